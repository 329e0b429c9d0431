"""Mirror planes and half-space: images, their factors, and what is refused."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from daraf.bem import InputError
from daraf.bem.flats import make_panels
from daraf.bem.images import HalfSpace, Images, MirrorPlane
from daraf.bem.media import METAL, Media
from daraf.bem.media_adaptive import MediaPlan, media_pass
from daraf.bem.panels import Panels, polygon_geometry
from published import shapes as S  # noqa: N812

O3 = np.zeros(3)
X, Y, Z = np.eye(3)


def one_pass(surface, media, images=None, panels=None):
    panels = make_panels(surface)[0] if panels is None else panels
    n = len(panels)
    bodies = int(panels.body.max()) + 1
    plan = MediaPlan(panels, np.zeros((n, 2), bool), np.full((n, 4), 0.25), np.zeros(bodies, np.int64))
    return media_pass(plan, media, images or Images(), lambda *_: None)


def both(panels, mirrored):
    """Panels with their mirror images as real panels of the same bodies."""
    return Panels(mirrored, *(np.tile(a, 2) for a in (panels.n_corners, panels.body, panels.conductor, panels.region)))


@pytest.mark.parametrize("electric", [False, True])
def test_image_is_a_mirrored_panel(electric):
    panels, _ = make_panels(S.surface([S.moved(S.cube(1.0), 0.2, 0.1, 1.5)]))
    plane = MirrorPlane(np.array([0.0, 0.0, 0.3]), 2.0 * Z, electric)
    placed = Images((plane,)).place(panels)
    image = placed.corners[len(panels) :]
    _, centroids, normals = polygon_geometry(image)
    assert_allclose(centroids[:, 2], 0.6 - panels.centroids[:, 2], atol=1e-12)  # rounding
    assert_allclose(normals, panels.normals * [1.0, 1.0, -1.0], atol=1e-12)
    assert_allclose(placed.factors[:, 0, 0], [1.0, -1.0 if electric else 1.0])


def test_three_planes_make_eight_images():
    panels, _ = make_panels(S.surface([S.moved(S.cube(1.0), 1.0, 1.0, 1.0)]))
    images = Images((MirrorPlane(O3, X, True), MirrorPlane(O3, Y, False), MirrorPlane(O3, Z, True)))
    placed = images.place(panels)
    assert images.n_images == 8
    corners = placed.corners.reshape(8, -1, 3)
    signs = np.sign(corners.mean(axis=1))
    assert len({tuple(s) for s in signs.tolist()}) == 8
    assert_allclose(placed.factors[:, 0, 0], signs[:, 0] * signs[:, 2])


def test_magnetic_wall_is_the_symmetric_half_of_the_whole():
    panels, _ = make_panels(S.surface([S.moved(S.cube(1.0), z=1.0)]))
    media = Media(np.array([2.0]), [0], [METAL], 1)
    images = Images((MirrorPlane(O3, Z, False),))
    half = one_pass(None, media, images, panels)
    whole = one_pass(None, media, None, both(panels, images.place(panels).corners))
    assert_allclose(2.0 * half.value, whole.value, rtol=1e-6)  # two sums of the same pairs, in two orders of the rules


@pytest.mark.parametrize("electric", [False, True])
def test_dielectric_and_conductor_by_a_plane_are_the_half_of_the_whole(electric):
    surface = S.surface([S.moved(S.cube(0.5), z=0.8), S.moved(S.cube(1.0), z=0.8)])
    panels, _ = make_panels(surface)
    images = Images((MirrorPlane(O3, Z, electric),))
    half = one_pass(None, Media(np.array([1.0, 5.0]), [1, 0], [METAL, 1], 1), images, panels)
    mirrored = images.place(panels).corners
    n = len(panels)
    parts = Panels(
        mirrored,
        np.tile(panels.n_corners, 2),
        np.concatenate([panels.body, panels.body + 2]),
        np.concatenate([np.where(panels.body == 0, 0, 2), np.where(panels.body == 0, 1, 2)]),
        np.tile(panels.region, 2),
    )
    whole = one_pass(None, Media(np.array([1.0, 5.0]), [1, 0, 1, 0], [METAL, 1, METAL, 1], 2), None, parts)
    state = whole.state[0] @ np.array([1.0, -1.0 if electric else 1.0])
    assert_allclose(half.state[0][:, 0], state[:n], rtol=1e-5, atol=1e-6)  # rules chosen by distance, both orders
    wanted = whole.value[0, 0] @ np.array([1.0, -1.0 if electric else 1.0])
    assert half.value[0, 0, 0] == pytest.approx(wanted, rel=1e-6)


def test_half_space_of_one_medium_is_that_medium():
    surface = S.surface([S.moved(S.cube(1.0), z=1.0), S.moved(S.cube(1.0), z=-1.0)])
    vacuum = Media(np.array([1.0]), [0, 0], [METAL, METAL], 2)
    found = one_pass(surface, vacuum, Images((), HalfSpace(O3, Z, 3.0, 3.0)))
    plain = one_pass(surface, vacuum)
    assert_allclose(found.value, 3.0 * plain.value, rtol=1e-12)  # rounding


def test_sheet_in_the_interface_sees_the_mean_permittivity():
    """The field of charge in the plane runs along it: both media act by their mean."""
    surface = S.surface([S.plate(1.0, 1.0)])
    vacuum = Media(np.array([1.0]), [0], [METAL], 1)
    found = one_pass(surface, vacuum, Images((), HalfSpace(O3, Z, 1.0, 6.0)))
    plain = one_pass(surface, vacuum)
    assert_allclose(found.value, 3.5 * plain.value, rtol=1e-12)  # rounding
    assert_allclose(found.limit, 3.5 * plain.limit, rtol=1e-9)  # rounding of the estimate


def test_refuses_planes_and_bodies_that_do_not_fit():
    with pytest.raises(InputError, match="orthogonal"):
        Images((MirrorPlane(O3, X, True), MirrorPlane(O3, X + Y, True)))
    with pytest.raises(InputError, match="at most three"):
        Images((MirrorPlane(O3, X, True), MirrorPlane(O3, Y, True), MirrorPlane(O3, Z, True)), HalfSpace(O3, X, 1, 2))
    with pytest.raises(InputError, match="normal not zero"):
        MirrorPlane(O3, O3, True)
    with pytest.raises(InputError, match="at least 1"):
        HalfSpace(O3, Z, 1.0, 0.5)
    panels, _ = make_panels(S.surface([S.cube(1.0)]))
    with pytest.raises(InputError, match="reaches through a mirror plane"):
        Images((MirrorPlane(O3, X, False),)).place(panels)
    with pytest.raises(InputError, match="uncut"):
        Images((), HalfSpace(O3, X, 1.0, 2.0)).place(panels)
    with pytest.raises(InputError, match="lies in an earthed plane"):
        Images((MirrorPlane(0.5 * Z, Z, True),)).place(panels)
