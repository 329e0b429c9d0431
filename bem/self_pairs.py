"""Pairs of triangles of one mesh that may meet away from what they share: a sieve before the exact computation.

The sieve never drops a pair that comes closer than the tolerance; a pair is dropped where a plane or a direction
separates it (separating axes; Gottschalk, Lin and Manocha, SIGGRAPH 1996, 171).
"""

import math

import numpy as np
from numpy.typing import NDArray

from .jit import kernel, parallel_kernel, prange

__all__ = ["self_pairs"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

#: Depth of the walk through a binary tree of boxes: two entries a level, and fewer than 2^40 triangles.
_DEPTH = 96
#: Normals of two panels that lie upon one another over a common edge are parallel to far better than this cosine.
_FOLDED = 0.999
#: Two triangles with a common corner are on different sides of a plane if all directions leave it by more than this.
_LEAVES = 1e-9


@kernel
def _axis_gap(a, b, x, y, z):
    """How far two triangles are apart along a direction, in units of its length; negative if they overlap.

    Parameters
    ----------
    a, b : (3, 3) float, m
    x, y, z : float
    """
    low_a = high_a = a[0, 0] * x + a[0, 1] * y + a[0, 2] * z
    low_b = high_b = b[0, 0] * x + b[0, 1] * y + b[0, 2] * z
    for k in range(1, 3):
        at = a[k, 0] * x + a[k, 1] * y + a[k, 2] * z
        low_a, high_a = min(low_a, at), max(high_a, at)
        at = b[k, 0] * x + b[k, 1] * y + b[k, 2] * z
        low_b, high_b = min(low_b, at), max(high_b, at)
    return max(low_b - high_a, low_a - high_b)


@kernel
def _apart(a, b, normals, tolerance):
    """Whether a normal, or a direction in the plane of one square to an edge of it, separates two triangles.

    Parameters
    ----------
    a, b : (3, 3) float, m
    normals : (2, 3) float
        Unit normals of both, zero for a triangle without area.
    tolerance : float, m
    """
    for k in range(2):
        if _axis_gap(a, b, normals[k, 0], normals[k, 1], normals[k, 2]) > tolerance:
            return True
    for k in range(2):
        one = a if k == 0 else b
        for m in range(3):
            start, stop = one[m], one[(m + 1) % 3]
            ex, ey, ez = stop[0] - start[0], stop[1] - start[1], stop[2] - start[2]
            x = normals[k, 1] * ez - normals[k, 2] * ey
            y = normals[k, 2] * ex - normals[k, 0] * ez
            z = normals[k, 0] * ey - normals[k, 1] * ex
            size = math.sqrt(x * x + y * y + z * z)
            if size > 0.0 and _axis_gap(a, b, x, y, z) > tolerance * size:
                return True
    return False


@kernel
def _cone_side(d, x, y, z):
    """1 if both directions leave a plane on the side of its normal, -1 if on the other, else 0.

    Parameters
    ----------
    d : (2, 3) float
    x, y, z : float
    """
    first = d[0, 0] * x + d[0, 1] * y + d[0, 2] * z
    second = d[1, 0] * x + d[1, 1] * y + d[1, 2] * z
    if min(first, second) > _LEAVES:
        return 1
    return -1 if max(first, second) < -_LEAVES else 0


@kernel
def _cones_apart(a, b, at_a, at_b, d):
    """Whether a plane through a common corner has two triangles on different sides of it.

    Parameters
    ----------
    a, b : (3, 3) float, m
    at_a, at_b : int
        The common corner in each.
    d : (2, 2, 3) float
        Room for the directions from the corner.
    """
    for k in range(2):
        one, at = (a, at_a) if k == 0 else (b, at_b)
        for m in range(2):
            size = 0.0
            for c in range(3):
                d[k, m, c] = one[(at + 1 + m) % 3, c] - one[at, c]
                size += d[k, m, c] ** 2
            size = math.sqrt(size)
            for c in range(3):
                d[k, m, c] /= size if size > 0.0 else 1.0
    x = d[0, 0, 0] + d[0, 1, 0] - d[1, 0, 0] - d[1, 1, 0]
    y = d[0, 0, 1] + d[0, 1, 1] - d[1, 0, 1] - d[1, 1, 1]
    z = d[0, 0, 2] + d[0, 1, 2] - d[1, 0, 2] - d[1, 1, 2]
    if _cone_side(d[0], x, y, z) == 1 and _cone_side(d[1], x, y, z) == -1:
        return True
    for k in range(2):
        p, q = d[k, 0], d[k, 1]
        nx, ny, nz = p[1] * q[2] - p[2] * q[1], p[2] * q[0] - p[0] * q[2], p[0] * q[1] - p[1] * q[0]
        for m in range(2):
            e = d[k, m]
            sign = -1.0 if m == 0 else 1.0
            x, y, z = sign * (ny * e[2] - nz * e[1]), sign * (nz * e[0] - nx * e[2]), sign * (nx * e[1] - ny * e[0])
            if _cone_side(d[1 - k], x, y, z) == 1:
                return True
    return False


@kernel
def _may_meet(corners, triangles, normals, i, j, tolerance, d):
    """Whether two triangles may come closer than the tolerance away from what they share.

    Parameters
    ----------
    corners : (n, 3, 3) float, m
    triangles : (n, 3) int
    normals : (n, 3) float
    i, j : int
    tolerance : float, m
    d : (3, 2, 3) float
        Room: directions of two corners, then two normals.
    """
    shared = at_i = at_j = 0
    for k in range(3):
        for m in range(3):
            if triangles[i, k] == triangles[j, m]:
                shared += 1
                at_i, at_j = k, m
    if shared > 2:
        return False
    for c in range(3):
        d[2, 0, c], d[2, 1, c] = normals[i, c], normals[j, c]
    if shared == 2:
        cosine = d[2, 0, 0] * d[2, 1, 0] + d[2, 0, 1] * d[2, 1, 1] + d[2, 0, 2] * d[2, 1, 2]
        return abs(cosine) > _FOLDED and _same_side(corners[i], corners[j], triangles[i], triangles[j])
    if shared == 1:
        return not _cones_apart(corners[i], corners[j], at_i, at_j, d)
    return not _apart(corners[i], corners[j], d[2], tolerance)


@kernel
def _same_side(a, b, ta, tb):
    """Whether two triangles lie on the same side of their common edge, or nearly square to one another.

    Parameters
    ----------
    a, b : (3, 3) float, m
    ta, tb : (3,) int
    """
    free_a = free_b = 0
    for k in range(3):
        if ta[k] != tb[0] and ta[k] != tb[1] and ta[k] != tb[2]:
            free_a = k
        if tb[k] != ta[0] and tb[k] != ta[1] and tb[k] != ta[2]:
            free_b = k
    start, stop = a[(free_a + 1) % 3], a[(free_a + 2) % 3]
    ee = ae = be = ab = 0.0
    for c in range(3):
        e, p, q = stop[c] - start[c], a[free_a, c] - start[c], b[free_b, c] - start[c]
        ee += e * e
        ae += p * e
        be += q * e
        ab += p * q
    return not ab * ee < ae * be


@parallel_kernel
def _sieve(corners, triangles, normals, boxes, levels, tolerance, start, found):
    """Count the partners of each triangle that may meet it, or write them.

    Parameters
    ----------
    corners : (n, 3, 3) float, m
        In the order of the leaves of the tree.
    triangles : (n, 3) int
    normals : (n, 3) float
    boxes : (m, 6) float, m
        Lower and upper corners of the boxes, level after level, leaves first.
    levels : (n_levels + 1,) int
        Where each level begins in them.
    tolerance : float, m
    start : (n + 1,) int
        Where the partners of each triangle are written; if `found` is empty, the counts are written here.
    found : (k,) int
        Written: partners with a larger number.
    """
    n = len(triangles)
    for i in prange(n):
        d = np.empty((3, 2, 3))
        level_of = np.empty(_DEPTH, dtype=np.int64)
        box_of = np.empty(_DEPTH, dtype=np.int64)
        level_of[0], box_of[0] = len(levels) - 2, 0
        waiting, met = 1, 0
        while waiting > 0:
            waiting -= 1
            level, k = level_of[waiting], box_of[waiting]
            # the last leaf below a box must come after i: each pair is met once
            if ((k + 1) << level) - 1 <= i:
                continue
            apart = False
            for c in range(3):
                gap = max(boxes[i, c] - boxes[levels[level] + k, 3 + c], boxes[levels[level] + k, c] - boxes[i, 3 + c])
                apart = apart or gap > tolerance
            if apart:
                continue
            if level > 0:
                for child in range(2 * k, min(2 * k + 2, levels[level] - levels[level - 1])):
                    level_of[waiting], box_of[waiting] = level - 1, child
                    waiting += 1
            elif k > i and _may_meet(corners, triangles, normals, i, k, tolerance, d):
                if len(found):
                    found[start[i] + met] = k
                met += 1
        if len(found) == 0:
            start[i] = met


def self_pairs(
    corners: FloatArray, triangles: IntArray, normals: FloatArray, boxes: FloatArray, levels: IntArray, tolerance: float
) -> IntArray:
    """Pairs of triangles that may come closer than the tolerance away from the vertices they share.

    Parameters
    ----------
    corners : (n, 3, 3) float, m
        In the order of the leaves of a binary tree: box k of a level lies about boxes 2 k and 2 k + 1 of the one below.
    triangles : (n, 3) int
        Vertices of each.
    normals : (n, 3) float
        Unit normals; zero for a triangle without area.
    boxes : (m, 6) float, m
        Lower and upper corners of the boxes, level after level, leaves first.
    levels : (n_levels + 1,) int
        Where each level begins in them, and their number.
    tolerance : float, m

    Returns
    -------
    (k, 2) int
        Each pair once, the smaller number first, in rising order.
    """
    corners, normals, boxes = (np.ascontiguousarray(x, dtype=np.float64) for x in (corners, normals, boxes))
    triangles, levels = (np.ascontiguousarray(x, dtype=np.int64) for x in (triangles, levels))
    n = len(triangles)
    count = np.zeros(n + 1, dtype=np.int64)
    _sieve(corners, triangles, normals, boxes, levels, tolerance, count, np.zeros(0, dtype=np.int64))
    start = np.concatenate([[0], np.cumsum(count[:n])])
    found = np.zeros(start[-1], dtype=np.int64)
    if len(found):
        _sieve(corners, triangles, normals, boxes, levels, tolerance, start, found)
    return np.column_stack([np.repeat(np.arange(n), count[:n]), found])
