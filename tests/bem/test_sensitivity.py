"""Sensitivities: the discrete energy's own differences, exact derivatives, and identities."""

from dataclasses import replace

import numpy as np
import pytest
from scipy.linalg import cho_factor, cho_solve

from daraf.bem import solve_capacitance
from daraf.bem.constants import FOUR_PI_EPSILON_0
from daraf.bem.creases import find_creases
from daraf.bem.errors import InputError
from daraf.bem.facets import find_facets
from daraf.bem.galerkin import galerkin_matrix
from daraf.bem.growth import growth
from daraf.bem.regions import find_regions
from daraf.bem.sensitivity import sensitivities, surface_product
from published import exact, shapes


def solved(parts, accuracy=0.01, **more):
    surface = shapes.surface(parts)
    return surface, solve_capacitance(surface, accuracy=accuracy, **more)


def grown_of(surface):
    regions, _ = find_regions(surface)
    creases = find_creases(surface, regions)
    return growth(surface, regions, creases, find_facets(surface, regions, creases))


def of(solution, one_sided, grown=None):
    return sensitivities(
        solution.panels,
        solution.densities,
        solution.maxwell,
        FOUR_PI_EPSILON_0,
        one_sided=np.asarray(one_sided),
        previous=solution.previous,
        grown=grown,
    )


def discrete(panels):
    """Capacitance matrix and densities of the panels as they are, bare."""
    matrix = galerkin_matrix(panels.corners)
    matrix = matrix + np.tril(matrix, -1).T
    columns = panels.areas[:, None] * (panels.conductor[:, None] == np.arange(panels.n_conductors))
    density = cho_solve(cho_factor(matrix), columns)
    return columns.T @ density, density.T


def turned(panels, body, axis, angle, about):
    c, s = np.cos(angle), np.sin(angle)
    i, j = (axis + 1) % 3, (axis + 2) % 3
    turn = np.eye(3)
    turn[i, i], turn[i, j], turn[j, i], turn[j, j] = c, -s, s, c
    corners = panels.corners.copy()
    own = panels.body == body
    corners[own] = (corners[own] - about) @ turn.T + about
    return replace(panels, corners=corners)


def shifted(panels, body, axis, step):
    corners = panels.corners.copy()
    corners[panels.body == body, :, axis] += step
    return replace(panels, corners=corners)


@pytest.fixture(scope="module")
def box_and_plate():
    parts = [
        shapes.block(1.0, 0.8, 0.6),
        shapes.moved(shapes.turned(shapes.plate(1.0, 0.7), 0.3, (1.0, 0.2, 0.1)), z=0.9),
    ]
    return shapes.surface(parts), solve_capacitance(shapes.surface(parts), accuracy=0.05)


def test_rigid_motion_is_the_derivative_of_the_discrete_energy(box_and_plate):
    _, solution = box_and_plate
    panels = solution.panels
    value, density = discrete(panels)
    found = sensitivities(panels, density, value, 1.0, one_sided=np.array([True, False]))
    h = 1e-3
    for axis in range(3):
        for made, got in (
            (lambda step, axis=axis: shifted(panels, 1, axis, step), found.shift[1, axis]),
            (lambda step, axis=axis: turned(panels, 1, axis, step, found.about[1]), found.rotation[1, axis]),
        ):
            near = discrete(made(h))[0] - discrete(made(-h))[0]
            far = discrete(made(2 * h))[0] - discrete(made(-2 * h))[0]
            difference = (8.0 * near - far) / (12.0 * h)
            # fourth order in h, rounding over h, pair integrals good to 1e-6
            assert got == pytest.approx(difference, abs=3e-6 * np.abs(found.shift).max())


def test_a_shift_of_all_bodies_changes_nothing(box_and_plate):
    _, solution = box_and_plate
    found = of(solution, [True, False])
    assert found.shift.sum(axis=0) == pytest.approx(np.zeros((3, 2, 2)), abs=1e-12 * np.abs(found.shift).max())


def test_two_spheres_pulled_apart():
    # derivative of Maxwell's series for two spheres, central difference of the exact value
    first = shapes.turned(shapes.icosphere(1.0, 2), 0.3, (1.0, 0.3, 0.2))
    second = shapes.moved(shapes.turned(shapes.icosphere(0.7, 2), 0.2, (0.2, 1.0, 0.7)), z=2.2)
    surface, solution = solved([first, second], 0.005)
    grown = grown_of(surface)
    found = of(solution, [True, True], grown=grown)
    h = 1e-4
    exact_slope = (exact.two_spheres(1.0, 0.7, 2.2 + h) - exact.two_spheres(1.0, 0.7, 2.2 - h)) / (2 * h)
    error = np.abs(found.shift[1, 2] - FOUR_PI_EPSILON_0 * exact_slope)
    assert (error <= found.shift_uncertainty[1]).all()
    # and the uncertainty says something
    assert (found.shift_uncertainty[1] < 0.1 * np.abs(found.shift[1, 2]).max()).all()
    for body, (da, db) in enumerate(((h, 0.0), (0.0, h))):
        larger = exact.two_spheres(1.0 + da, 0.7 + db, 2.2) - exact.two_spheres(1.0 - da, 0.7 - db, 2.2)
        error = np.abs(found.offset[body] - FOUR_PI_EPSILON_0 * larger / (2 * h))
        assert (error <= found.offset_uncertainty[body]).all()
        assert (found.offset_uncertainty[body] < 0.02 * np.abs(found.offset[body]).max()).all()


def test_a_cube_that_grows_scales():
    # a cube offset by d is a cube of side L + 2 d: dC/dd = 2 C / L
    surface, solution = solved([shapes.cube(1.0)], 0.001)
    found = of(solution, [True], grown=grown_of(surface))
    error = abs(found.offset[0, 0, 0] - 2.0 * solution.maxwell[0, 0])
    assert error <= found.offset_uncertainty[0, 0, 0]
    assert found.offset_uncertainty[0, 0, 0] < 0.01 * found.offset[0, 0, 0]


def test_a_sphere_that_grows():
    # C = 4 pi eps a: dC/da = 4 pi eps
    surface, solution = solved([shapes.icosphere(1.0, 2)], 0.01)
    found = of(solution, [True], grown=grown_of(surface))
    assert abs(found.offset[0, 0, 0] - FOUR_PI_EPSILON_0) <= found.offset_uncertainty[0, 0, 0]
    assert found.offset_uncertainty[0, 0, 0] < 0.01 * FOUR_PI_EPSILON_0


def test_offset_is_the_derivative_of_the_discrete_energy(box_and_plate):
    surface, solution = box_and_plate
    panels, grown = solution.panels, grown_of(surface)
    value, density = discrete(panels)
    found = sensitivities(panels, density, value, 1.0, one_sided=np.array([True, False]), grown=grown)
    motion, h = np.where((panels.body == 0)[:, None, None], grown.of(panels), 0.0), 3e-4

    def larger(step):
        return discrete(replace(panels, corners=panels.corners + step * motion))[0]

    difference = (8.0 * (larger(h) - larger(-h)) - (larger(2 * h) - larger(-2 * h))) / (12.0 * h)
    # pair integrals good to 1e-6 over a step of 1e-3 of the size, and the square of that step
    assert found.offset[0] == pytest.approx(difference, abs=1e-3 * np.abs(difference).max())


def test_a_block_grows_by_its_faces():
    surface = shapes.surface([shapes.block(1.0, 2.0, 0.5)])
    grown = grown_of(surface)
    # a corner moves by one along each axis, outward; so does every point of a face along its normal
    np.testing.assert_allclose(grown.motion, np.sign(grown.triangles - grown.triangles.mean(axis=(0, 1))), atol=1e-9)
    panels = solve_capacitance(surface, accuracy=0.2).panels
    along = np.einsum("pki,pi->pk", grown.of(panels), panels.normals)
    np.testing.assert_allclose(along, 1.0, atol=1e-9)


def test_sheets_have_no_offset(box_and_plate):
    surface, solution = box_and_plate
    found = of(solution, [True, False], grown=grown_of(surface))
    assert np.isnan(found.offset[1]).all()
    assert np.isfinite(found.offset[0]).all()
    # without the surface none is given
    assert np.isnan(of(solution, [True, False]).offset).all()


def test_the_map_adds_up_to_the_offset_of_a_smooth_body():
    _, solution = solved([shapes.icosphere(1.0, 2)], 0.01)
    density = solution.densities[0]
    product = surface_product(density, density, FOUR_PI_EPSILON_0 / (4 * np.pi))
    # facets stand for a sphere whose area is 2 % larger: this is a map, not the value
    assert (product * solution.panels.areas).sum() == pytest.approx(FOUR_PI_EPSILON_0, rel=0.03)


def test_refuses_what_does_not_belong_together(box_and_plate):
    _, solution = box_and_plate
    with pytest.raises(InputError, match="do not belong together"):
        sensitivities(solution.panels, solution.densities[:1], solution.maxwell, 1.0, one_sided=np.ones(2, bool))
