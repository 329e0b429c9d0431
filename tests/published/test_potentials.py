"""Potential and field off the surfaces against exact ones: the value lies within its own uncertainty."""

import numpy as np
import pytest

from daraf.bem import excite, solve_capacitance
from daraf.bem.constants import FOUR_PI_EPSILON_0
from daraf.bem.field_lines import field_line
from daraf.bem.meaning import surface_meaning
from daraf.bem.probing import charged_panels, probe
from published import shapes
from published.exact_potentials import ellipsoid_field, two_spheres_field

#: Distances from the drawn surface, in radii: from right above it to far away.
DISTANCES = [0.003, 0.01, 0.03, 0.1, 0.3, 1.0, 3.0]


def charged(meshes, potentials, accuracy=0.02):
    surface = shapes.surface(meshes)
    solution = solve_capacitance(surface, accuracy=accuracy)
    meaning = surface_meaning(surface, solution.panels)
    held = np.ones(len(potentials), bool)
    state = excite(solution.maxwell, solution.maxwell_uncertainty, held, np.array(potentials, dtype=float))
    return charged_panels(
        solution.panels,
        solution.densities,
        state,
        FOUR_PI_EPSILON_0,
        fill=meaning.fill,
        facet_offset=meaning.facet_offset,
        previous=solution.previous,
    )


def around(mesh, rng, n=150):
    corners = mesh[0][mesh[1]]
    normal = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])
    area = np.linalg.norm(normal, axis=1)
    k = rng.choice(len(corners), n, p=area / area.sum())
    foot = np.einsum("ij,ijk->ik", rng.dirichlet([1, 1, 1], n), corners[k])
    height = rng.choice(DISTANCES, n)
    return np.column_stack([foot + height[:, None] * normal[k] / area[k, None], height])


BALL, ELLIPSOID, DISC = (1.0, 1.0, 1.0), (1.0, 0.7, 0.4), (1.0, 1.0, 0.0)
SPHERES = [
    shapes.turned(shapes.icosphere(1.0, 2), 0.3, (1.0, 0.3, 0.2)),
    shapes.moved(shapes.turned(shapes.icosphere(0.7, 2), 0.2, (0.2, 1.0, 0.7)), z=2.2),
]
CASES = {
    "sphere": ([shapes.icosphere(1.0, 2)], [1.0], lambda x: ellipsoid_field(x, BALL)),
    "ellipsoid": ([shapes.ellipsoid(ELLIPSOID, 2)], [1.0], lambda x: ellipsoid_field(x, ELLIPSOID)),
    "disc": ([shapes.disc(1.0, 24)], [1.0], lambda x: ellipsoid_field(x, DISC)),
    "pair": (SPHERES, [1.0, -0.5], lambda x: two_spheres_field(x, (1.0, 0.7), 2.2, (1.0, -0.5))),
}


@pytest.mark.parametrize("name", CASES)
def test_exact_potential_and_field_lie_within_the_uncertainty(name):
    meshes, potentials, exact = CASES[name]
    rng = np.random.default_rng(1)
    points, height = np.split(np.concatenate([around(mesh, rng) for mesh in meshes]), [3], axis=1)
    solid = np.zeros(len(points), bool)
    for at, axes in {"sphere": [(0.0, BALL)], "ellipsoid": [(0.0, ELLIPSOID)], "disc": []}.get(
        name, [(0.0, BALL), (2.2, 0.7 * np.array(BALL))]
    ):
        solid |= (((points - [0.0, 0.0, at]) / axes) ** 2).sum(axis=1) <= 1.0
    found = probe(charged(meshes, potentials), points[~solid])
    free = found.inside < 0
    # a seventh of the points is less than a facet's depth above the facet, where they may still count as metal
    assert free.mean() > 1.0 - 1.0 / len(DISTANCES)
    volts, field = exact(points[~solid])
    error = np.abs(found.potential - volts)[free]
    strength_error = np.linalg.norm(found.field - field, axis=1)[free]
    # the promise of an expanded uncertainty: 95 % of the values
    assert np.mean(error <= found.potential_uncertainty[free]) >= 0.95
    assert np.mean(strength_error <= found.field_uncertainty[free]) >= 0.95
    # and it says something: beyond a few panels of any body the field is told to a few per cent
    away = height[:, 0] >= 1.0
    if name == "pair":
        away &= (np.linalg.norm(points, axis=1) > 2.0) & (np.linalg.norm(points - [0.0, 0.0, 2.2], axis=1) > 1.7)
    far = away[~solid][free]
    assert far.any()
    assert np.all(found.field_uncertainty[free][far] < 0.05 * found.strength[free][far])


def test_metal_is_told_and_holds_the_potential_of_its_conductor():
    found = probe(charged(SPHERES, [1.0, -0.5]), [[0.0, 0.0, 0.2], [0.1, 0.0, 2.3], [0.0, 0.0, 1.25]])
    assert found.inside.tolist() == [0, 1, -1]
    assert found.potential[:2].tolist() == [1.0, -0.5]
    assert not found.field[:2].any()
    assert not found.potential_uncertainty[:2].any()


def test_a_field_line_crosses_the_gap_of_two_spheres():
    state = charged(SPHERES, [1.0, -0.5])
    line = field_line(state, [0.0, 0.0, 1.0])
    assert (line.starts_on, line.ends_on) == (0, 1)
    # straight along the axis; the facets are up to 1 % of a radius off the sphere
    assert line.points[-1] == pytest.approx([0.0, 0.0, 1.5], abs=0.03)
    # the work along it is the voltage
    found = probe(state, line.points[1:-1])
    work = np.trapezoid(found.strength, line.distance[1:-1])
    # trapezia over some twenty steps
    assert work == pytest.approx(found.potential[0] - found.potential[-1], rel=0.01)
    assert np.all(np.diff(found.potential) < 0.0)


def test_a_field_line_from_free_space_is_followed_both_ways_and_one_to_infinity_leaves():
    state = charged(SPHERES, [1.0, -0.5])
    line = field_line(state, [0.2, 0.0, 1.25])
    assert (line.starts_on, line.ends_on) == (0, 1)
    outward = field_line(state, [0.0, 0.0, -1.0])
    assert outward.starts_on == 0
    assert outward.ends_on == -1
    assert np.linalg.norm(outward.points[-1]) > 5.0
