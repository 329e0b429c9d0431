"""Polygons of any shape, flat or nearly so, as triangles."""

from collections.abc import Sequence
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

__all__ = ["polygons_to_triangles"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


def polygons_to_triangles(vertices: FloatArray, polygons: Sequence[Sequence[int]]) -> IntArray:
    """Cut polygons into triangles on their own vertices.

    Convex ones become fans about their first corner; from the others one ear after the other is cut, since a
    fan would cover what lies outside of them.

    Parameters
    ----------
    vertices : (nv, 3) float
    polygons : sequence of sequences of int
        Corners of each, three at least.

    Returns
    -------
    (nt, 3) int
    """
    fans = [(one[0], b, c) for one in polygons for b, c in pairwise(one[1:])]
    triangles = np.array(fans, dtype=np.int64).reshape(-1, 3)
    sizes = np.array([len(one) - 2 for one in polygons], dtype=np.int64)
    if (sizes == 1).all() or triangles.min() < 0 or triangles.max() >= len(vertices):
        return triangles  # a corner that does not exist is the caller's to tell
    owner = np.repeat(np.arange(len(polygons)), sizes)
    areas = _area_vectors(vertices, triangles)
    normals = np.zeros((len(polygons), 3))
    np.add.at(normals, owner, areas)
    along = np.einsum("ij,ij->i", areas, normals[owner])
    wrong = np.unique(owner[(along <= 0.0) & (sizes[owner] > 1)])
    if len(wrong) == 0:
        return triangles
    for k in wrong:
        triangles[owner == k] = _ears(vertices, polygons[k], normals[k])
    return triangles


def _area_vectors(vertices: FloatArray, triangles: IntArray) -> FloatArray:
    a, b, c = (vertices[triangles[:, k]] for k in range(3))
    vectors: FloatArray = np.cross(b - a, c - a)
    return vectors


def _ears(vertices: FloatArray, polygon: Sequence[int], normal: FloatArray) -> list[tuple[int, int, int]]:
    """Ears of a simple polygon; what is left without an ear (one that crosses itself) becomes a fan."""
    drop = int(np.argmax(np.abs(normal)))
    kept = [(drop + 1) % 3, (drop + 2) % 3]
    flat = vertices[:, kept] * (1.0, np.sign(normal[drop]) or 1.0)
    left = list(polygon)
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
    return triangles + [(left[0], b, c) for b, c in pairwise(left[1:])]


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
