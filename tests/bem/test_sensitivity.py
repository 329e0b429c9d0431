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
from daraf.bem.regions import find_regions
from daraf.bem.sensitivity import sensitivities, surface_product
from published import exact, shapes


def solved(parts, accuracy=0.01, **more):
    surface = shapes.surface(parts)
    return surface, solve_capacitance(surface, accuracy=accuracy, **more)


def of(solution, one_sided, facet_offset=None):
    return sensitivities(
        solution.panels,
        solution.densities,
        solution.maxwell,
        FOUR_PI_EPSILON_0,
        one_sided=np.asarray(one_sided),
        previous=solution.previous,
        facet_offset=facet_offset,
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
    regions, _ = find_regions(surface)
    facets = find_facets(surface, regions, find_creases(surface, regions))
    found = of(solution, [True, True], facets.offset[solution.panels.region])
    h = 1e-4
    exact_slope = (exact.two_spheres(1.0, 0.7, 2.2 + h) - exact.two_spheres(1.0, 0.7, 2.2 - h)) / (2 * h)
    print("shift", found.shift[1, 2] / (FOUR_PI_EPSILON_0 * exact_slope) - 1, found.shift_uncertainty[1] / found.shift[1, 2])
    error = np.abs(found.shift[1, 2] - FOUR_PI_EPSILON_0 * exact_slope)
    assert (error <= found.shift_uncertainty[1]).all()
    # and the uncertainty says something
    assert (found.shift_uncertainty[1] < 0.1 * np.abs(found.shift[1, 2]).max()).all()
    grown = exact.two_spheres(1.0 + h, 0.7, 2.2) - exact.two_spheres(1.0 - h, 0.7, 2.2)
    print("offset", found.offset[0] / (FOUR_PI_EPSILON_0 * grown / (2 * h)) - 1, found.offset_uncertainty[0] / found.offset[0])
    error = np.abs(found.offset[0] - FOUR_PI_EPSILON_0 * grown / (2 * h))
    assert (error <= found.offset_uncertainty[0] + 0.01 * np.abs(found.offset[0]).max()).all()  # coarse facets: 1 %


def test_a_cube_that_grows_scales():
    # a cube offset by d is a cube of side L + 2 d: dC/dd = 2 C / L
    _, solution = solved([shapes.cube(1.0)], 0.001)
    found = of(solution, [True])
    print("cube", found.offset / solution.maxwell / 2 - 1, found.offset_uncertainty / found.offset)
    error = abs(found.offset[0, 0, 0] - 2.0 * solution.maxwell[0, 0])
    assert error <= found.offset_uncertainty[0, 0, 0]
    assert found.offset_uncertainty[0, 0, 0] < 0.1 * found.offset[0, 0, 0]


def test_sheets_have_no_offset(box_and_plate):
    _, solution = box_and_plate
    found = of(solution, [True, False])
    assert np.isnan(found.offset[1]).all()
    assert np.isfinite(found.offset[0]).all()


def test_the_map_adds_up_to_the_offset(box_and_plate):
    _, solution = box_and_plate
    panels, value = solution.panels, np.zeros((2, 2))
    epsilon = FOUR_PI_EPSILON_0 / (4 * np.pi)
    own = panels.body == 0
    for i in range(2):
        for j in range(2):
            product = surface_product(solution.densities[i], solution.densities[j], epsilon)
            value[i, j] = (product * panels.areas)[own].sum()
    exactly = sensitivities(
        panels,
        solution.densities,
        np.array(
            [[(row * panels.areas)[panels.conductor == k].sum() for k in range(2)] for row in solution.densities]
        ).T,
        FOUR_PI_EPSILON_0,
        one_sided=np.array([True, False]),
    )
    assert exactly.offset[0] == pytest.approx(value, rel=1e-9)


def test_refuses_what_does_not_belong_together(box_and_plate):
    _, solution = box_and_plate
    with pytest.raises(InputError, match="do not belong together"):
        sensitivities(solution.panels, solution.densities[:1], solution.maxwell, 1.0, one_sided=np.ones(2, bool))
