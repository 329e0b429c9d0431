import functools

import naive
import numpy as np
import pytest

from daraf.bem import set_threads, solve_capacitance
from daraf.bem.bisection import children
from daraf.bem.field import polygon_field
from daraf.bem.frames import AREA, panel_frames
from daraf.bem.galerkin import galerkin_matrix
from daraf.bem.indicator import child_potentials
from daraf.bem.operator import FastOperator, plan_operator
from daraf.bem.polygon import polygon_potential
from published import shapes


def of_mesh(mesh):
    vertices, triangles = mesh
    return vertices[triangles][:, [0, 1, 2, 2]]


def squares(n, height=0.0):
    steps = np.arange(n) / n
    return np.array([naive.rectangle(1 / n, 1 / n, at=(x, y, height)) for x in steps for y in steps])


def soup(n):
    rng = np.random.default_rng(3)
    return (rng.uniform(0, 1, (n, 1, 3)) + 0.2 * n ** (-1 / 3) * rng.normal(size=(n, 3, 3)))[:, [0, 1, 2, 2]]


def long_tube():
    vertices, triangles = shapes.tube(0.5, 100.0, 12, 100)
    return vertices[triangles][:, [0, 1, 2, 2]]


def refined_plate():
    """From the real refinement: panels of aspect up to thousands at the rims."""
    return solve_capacitance(shapes.surface([shapes.plate()]), accuracy=1e-4).panels.corners


CASES = {
    "sphere": lambda: of_mesh(shapes.icosphere(levels=3)),
    "close plates": lambda: np.concatenate([squares(25), squares(25, 0.01)]),
    "long tube": long_tube,
    "refined plate": refined_plate,
    "soup": lambda: soup(1500),
}


@functools.cache
def case(name):
    """Panels and dense matrix."""
    corners = CASES[name]()
    matrix = galerkin_matrix(corners)
    return corners, matrix + np.tril(matrix, -1).T


def densities(areas, n_columns):
    """Charges of random sign, and as the last column a uniform density."""
    signs = np.random.default_rng(1).choice([-1.0, 1.0], (len(areas), n_columns))
    signs[:, :-1] /= areas[:, None]
    signs[:, -1] = 1.0
    return signs


def relative_error(product, exact, areas):
    """Root mean square of each column's mean potentials."""
    difference = (product - exact) / areas[:, None]
    return np.sqrt((difference**2).sum(axis=0) / ((exact / areas[:, None]) ** 2).sum(axis=0))


@pytest.mark.parametrize("tolerance", [1e-3, 1e-4, 1e-5, 1e-7])
@pytest.mark.parametrize("name", CASES)
def test_product_equals_the_dense_one(name, tolerance):
    corners, A = case(name)
    plan = plan_operator(corners, tolerance, leaf_size=20)
    operator = FastOperator(corners, tolerance, plan=plan)
    density = densities(operator.areas, 3)
    error = relative_error(operator.apply(density), A @ density, operator.areas)
    # the tolerance is a promise for random signs; single precision and the rules of the pairs are below it
    assert error.max() < tolerance
    assert plan.near_entries < 0.8 * len(A) * (len(A) + 1) / 2 or len(A) < 500


@pytest.mark.parametrize("name", CASES)
def test_diagonal_and_leaf_blocks_are_those_of_the_matrix(name):
    corners, A = case(name)
    operator = FastOperator(corners)
    # single precision
    np.testing.assert_allclose(operator.diagonal, np.diag(A), rtol=2e-7)
    leaves = operator.leaves
    np.testing.assert_array_equal(np.sort(np.concatenate(leaves)), np.arange(len(corners)))
    for leaf in (0, len(leaves) // 2):
        # pairs beyond 5.8 sums of radii are expanded to the second order, close ones take rules that leave 1e-5
        np.testing.assert_allclose(operator.leaf_block(leaf), A[np.ix_(leaves[leaf], leaves[leaf])], rtol=3e-4)


@pytest.mark.parametrize("n", [1, 3])
def test_few_panels_are_all_near(n):
    corners = squares(n)
    operator = FastOperator(corners)
    matrix = galerkin_matrix(corners)
    density = np.arange(1.0, 2 * n * n + 1).reshape(-1, 2)
    exact = (matrix + np.tril(matrix, -1).T) @ density
    # the rules of close pairs and single precision
    np.testing.assert_allclose(operator.apply(density), exact, rtol=operator.tolerance)
    assert operator.check(density) < operator.tolerance
    potential, gradient = operator.at_points(np.array([[0.3, 0.4, 2.0]]), density)
    assert np.isfinite(potential).all()
    assert (gradient[:, :, 2] < 0.0).all()


def test_one_column_and_many_agree_and_scale():
    corners, _ = case("sphere")
    operator = FastOperator(corners)
    density = densities(operator.areas, 9)
    many = operator.apply(density)
    for k in (0, 8):
        # sums in another order, single precision
        np.testing.assert_allclose(operator.apply(density[:, k]), many[:, k], atol=1e-5 * np.abs(many[:, k]).max())
    np.testing.assert_array_equal(operator.apply(2.0**-200 * density), 2.0**-200 * many)
    assert not operator.apply(np.zeros(len(corners))).any()


def test_size_and_place_do_not_matter():
    corners, _ = case("close plates")
    density = densities(np.ones(len(corners)), 2)
    here = FastOperator(corners).apply(density)
    there = FastOperator(1e-9 * corners + [1e-7, 0.0, 2e-7]).apply(density)
    # the shift costs four digits of the coordinates, single precision the rest
    np.testing.assert_allclose(1e27 * there, here, atol=1e-6 * np.abs(here).max())


def test_threads_change_nothing():
    corners, _ = case("sphere")
    density = densities(np.ones(len(corners)), 3)
    products = []
    try:
        for n in (1, None):
            set_threads(n)
            products.append(FastOperator(corners).apply(density))
    finally:
        set_threads()
    np.testing.assert_allclose(products[0], products[1], rtol=0, atol=1e-13 * np.abs(products[0]).max())


def test_near_integrals_are_taken_over():
    corners, _ = case("close plates")
    old = FastOperator(corners)
    marked = old.near.values.copy()
    old.near.values[:] *= 2.0
    keep = np.arange(100, len(corners))
    new = np.concatenate([corners[keep], squares(10, -0.5)])
    known = np.concatenate([keep, np.full(100, -1)])
    operator = FastOperator(new, previous=old, known=known)
    old.near.values[:] = marked
    fresh = FastOperator(new)
    np.testing.assert_allclose(operator.diagonal[: len(keep)], 2.0 * fresh.diagonal[: len(keep)], rtol=1e-6)
    np.testing.assert_allclose(operator.diagonal[len(keep) :], fresh.diagonal[len(keep) :], rtol=1e-6)
    density = np.ones(len(new))
    same = FastOperator(new, previous=old, known=known).apply(density)
    np.testing.assert_allclose(same, fresh.apply(density), rtol=1e-6)


def test_memory_is_told_beforehand():
    corners, _ = case("sphere")
    plan = plan_operator(corners, 1e-5)
    assert FastOperator(corners, plan=plan).bytes == pytest.approx(plan.bytes, rel=0.2)


def test_progress_ends_with_all():
    seen = []
    FastOperator(case("sphere")[0], progress=lambda done, total: seen.append((done, total)))
    assert seen[-1][0] == seen[-1][1] > 0


def test_check_finds_the_error_and_an_error():
    corners, _ = case("long tube")
    operator = FastOperator(corners)
    density = densities(operator.areas, 2)
    assert operator.check(density, n_targets=200) < operator.tolerance
    operator.near.values[:] *= 1.001
    assert operator.check(density) > 1e-4


@pytest.mark.parametrize("name", CASES)
def test_parts_agree_with_direct_sums(name):
    corners, _ = case(name)
    n_corners = np.where((corners[:, 2] == corners[:, 3]).all(axis=1), 3, 4)
    parts = panel_frames(children(corners, n_corners).reshape(-1, 4, 3), largest_rule=4).reshape(len(corners), 4, -1)
    operator = FastOperator(corners)
    density = densities(operator.areas, 2)
    exact = np.empty((len(corners), 4, 2))
    frames = panel_frames(corners)
    child_potentials(parts, frames, frames, density, exact)
    chosen = np.random.default_rng(2).permutation(len(corners))
    result = operator.at_parts(parts[chosen], operator.expand(density), chosen)
    filled = parts[chosen, :, AREA] > 0
    area = parts[chosen, :, AREA][filled]
    # the twin takes sources beyond six radii in one point, which leaves (1/12)^2 / 6 of each and less of their sum
    assert relative_error(result[filled], exact[chosen][filled], area).max() < 5e-4
    assert not result[~filled].any()


@pytest.mark.parametrize("name", CASES)
def test_points_agree_with_closed_forms(name):
    corners, _ = case(name)
    operator = FastOperator(corners)
    density = densities(operator.areas, 2)
    rng = np.random.default_rng(4)
    low, high = corners.min(axis=(0, 1)), corners.max(axis=(0, 1))
    size = (high - low).max()
    points = np.concatenate(
        [corners[::97, :3].mean(axis=1), rng.uniform(low - 0.1 * size, high + 0.1 * size, (20, 3)), [high + 9 * size]]
    )
    frames = panel_frames(corners)
    exact = np.array([[(polygon_potential(f, *p), *polygon_field(f, *p)) for f in frames] for p in points])
    exact = np.einsum("pjk,jc->pck", exact, density)
    potential, gradient = operator.at_points(points, density)
    assert (np.linalg.norm(potential - exact[:, :, 0], axis=0) < 1e-5 * np.linalg.norm(exact[:, :, 0], axis=0)).all()
    error = np.linalg.norm(gradient + exact[:, :, 1:], axis=(0, 2))
    # one digit is lost to the derivative
    assert (error < 1e-4 * np.linalg.norm(exact[:, :, 1:], axis=(0, 2))).all()
