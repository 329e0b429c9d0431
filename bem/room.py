"""Room inside a polygon: the largest circle that touches the outline at a point from within."""

import math

import numpy as np
from numpy.typing import NDArray

from .jit import kernel

__all__ = ["circle_radii"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


@kernel
def circle_radii(
    points: FloatArray, normals: FloatArray, edge: IntArray, near: IntArray, corners: FloatArray, ends: IntArray
) -> FloatArray:
    """Radius of the largest circle inside an outline that touches it at each of some points.

    The circle through a point with normal n and through another point x of the outline has the radius
    ``|x|^2 / (2 x.n)``; the smallest over all x counts.

    Parameters
    ----------
    points, normals : (n, 2) float
        On the outline; inward unit normals.
    edge : (n,) int
        Outline edge of each point.
    near : (n_edges, 3) int
        Edges whose points say nothing about the room at an edge: itself and its neighbours.
    corners : (n_edges, 2) float
        Vertices of the outline; edge e starts at vertex e.
    ends : (n_edges, 4) int
        Vertices that say nothing about the room at an edge; -1 for none.

    Returns
    -------
    (n,) float
        Infinite where nothing lies ahead.
    """
    radii = np.empty(len(points))
    for i in range(len(points)):
        own = edge[i]
        best = math.inf
        for j in range(len(points)):
            other = edge[j]
            if other == near[own, 0] or other == near[own, 1] or other == near[own, 2]:
                continue
            best = min(best, _circle(points[j, 0] - points[i, 0], points[j, 1] - points[i, 1], normals[i]))
        for v in range(len(corners)):
            if v == ends[own, 0] or v == ends[own, 1] or v == ends[own, 2] or v == ends[own, 3]:
                continue
            best = min(best, _circle(corners[v, 0] - points[i, 0], corners[v, 1] - points[i, 1], normals[i]))
        radii[i] = best
    return radii


@kernel
def _circle(x: float, y: float, normal: FloatArray) -> float:
    """Radius of the circle that touches the origin with a normal and passes through (x, y); inf if that lies behind."""
    height = x * normal[0] + y * normal[1]
    square = x * x + y * y
    if height <= 1e-9 * math.sqrt(square):
        return math.inf
    radius: float = square / (2.0 * height)
    return radius
