"""Packed panel geometry for the kernels: one row of numbers per flat panel.

A row holds all that the integrals need, so that a kernel takes two rows instead of a dozen arrays. A triangle
repeats its third corner; the edge between the two copies has length zero and contributes nothing.
"""

import numpy as np
from numpy.typing import NDArray

from .gauss import GAUSS_NODES, GAUSS_WEIGHTS
from .panels import polygon_geometry

__all__ = [
    "AREA",
    "CENTROID",
    "CORNER",
    "DIRECTION",
    "FRAME_SIZE",
    "LENGTH",
    "NORMAL",
    "OUTWARD",
    "POINTS",
    "RADIUS",
    "TWICE_AREA_1",
    "TWICE_AREA_2",
    "panel_frames",
]

CORNER = 0  # 4 corners
DIRECTION = 12  # 4 unit edge vectors, from corner k to corner k + 1; zero for an edge of no length
OUTWARD = 24  # 4 unit vectors in the plane, across each edge, out of the panel
LENGTH = 36  # 4 edge lengths
NORMAL = 40  # unit normal
CENTROID = 43
RADIUS = 46  # largest distance of a corner from the centroid
AREA = 47
TWICE_AREA_1 = 48  # of triangle 0 1 2
TWICE_AREA_2 = 49  # of triangle 0 2 3
POINTS = (0, 0, 50, 66, 102, 166)  # start of the n x n Gauss points, n = 2 to 5: all x, y, z, then weights
FRAME_SIZE = 266


def panel_frames(corners: NDArray[np.float64], *, largest_rule: int = 5) -> NDArray[np.float64]:
    """Pack the geometry of flat panels.

    Parameters
    ----------
    corners : (n, 4, 3) float, m
        Counter-clockwise; a triangle repeats its third corner.
    largest_rule : int
        Largest n of the n x n Gauss rules that will be asked of these rows; below 2 none are stored.

    Returns
    -------
    frames : (n, FRAME_SIZE) float
        Shorter rows for smaller rules.
    """
    n = len(corners)
    frames = np.zeros((n, POINTS[largest_rule] + 4 * largest_rule**2 if largest_rule > 1 else POINTS[2]))
    areas, centroids, normals = polygon_geometry(corners)
    edges = np.roll(corners, -1, axis=1) - corners
    lengths = np.linalg.norm(edges, axis=2)
    safe = np.where(lengths > 0, lengths, 1.0)
    directions = edges / safe[:, :, None]
    a, b, c, d = (corners[:, k] for k in range(4))
    frames[:, CORNER : CORNER + 12] = corners.reshape(n, 12)
    frames[:, DIRECTION : DIRECTION + 12] = directions.reshape(n, 12)
    frames[:, OUTWARD : OUTWARD + 12] = np.cross(directions, normals[:, None, :]).reshape(n, 12)
    frames[:, LENGTH : LENGTH + 4] = lengths
    frames[:, NORMAL : NORMAL + 3] = normals
    frames[:, CENTROID : CENTROID + 3] = centroids
    frames[:, RADIUS] = np.linalg.norm(corners - centroids[:, None, :], axis=2).max(axis=1)
    frames[:, AREA] = areas
    frames[:, TWICE_AREA_1] = np.linalg.norm(np.cross(b - a, c - a), axis=1)
    frames[:, TWICE_AREA_2] = np.linalg.norm(np.cross(c - a, d - a), axis=1)
    for n_side in range(2, largest_rule + 1):
        _put_points(frames, corners, n_side)
    return frames


def _put_points(frames: NDArray[np.float64], corners: NDArray[np.float64], n_side: int) -> None:
    """Product Gauss rule on the bilinear image of the unit square; weights hold the area."""
    node, weight = GAUSS_NODES[n_side, :n_side], GAUSS_WEIGHTS[n_side, :n_side]
    u, v = (grid.ravel() for grid in np.meshgrid(node, node, indexing="ij"))
    a, b, c, d = (corners[:, None, k] for k in range(4))
    u, v = u[None, :, None], v[None, :, None]
    points = (1 - u) * (1 - v) * a + u * (1 - v) * b + u * v * c + (1 - u) * v * d
    along_u = (1 - v) * (b - a) + v * (c - d)
    along_v = (1 - u) * (d - a) + u * (c - b)
    weights = np.outer(weight, weight).ravel() * np.linalg.norm(np.cross(along_u, along_v), axis=2)
    start, count = POINTS[n_side], n_side * n_side
    for axis in range(3):
        frames[:, start + axis * count : start + (axis + 1) * count] = points[:, :, axis]
    frames[:, start + 3 * count : start + 4 * count] = weights
