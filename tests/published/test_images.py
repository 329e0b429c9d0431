"""Conductors by mirror planes and half-spaces against exact values, within the stated uncertainty."""

import numpy as np
import pytest

from daraf.bem.constants import FOUR_PI_EPSILON_0
from daraf.bem.images import HalfSpace, Images, MirrorPlane
from daraf.bem.media import METAL, Media
from daraf.bem.media_solve import solve_media
from published import exact as X  # noqa: N812
from published import shapes as S  # noqa: N812
from published.media_cases import split_faces

O3 = np.zeros(3)
AXES = np.eye(3)
VACUUM = Media(np.array([1.0]), np.array([0]), np.array([METAL]), 1)
EARTH = Images((MirrorPlane(O3, AXES[2], True),))
OVER_4 = Images((), HalfSpace(O3, AXES[2], 1.0, 4.0))


def check(surface, images, exact, accuracy, copies=1, media=VACUUM):
    solution = solve_media(surface, media, images=images, accuracy=accuracy)
    value = copies * solution.maxwell[0, 0, 0] / FOUR_PI_EPSILON_0
    spread = copies * solution.maxwell_uncertainty[0, 0, 0] / FOUR_PI_EPSILON_0
    assert solution.reached
    assert abs(value - exact) <= spread


def sphere_at(height):
    return S.surface([S.moved(S.icosphere(1.0, 2), z=height)])


@pytest.mark.parametrize("accuracy", [0.02, 0.003])
def test_eighth_of_a_cube(accuracy):
    """Unit cube 0.66067815409957: published value, see references of the shapes."""
    outer, _ = split_faces(S.moved(S.cube(0.5), 0.25, 0.25, 0.25), lambda n: bool(n[:3].sum() > 0.0))
    walls = Images(tuple(MirrorPlane(O3, axis, False) for axis in AXES))
    check(S.surface([outer]), walls, 0.66067815409957, accuracy, copies=8)


def test_half_sphere_at_a_magnetic_wall():
    upper, _ = split_faces(S.uv_sphere(1.0, 32, 16), lambda n: bool(n[5] > 0.0))
    check(S.surface([upper]), Images((MirrorPlane(O3, AXES[2], False),)), 1.0, 0.01, copies=2)


def test_sphere_over_an_earthed_plane():
    """Maxwell's sums of images: sphere of radius 1 with its centre 1.5 above the plane."""
    check(sphere_at(1.5), EARTH, X.sphere_over_plane(1, 1.5), 0.01)


@pytest.mark.parametrize("height", [1.2, 2.0])
def test_sphere_over_a_dielectric_half_space(height):
    """Image chain a sinh U sum k^(n-1) / sinh nU, cosh U = h/a, k = (e2 - e1)/(e2 + e1) = 0.6."""
    u, n = np.arccosh(height), np.arange(1, 200)
    exact = np.sinh(u) * np.sum(0.6 ** (n - 1) / np.sinh(n * u))
    check(sphere_at(height), OVER_4, exact, 0.01)


def test_sphere_half_embedded():
    """The field is radial, tangential to the interface: a (e1 + e2)/2."""
    lower, upper = split_faces(S.uv_sphere(1.0, 32, 16), lambda n: bool(n[5] < 0.0))
    media = Media(np.array([1.0]), np.array([0, 0]), np.array([METAL, METAL]), 1, np.array([0, 0]))
    check(S.surface([[lower, upper]]), OVER_4, 2.5, 0.01, media=media)


def test_disc_on_the_interface():
    """(2/pi) a (e1 + e2)/2: the field of charge in the plane runs along it."""
    check(S.surface([S.disc(1.0, 32)]), OVER_4, 5.0 / np.pi, 0.01)
