"""Packed panel geometry for the kernels: one row of numbers per flat panel.

A row holds all that the integrals need, so that a kernel takes two rows instead of a dozen arrays. A triangle
repeats its third corner; the edge between the two copies has length zero and contributes nothing.
"""

import math

import numpy as np
from numpy.typing import NDArray

from .gauss import GAUSS_NODES, GAUSS_WEIGHTS
from .jit import kernel, parallel_kernel, prange

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
    corners = np.ascontiguousarray(corners, dtype=np.float64)
    frames = np.zeros((len(corners), POINTS[largest_rule] + 4 * largest_rule**2 if largest_rule > 1 else POINTS[2]))
    _fill_frames(corners, frames, largest_rule)
    return frames


@parallel_kernel
def _fill_frames(corners, frames, largest_rule):
    """Rows of :func:`panel_frames` from corners (n, 4, 3), m, each by one thread."""
    for p in prange(len(corners)):
        _put_plane(corners[p], frames[p])
        _put_sides(corners[p], frames[p])
        for n_side in range(2, largest_rule + 1):
            _put_points(corners[p], frames[p], n_side)


@kernel
def _cross(ax, ay, az, bx, by, bz):
    """Cross product."""
    return ay * bz - az * by, az * bx - ax * bz, ax * by - ay * bx


@kernel
def _put_plane(corner, frame):
    """Corners, normal, centroid, radius and areas, from the triangles 0 1 2 and 0 2 3."""
    bx, by, bz = corner[1, 0] - corner[0, 0], corner[1, 1] - corner[0, 1], corner[1, 2] - corner[0, 2]
    cx, cy, cz = corner[2, 0] - corner[0, 0], corner[2, 1] - corner[0, 1], corner[2, 2] - corner[0, 2]
    dx, dy, dz = corner[3, 0] - corner[0, 0], corner[3, 1] - corner[0, 1], corner[3, 2] - corner[0, 2]
    fx, fy, fz = _cross(bx, by, bz, cx, cy, cz)
    sx, sy, sz = _cross(cx, cy, cz, dx, dy, dz)
    nx, ny, nz = fx + sx, fy + sy, fz + sz
    twice = math.sqrt(nx * nx + ny * ny + nz * nz)
    if twice > 0.0:
        nx, ny, nz = nx / twice, ny / twice, nz / twice
    second = (sx * nx + sy * ny + sz * nz) / twice if twice > 0.0 else 0.0
    first = 1.0 - second
    frame[NORMAL], frame[NORMAL + 1], frame[NORMAL + 2] = nx, ny, nz
    frame[CENTROID] = corner[0, 0] + ((bx + cx) * first + (cx + dx) * second) / 3.0
    frame[CENTROID + 1] = corner[0, 1] + ((by + cy) * first + (cy + dy) * second) / 3.0
    frame[CENTROID + 2] = corner[0, 2] + ((bz + cz) * first + (cz + dz) * second) / 3.0
    frame[AREA] = 0.5 * twice
    frame[TWICE_AREA_1] = math.sqrt(fx * fx + fy * fy + fz * fz)
    frame[TWICE_AREA_2] = math.sqrt(sx * sx + sy * sy + sz * sz)
    largest = 0.0
    for k in range(4):
        for axis in range(3):
            frame[CORNER + 3 * k + axis] = corner[k, axis]
        x, y, z = (
            corner[k, 0] - frame[CENTROID],
            corner[k, 1] - frame[CENTROID + 1],
            corner[k, 2] - frame[CENTROID + 2],
        )
        largest = max(largest, x * x + y * y + z * z)
    frame[RADIUS] = math.sqrt(largest)


@kernel
def _put_sides(corner, frame):
    """Lengths, unit vectors along the sides and across them."""
    nx, ny, nz = frame[NORMAL], frame[NORMAL + 1], frame[NORMAL + 2]
    for k in range(4):
        m = (k + 1) % 4
        x, y, z = corner[m, 0] - corner[k, 0], corner[m, 1] - corner[k, 1], corner[m, 2] - corner[k, 2]
        length = math.sqrt(x * x + y * y + z * z)
        frame[LENGTH + k] = length
        if length > 0.0:
            x, y, z = x / length, y / length, z / length
        d, o = DIRECTION + 3 * k, OUTWARD + 3 * k
        frame[d], frame[d + 1], frame[d + 2] = x, y, z
        frame[o], frame[o + 1], frame[o + 2] = _cross(x, y, z, nx, ny, nz)


@kernel
def _put_points(corner, frame, n_side):
    """Product Gauss rule on the bilinear image of the unit square; weights hold the area."""
    start, count = POINTS[n_side], n_side * n_side
    along_u, along_v = np.empty(3), np.empty(3)
    for i in range(n_side):
        for j in range(n_side):
            u, v, at = GAUSS_NODES[n_side, i], GAUSS_NODES[n_side, j], start + i * n_side + j
            for k in range(3):
                a, b, c, d = corner[0, k], corner[1, k], corner[2, k], corner[3, k]
                frame[at + k * count] = (1 - u) * (1 - v) * a + u * (1 - v) * b + u * v * c + (1 - u) * v * d
                along_u[k] = (1 - v) * (b - a) + v * (c - d)
                along_v[k] = (1 - u) * (d - a) + u * (c - b)
            x, y, z = _cross(along_u[0], along_u[1], along_u[2], along_v[0], along_v[1], along_v[2])
            weight = GAUSS_WEIGHTS[n_side, i] * GAUSS_WEIGHTS[n_side, j]
            frame[at + 3 * count] = weight * math.sqrt(x * x + y * y + z * z)
