"""Where the potential of one panel is steep along a segment of another, and how to cut the segment there.

Integrals along edges and across narrow panels (:mod:`daraf.bem.near`, :mod:`daraf.bem.parallel`,
:mod:`daraf.bem.close_force`) are done with Gauss-Legendre points on pieces that end where the integrand may be
steep, crowded toward both ends of each piece.
"""

import math

import numpy as np

from .frames import CENTROID, CORNER, DIRECTION, LENGTH, NORMAL, OUTWARD
from .jit import kernel

__all__ = [
    "COARSE_NODES",
    "COARSE_WEIGHTS",
    "CROWDED_NODES",
    "CROWDED_WEIGHTS",
    "MAX_PIECES",
    "NARROW",
    "N_POINTS",
    "PARALLEL",
    "across",
    "edge_line",
    "height_over",
    "narrow_rule",
    "narrowness",
    "pieces",
    "steep_points",
]

N_POINTS = 16
_U, _WU = np.polynomial.legendre.leggauss(N_POINTS)
_U = 0.5 * (_U + 1.0)
_WU = 0.5 * _WU
#: Points and weights of a piece of unit length. Crowding toward both ends: the smoothing polynomial of order 3 turns
#: s ln s into a smooth function of u.
CROWDED_NODES = _U**3 * (10.0 - 15.0 * _U + 6.0 * _U**2)
CROWDED_WEIGHTS = _WU * 30.0 * (_U * (1.0 - _U)) ** 2

#: A rule of half as many points, crowded by the polynomial of order 2: leaves 1e-6 of the integral of a close pair in
#: the root mean square, 1e-5 at worst, measured on spheres, plates and graded plates; 16 points leave 1e-9.
N_COARSE = 8
_V, _WV = np.polynomial.legendre.leggauss(N_COARSE)
_V = 0.5 * (_V + 1.0)
COARSE_NODES = _V**2 * (3.0 - 2.0 * _V)
COARSE_WEIGHTS = 0.5 * _WV * 6.0 * _V * (1.0 - _V)

#: Most corners and closest points that can make the integrand steep along one edge, its two ends included.
_MAX_STEEP = 12
#: Most pieces of one edge.
MAX_PIECES = 64
#: Pieces grow by this factor away from a steep point, the first one being as long as _FIRST gaps.
_GROWTH, _FIRST = 12.0, 2.0
#: Steep points closer together than this share of their distance from the other panel count as one.
_MERGED = 0.25
#: A piece is cut where the next step is shorter than this share of it.
_CUT = 0.8
#: A panel further off than this many half-widths is integrated by lines along the narrow one.
NARROW = 2.0
#: Planes that meet at a smaller sine than this are taken as parallel.
PARALLEL = 1e-7


@kernel
def _note_steep(at, gap, n, s, distance, length):
    """Note a steep point at arc length s; one that lies as near as its own steepness is merged."""
    if distance > 0.5 * length:
        return n
    for k in range(n):
        if abs(at[k] - s) <= max(_MERGED * distance, 1e-13 * length):
            if distance > 1e-13 * length:
                gap[k] = min(gap[k], distance)
            return n
    if n >= _MAX_STEEP:
        return n
    k = n
    while at[k - 1] > s:
        at[k], gap[k] = at[k - 1], gap[k - 1]
        k -= 1
    at[k] = s
    gap[k] = distance if distance > 1e-13 * length else length
    return n + 1


@kernel
def steep_points(at, gap, line, other):
    """Where the potential of panel `other` may be steep along a segment.

    `line` holds the start, the unit vector and the length of the segment.

    Fills `at` (arc lengths, ascending, both ends included) and `gap` (the smallest distance, not zero, of the
    other panel's corners and edges from there); returns their number and the smallest distance found.
    """
    px, py, pz, ux, uy, uz, length = line[0], line[1], line[2], line[3], line[4], line[5], line[6]
    at[0], at[1] = 0.0, length
    gap[0], gap[1] = length, length
    n, nearest = 2, 1e300
    for j in range(4):
        if other[LENGTH + j] == 0.0:
            continue
        c, d = CORNER + 3 * j, DIRECTION + 3 * j
        rx, ry, rz = other[c] - px, other[c + 1] - py, other[c + 2] - pz
        along = rx * ux + ry * uy + rz * uz
        s = min(max(along, 0.0), length)
        gx, gy, gz = rx - s * ux, ry - s * uy, rz - s * uz
        distance = math.sqrt(gx * gx + gy * gy + gz * gz)
        nearest = min(nearest, distance)
        n = _note_steep(at, gap, n, s, distance, length)
        vx, vy, vz = other[d], other[d + 1], other[d + 2]
        uv = ux * vx + uy * vy + uz * vz
        sin2 = 1.0 - uv * uv
        if sin2 < 1e-6:
            # parallel edges: nothing is steep between the corners, but their distance counts
            for m in range(2):
                s = m * length
                t = min(max(s * uv - (rx * vx + ry * vy + rz * vz), 0.0), other[LENGTH + j])
                gx, gy, gz = rx + t * vx - s * ux, ry + t * vy - s * uy, rz + t * vz - s * uz
                nearest = min(nearest, math.sqrt(gx * gx + gy * gy + gz * gz))
            continue
        rv = rx * vx + ry * vy + rz * vz
        t = min(max((along * uv - rv) / sin2, 0.0), other[LENGTH + j])
        s = min(max(along + t * uv, 0.0), length)
        gx, gy, gz = rx + t * vx - s * ux, ry + t * vy - s * uy, rz + t * vz - s * uz
        distance = math.sqrt(gx * gx + gy * gy + gz * gz)
        nearest = min(nearest, distance)
        n = _note_steep(at, gap, n, s, distance, length)
    s = _pierced_at(line, other)
    if s > 0.0:
        n, nearest = _note_steep(at, gap, n, s, 0.0, length), 0.0
    return n, nearest


@kernel
def _pierced_at(line, panel):
    """Arc length at which a segment goes through a panel, where the potential has a kink; 0 if it does not."""
    low = (line[0] - panel[CORNER]) * panel[NORMAL] + (line[1] - panel[CORNER + 1]) * panel[NORMAL + 1]
    low += (line[2] - panel[CORNER + 2]) * panel[NORMAL + 2]
    rise = line[3] * panel[NORMAL] + line[4] * panel[NORMAL + 1] + line[5] * panel[NORMAL + 2]
    if low * (low + line[6] * rise) >= 0.0:
        return 0.0
    s = -low / rise
    x, y, z = line[0] + s * line[3], line[1] + s * line[4], line[2] + s * line[5]
    for k in range(4):
        c, o = CORNER + 3 * k, OUTWARD + 3 * k
        out = (x - panel[c]) * panel[o] + (y - panel[c + 1]) * panel[o + 1] + (z - panel[c + 2]) * panel[o + 2]
        if panel[LENGTH + k] > 0.0 and out > 0.0:
            return 0.0
    return s


@kernel
def pieces(breaks, line, other):
    """Cut a segment at its steep points, and in growing steps away from each.

    Fills `breaks` with ascending arc lengths, both ends included, and returns their number.
    """
    at, gap = np.empty(_MAX_STEEP), np.empty(_MAX_STEEP)
    n_steep, _ = steep_points(at, gap, line, other)
    n = 0
    for m in range(n_steep - 1):
        piece = at[m + 1] - at[m]
        breaks[n] = at[m]
        n += 1
        step = _FIRST * gap[m]
        while step < _CUT * piece and n < MAX_PIECES - 10:
            breaks[n] = at[m] + step
            n += 1
            step *= _GROWTH
        step = _FIRST * gap[m + 1]
        while step * _GROWTH < _CUT * piece:
            step *= _GROWTH
        while step >= 0.999 * _FIRST * gap[m + 1] and step < _CUT * piece and n < MAX_PIECES - 2:
            breaks[n] = at[m + 1] - step
            n += 1
            step /= _GROWTH
    breaks[n] = at[n_steep - 1]
    return n + 1


@kernel
def edge_line(line, panel, k):
    """Start, unit vector and length of edge k of a panel."""
    for m in range(3):
        line[m] = panel[CORNER + 3 * k + m]
        line[3 + m] = panel[DIRECTION + 3 * k + m]
    line[6] = panel[LENGTH + k]


@kernel
def across(panel, side, v, line):
    """The segment across a panel at a fraction v of its side, and the area weights at its two ends.

    With side 0 the segment runs from edge 3-0 to edge 1-2, with side 1 from edge 0-1 to edge 2-3.
    """
    a, b, c, d = CORNER, CORNER + 3, CORNER + 6, CORNER + 9
    if side == 1:
        a, b, c, d = CORNER + 3, CORNER + 6, CORNER + 9, CORNER
    length2 = 0.0
    for m in range(3):
        line[m] = panel[a + m] + v * (panel[d + m] - panel[a + m])
        line[3 + m] = panel[b + m] + v * (panel[c + m] - panel[b + m]) - line[m]
        length2 += line[3 + m] ** 2
    length = math.sqrt(length2)
    line[6] = length
    w0, w1 = 0.0, 0.0
    if length > 0.0:
        for m in range(3):
            line[3 + m] /= length
        # |line x side vector| / |line|: the width that one unit of v sweeps, at either end
        w0 = _swept(line, panel[d] - panel[a], panel[d + 1] - panel[a + 1], panel[d + 2] - panel[a + 2])
        w1 = _swept(line, panel[c] - panel[b], panel[c + 1] - panel[b + 1], panel[c + 2] - panel[b + 2])
    return w0, w1


@kernel
def _swept(line, x, y, z):
    along = x * line[3] + y * line[4] + z * line[5]
    return math.sqrt(max(x * x + y * y + z * z - along * along, 0.0))


@kernel
def narrowness(panel, other, line):
    """How far panel `other` is in half-widths of `panel`, and the side to run along; 0 if not narrow."""
    best, side = 0.0, 0
    at, gap = np.empty(_MAX_STEEP), np.empty(_MAX_STEEP)
    for k in range(2):
        # the sides themselves, not what they sweep: a sheared panel shifts its lines lengthwise
        width = max(panel[LENGTH + 3 - 3 * k], panel[LENGTH + 1 + k])
        if width == 0.0:
            continue
        nearest = 1e300
        for half in range(3):
            across(panel, k, 0.5 * half, line)
            if line[6] > 0.0:
                _, distance = steep_points(at, gap, line, other)
                nearest = min(nearest, distance)
        ratio = 2.0 * nearest / width
        if ratio > best:
            best, side = ratio, k
    return best, side


@kernel
def narrow_rule(ratio):
    """Number of Gauss points across a narrow panel, from its distance in half-widths."""
    if ratio > 20.0:
        return 3
    if ratio > 7.0:
        return 4
    if ratio > 3.5:
        return 5
    return 8


@kernel
def height_over(source, target):
    """Height of the target's centroid over the source's plane, m."""
    x = target[CENTROID] - source[CENTROID]
    y = target[CENTROID + 1] - source[CENTROID + 1]
    z = target[CENTROID + 2] - source[CENTROID + 2]
    return abs(x * source[NORMAL] + y * source[NORMAL + 1] + z * source[NORMAL + 2])
