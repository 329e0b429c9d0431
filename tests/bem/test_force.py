"""Forces between panels against brute force, and the sum over all pairs against the derivative of the energy."""

from dataclasses import replace

import naive
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daraf.bem import excite, set_threads, solve_capacitance
from daraf.bem.charges import stated_charges
from daraf.bem.close_force import close_force, divided_force
from daraf.bem.force import conductor_forces, interaction
from daraf.bem.frames import panel_frames
from daraf.bem.galerkin import galerkin_matrix
from daraf.bem.pair_force import far_force, middle_force, pair_force
from daraf.bem.panels import Panels
from published import shapes

SQUARE = naive.rectangle(1.0, 1.0)
TRAPEZE = np.array([(0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (0.8, 0.7, 0.0), (0.1, 0.7, 0.0)])
TRIANGLE = naive.triangle((0.0, 0.0, 0.0), (1.0, 0.1, 0.0), (0.3, 0.9, 0.0))
SLIVER = naive.rectangle(1.0, 0.01)


def frame(corners):
    return panel_frames(np.ascontiguousarray(corners, dtype=np.float64)[None])[0]


def at(corners, *shift):
    return corners + np.array(shift)


def turned(corners, angle, axis):
    return shapes.turned((corners, None), angle, axis)[0]


def grid(corners, cells=16, points=4):
    """Composite Gauss points and weights on a panel."""
    node, weight = np.polynomial.legendre.leggauss(points)
    places = ((np.arange(cells)[:, None] + 0.5 * (1.0 + node)) / cells).ravel()
    weights = np.tile(0.5 * weight / cells, cells)
    u, v = (one.ravel() for one in np.meshgrid(places, places))
    x, swept = naive.bilinear(corners, u, v)
    return x, swept * np.outer(weights, weights).ravel()


def brute(first, second):
    """Force and torque on the first panel as a sum over points of both."""
    (x, wx), (y, wy) = grid(first), grid(second)
    total = np.zeros(6)
    for place, weight in zip(x, wx, strict=True):
        r = place - y
        force = weight * (wy / np.einsum("ij,ij->i", r, r) ** 1.5) @ r
        total += np.concatenate([force, np.cross(place, force)])
    return total


CLOSE = {
    "parallel": (SQUARE, at(TRAPEZE, 0.3, 0.2, 0.2)),
    "parallel, turned over": (at(turned(TRIANGLE, np.pi, (1.0, 0.0, 0.0)), 0.2, 0.8, 0.0), at(TRAPEZE, 0.1, 0.1, -0.2)),
    "coplanar": (SQUARE, at(TRAPEZE, 1.2, 0.1, 0.0)),
    "at an angle": (SQUARE, at(turned(TRAPEZE, 0.6, (1.0, 0.3, 0.0)), 0.2, 0.1, 0.3)),
    "upright": (at(turned(TRIANGLE, 0.5 * np.pi, (1.0, 0.0, 0.0)), 0.1, 0.4, 0.2), SQUARE),
    "nearly parallel": (SQUARE, at(turned(TRAPEZE, 1e-3, (1.0, 0.3, 0.0)), 0.2, 0.1, 0.2)),
    "hardly tilted": (SQUARE, at(turned(TRAPEZE, 1e-6, (1.0, 0.3, 0.0)), 0.2, 0.1, 0.2)),
    "slivers": (SLIVER, at(turned(SLIVER, 0.5, (0.0, 0.0, 1.0)), 0.1, -0.2, 0.2)),
    "sliver and square": (SLIVER, at(turned(SQUARE, 0.1, (0.0, 1.0, 0.0)), 0.1, -0.5, 0.3)),
}


@pytest.mark.parametrize("name", CLOSE)
def test_close_panels_against_points(name):
    first, second = CLOSE[name]
    expected = brute(first, second)
    scale = np.linalg.norm(expected[:3])
    # 1e-6 of the size of the force is what the rules promise; the sum over points is good to 1e-8 here.
    np.testing.assert_allclose(close_force(frame(first), frame(second)), expected, rtol=0, atol=3e-6 * scale)
    np.testing.assert_allclose(close_force(frame(second), frame(first)), -expected, rtol=0, atol=3e-6 * scale)
    np.testing.assert_allclose(divided_force(frame(first), frame(second)), expected, rtol=0, atol=1e-7 * scale)


@pytest.mark.parametrize("tilt", [0.0, 1e-6, 1e-4, 1e-3, 0.05])
@pytest.mark.parametrize("height", [0.1, 0.01])
def test_close_rules_agree_where_they_take_over_from_each_other(tilt, height):
    first = frame(at(turned(SQUARE, tilt, (1.0, 0.3, 0.0)), 0.13, 0.11, height + 0.6 * tilt))
    second = frame(TRAPEZE)
    expected = np.array(divided_force(first, second))
    found = np.array(close_force(first, second))
    scale = np.linalg.norm(expected[:3])
    # planes that meet far off, or are taken as parallel although they are not, cost digits: worst 5e-5
    assert np.linalg.norm((found - expected)[:3]) < 5e-5 * scale
    assert np.linalg.norm((found - expected)[3:]) < 1e-4 * scale


@settings(max_examples=60)
@given(
    st.sampled_from([SQUARE, TRAPEZE, TRIANGLE]),
    st.sampled_from([SQUARE, TRAPEZE, TRIANGLE]),
    st.floats(0.0, 3.0),
    st.floats(0.3, 1.0),
    st.floats(1.1, 40.0),
    st.integers(0, 2**32 - 1),
)
def test_every_regime_against_the_closest(first, second, angle, size, distance, seed):
    direction = np.random.default_rng(seed).normal(size=3)
    direction /= np.linalg.norm(direction)
    one, two = frame(first), frame(turned(size * second, angle, direction) + distance * direction * 1.5)
    expected = np.array(divided_force(one, two))
    found = np.array(pair_force(one, two))
    lever = 1.0 + 1.5 * distance
    assert np.linalg.norm((found - expected)[:3]) < 5e-6 * np.linalg.norm(expected[:3])
    assert np.linalg.norm((found - expected)[3:]) < 5e-6 * lever * np.linalg.norm(expected[:3])


def test_far_panels_are_point_charges():
    one, two = frame(SQUARE), frame(at(TRAPEZE, 300.0, 400.0, 0.0))
    area = 0.5 * (1.0 + 0.7) * 0.7
    expected = -area / 500.0**2 * np.array([0.6, 0.8, 0.0])
    # the centres of the panels lie off their corners by 1e-3 of the distance
    np.testing.assert_allclose(far_force(one, two, 2)[:3], expected, rtol=0, atol=3e-3 * area / 500.0**2)


def test_force_scales_and_turns_with_the_panels():
    first, second = TRAPEZE, at(turned(TRIANGLE, 0.4, (1.0, 2.0, 0.5)), 0.4, 0.2, 0.6)
    force = np.array(pair_force(frame(first), frame(second)))
    large = np.array(pair_force(frame(1000.0 * first), frame(1000.0 * second)))
    np.testing.assert_allclose(large, force * np.repeat([1e6, 1e9], 3), rtol=1e-10)
    axis = (0.3, -1.0, 0.4)
    spun = np.array(pair_force(frame(turned(first, 1.1, axis)), frame(turned(second, 1.1, axis))))
    expected = np.concatenate([turned(force[None, :3], 1.1, axis)[0], turned(force[None, 3:], 1.1, axis)[0]])
    np.testing.assert_allclose(spun, expected, rtol=0, atol=1e-8 * np.linalg.norm(force[:3]))


def test_middle_rule_is_the_field_at_gauss_points():
    outer, inner = at(TRIANGLE, 0.0, 0.0, 3.0), SQUARE
    x, weight = grid(outer, cells=1, points=3)
    field = np.array([naive.brute_field(inner, place) for place in x])
    force = weight @ field
    found = middle_force(frame(outer), frame(inner), 3)
    # the brute field is good to 1e-6
    np.testing.assert_allclose(found[:3], force, rtol=0, atol=1e-5 * np.linalg.norm(force))


def solved(panels, potential):
    """Energy and bare density with dense algebra."""
    matrix = galerkin_matrix(panels.corners)
    matrix += np.tril(matrix, -1).T
    charge = panels.areas * potential[panels.conductor]
    density = np.linalg.solve(matrix, charge)
    return 0.5 * charge @ density, density


def moved(panels, conductor, shift=(0.0, 0.0, 0.0), angle=0.0, axis=(0.0, 0.0, 1.0)):
    corners = panels.corners.copy()
    own = panels.conductor == conductor
    middle = corners[own].reshape(-1, 3).mean(axis=0)
    points = turned(corners[own].reshape(-1, 3) - middle, angle, axis) + middle + np.array(shift)
    corners[own] = points.reshape(-1, 4, 3)
    return replace(panels, corners=corners), middle


def slope(energy, step):
    """Fourth-order difference."""
    return (energy(-2 * step) - 8 * energy(-step) + 8 * energy(step) - energy(2 * step)) / (12 * step)


PAIRS = {
    "plates": ([shapes.plate(), shapes.moved(shapes.plate(1.0, 0.8), x=0.2, z=0.1)], 0.1),
    "tilted plates": (
        [shapes.plate(), shapes.moved(shapes.turned(shapes.plate(), 0.05, (1, 0.2, 0)), y=0.1, z=0.15)],
        0.1,
    ),
    "cubes": ([shapes.cube(), shapes.moved(shapes.turned(shapes.cube(0.7), 0.4, (1, 0.2, 0.3)), x=0.3, z=1.1)], 0.2),
    "spheres": ([shapes.icosphere(1.0, 1), shapes.moved(shapes.icosphere(1.0, 1), x=0.03, z=2.1)], 0.1),
}


@pytest.mark.parametrize("name", PAIRS)
def test_force_and_torque_are_the_derivative_of_the_energy(name):
    meshes, gap = PAIRS[name]
    panels = solve_capacitance(shapes.surface(meshes), accuracy=0.2).panels
    potential = np.array([1.0, -0.5])
    density = solved(panels, potential)[1]
    found = interaction(panels, density[:, None])[0].sum(axis=1)[1]
    middle = moved(panels, 1)[1]
    torque = found[3:] - np.cross(middle, found[:3])
    size = np.linalg.norm(found[:3])
    for k, axis in enumerate(np.eye(3)):
        expected = slope(lambda s, a=axis: solved(moved(panels, 1, shift=s * a)[0], potential)[0], 0.01 * gap)
        # The differences are good to about 1e-7. The integrals of nearly parallel panels are good to 1e-7 of the
        # energy and no better, hence the longer step of the angle.
        assert found[k] == pytest.approx(expected, abs=1e-6 * size)
        expected = slope(lambda s, a=axis: solved(moved(panels, 1, angle=s, axis=a)[0], potential)[0], 0.04 * gap)
        assert torque[k] == pytest.approx(expected, abs=1e-6 * size)


@pytest.fixture(scope="module")
def three():
    meshes = [shapes.cube(), shapes.moved(shapes.icosphere(0.4, 1), z=1.1), shapes.moved(shapes.plate(), x=1.3)]
    surface = shapes.surface(meshes)
    return surface, solve_capacitance(surface, accuracy=0.05)


def stated(three, held, values):
    surface, solution = three
    state = excite(solution.maxwell, solution.maxwell_uncertainty, np.array(held), np.array(values))
    return stated_charges(surface, solution, state)


def test_action_equals_reaction(three):
    forces = conductor_forces(stated(three, [True, True, False], [1.0, -2.0, 0.0]))
    size = np.abs(forces.force).max()
    assert np.abs(forces.force.sum(axis=0)).max() < 1e-13 * size
    about_origin = forces.torque + np.cross(forces.about, forces.force)
    assert np.abs(about_origin.sum(axis=0)).max() < 1e-13 * size
    assert (forces.force_uncertainty > 0).all()
    assert (forces.force_uncertainty < 0.2 * np.linalg.norm(forces.force, axis=1).max()).all()


def test_forces_are_quadratic_and_do_not_know_the_sign(three):
    one = conductor_forces(stated(three, [True, True, True], [1.0, -2.0, 0.5]))
    two = conductor_forces(stated(three, [True, True, True], [-3.0, 6.0, -1.5]))
    np.testing.assert_allclose(two.force, 9.0 * one.force, rtol=1e-9, atol=1e-12 * np.abs(one.force).max())
    np.testing.assert_allclose(two.force_uncertainty, 9.0 * one.force_uncertainty, rtol=1e-6)


def test_charges_add_up_to_those_of_the_network(three):
    surface, solution = three
    state = excite(
        solution.maxwell, solution.maxwell_uncertainty, np.array([True, True, False]), np.array([1.0, 0, 3e-12])
    )
    charges = stated_charges(surface, solution, state)
    total = np.bincount(charges.panels.conductor, charges.density * charges.panels.areas)
    np.testing.assert_allclose(total, state.charge, rtol=1e-12)


def test_no_charge_no_force(three):
    forces = conductor_forces(stated(three, [True, True, True], [0.0, 0.0, 0.0]))
    assert not forces.force.any()
    assert not forces.force_uncertainty.any()
    assert np.isfinite(forces.torque_uncertainty).all()


def test_one_conductor_feels_nothing():
    surface = shapes.surface([shapes.cube()])
    solution = solve_capacitance(surface, accuracy=0.1)
    state = excite(solution.maxwell, solution.maxwell_uncertainty, np.array([True]), np.array([1.0]))
    forces = conductor_forces(stated_charges(surface, solution, state))
    assert not forces.force.any()
    assert not forces.torque.any()


def test_interaction_does_not_depend_on_the_number_of_threads(three):
    panels = three[1].panels
    density = np.random.default_rng(4).normal(size=(len(panels), 2))
    try:
        one = (set_threads(1), interaction(panels, density))[1]
    finally:
        set_threads()
    assert np.array_equal(one, interaction(panels, density))


def test_interaction_far_from_the_origin_and_progress():
    rng = np.random.default_rng(7)
    corners = np.stack([SQUARE, at(TRAPEZE, 0.2, 0.3, 1.0), at(TRIANGLE, 2.0, 0.0, 0.5)])
    panels = Panels(corners, np.array([4, 4, 3]), np.arange(3), np.array([0, 1, 1]), np.arange(3))
    away = replace(panels, corners=at(corners, 1000.0, 2000.0, -500.0))
    density = rng.normal(size=(3, 1))
    told = []
    near = interaction(panels, density, progress=lambda done, total: told.append((done, total)))
    far = interaction(away, density)
    np.testing.assert_allclose(far[..., :3], near[..., :3], rtol=1e-9, atol=1e-12)
    expected = near[..., 3:] + np.cross((1000.0, 2000.0, -500.0), near[..., :3])
    np.testing.assert_allclose(far[..., 3:], expected, rtol=1e-9, atol=1e-9)
    assert told[-1][0] == told[-1][1]
