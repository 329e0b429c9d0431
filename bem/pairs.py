"""Double surface integrals of 1/r over any two panels: the rule is chosen by their distance.

| pair | rule |
| --- | --- |
| far | product of Gauss rules on both panels |
| middle | closed-form potential of the larger panel at Gauss points of the smaller one |
| close, touching, self | edge integrals of :mod:`daraf.bem.near` |

The limits below keep the relative error of every regime under about 1e-7: ``scripts/bench/pair_rules.py``
prints the measured table, ``tests/bem/test_pairs.py`` holds it.
"""

import math

import numpy as np

from .frames import CENTROID, CORNER, RADIUS
from .gauss import GAUSS_NODES, GAUSS_WEIGHTS
from .jit import kernel
from .near import close_pair_integral
from .polygon import polygon_distance, polygon_potential

__all__ = ["far_integral", "middle_integral", "pair_integral"]

#: Centre distance over the sum of the radii, beyond which n x n points on both panels do.
_FAR_2, _FAR_3, _FAR_4 = 16.0, 5.0, 2.7
#: Distance from the smaller panel's centroid to the larger panel over the smaller one's radius, beyond which
#: n x n points on the smaller panel do; nearer pairs go to the edge integrals.
_MIDDLE_3, _MIDDLE_4, _MIDDLE_5 = 5.0, 2.7, 1.9


@kernel
def _points(frame, n, points):
    """Fill `points` (n*n, 4) with the x, y, z and weight (m2) of a product Gauss rule on a panel."""
    c = CORNER
    q = 0
    for i in range(n):
        u, wu = GAUSS_NODES[n, i], GAUSS_WEIGHTS[n, i]
        # the two ends of the line u = const, on edge 0-1 and on edge 3-2
        px = frame[c] + u * (frame[c + 3] - frame[c])
        py = frame[c + 1] + u * (frame[c + 4] - frame[c + 1])
        pz = frame[c + 2] + u * (frame[c + 5] - frame[c + 2])
        vx = frame[c + 9] + u * (frame[c + 6] - frame[c + 9]) - px
        vy = frame[c + 10] + u * (frame[c + 7] - frame[c + 10]) - py
        vz = frame[c + 11] + u * (frame[c + 8] - frame[c + 11]) - pz
        for j in range(n):
            v = GAUSS_NODES[n, j]
            ux = (1.0 - v) * (frame[c + 3] - frame[c]) + v * (frame[c + 6] - frame[c + 9])
            uy = (1.0 - v) * (frame[c + 4] - frame[c + 1]) + v * (frame[c + 7] - frame[c + 10])
            uz = (1.0 - v) * (frame[c + 5] - frame[c + 2]) + v * (frame[c + 8] - frame[c + 11])
            jx, jy, jz = uy * vz - uz * vy, uz * vx - ux * vz, ux * vy - uy * vx
            points[q, 0] = px + v * vx
            points[q, 1] = py + v * vy
            points[q, 2] = pz + v * vz
            points[q, 3] = wu * GAUSS_WEIGHTS[n, j] * math.sqrt(jx * jx + jy * jy + jz * jz)
            q += 1


@kernel
def far_integral(source, target, n):
    """Product of n x n Gauss rules on two well separated panels, m3."""
    s = np.empty((n * n, 4))
    t = np.empty((n * n, 4))
    _points(source, n, s)
    _points(target, n, t)
    total = 0.0
    for i in range(n * n):
        part = 0.0
        for j in range(n * n):
            x, y, z = s[i, 0] - t[j, 0], s[i, 1] - t[j, 1], s[i, 2] - t[j, 2]
            part += t[j, 3] / math.sqrt(x * x + y * y + z * z)
        total += s[i, 3] * part
    return total


@kernel
def middle_integral(outer, inner, n):
    """Potential of `inner` in closed form at n x n Gauss points of `outer`, m3."""
    s = np.empty((n * n, 4))
    _points(outer, n, s)
    total = 0.0
    for i in range(n * n):
        total += s[i, 3] * polygon_potential(inner, s[i, 0], s[i, 1], s[i, 2])
    return total


@kernel
def pair_integral(source, target):
    """Integral of 1/r over two different panels, m3, the rule chosen by their distance.

    Parameters
    ----------
    source, target : (FRAME_SIZE,) float
        Rows of :func:`daraf.bem.frames.panel_frames`. The value does not depend on their order.
    """
    x = source[CENTROID] - target[CENTROID]
    y = source[CENTROID + 1] - target[CENTROID + 1]
    z = source[CENTROID + 2] - target[CENTROID + 2]
    ratio = math.sqrt(x * x + y * y + z * z) / (source[RADIUS] + target[RADIUS])
    if ratio > _FAR_2:
        return far_integral(source, target, 2)
    if ratio > _FAR_3:
        return far_integral(source, target, 3)
    if ratio > _FAR_4:
        return far_integral(source, target, 4)
    if source[RADIUS] <= target[RADIUS]:
        outer, inner = source, target
    else:
        outer, inner = target, source
    ratio = polygon_distance(inner, outer[CENTROID], outer[CENTROID + 1], outer[CENTROID + 2]) / outer[RADIUS]
    if ratio > _MIDDLE_3:
        return middle_integral(outer, inner, 3)
    if ratio > _MIDDLE_4:
        return middle_integral(outer, inner, 4)
    if ratio > _MIDDLE_5:
        return middle_integral(outer, inner, 5)
    return close_pair_integral(outer, inner)
