"""Forces and peak fields against published and exact values, each within its own uncertainty.

Forces in V^2 (times 4 pi epsilon_0: N at potentials in V; charges then in units of 4 pi epsilon_0), lengths in m.

Two spheres: multipole expansion, 11 digits, computed for these tests; the problem is that of Maxwell, Treatise
(1873) art. 173; the attraction of like charges is that of Lekner, Proc. R. Soc. A 468 (2012) 2829. Discs: derivative
of Love's equation, Quart. J. Mech. Appl. Math. 2 (1949) 428, 9 digits. Spheroids: charge density of an ellipsoid,
Landau and Lifshitz, Electrodynamics of Continuous Media, section 4.
"""

from functools import cache
from math import acos, atanh, sqrt

import numpy as np
import pytest

from daraf.bem import excite, solve_capacitance
from daraf.bem.charges import stated_charges
from daraf.bem.constants import FOUR_PI_EPSILON_0
from daraf.bem.force import conductor_forces
from daraf.bem.peak import peak_fields
from published import shapes

#: radius, radius, distance of centres, given, values: repulsion.
SPHERE_FORCES = [
    (1, 1, 3, "potential", (1, 1), 0.05414621882608532),
    (1, 1, 3, "potential", (1, -1), -0.3178169228725260),
    (1, 1, 3, "charge", (1, 1), 0.09443693967347194),
    (1, 2, 4, "potential", (1, 1), 0.05170722007156839),
    (1, 2, 4, "potential", (1, -1), -0.4574871943265062),
    (1, 2, 4, "charge", (1, 1), 0.03842253107054882),
    (1, 1, 2.1, "potential", (1, 1), 0.07191470775576109),
    (1, 1, 2.1, "potential", (1, -1), -4.625661995880998),
    (1, 1, 2.1, "charge", (1, 1), 0.1465821816838495),
    (1, 2, 3.2, "charge", (1, 1), -0.0215378071831910),
]

#: Distance of two discs of radius 1 at +1/2 V and -1/2 V: attraction.
DISC_FORCES = {0.1: 12.8181303, 0.5: 0.54076341803, 1.0: 0.13811711658, 2.0: 0.033950539771}

#: radius, radius, distance, potentials: field at the pole of the first sphere that faces the second, V/m.
POLE_FIELDS = [
    (1, 1, 3, (1, 0), 1.516980077012539),
    (1, 1, 3, (1, -1), 2.717992656043067),
    (1, 2, 4, (1, 0), 1.620148170524523),
    (1, 2, 4, (1, -1), 3.077655339302141),
    (1, 1, 2.1, (1, 0), 10.33567903807506),
    (1, 1, 2.1, (1, -1), 20.67115606736584),
]


@cache
def spheres(one, two, distance):
    first = shapes.turned(shapes.icosphere(one, 2), 0.3, (1.0, 0.3, 0.2))
    second = shapes.turned(shapes.icosphere(two, 2), 0.2, (0.2, 1.0, 0.7))
    surface = shapes.surface([first, shapes.moved(second, z=distance)])
    return surface, solve_capacitance(surface)


def charges(solved, given, values):
    surface, solution = solved
    held = np.full(len(values), given == "potential")
    scale = 1.0 if given == "potential" else FOUR_PI_EPSILON_0
    state = excite(
        solution.maxwell,
        solution.maxwell_uncertainty,
        held,
        scale * np.array(values, dtype=np.float64),
        to_infinity_uncertainty=solution.to_infinity_uncertainty,
    )
    return stated_charges(surface, solution, state)


def assert_pushes(forces, repulsion, worst):
    """The second conductor lies above the first."""
    expected = np.array([[0.0, 0.0, -repulsion], [0.0, 0.0, repulsion]])
    error = np.linalg.norm(forces.force / FOUR_PI_EPSILON_0 - expected, axis=1)
    spread = forces.force_uncertainty / FOUR_PI_EPSILON_0
    assert (error <= spread).all()
    assert (spread <= worst * abs(repulsion)).all()
    # by symmetry nothing turns
    assert (np.linalg.norm(forces.torque, axis=1) <= forces.torque_uncertainty).all()


@pytest.mark.parametrize(("one", "two", "distance", "given", "values", "repulsion"), SPHERE_FORCES)
def test_two_spheres(one, two, distance, given, values, repulsion):
    # 320 facets each; the balance of like charges that attract hangs on the shape to a tenth
    worst = 0.12 if repulsion == -0.0215378071831910 else 0.04
    assert_pushes(conductor_forces(charges(spheres(one, two, distance), given, values)), repulsion, worst)


def test_no_force_inside_a_concentric_shell():
    """Zero by symmetry, of a mesh as symmetric: what is left is rounding, and the uncertainty says as much."""
    surface = shapes.surface([shapes.icosphere(1.0, 1), shapes.icosphere(2.0, 1)])
    forces = conductor_forces(charges((surface, solve_capacitance(surface, accuracy=0.02)), "potential", (1.0, 0.0)))
    size = np.linalg.norm(forces.force, axis=1)
    assert (size <= forces.force_uncertainty).all()
    assert (np.linalg.norm(forces.torque, axis=1) <= forces.torque_uncertainty).all()
    # the pressure on the inner sphere, eps E^2 / 2 over 4 pi a^2 with E = 2 V/m, is 8 pi eps
    assert (forces.force_uncertainty < 1e-3 * 2.0 * FOUR_PI_EPSILON_0).all()


@pytest.mark.parametrize("distance", DISC_FORCES)
def test_two_discs(distance):
    surface = shapes.surface([shapes.disc(1.0, 64), shapes.moved(shapes.turned(shapes.disc(1.0, 64), 0.1), z=distance)])
    solved = surface, solve_capacitance(surface)
    assert_pushes(conductor_forces(charges(solved, "potential", (0.5, -0.5))), -DISC_FORCES[distance], 0.05)


def assert_peak(found, expected, worst):
    assert found.bounded
    assert abs(found.peak - expected) <= found.uncertainty
    assert found.uncertainty <= worst * expected


@pytest.mark.parametrize(("one", "two", "distance", "values", "field"), POLE_FIELDS)
def test_field_between_spheres(one, two, distance, values, field):
    found = peak_fields(charges(spheres(one, two, distance), "potential", values))[0]
    # a gap of a tenth of the radius is half as wide as a facet
    assert_peak(found, field, 0.2 if distance == 2.1 else 0.03)
    # the facet that faces the other sphere is off the axis by up to its own size
    assert np.linalg.norm(found.at - (0.0, 0.0, one)) < 0.1 * one


def test_field_of_a_sphere():
    surface = shapes.surface([shapes.icosphere(2.0, 2)])
    (found,) = peak_fields(charges((surface, solve_capacitance(surface)), "potential", (3.0,)))
    assert_peak(found, 1.5, 0.02)


@pytest.mark.parametrize("levels", [2, 3])
def test_field_at_the_tip_of_a_spheroid(levels):
    surface = shapes.surface([shapes.spheroid(2.0, 1.0, levels)])
    (found,) = peak_fields(charges((surface, solve_capacitance(surface)), "potential", (1.0,)))
    # sigma / eps = c V / b^2 at the tip of a prolate spheroid
    assert_peak(found, sqrt(3.0) / atanh(sqrt(0.75)), 0.05)
    assert abs(abs(found.at[2]) - 2.0) < 0.05


def test_field_at_the_rim_of_an_oblate_spheroid():
    surface = shapes.surface([shapes.spheroid(1.0, 2.0, 2)])
    (found,) = peak_fields(charges((surface, solve_capacitance(surface)), "potential", (1.0,)))
    # sigma / eps = c V / (a b)
    assert_peak(found, sqrt(3.0) / acos(0.5) / 2.0, 0.05)


def test_field_in_a_spherical_capacitor():
    """E = V b / (a (b - a)) on the inner sphere, V a / (b (b - a)) on the shell."""
    surface = shapes.surface([shapes.icosphere(1.0, 2), shapes.icosphere(2.0, 2)])
    inner, outer = peak_fields(charges((surface, solve_capacitance(surface)), "potential", (1.0, 0.0)))
    assert_peak(inner, 2.0, 0.05)
    assert_peak(outer, 0.5, 0.05)
