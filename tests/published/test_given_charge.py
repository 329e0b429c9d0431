"""Given charge and uniform fields with conductors and dielectrics, against exact values, within the uncertainty."""

import numpy as np
import pytest

from daraf.bem.constants import FOUR_PI_EPSILON_0
from daraf.bem.given_charge import ChargedBody, PointCharges, UniformField
from daraf.bem.images import Images, MirrorPlane
from daraf.bem.load_response import excite_with_loads, polarisability
from daraf.bem.media import METAL, Media
from daraf.bem.media_solve import solve_media
from daraf.bem.polyhedron import polyhedron_volume
from published import shapes as S  # noqa: N812

UNIT = FOUR_PI_EPSILON_0
METAL_BALL = Media(np.array([1.0]), np.array([0]), np.array([METAL]), 1)
GLASS_BALL = Media(np.array([1.0, 4.0]), np.array([0]), np.array([1]), 0)
AXES = np.eye(3)


def ball():
    return S.surface([S.icosphere(1.0, 2)])


def point(*place, medium=0):
    return PointCharges(np.array([place], dtype=np.float64), np.array([UNIT]), medium)


def inside(value, spread, exact):
    assert abs(value - exact) <= spread


def test_point_charge_by_an_earthed_and_a_floating_sphere():
    """Thomson's images (Maxwell, Treatise, art. 149): -a/d; floating: potential 1/d, energy from both images."""
    solution = solve_media(ball(), METAL_BALL, loads=[point(2.0, 0.0, 0.0)], accuracy=0.005)
    value, spread = solution.maxwell[0] / UNIT, solution.maxwell_uncertainty[0] / UNIT
    inside(value[0, 1], spread[0, 1], -0.5)
    inside(value[1, 1], spread[1, 1], 1.0 / 3.0)
    floating = excite_with_loads(solution, [False], [0.0])
    inside(floating.potential[0], floating.potential_uncertainty[0], 0.5)
    # -a/(d^2 - a^2) of the earthed sphere and +a/d^2 of the charge that brings it back to zero, halved
    inside(floating.energy / UNIT, floating.energy_uncertainty / UNIT, 0.5 * (-1.0 / 3.0 + 0.25))


def test_point_charge_by_a_dielectric_sphere():
    """Reaction potential -0.0427162 at distance 2, permittivity 4: Stratton (1941) section 3.23, summed."""
    solution = solve_media(ball(), GLASS_BALL, loads=[point(2.0, 0.0, 0.0)], accuracy=0.005)
    inside(solution.maxwell[0, 0, 0] / UNIT, solution.maxwell_uncertainty[0, 0, 0] / UNIT, 0.04271619956051245)


def test_point_charge_inside_a_dielectric_sphere():
    """Concentric: the bound charge at the surface makes (1 - 1/4)/a where the charge is (elementary)."""
    solution = solve_media(ball(), GLASS_BALL, loads=[point(0.0, 0.0, 0.0, medium=1)], accuracy=0.005)
    inside(solution.maxwell[0, 0, 0] / UNIT, solution.maxwell_uncertainty[0, 0, 0] / UNIT, -0.75)


def test_charged_ball_by_an_earthed_sphere():
    """As a point charge at its centre, by its own volume: the mean of a harmonic function over a ball.

    The facets of the ball are taken as they are; an inscribed icosphere has no dipole and hardly a quadrupole.
    """
    mesh = S.moved(S.icosphere(0.5, 2), x=2.0)
    charge = polyhedron_volume(*mesh)
    solution = solve_media(ball(), METAL_BALL, loads=[ChargedBody(*mesh, UNIT / charge)], accuracy=0.005)
    inside(solution.maxwell[0, 0, 1] / UNIT, solution.maxwell_uncertainty[0, 0, 1] / UNIT, -0.5)


def test_polarisability_of_metal_and_glass_spheres():
    """a^3 and (e - 1)/(e + 2) a^3 (Stratton 1941, section 3.24; Jackson section 4.4)."""
    fields = [UniformField(axis) for axis in AXES]
    for media, exact in ((METAL_BALL, 1.0), (GLASS_BALL, 0.5)):
        solution = solve_media(ball(), media, loads=fields, accuracy=0.01)
        tensor, spread = polarisability(solution)
        assert solution.reached
        assert np.all(np.abs(tensor / UNIT - exact * np.eye(3)) <= spread / UNIT)


def test_charge_in_an_earthed_box_is_mirrored_whole():
    """All field lines of a charge in a closed box end on it: the induced charge is -q, on each face a sixth."""
    vertices, triangles = S.flipped(S.cube(1.0))
    faces = [(vertices[t], np.array([[0, 1, 2], [3, 4, 5]])) for t in triangles.reshape(6, 6)]
    gap = 1e-3
    shrunk = [((v - v.mean(axis=0)) * (1.0 - gap) + v.mean(axis=0), t) for v, t in faces]
    media = Media(np.array([1.0]), np.zeros(6, int), np.zeros(6, int), 6)
    solution = solve_media(S.surface(shrunk), media, loads=[point(0.0, 0.0, 0.0)], accuracy=0.02, want=[(0, 6), (5, 6)])
    value, spread = solution.maxwell[0, :6, 6] / UNIT, solution.maxwell_uncertainty[0, :6, 6] / UNIT
    # hair gaps of 1e-3 let about as much of the flux through
    assert np.all(np.abs(value[[0, 5]] + 1.0 / 6.0) <= spread[[0, 5]] + gap)


@pytest.mark.parametrize("electric", [True, False])
def test_charge_and_sphere_over_a_plane_as_with_their_images(electric):
    """The same problem with the image modelled as real bodies; Green's reciprocity holds in both."""
    sign = -1.0 if electric else 1.0
    plane = Images((MirrorPlane(np.zeros(3), AXES[2], electric),))
    mesh = S.moved(S.icosphere(1.0, 2), z=1.5)
    load = point(2.0, 0.0, 1.0)
    half = solve_media(S.surface([mesh]), METAL_BALL, images=plane, loads=[load], accuracy=0.01)
    both = PointCharges(np.array([[2.0, 0.0, 1.0], [2.0, 0.0, -1.0]]), UNIT * np.array([1.0, sign]))
    media = Media(np.array([1.0]), np.zeros(2, int), np.full(2, METAL), 2)
    whole = solve_media(S.surface([mesh, S.moved(mesh, z=-3.0)]), media, loads=[both], accuracy=0.01)
    allowed = half.maxwell_uncertainty[0, 0, 1] + whole.maxwell_uncertainty[0, 0, 2]
    assert abs(half.maxwell[0, 0, 1] - whole.maxwell[0, 0, 2]) <= allowed
