"""Packed panel geometry for the kernels: one row of numbers per flat panel.

A row holds all that the integrals need, so that a kernel takes two rows instead of a dozen arrays. A triangle
repeats its third corner; the edge between the two copies has length zero and contributes nothing.
"""

import numpy as np
from numpy.typing import NDArray

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
FRAME_SIZE = 50


def panel_frames(corners: NDArray[np.float64]) -> NDArray[np.float64]:
    """Pack the geometry of flat panels.

    Parameters
    ----------
    corners : (n, 4, 3) float, m
        Counter-clockwise; a triangle repeats its third corner.

    Returns
    -------
    frames : (n, FRAME_SIZE) float
    """
    n = len(corners)
    frames = np.zeros((n, FRAME_SIZE))
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
    return frames
