"""Given charge: closed forms against slow twins, and identities of the states it makes."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from daraf.bem import InputError
from daraf.bem.bisection import children
from daraf.bem.constants import FOUR_PI_EPSILON_0
from daraf.bem.frames import panel_frames
from daraf.bem.given_charge import ChargedBody, ChargedSurface, LineCharge, PointCharges, UniformField
from daraf.bem.images import Images, MirrorPlane
from daraf.bem.load_columns import check_loads
from daraf.bem.media import METAL, Media
from daraf.bem.polyhedron import polyhedron_frames, polyhedron_potential
from published import shapes as S  # noqa: N812

O3 = np.zeros(3)
X, Y, Z = np.eye(3)
ONE_VOLT_METRE = FOUR_PI_EPSILON_0  # charge whose potential is 1 V at 1 m


def at(frames, points):
    potential, field = np.empty(len(points)), np.empty((len(points), 3))
    polyhedron_potential(points, frames, potential, field)
    return potential, field


def test_cube_at_its_centre_and_corner():
    """Unit cube: int dV / r is 2.3800774 at the centre and half of it at a corner (eight cubes meet there)."""
    frames = polyhedron_frames(*S.cube(1.0))
    potential, field = at(frames, np.array([O3, 0.5 * (X + Y + Z)]))
    centre = 1.5 * np.log((np.sqrt(3) + 1) / (np.sqrt(3) - 1)) * 2.0 / 1.0 - np.pi / 2.0
    assert potential[0] == pytest.approx(centre, rel=1e-12)  # closed form; rounding
    assert potential[1] == pytest.approx(centre / 2.0, rel=1e-12)
    assert_allclose(field[0], 0.0, atol=1e-12)


def test_polyhedron_against_gauss_points():
    """Slow twin: a tensor Gauss rule over the cube, from outside."""
    node, weight = np.polynomial.legendre.leggauss(20)
    grid = np.stack(np.meshgrid(node, node, node, indexing="ij"), axis=-1).reshape(-1, 3) / 2.0
    weights = np.einsum("i,j,k->ijk", weight, weight, weight).reshape(-1) / 8.0
    point = np.array([[0.9, 0.3, -0.2]])
    potential, field = at(polyhedron_frames(*S.cube(1.0)), point)
    away = point[0] - grid
    r = np.linalg.norm(away, axis=1)
    assert potential[0] == pytest.approx(weights @ (1.0 / r), rel=1e-9)  # twin converged to that
    assert_allclose(field[0], (weights / r**3) @ away, rtol=1e-8, atol=1e-10)


def test_field_is_minus_the_gradient_of_the_potential():
    frames = polyhedron_frames(*S.icosphere(1.0, 1))
    point, step = np.array([0.4, -0.3, 0.2]), 1e-4
    shifted = np.array([point + s * step * axis for axis in np.eye(3) for s in (1, -1)])
    potential, _ = at(frames, shifted)
    _, field = at(frames, point[None])
    # central difference of second order: 1e-8
    assert_allclose(field[0], -(potential[::2] - potential[1::2]) / (2 * step), atol=1e-7)


def test_refuses_open_and_inverted_bodies():
    vertices, triangles = S.cube(1.0)
    with pytest.raises(InputError, match="closed surface"):
        polyhedron_frames(vertices, triangles[:-1])
    with pytest.raises(InputError, match="inside out"):
        polyhedron_frames(*S.flipped((vertices, triangles)))


def box_corners():
    vertices, triangles = S.cube(1.0)
    return vertices[triangles][:, [0, 1, 2, 2]]


LOADS = {
    "points": PointCharges(np.array([[0.1, 0.2, -0.1], [0.2, 0.0, 0.0]]), ONE_VOLT_METRE * np.array([1.0, 2.0])),
    "line": LineCharge(-0.2 * X, 0.2 * X + 0.1 * Y, 5.0 * ONE_VOLT_METRE),
    "surface": ChargedSurface(0.2 * np.array([[O3, X, X + Y, Y]]), np.array([ONE_VOLT_METRE])),
    "body": ChargedBody(*S.cube(0.4), 2.0 * ONE_VOLT_METRE),
}
TOTAL = {"points": 3.0, "line": 5.0 * np.hypot(0.4, 0.1), "surface": 0.04, "body": 0.128}


@pytest.mark.parametrize("name", LOADS)
def test_flux_through_a_closed_box_is_four_pi_times_the_charge(name):
    parts = box_corners()
    for _ in range(2):
        parts = children(parts, np.where(np.ptp(parts[:, 2:], axis=1).any(axis=1), 4, 3)).reshape(-1, 4, 3)
    _, flux = LOADS[name].moments(panel_frames(parts))
    # the body's flux comes from 5 x 5 points a panel, an eighth of a face wide: 1e-5
    assert flux.sum() == pytest.approx(4.0 * np.pi * TOTAL[name], rel=2e-5)


@pytest.mark.parametrize("name", LOADS)
def test_moments_are_the_integrated_potential(name):
    load = LOADS[name]
    frames = panel_frames(np.array([[1.0 * X, X + Y, X + Y + Z, X + Z]]))
    node, weight = np.polynomial.legendre.leggauss(12)
    y, z = (grid.ravel() for grid in np.meshgrid(0.5 * (node + 1), 0.5 * (node + 1), indexing="ij"))
    points = np.column_stack([np.ones_like(y), y, z])
    wanted = np.outer(weight, weight).ravel() / 4.0 @ load.potential(points)
    found, _ = load.moments(frames)
    assert found[0] == pytest.approx(wanted, rel=1e-6)  # the twin's rule at this distance


def test_uniform_field():
    frames = panel_frames(box_corners())
    potential, flux = UniformField([1.0, 2.0, 3.0]).moments(frames)
    assert flux.sum() == pytest.approx(0.0, abs=1e-12)
    assert potential.sum() == pytest.approx(0.0, abs=1e-12)  # a box about the origin


def test_refuses_loads_that_do_not_fit():
    media = Media(np.array([1.0]), [0], [METAL], 1)
    earth = Images((MirrorPlane(O3, Z, True),))
    with pytest.raises(InputError, match="right angles to an earthed plane"):
        check_loads([UniformField(X)], media, earth)
    with pytest.raises(InputError, match="does not exist"):
        check_loads([PointCharges([O3], [1.0], 3)], media, Images())
    with pytest.raises(InputError, match="shape"):
        PointCharges([O3], [1.0, 2.0])
    check_loads([UniformField(Z)], media, earth)
