"""Polygons of any shape, flat or nearly so, as triangles."""

from collections.abc import Iterable, Sequence
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

__all__ = ["polygons_to_triangles"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Polygons with more corners are cut by a library, whose effort does not grow with their square.
_BY_EAR = 40


def polygons_to_triangles(vertices: FloatArray, corners: IntArray, sizes: IntArray) -> IntArray:
    """Cut polygons into triangles on their own vertices.

    Convex ones become fans about their first corner; the others are cut so that nothing outside of them is covered,
    as a fan would do.

    Parameters
    ----------
    vertices : (nv, 3) float
    corners : (nc,) int
        Corners of all polygons, one polygon after the other.
    sizes : (np,) int
        Number of corners of each, three at least.

    Returns
    -------
    (nt, 3) int
    """
    if (sizes == 3).all():
        return corners.reshape(-1, 3)
    owner = np.repeat(np.arange(len(sizes)), sizes - 2)
    starts = np.cumsum(sizes) - sizes
    step = np.arange(len(owner)) - np.repeat(np.cumsum(sizes - 2) - (sizes - 2), sizes - 2)
    first = starts[owner]
    triangles = np.column_stack([corners[first], corners[first + step + 1], corners[first + step + 2]])
    if triangles.min() < 0 or triangles.max() >= len(vertices):
        return triangles  # a corner that does not exist is the caller's to tell
    areas = _area_vectors(vertices, triangles)
    normals = np.column_stack([np.bincount(owner, areas[:, k], len(sizes)) for k in range(3)])
    along = np.einsum("ij,ij->i", areas, normals[owner])
    for k in np.unique(owner[(along <= 0.0) & (sizes[owner] > 3)]):
        polygon = corners[starts[k] : starts[k] + sizes[k]].tolist()
        rows = starts[k] - 2 * k
        triangles[rows : rows + sizes[k] - 2] = list(_cut(vertices, polygon, normals[k]))
    return triangles


def _area_vectors(vertices: FloatArray, triangles: IntArray) -> FloatArray:
    a, b, c = (vertices[triangles[:, k]] for k in range(3))
    vectors: FloatArray = np.cross(b - a, c - a)
    return vectors


def _cut(vertices: FloatArray, polygon: Sequence[int], normal: FloatArray) -> Iterable[tuple[int, int, int]]:
    """Triangles of one polygon, seen along its largest shadow; one that crosses itself becomes a fan."""
    drop = int(np.argmax(np.abs(normal)))
    kept = [(drop + 1) % 3, (drop + 2) % 3]
    flat = vertices[polygon][:, kept] * (1.0, np.sign(normal[drop]) or 1.0)
    large = len(polygon) > _BY_EAR
    triangles = _by_library(flat, polygon) if large else _ears(flat, polygon)
    return triangles or [(polygon[0], b, c) for b, c in pairwise(polygon[1:])]


def _by_library(flat: FloatArray, polygon: Sequence[int]) -> list[tuple[int, int, int]]:
    """Constrained Delaunay triangles of a simple polygon; nothing if it has equal corners or crosses itself."""
    import shapely

    outline = shapely.Polygon(flat)
    number = {tuple(point): corner for point, corner in zip(flat.tolist(), polygon, strict=True)}
    if len(number) < len(polygon) or not outline.is_valid:
        return []
    pieces = shapely.get_parts(shapely.constrained_delaunay_triangles(outline))
    points = shapely.get_coordinates(shapely.normalize(pieces)).reshape(-1, 4, 2)[:, :3]
    try:
        # normalised rings run clockwise, the polygon counter-clockwise
        found = [(number[tuple(c)], number[tuple(b)], number[tuple(a)]) for a, b, c in points.tolist()]
    except KeyError:
        return []
    return found if len(found) == len(polygon) - 2 else []


def _ears(flat: FloatArray, polygon: Sequence[int]) -> list[tuple[int, int, int]]:
    """Ears of a simple polygon; what is left without an ear (one that crosses itself) becomes a fan."""
    left = list(range(len(polygon)))
    triangles = []
    while len(left) > 3:
        for k in range(len(left)):
            a, b, c = left[k - 1], left[k], left[(k + 1) % len(left)]
            if _is_ear(flat[a], flat[b], flat[c], flat[left]):
                triangles.append((a, b, c))
                del left[k]
                break
        else:
            break
    triangles += [(left[0], b, c) for b, c in pairwise(left[1:])]
    return [(polygon[a], polygon[b], polygon[c]) for a, b, c in triangles]


def _is_ear(a: FloatArray, b: FloatArray, c: FloatArray, others: FloatArray) -> bool:
    """Whether the corner b is convex and no other corner lies in the triangle."""
    if _turn(a, b, c) <= 0.0:
        return False
    others = others[~(np.stack([(others == p).all(axis=1) for p in (a, b, c)]).any(axis=0))]
    inside = (_turn(a, b, others) >= 0.0) & (_turn(b, c, others) >= 0.0) & (_turn(c, a, others) >= 0.0)
    return not inside.any()


def _turn(a: FloatArray, b: FloatArray, points: FloatArray) -> FloatArray:
    ab, ap = b - a, points - a
    turn: FloatArray = ab[0] * ap[..., 1] - ab[1] * ap[..., 0]
    return turn
