"""Double surface integrals of 1/r over close panels, reduced to integrals along their edges.

Two panels in planes that meet: with the origin o on both planes the integrand is homogeneous of degree -1 in
the four in-plane coordinates, and the divergence theorem over the product of the panels leaves

    I = 1/3 [ sum_{edges e of S} d_e int_e V_T dl + sum_{edges f of T} d_f int_f V_S dl ],

where d is the signed in-plane distance from o to the edge's line and V the closed-form potential of a panel
(the reduction of Lenoir and Salles, SIAM J. Sci. Comput. 34 (2012) A3057, stopped one step short of closed
form, since the last step cancels for slivers). It serves a panel with itself, panels that share an edge, part
of an edge or a corner, and close panels that do not touch.

Two panels in parallel planes a height h apart: the function F = R - h ln(R + h) has the planar Laplacian 1/R,
and the divergence theorem in both planes leaves

    I = - sum_{e, f} (m_e . m_f) int_e int_f F dl dl,

with the outward in-plane normals m; its inner integral is closed.

The remaining integral along an edge is done with Gauss-Legendre points on pieces that end where the integrand
may be steep, crowded toward both ends of each piece.
"""

import math

import numpy as np

from .frames import CENTROID, CORNER, DIRECTION, LENGTH, NORMAL, OUTWARD, RADIUS
from .gauss import GAUSS_NODES, GAUSS_WEIGHTS
from .jit import kernel
from .polygon import polygon_potential

__all__ = ["close_pair_integral", "self_integral"]

N_POINTS = 16
_U, _WU = np.polynomial.legendre.leggauss(N_POINTS)
_U = 0.5 * (_U + 1.0)
_WU = 0.5 * _WU
#: Crowding toward both ends: the smoothing polynomial of order 3 turns s ln s into a smooth function of u.
_S = _U**3 * (10.0 - 15.0 * _U + 6.0 * _U**2)
_WS = _WU * 30.0 * (_U * (1.0 - _U)) ** 2

#: Most corners and closest points that can make the integrand steep along one edge, its two ends included.
_MAX_STEEP = 12
#: Most pieces of one edge.
_MAX_PIECES = 64
#: Pieces grow by this factor away from a steep point, the first one being as long as _FIRST gaps.
_GROWTH, _FIRST = 12.0, 2.0
#: Steep points closer together than this share of their distance from the other panel count as one.
_MERGED = 0.25
#: A piece is cut where the next step is shorter than this share of it.
_CUT = 0.8
#: A panel further off than this many half-widths is integrated by lines along the narrow one.
_NARROW = 2.0
#: Parallel planes no higher apart than this share of the smaller radius are one.
_COPLANAR = 1e-10
#: An origin further off than this many radii wants a finer rule.
_FAR_ORIGIN = 30.0
#: Planes that meet at a smaller sine than this are taken as parallel.
_PARALLEL = 1e-7


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
def _steep_points(at, gap, line, other):
    """Where the potential of panel `other` may be steep along a segment.

    `line` holds the start, the unit vector and the length of the segment.

    Fills `at` (arc lengths, ascending, both ends included) and `gap` (the smallest distance, not zero, of the
    other panel's corners and edges from there); returns their number and the
    smallest distance found.
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
def _pieces(breaks, line, other):
    """Cut a segment at its steep points, and in growing steps away from each.

    Fills `breaks` with ascending arc lengths, both ends included, and returns their number.
    """
    at, gap = np.empty(_MAX_STEEP), np.empty(_MAX_STEEP)
    n_steep, _ = _steep_points(at, gap, line, other)
    n = 0
    for m in range(n_steep - 1):
        piece = at[m + 1] - at[m]
        breaks[n] = at[m]
        n += 1
        step = _FIRST * gap[m]
        while step < _CUT * piece and n < _MAX_PIECES - 10:
            breaks[n] = at[m] + step
            n += 1
            step *= _GROWTH
        step = _FIRST * gap[m + 1]
        while step * _GROWTH < _CUT * piece:
            step *= _GROWTH
        while step >= 0.999 * _FIRST * gap[m + 1] and step < _CUT * piece and n < _MAX_PIECES - 2:
            breaks[n] = at[m + 1] - step
            n += 1
            step /= _GROWTH
    breaks[n] = at[n_steep - 1]
    return n + 1


@kernel
def _edge_line(line, panel, k):
    """Start, unit vector and length of edge k of a panel."""
    for m in range(3):
        line[m] = panel[CORNER + 3 * k + m]
        line[3 + m] = panel[DIRECTION + 3 * k + m]
    line[6] = panel[LENGTH + k]


@kernel
def _potential_along(line, other, w0, w1, parts):
    """Integral of (potential of panel `other`) x (weight, linear from w0 to w1) along a segment.

    Each of its pieces is cut into `parts` equal ones.
    """
    breaks = np.empty(_MAX_PIECES)
    n = _pieces(breaks, line, other)
    slope = (w1 - w0) / line[6]
    total = 0.0
    for b in range((n - 1) * parts):
        k = b // parts
        piece = (breaks[k + 1] - breaks[k]) / parts
        start = breaks[k] + (b - k * parts) * piece
        part = 0.0
        for q in range(N_POINTS):
            s = start + piece * _S[q]
            value = polygon_potential(other, line[0] + s * line[3], line[1] + s * line[4], line[2] + s * line[5])
            part += _WS[q] * (w0 + slope * s) * value
        total += part * piece
    return total


@kernel
def _edges_about(panel, other, ox, oy, oz, parts):
    """Sum over the edges of `panel` of (distance from the origin) times (potential along the edge), m3."""
    line = np.empty(7)
    total = 0.0
    for k in range(4):
        if panel[LENGTH + k] == 0.0:
            continue
        c, o = CORNER + 3 * k, OUTWARD + 3 * k
        distance = (panel[c] - ox) * panel[o] + (panel[c + 1] - oy) * panel[o + 1] + (panel[c + 2] - oz) * panel[o + 2]
        if abs(distance) > 1e-14 * panel[RADIUS]:
            _edge_line(line, panel, k)
            total += distance * _potential_along(line, other, 1.0, 1.0, parts)
    return total


@kernel
def self_integral(frame):
    """Integral of 1/r over a panel with itself, m3: all terms are positive, slivers lose nothing."""
    return 2.0 / 3.0 * _edges_about(frame, frame, frame[CENTROID], frame[CENTROID + 1], frame[CENTROID + 2], 1)


@kernel
def _inner_of_f(q2, h, t0, t1):
    """Integral of F = R - h ln(R + h), R^2 = t^2 + q2 + h^2, over t from t0 to t1, m2."""
    p2 = q2 + h * h
    r0, r1 = math.sqrt(t0 * t0 + p2), math.sqrt(t1 * t1 + p2)
    # ln(t + R), differenced without cancellation for negative t
    if t0 >= 0.0:
        log_ratio = math.log((t1 + r1) / max(t0 + r0, 1e-300))
    elif t1 <= 0.0:
        log_ratio = math.log((r0 - t0) / max(r1 - t1, 1e-300))
    else:
        log_ratio = math.log((t1 + r1) * (r0 - t0) / max(p2, 1e-300))
    value = 0.5 * (t1 * r1 - t0 * r0)
    if p2 > 0.0:
        value += 0.5 * p2 * log_ratio
    if h > 0.0:
        log_part = t1 * math.log(r1 + h) - t0 * math.log(r0 + h) + h * log_ratio - (t1 - t0)
        q = math.sqrt(q2)
        if q > 0.0:
            log_part += q * (math.atan2(t1, q) - math.atan2(t0, q))
            log_part -= q * (math.atan2(t1 * h, q * r1) - math.atan2(t0 * h, q * r0))
        value -= h * log_part
    return value


@kernel
def _parallel_integral(source, target, h):
    """Integral of 1/r over two panels in parallel planes a height h apart, m3."""
    breaks = np.empty(_MAX_PIECES)
    line = np.empty(7)
    total = 0.0
    for k in range(4):
        if source[LENGTH + k] == 0.0:
            continue
        _edge_line(line, source, k)
        n = _pieces(breaks, line, target)
        c, d, o = CORNER + 3 * k, DIRECTION + 3 * k, OUTWARD + 3 * k
        for j in range(4):
            if target[LENGTH + j] == 0.0:
                continue
            cj, dj, oj = CORNER + 3 * j, DIRECTION + 3 * j, OUTWARD + 3 * j
            weight = source[o] * target[oj] + source[o + 1] * target[oj + 1] + source[o + 2] * target[oj + 2]
            if abs(weight) < 1e-14:
                continue
            for b in range(n - 1):
                piece = breaks[b + 1] - breaks[b]
                part = 0.0
                for p in range(N_POINTS):
                    s = breaks[b] + piece * _S[p]
                    rx = source[c] + s * source[d] - target[cj]
                    ry = source[c + 1] + s * source[d + 1] - target[cj + 1]
                    rz = source[c + 2] + s * source[d + 2] - target[cj + 2]
                    t = rx * target[dj] + ry * target[dj + 1] + rz * target[dj + 2]
                    q = rx * target[oj] + ry * target[oj + 1] + rz * target[oj + 2]
                    part += _WS[p] * _inner_of_f(q * q, h, -t, target[LENGTH + j] - t)
                total -= weight * part * piece
    return total


@kernel
def _across(panel, side, v, line):
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
def _narrowness(panel, other, line):
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
            _across(panel, k, 0.5 * half, line)
            if line[6] > 0.0:
                _, distance = _steep_points(at, gap, line, other)
                nearest = min(nearest, distance)
        ratio = 2.0 * nearest / width
        if ratio > best:
            best, side = ratio, k
    return best, side


@kernel
def _narrow_integral(narrow, other, side, n):
    """Gauss points across a narrow panel, the potential of the other one along each line, m3."""
    line = np.empty(7)
    total = 0.0
    for q in range(n):
        w0, w1 = _across(narrow, side, GAUSS_NODES[n, q], line)
        if line[6] > 0.0:
            total += GAUSS_WEIGHTS[n, q] * _potential_along(line, other, w0, w1, 1)
    return total


@kernel
def close_pair_integral(source, target):
    """Integral of 1/r over two different panels that touch or nearly touch.

    Parameters
    ----------
    source, target : (FRAME_SIZE,) float
        Rows of :func:`daraf.bem.frames.panel_frames`; where both serve, the lines run along `source`, so
        that should be the smaller one.

    Returns
    -------
    float, m3
        Relative error below 1e-7 for touching panels, 1e-6 at worst for close ones.
    """
    nx, ny, nz = source[NORMAL], source[NORMAL + 1], source[NORMAL + 2]
    mx, my, mz = target[NORMAL], target[NORMAL + 1], target[NORMAL + 2]
    ox, oy, oz, touching = _common_corner(source, target, 1e-12 * min(source[RADIUS], target[RADIUS]))
    parts = 1
    if not touching:
        line = np.empty(7)
        ratio, side = _narrowness(source, target, line)
        if ratio > _NARROW:
            return _narrow_integral(source, target, side, _narrow_rule(ratio))
        ratio, side = _narrowness(target, source, line)
        if ratio > _NARROW:
            return _narrow_integral(target, source, side, _narrow_rule(ratio))
        # cross product of the normals: direction of the line where the planes meet, length the sine
        lx, ly, lz = ny * mz - nz * my, nz * mx - nx * mz, nx * my - ny * mx
        sin2 = lx * lx + ly * ly + lz * lz
        share = source[RADIUS] ** 2 / (source[RADIUS] ** 2 + target[RADIUS] ** 2)
        height = share * _height(source, target) + (1.0 - share) * _height(target, source)
        if sin2 < _PARALLEL**2 and height > _COPLANAR * min(source[RADIUS], target[RADIUS]):
            return _parallel_integral(source, target, height)
        # the origin starts half-way between the panels and is moved onto both planes
        ox = 0.5 * (source[CENTROID] + target[CENTROID])
        oy = 0.5 * (source[CENTROID + 1] + target[CENTROID + 1])
        oz = 0.5 * (source[CENTROID + 2] + target[CENTROID + 2])
        if sin2 < _PARALLEL**2:
            # in one plane any origin will do
            return (_edges_about(source, target, ox, oy, oz, 1) + _edges_about(target, source, ox, oy, oz, 1)) / 3.0
        g = nx * (source[CENTROID] - ox) + ny * (source[CENTROID + 1] - oy) + nz * (source[CENTROID + 2] - oz)
        f = mx * (target[CENTROID] - ox) + my * (target[CENTROID + 1] - oy) + mz * (target[CENTROID + 2] - oz)
        cosine = nx * mx + ny * my + nz * mz
        a = (g - cosine * f) / sin2
        b = (f - cosine * g) / sin2
        ox, oy, oz = ox + a * nx + b * mx, oy + a * ny + b * my, oz + a * nz + b * mz
        # an origin far away makes large terms that cancel: they need a rule finer by as much
        far = math.sqrt(
            (ox - source[CENTROID]) ** 2 + (oy - source[CENTROID + 1]) ** 2 + (oz - source[CENTROID + 2]) ** 2
        )
        if far > _FAR_ORIGIN * max(source[RADIUS], target[RADIUS]):
            parts = 2
    return (_edges_about(source, target, ox, oy, oz, parts) + _edges_about(target, source, ox, oy, oz, parts)) / 3.0


@kernel
def _narrow_rule(ratio):
    if ratio > 20.0:
        return 3
    if ratio > 7.0:
        return 4
    if ratio > 3.5:
        return 5
    return 8


@kernel
def _height(source, target):
    """Height of the target's centroid over the source's plane, m."""
    x = target[CENTROID] - source[CENTROID]
    y = target[CENTROID + 1] - source[CENTROID + 1]
    z = target[CENTROID + 2] - source[CENTROID + 2]
    return abs(x * source[NORMAL] + y * source[NORMAL + 1] + z * source[NORMAL + 2])


@kernel
def _common_corner(source, target, tolerance):
    """A corner of one panel that lies on the other's boundary, if there is one."""
    for a, b in ((source, target), (target, source)):
        for k in range(4):
            x, y, z = a[CORNER + 3 * k], a[CORNER + 3 * k + 1], a[CORNER + 3 * k + 2]
            for j in range(4):
                length = b[LENGTH + j]
                if length == 0.0:
                    continue
                rx, ry, rz = x - b[CORNER + 3 * j], y - b[CORNER + 3 * j + 1], z - b[CORNER + 3 * j + 2]
                ux, uy, uz = b[DIRECTION + 3 * j], b[DIRECTION + 3 * j + 1], b[DIRECTION + 3 * j + 2]
                s = min(max(rx * ux + ry * uy + rz * uz, 0.0), length)
                gx, gy, gz = rx - s * ux, ry - s * uy, rz - s * uz
                if gx * gx + gy * gy + gz * gz <= tolerance * tolerance:
                    return x, y, z, True
    return 0.0, 0.0, 0.0, False
