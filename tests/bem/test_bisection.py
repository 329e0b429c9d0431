import naive
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daraf.bem.bisection import SPLIT_BOTH, SPLIT_NONE, SPLIT_U, SPLIT_V, children, halves, split_panels
from daraf.bem.panels import Panels, polygon_geometry


@st.composite
def convex_quads(draw):
    """A convex quadrilateral on an ellipse, turned somewhere."""
    gaps = np.array([draw(st.floats(0.05, 1.0)) for _ in range(4)])
    angles = 2.0 * np.pi * np.cumsum(gaps) / gaps.sum()
    flat = np.stack([np.cos(angles), draw(st.floats(0.01, 1.0)) * np.sin(angles), np.zeros(4)], axis=1)
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    q, _ = np.linalg.qr(rng.normal(size=(3, 3)))
    return flat @ q.T + rng.normal(size=3)


def mixed():
    """Two quadrilaterals and two triangles, of bodies 0 to 3."""
    corners = np.stack(
        [
            naive.rectangle(2.0, 1.0),
            naive.triangle((0.0, 0.0, 1.0), (1.0, 0.0, 1.0), (0.3, 0.8, 1.0)),
            naive.rectangle(1.0, 3.0, at=(0.0, 0.0, 2.0)),
            naive.triangle((0.0, 0.0, 3.0), (1.0, 0.0, 3.0), (0.3, 0.8, 3.0)),
        ]
    )
    number = np.arange(4)
    return Panels(corners, np.array([4, 3, 4, 3]), number, number, number + 10)


def turns(corners):
    """Sines of the turns at the corners, seen along the normal: positive for a convex panel."""
    _, _, normals = polygon_geometry(corners)
    edges = np.roll(corners, -1, axis=1) - corners
    return np.einsum("nki,ni->nk", np.cross(edges, np.roll(edges, -1, axis=1)), normals)


def heights(corners):
    """Largest distance of a corner from the panel's plane."""
    _, centroids, normals = polygon_geometry(corners)
    return np.abs(np.einsum("nki,ni->nk", corners - centroids[:, None], normals)).max()


@given(convex_quads(), st.sampled_from([SPLIT_U, SPLIT_V]))
@settings(max_examples=50)
def test_halves_conserve_area_and_stay_flat_and_convex(quad, direction):
    parts = halves(quad[None], direction)[0]
    whole, part = polygon_geometry(quad[None])[0], polygon_geometry(parts)[0]
    # rounding of coordinates of size 1 against an area of 1e-2 at least
    assert part.sum() == pytest.approx(whole[0], rel=1e-12)
    assert heights(parts) < 1e-14 * 10
    assert np.all(turns(parts) > 0)


@given(convex_quads())
@settings(max_examples=25)
def test_children_are_halves_of_halves(quad):
    parts = children(quad[None], np.array([4]))[0]
    first, second = halves(quad[None], SPLIT_U)[0]
    np.testing.assert_array_equal(parts[:2], halves(first[None], SPLIT_V)[0])
    np.testing.assert_array_equal(parts[2:], halves(second[None], SPLIT_V)[0])


def test_thirds_of_a_triangle():
    triangle = naive.triangle((0.0, 0.0, 0.0), (2.0, 0.0, 0.0), (0.3, 1.5, 0.0))[None]
    parts = children(triangle, np.array([3]))[0]
    areas = polygon_geometry(parts)[0]
    # three equal parts; the fourth has no area
    np.testing.assert_allclose(areas, [0.5, 0.5, 0.5, 0.0], rtol=1e-14, atol=1e-16)
    assert np.all(turns(parts[:3]) > 0)
    # the normals stay
    np.testing.assert_allclose(polygon_geometry(parts[:3])[2], [[0.0, 0.0, 1.0]] * 3, atol=1e-15)


MARKS = [(SPLIT_NONE, 1, 1), (SPLIT_U, 2, 3), (SPLIT_V, 2, 3), (SPLIT_BOTH, 4, 3)]


@pytest.mark.parametrize(("mark", "of_quad", "of_triangle"), MARKS)
def test_split_marks(mark, of_quad, of_triangle):
    panels = mixed()
    new, parent = split_panels(panels, np.full(4, mark))
    np.testing.assert_array_equal(np.bincount(parent), [of_quad, of_triangle, of_quad, of_triangle])
    assert np.all(new.n_corners[mark != SPLIT_NONE :] == 4) or mark == SPLIT_NONE


def test_parent_mapping_and_order():
    panels = mixed()
    new, parent = split_panels(panels, np.array([SPLIT_U, SPLIT_NONE, SPLIT_BOTH, SPLIT_V]))
    # those that stay come first and are untouched
    assert parent[0] == 1
    np.testing.assert_array_equal(new.corners[0], panels.corners[1])
    for name in ("body", "conductor", "region"):
        np.testing.assert_array_equal(getattr(new, name), getattr(panels, name)[parent])
    np.testing.assert_allclose(np.bincount(parent, new.areas), panels.areas, rtol=1e-14)
    # a part lies on its parent: the mean of the parts' centroids, weighted, is the parent's
    for axis in range(3):
        mean = np.bincount(parent, new.areas * new.centroids[:, axis]) / panels.areas
        np.testing.assert_allclose(mean, panels.centroids[:, axis], atol=1e-14)


def test_nothing_to_split_gives_the_same_panels():
    panels = mixed()
    new, parent = split_panels(panels, np.zeros(4, dtype=np.int64))
    np.testing.assert_array_equal(new.corners, panels.corners)
    np.testing.assert_array_equal(parent, np.arange(4))


def test_u_halves_the_sides_0_1_and_3_2():
    new, _ = split_panels(mixed(), np.array([SPLIT_U, 0, 0, 0]))
    np.testing.assert_array_equal(np.ptp(new.corners[-1], axis=0), [1.0, 1.0, 0.0])
