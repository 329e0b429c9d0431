"""Packed panel geometry against its plain definition."""

import numpy as np
import pytest

from daraf.bem import frames as F  # noqa: N812
from daraf.bem.panels import polygon_geometry


def panels(seed=5):
    """Random flat convex quadrilaterals and triangles, turned about."""
    random = np.random.default_rng(seed)
    angle = np.sort(random.uniform(0, 2 * np.pi, (40, 4)), axis=1)
    flat = np.stack([np.cos(angle), np.sin(angle), np.zeros_like(angle)], axis=2)
    flat[30:, 3] = flat[30:, 2]
    turn = np.linalg.qr(random.normal(size=(40, 3, 3)))[0]
    size = 10.0 ** random.uniform(-3, 1, (40, 1, 1))
    return np.ascontiguousarray(size * (flat @ turn.transpose(0, 2, 1)) + random.normal(size=(40, 1, 3)))


def test_frames_hold_the_geometry_of_the_panels():
    corners = panels()
    rows = F.panel_frames(corners)
    areas, centroids, normals = polygon_geometry(corners)
    edges = np.roll(corners, -1, axis=1) - corners
    lengths = np.linalg.norm(edges, axis=2)
    along = edges / np.where(lengths > 0, lengths, 1.0)[..., None]
    near = {"rtol": 1e-10, "atol": 1e-12}  # rounding of coordinates of size 1 on panels down to 1e-3
    np.testing.assert_array_equal(rows[:, F.CORNER : F.CORNER + 12], corners.reshape(-1, 12))
    np.testing.assert_allclose(rows[:, F.AREA], areas, **near)
    np.testing.assert_allclose(rows[:, F.CENTROID : F.CENTROID + 3], centroids, **near)
    np.testing.assert_allclose(rows[:, F.NORMAL : F.NORMAL + 3], normals, **near)
    np.testing.assert_allclose(rows[:, F.LENGTH : F.LENGTH + 4], lengths, **near)
    np.testing.assert_allclose(rows[:, F.DIRECTION : F.DIRECTION + 12], along.reshape(-1, 12), **near)
    across = np.cross(along, normals[:, None])
    np.testing.assert_allclose(rows[:, F.OUTWARD : F.OUTWARD + 12], across.reshape(-1, 12), **near)
    radius = np.linalg.norm(corners - centroids[:, None], axis=2).max(axis=1)
    np.testing.assert_allclose(rows[:, F.RADIUS], radius, **near)
    parts = rows[:, F.TWICE_AREA_1] + rows[:, F.TWICE_AREA_2]
    np.testing.assert_allclose(parts, 2 * areas, **near)


@pytest.mark.parametrize("n", [2, 3, 4, 5])
def test_gauss_points_integrate_polynomials_over_the_panel(n):
    corners = panels()
    rows = F.panel_frames(corners, largest_rule=n)
    count = n * n
    points = rows[:, F.POINTS[n] : F.POINTS[n] + 3 * count].reshape(-1, 3, count)
    weights = rows[:, F.POINTS[n] + 3 * count : F.POINTS[n] + 4 * count]
    areas, centroids, _ = polygon_geometry(corners)
    # the rule is exact for linear functions times the bilinear map's Jacobian from two points a side on
    np.testing.assert_allclose(weights.sum(axis=1), areas, rtol=1e-9)
    moment = np.einsum("pkq,pq->pk", points, weights)
    np.testing.assert_allclose(moment, areas[:, None] * centroids, rtol=1e-9, atol=1e-11)


def test_rows_without_rules_are_shorter_and_agree():
    corners = panels()
    rows = F.panel_frames(corners, largest_rule=0)
    assert rows.shape == (40, F.POINTS[2])
    np.testing.assert_array_equal(rows, F.panel_frames(corners)[:, : F.POINTS[2]])


def test_a_panel_without_area_has_no_normal():
    row = F.panel_frames(np.zeros((1, 4, 3)))[0]
    assert np.all(row == 0.0)


def test_strided_corners_are_taken():
    corners = panels()
    np.testing.assert_array_equal(F.panel_frames(corners[::-1]), F.panel_frames(corners)[::-1])
