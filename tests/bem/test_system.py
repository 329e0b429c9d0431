import numpy as np
import pytest

from daraf.bem import InputError, set_threads, solve_capacitance
from daraf.bem.errors import NumericalError
from daraf.bem.galerkin import galerkin_matrix
from daraf.bem.panels import Panels
from daraf.bem.system import ALONE_SHARE, CROSS_OVER, FastSystem, factorise, far_tolerance, make_system, uses_fast
from published import shapes

SQUARE = np.array([(0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (1.0, 1.0, 0.0), (0.0, 1.0, 0.0)])


def test_solution_meets_the_equation():
    rng = np.random.default_rng(1)
    corners = np.stack([SQUARE + np.array([float(k), 0.3 * k, 0.0]) for k in range(6)])
    lower = galerkin_matrix(corners)
    full = lower + np.tril(lower, -1).T
    charges = rng.normal(size=(6, 2))
    density, notices = factorise(lower, charges)
    # a condition number of about 10
    np.testing.assert_allclose(full @ density, charges, rtol=1e-13, atol=1e-14)
    assert notices == []


def test_coincident_panels_are_solved_with_a_notice():
    lower = np.array([(1.0, 0.0, 0.0), (1.0, 1.0, 0.0), (0.1, 0.1, 1.0)])
    lower[1, 1] -= 1e-15
    charges = np.array([(1.0,), (1.0,), (1.0,)])
    density, notices = factorise(lower, charges)
    assert [notice.code for notice in notices] == ["coincident-panels"]
    # what the two share is arbitrary, their sum is not: by hand from the two by two system
    assert density[:2].sum() == pytest.approx(0.9 / 0.99, rel=1e-6)
    assert density[2, 0] == pytest.approx(0.9 / 0.99, rel=1e-6)


def test_an_indefinite_matrix_is_a_defect_of_ours():
    lower = np.array([(1.0, 0.0), (2.0, 1.0)])
    with pytest.raises(NumericalError, match="not positive definite"):
        factorise(lower, np.ones((2, 1)))


CASES = {
    "plates at a gap of 5 %": ([shapes.plate(), shapes.moved(shapes.plate(), z=0.05)], 0.005),
    "cube": ([shapes.cube()], 0.002),
    "balls": ([shapes.icosphere(1.0, 2), shapes.moved(shapes.icosphere(0.5, 2), x=1.7)], 0.01),
    "ball in a box": ([shapes.icosphere(0.3, 2), shapes.block(1.0, 1.0, 1.0)], 0.02),
    "five in a row": ([shapes.moved(shapes.plate(0.5, 1.0), z=0.2 * k) for k in range(5)], 0.02),
}


@pytest.mark.parametrize("name", CASES)
def test_fast_and_dense_agree_within_what_they_state(name):
    parts, accuracy = CASES[name]
    if name == "ball in a box":
        parts = [shapes.moved(parts[0], 0.5, 0.5, 0.5), parts[1]]
    surface = shapes.surface(parts)
    dense = solve_capacitance(surface, accuracy=accuracy, method="dense")
    fast = solve_capacitance(surface, accuracy=accuracy, method="fast")
    assert (dense.method, fast.method) == ("dense Cholesky", "fast multipole, conjugate gradients")
    assert dense.iterations == 0 < fast.iterations
    scale = np.sqrt(np.outer(np.diag(dense.maxwell), np.diag(dense.maxwell)))
    # the first pass has one mesh: the tolerances of the product and of the iteration are all that differs
    first = np.abs(fast.passes[0].maxwell - dense.passes[0].maxwell)
    assert (first <= (far_tolerance(accuracy) + ALONE_SHARE * accuracy) * scale).all()
    # as many panels need not be the same ones: on symmetric bodies equal gains are told apart by rounding
    if np.array_equal(dense.panels.corners, fast.panels.corners):
        # the same mesh: what differs is what the lines "solver" and "far field" state, and the coarse rules of the
        # estimate, good to a few per cent of what it adds
        stated = fast.budget["solver"] + fast.budget["far field"]
        added = np.abs(dense.passes[-1].estimate)
        assert (np.abs(fast.maxwell - dense.maxwell) <= stated + 0.03 * added + 1e-9 * scale).all()
    assert (np.abs(fast.maxwell - dense.maxwell) <= fast.maxwell_uncertainty).all()
    # these lines must not spoil the accuracy asked
    for cause in ("solver", "far field"):
        assert (fast.budget[cause] <= 0.1 * accuracy * np.maximum(np.abs(dense.maxwell), 1e-3 * scale)).all()


def silent(stage, done, total):
    return None


def ball(levels=3):
    vertices, triangles = shapes.icosphere(1.0, levels)
    corners = vertices[triangles][:, [0, 1, 2, 2]]
    zero = np.zeros(len(corners), dtype=np.int64)
    return Panels(corners, np.full(len(corners), 3), zero, zero, zero)


def test_the_lines_of_the_fast_system_hold():
    """Solver and far field against the direct solution of the same matrix."""
    panels = ball()
    charges = panels.areas[:, None]
    exact = make_system(panels, 0.01, "dense", None, silent).solve(charges, None, silent)
    for accuracy in (0.05, 0.001):
        found = FastSystem(panels, accuracy, None, silent).solve(charges, None, silent)
        off = abs(found.value[0, 0] - exact.value[0, 0])
        assert off <= sum(line[0, 0] for line in found.open.values()) + 1e-9 * exact.value[0, 0]
        assert off < 0.02 * accuracy * exact.value[0, 0]


def test_a_warm_start_saves_steps_and_near_integrals_are_taken_over():
    panels = ball()
    first = FastSystem(panels, 0.001, None, silent)
    cold = first.solve(panels.areas[:, None], None, silent)
    kept = np.arange(len(panels))
    told = []
    second = FastSystem(panels, 0.001, first.carried(kept), lambda *one: told.append(one))
    warm = second.solve(panels.areas[:, None], cold.density, silent)
    assert warm.iterations < cold.iterations
    np.testing.assert_array_equal(second.operator.near.values, first.operator.near.values)


def test_threads_do_not_change_the_result():
    surface = shapes.surface([shapes.icosphere(1.0, 3), shapes.moved(shapes.icosphere(1.0, 3), x=2.5)])
    found = []
    for threads in (1, 2):
        set_threads(threads)
        found.append(solve_capacitance(surface, accuracy=0.01, method="fast").maxwell)
    # sums are taken in the same order
    np.testing.assert_allclose(found[0], found[1], rtol=1e-13)


def test_method_is_chosen_by_size():
    assert not uses_fast(CROSS_OVER - 1, "auto")
    assert uses_fast(CROSS_OVER, "auto")
    assert uses_fast(1, "fast")
    assert not uses_fast(10 * CROSS_OVER, "dense")


def test_unknown_method_is_refused():
    with pytest.raises(InputError, match="no method"):
        solve_capacitance(shapes.surface([shapes.cube()]), method="quick")
