"""The largest circle inside a polygon that touches its outline at a point."""

import numpy as np
import pytest
import shapely
from hypothesis import given
from hypothesis import strategies as st

from daraf.bem.bands import _radii
from daraf.bem.room import circle_radii

SQUARE = np.array([[0.0, 0.0], [1.0, 0.0], [1.0, 1.0], [0.0, 1.0]])


def test_nothing_ahead_is_infinite():
    points, normals = np.array([[0.0, 0.0]]), np.array([[0.0, 1.0]])
    none = np.full((1, 4), -1)
    found = circle_radii(points, normals, np.zeros(1, np.int64), none[:, :3], np.array([[0.0, -1.0]]), none)
    assert np.isinf(found[0])


def test_circle_through_one_corner():
    # the circle that touches the x axis in the origin and passes through (1, 1) has the radius 1
    points, normals = np.array([[0.0, 0.0]]), np.array([[0.0, 1.0]])
    none = np.full((1, 4), -1)
    found = circle_radii(points, normals, np.zeros(1, np.int64), none[:, :3], np.array([[1.0, 1.0]]), none)
    assert found[0] == pytest.approx(1.0, rel=1e-15)


@given(seed=st.integers(0, 2**32 - 1), n=st.integers(5, 12))
def test_slow_twin_on_stars(seed, n):
    """The circle bulges over no sample that it was asked to respect, and touches one: by distances alone."""
    rng = np.random.default_rng(seed)
    angle = (np.arange(n) + rng.uniform(0.1, 0.9, n)) * 2 * np.pi / n
    loop = np.column_stack([np.cos(angle), np.sin(angle)]) * rng.uniform(0.4, 1.0, n)[:, None]
    if not shapely.Polygon(loop).is_valid:
        return
    radii, edge = _radii([loop])
    corner = np.roll(loop, -1, axis=0) - loop
    length = np.hypot(*corner.T)
    normal = np.column_stack([-corner[:, 1], corner[:, 0]]) / length[:, None]
    count = np.bincount(edge, minlength=n)
    for k in range(n):
        for m in range(count[k]):
            point = loop[k] + (m + 0.5) / count[k] * corner[k]
            radius = radii[np.searchsorted(edge, k) + m]
            others = [j for j in range(n) if j not in (k, (k + 1) % n, (k - 1) % n)]
            samples = [loop[j] + (i + 0.5) / count[j] * corner[j] for j in others for i in range(count[j])]
            far = np.linalg.norm(np.array(samples) - (point + radius * normal[k]), axis=1)
            # 1e-9: rounding of a radius a thousand times the polygon
            assert np.isinf(radius) or far.min() >= radius * (1.0 - 1e-9)
