"""Exact distances and crossings of pairs of triangles, many pairs at once.

Closest points of segments: Ericson, Real-Time Collision Detection (2005), section 5.1.9.
"""

import numpy as np
from numpy.typing import NDArray

__all__ = [
    "edge_crossings",
    "inside_fraction",
    "pair_distances",
    "segment_triangle_distances",
    "sides_and_areas",
    "slab_gaps",
    "winding_numbers",
]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]


def _dot(a: FloatArray, b: FloatArray) -> FloatArray:
    dot: FloatArray = np.einsum("...i,...i->...", a, b)
    return dot


def _segment_points(p: FloatArray, u: FloatArray, q: FloatArray, v: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Closest points of the segments p + s u and q + t v, s and t from 0 to 1; shapes (..., 3)."""
    w = p - q
    uu, uv, vv, uw, vw = _dot(u, u), _dot(u, v), _dot(v, v), _dot(u, w), _dot(v, w)
    tiny = np.finfo(float).tiny
    det = uu * vv - uv * uv
    skew = det > 1e-14 * uu * vv  # else parallel: any s will do, the clamping below finds the rest
    s = np.where(skew, (uv * vw - vv * uw) / np.where(skew, det, 1.0), 0.0).clip(0.0, 1.0)
    t = ((uv * s + vw) / np.maximum(vv, tiny)).clip(0.0, 1.0)
    s = ((uv * t - uw) / np.maximum(uu, tiny)).clip(0.0, 1.0)
    t = ((uv * s + vw) / np.maximum(vv, tiny)).clip(0.0, 1.0)
    return p + s[..., None] * u, q + t[..., None] * v


def inside_fraction(points: FloatArray, triangle: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Least barycentric coordinate of points projected into the planes of triangles, and signed heights.

    Parameters
    ----------
    points : (..., 3) float, m
    triangle : (..., 3, 3) float, m

    Returns
    -------
    least : (...) float
        At least 0 where the foot of the point lies in the triangle; -inf for triangles without area.
    height : (...) float, m
    """
    a = triangle[..., 0, :]
    u, v, w = triangle[..., 1, :] - a, triangle[..., 2, :] - a, points - a
    normal = np.cross(u, v)
    squared = _dot(normal, normal)
    longest = np.maximum(_dot(u, u), _dot(v, v))
    flat = squared <= 1e-28 * longest * longest
    safe = np.where(flat, 1.0, squared)
    beta = _dot(np.cross(w, v), normal) / safe
    gamma = _dot(np.cross(u, w), normal) / safe
    least = np.minimum(np.minimum(beta, gamma), 1.0 - beta - gamma)
    return np.where(flat, -np.inf, least), _dot(w, normal) / np.sqrt(safe)


def edge_crossings(
    segments: FloatArray, triangles: FloatArray, margin: float, *, strict: bool = False
) -> tuple[BoolArray, FloatArray]:
    """Whether segments pass through triangles, both ends farther from the plane than the margin.

    Parameters
    ----------
    segments : (..., 2, 3) float, m
    triangles : (..., 3, 3) float, m
    margin : float, m
    strict : bool
        Whether the passage must also be farther than the margin from the edges of the triangle.

    Returns
    -------
    crosses : (...) bool
    place : (..., 3) float, m
        Where the line of the segment meets the plane.
    """
    _, h0 = inside_fraction(segments[..., 0, :], triangles)
    _, h1 = inside_fraction(segments[..., 1, :], triangles)
    opposite = (h0 * h1 < 0.0) & (np.minimum(np.abs(h0), np.abs(h1)) > margin)
    share = h0 / np.where(opposite, h0 - h1, 1.0)
    place = segments[..., 0, :] + share[..., None] * (segments[..., 1, :] - segments[..., 0, :])
    least, _ = inside_fraction(place, triangles)
    if not strict:
        return opposite & (least >= 0.0), place
    # a barycentric coordinate is the distance from an edge over the height upon it
    sides = np.roll(triangles, -1, axis=-2) - triangles
    longest = np.sqrt(_dot(sides, sides).max(axis=-1))
    doubled = np.linalg.norm(np.cross(sides[..., 0, :], sides[..., 1, :]), axis=-1)
    return opposite & (least * doubled > margin * longest), place


def pair_distances(a: FloatArray, b: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Distances of pairs of triangles, with the closest points; 0 where they meet.

    The least distance is between two edges or between a vertex and a face, unless an edge passes through.

    Parameters
    ----------
    a, b : (n, 3, 3) float, m

    Returns
    -------
    distance : (n,) float, m
    point_a, point_b : (n, 3) float, m
    """
    n = len(a)
    centre = a.mean(axis=1)[:, None]
    a, b = a - centre, b - centre
    p, q = a[:, :, None], b[:, None, :]
    u = np.roll(a, -1, axis=1)[:, :, None] - p
    v = np.roll(b, -1, axis=1)[:, None, :] - q
    on_a, on_b = (x.reshape(n, 9, 3) for x in _segment_points(p, u, q, v))
    foot_a, foot_b, miss_b = _vertex_faces(a, b)
    back_b, back_a, miss_a = _vertex_faces(b, a)
    hit_ab, place_ab = edge_crossings(_edges(a), b[:, None], 0.0)
    hit_ba, place_ba = edge_crossings(_edges(b), a[:, None], 0.0)
    points_a = np.concatenate([on_a, foot_a, back_a, place_ab, place_ba], axis=1)
    points_b = np.concatenate([on_b, foot_b, back_b, place_ab, place_ba], axis=1)
    distance = np.linalg.norm(points_a - points_b, axis=2)
    distance[:, 9:12][miss_b] = np.inf
    distance[:, 12:15][miss_a] = np.inf
    distance[:, 15:18][~hit_ab] = np.inf
    distance[:, 18:21][~hit_ba] = np.inf
    best = distance.argmin(axis=1)
    row = np.arange(n)
    return distance[row, best], points_a[row, best] + centre[:, 0], points_b[row, best] + centre[:, 0]


def sides_and_areas(corners: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Lengths of the sides of triangles, and twice their areas.

    Parameters
    ----------
    corners : (n, 3, 3) float, m

    Returns
    -------
    sides : (n, 3) float, m
        From corner k to corner k + 1.
    doubled : (n,) float, m2
    """
    a, b, c = (np.ascontiguousarray(corners[:, k].T) for k in range(3))  # columns: a third of the time of rows
    ab, bc, ca = b - a, c - b, a - c
    sides = np.sqrt(np.stack([(side * side).sum(axis=0) for side in (ab, bc, ca)], axis=1))
    x = ab[1] * bc[2] - ab[2] * bc[1]
    y = ab[2] * bc[0] - ab[0] * bc[2]
    z = ab[0] * bc[1] - ab[1] * bc[0]
    return sides, np.sqrt(x * x + y * y + z * z)


def slab_gaps(a: FloatArray, normal_a: FloatArray, b: FloatArray, normal_b: FloatArray) -> FloatArray:
    """Lower bound of the distances of pairs of triangles: how far one stays on one side of the other's plane.

    Parameters
    ----------
    a, b : (n, 3, 3) float, m
    normal_a, normal_b : (n, 3) float
        Unit normals; zero for a triangle without area.

    Returns
    -------
    (n,) float, m
    """
    over_a = np.einsum("nki,ni->nk", b - a[:, :1], normal_a)
    over_b = np.einsum("nki,ni->nk", a - b[:, :1], normal_b)
    bound = np.maximum(over_a.min(axis=1), -over_a.max(axis=1))
    bound = np.maximum(bound, np.maximum(over_b.min(axis=1), -over_b.max(axis=1)))
    gaps: FloatArray = np.maximum(bound, 0.0)
    return gaps


def _edges(a: FloatArray) -> FloatArray:
    """The three edges of triangles, (n, 3, 2, 3)."""
    return np.stack([a, np.roll(a, -1, axis=1)], axis=2)


def _vertex_faces(a: FloatArray, b: FloatArray) -> tuple[FloatArray, FloatArray, BoolArray]:
    """Vertices of `a`, their feet in the planes of `b`, and where the feet miss the triangles of `b`."""
    triangle = b[:, None]
    least, height = inside_fraction(a, triangle)
    normal = np.cross(b[:, 1] - b[:, 0], b[:, 2] - b[:, 0])
    unit = normal / np.maximum(np.linalg.norm(normal, axis=1), np.finfo(float).tiny)[:, None]
    return a, a - height[..., None] * unit[:, None], least < 0.0


def segment_triangle_distances(segments: FloatArray, triangles: FloatArray) -> FloatArray:
    """Distances of segments from triangles; 0 where a segment passes through.

    Parameters
    ----------
    segments : (n, 2, 3) float, m
    triangles : (n, 3, 3) float, m

    Returns
    -------
    (n,) float, m
    """
    as_triangle = np.concatenate([segments, segments[:, 1:]], axis=1)
    return pair_distances(as_triangle, triangles)[0]


def winding_numbers(points: FloatArray, triangles: FloatArray) -> FloatArray:
    """How often a surface winds about points: 1 inside an outward closed surface, 0 outside.

    Sum of the solid angles over 4 pi (van Oosterom and Strackee, IEEE Trans. Biomed. Eng. 30 (1983) 125).

    Parameters
    ----------
    points : (m, 3) float, m
    triangles : (n, 3, 3) float, m

    Returns
    -------
    (m,) float
    """
    total = np.zeros(len(points))
    step = max(1, 2_000_000 // max(len(triangles), 1))
    for start in range(0, len(points), step):
        block = points[start : start + step]
        r = triangles[None] - block[:, None, None]
        length = np.linalg.norm(r, axis=3)
        a, b, c = r[:, :, 0], r[:, :, 1], r[:, :, 2]
        la, lb, lc = length[:, :, 0], length[:, :, 1], length[:, :, 2]
        top = _dot(a, np.cross(b, c))
        bottom = la * lb * lc + _dot(a, b) * lc + _dot(b, c) * la + _dot(c, a) * lb
        total[start : start + step] = np.arctan2(top, bottom).sum(axis=1) / (2.0 * np.pi)
    return total
