"""Flux of one panel's charge through another: the double integral behind every dielectric interface.

    Phi(T, S) = int_T int_S n_T . (x - y) / r^3 dS_y dS_x = int_S Omega_T(y) dS_y

with Omega_T the signed solid angle of the target seen from a point of the source, positive where its normal points
away from there. Swapping the order makes Gauss's law visible: over a closed surface the solid angles add up to
4 pi, 2 pi or 0 at any point, whatever rule integrates over the source.

| pair | rule |
| --- | --- |
| far | product of Gauss rules on both panels |
| middle | closed form of the larger panel (its solid angle or its field) at Gauss points of the smaller one |
| parallel planes | edge integrals of ln(R + h), which is minus the height derivative of F in :mod:`daraf.bem.near` |
| close, touching | with the origin on both planes the integrand is homogeneous of degree -2 in the four in-plane |
| | coordinates: half the sum over the edges of (distance of the origin) x (closed form along the edge) |

In one plane it is zero, a panel with itself included: the jump by 2 pi at the charge is not part of it.
"""

import math

import numpy as np

from .field import polygon_field
from .frames import CENTROID, CORNER, DIRECTION, LENGTH, NORMAL, OUTWARD, POINTS, RADIUS
from .gauss import GAUSS_NODES, GAUSS_WEIGHTS
from .jit import kernel, parallel_kernel, prange
from .near import common_corner
from .pair_rule import pair_rule
from .segments import (
    CROWDED_NODES,
    CROWDED_WEIGHTS,
    MAX_PIECES,
    N_POINTS,
    NARROW,
    PARALLEL,
    across,
    edge_line,
    height_over,
    narrow_rule,
    narrowness,
    pieces,
)

__all__ = ["flux_integral", "flux_rows", "middle_flux"]

_REORDER = {"reassoc", "contract", "arcp", "nsz"}
#: As in :mod:`daraf.bem.pairs`; the integrand is steeper by one power of the distance.
_FAR = (30.0, 7.0, 3.2)
_MIDDLE = (6.0, 3.2, 2.2)
#: Panels whose corners all lie this close to the target's plane, per radius, send no flux through it.
_IN_PLANE = 1e-13
#: An origin further off than this many radii wants a finer rule.
_FAR_ORIGIN = 30.0


@kernel(fastmath=_REORDER)
def _far_flux(target, source, n):
    """Product of n x n Gauss rules on two well separated panels, m2; n is 2, 3 or 4."""
    count = n * n
    s = POINTS[n]
    nx, ny, nz = target[NORMAL], target[NORMAL + 1], target[NORMAL + 2]
    total = 0.0
    for i in range(count):
        px, py, pz = target[s + i], target[s + count + i], target[s + 2 * count + i]
        part = 0.0
        for j in range(count):
            x, y, z = px - source[s + j], py - source[s + count + j], pz - source[s + 2 * count + j]
            r2 = x * x + y * y + z * z
            part += source[s + 3 * count + j] * (x * nx + y * ny + z * nz) / (r2 * math.sqrt(r2))
        total += target[s + 3 * count + i] * part
    return total


@kernel
def _normal_part(other, nx, ny, nz, x, y, z):
    fx, fy, fz = polygon_field(other, x, y, z)
    return fx * nx + fy * ny + fz * nz


@kernel
def middle_flux(target, source, n):
    """Closed form of the larger panel at n x n Gauss points of the smaller one, m2; n is 2 to 5."""
    s, count = POINTS[n], n * n
    nx, ny, nz = target[NORMAL], target[NORMAL + 1], target[NORMAL + 2]
    if source[RADIUS] <= target[RADIUS]:
        outer, inner, sign = source, target, -1.0
    else:
        outer, inner, sign = target, source, 1.0
    total = 0.0
    for i in range(count):
        value = _normal_part(inner, nx, ny, nz, outer[s + i], outer[s + count + i], outer[s + 2 * count + i])
        total += outer[s + 3 * count + i] * value
    return sign * total


@kernel
def _along(line, other, normal, w0, w1, parts):
    """Integral of (normal part of the field of panel `other`) x (weight, linear from w0 to w1) along a segment."""
    breaks = np.empty(MAX_PIECES)
    n = pieces(breaks, line, other)
    slope = (w1 - w0) / line[6]
    total = 0.0
    for b in range((n - 1) * parts):
        k = b // parts
        piece = (breaks[k + 1] - breaks[k]) / parts
        start = breaks[k] + (b - k * parts) * piece
        part = 0.0
        for q in range(N_POINTS):
            s = start + piece * CROWDED_NODES[q]
            x, y, z = line[0] + s * line[3], line[1] + s * line[4], line[2] + s * line[5]
            part += (
                CROWDED_WEIGHTS[q] * (w0 + slope * s) * _normal_part(other, normal[0], normal[1], normal[2], x, y, z)
            )
        total += part * piece
    return total


@kernel
def _edges_about(panel, other, normal, origin, parts):
    """Sum over the edges of `panel` of (distance from the origin) x (normal field of `other` along the edge), m2."""
    line = np.empty(7)
    total = 0.0
    for k in range(4):
        if panel[LENGTH + k] == 0.0:
            continue
        c, o = CORNER + 3 * k, OUTWARD + 3 * k
        distance = (panel[c] - origin[0]) * panel[o] + (panel[c + 1] - origin[1]) * panel[o + 1]
        distance += (panel[c + 2] - origin[2]) * panel[o + 2]
        if abs(distance) > 1e-13 * panel[RADIUS]:
            edge_line(line, panel, k)
            total += distance * _along(line, other, normal, 1.0, 1.0, parts)
    return total


@kernel
def _log_inner(q2, h, t0, t1):
    """Integral of ln(R + h), R^2 = t^2 + q2 + h^2, over t from t0 to t1, m."""
    p2 = q2 + h * h
    r0, r1 = math.sqrt(t0 * t0 + p2), math.sqrt(t1 * t1 + p2)
    if t0 >= 0.0:
        log_ratio = math.log((t1 + r1) / max(t0 + r0, 1e-300))
    elif t1 <= 0.0:
        log_ratio = math.log((r0 - t0) / max(r1 - t1, 1e-300))
    else:
        log_ratio = math.log((t1 + r1) * (r0 - t0) / max(p2, 1e-300))
    value = t1 * math.log(r1 + h) - t0 * math.log(r0 + h) + h * log_ratio - (t1 - t0)
    q = math.sqrt(q2)
    if q > 0.0:
        value += q * (math.atan2(t1, q) - math.atan2(t0, q))
        value -= q * (math.atan2(t1 * h, q * r1) - math.atan2(t0 * h, q * r0))
    return value


@kernel
def _parallel_flux(target, source, h):
    """Flux through a panel of the charge of another in a parallel plane a height h > 0 behind it, m2."""
    breaks = np.empty(MAX_PIECES)
    line = np.empty(7)
    total = 0.0
    for k in range(4):
        if source[LENGTH + k] == 0.0:
            continue
        edge_line(line, source, k)
        n = pieces(breaks, line, target)
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
                    s = breaks[b] + piece * CROWDED_NODES[p]
                    rx = source[c] + s * source[d] - target[cj]
                    ry = source[c + 1] + s * source[d + 1] - target[cj + 1]
                    rz = source[c + 2] + s * source[d + 2] - target[cj + 2]
                    t = rx * target[dj] + ry * target[dj + 1] + rz * target[dj + 2]
                    q = rx * target[oj] + ry * target[oj + 1] + rz * target[oj + 2]
                    part += CROWDED_WEIGHTS[p] * _log_inner(q * q, h, -t, target[LENGTH + j] - t)
                total -= weight * part * piece
    return total


@kernel
def _narrow_flux(narrow, other, normal, side, n):
    """Gauss points across a narrow panel, the normal field of the other one along each line, m2."""
    line = np.empty(7)
    total = 0.0
    for q in range(n):
        w0, w1 = across(narrow, side, GAUSS_NODES[n, q], line)
        if line[6] > 0.0:
            total += GAUSS_WEIGHTS[n, q] * _along(line, other, normal, w0, w1, 1)
    return total


@kernel
def _close_flux(target, source):
    """Flux of a panel through another that touches or nearly touches it, m2."""
    normal = target[NORMAL : NORMAL + 3]
    smaller = min(source[RADIUS], target[RADIUS])
    ox, oy, oz, touching = common_corner(source, target, 1e-12 * smaller)
    nx, ny, nz = target[NORMAL], target[NORMAL + 1], target[NORMAL + 2]
    mx, my, mz = source[NORMAL], source[NORMAL + 1], source[NORMAL + 2]
    parts = 1
    if not touching:
        line = np.empty(7)
        ratio, side = narrowness(source, target, line)
        if ratio > NARROW:
            return -_narrow_flux(source, target, normal, side, narrow_rule(ratio) + 2)
        ratio, side = narrowness(target, source, line)
        if ratio > NARROW:
            return _narrow_flux(target, source, normal, side, narrow_rule(ratio) + 2)
        lx, ly, lz = ny * mz - nz * my, nz * mx - nx * mz, nx * my - ny * mx
        sin2 = lx * lx + ly * ly + lz * lz
        if sin2 < PARALLEL**2:
            x = target[CENTROID] - source[CENTROID]
            y = target[CENTROID + 1] - source[CENTROID + 1]
            z = target[CENTROID + 2] - source[CENTROID + 2]
            sign = 1.0 if x * nx + y * ny + z * nz > 0.0 else -1.0
            share = source[RADIUS] ** 2 / (source[RADIUS] ** 2 + target[RADIUS] ** 2)
            height = share * height_over(source, target) + (1.0 - share) * height_over(target, source)
            return sign * _parallel_flux(target, source, height)
        ox = 0.5 * (source[CENTROID] + target[CENTROID])
        oy = 0.5 * (source[CENTROID + 1] + target[CENTROID + 1])
        oz = 0.5 * (source[CENTROID + 2] + target[CENTROID + 2])
        g = mx * (source[CENTROID] - ox) + my * (source[CENTROID + 1] - oy) + mz * (source[CENTROID + 2] - oz)
        f = nx * (target[CENTROID] - ox) + ny * (target[CENTROID + 1] - oy) + nz * (target[CENTROID + 2] - oz)
        cosine = nx * mx + ny * my + nz * mz
        a = (g - cosine * f) / sin2
        b = (f - cosine * g) / sin2
        ox, oy, oz = ox + a * mx + b * nx, oy + a * my + b * ny, oz + a * mz + b * nz
        far = math.sqrt(
            (ox - source[CENTROID]) ** 2 + (oy - source[CENTROID + 1]) ** 2 + (oz - source[CENTROID + 2]) ** 2
        )
        if far > _FAR_ORIGIN * max(source[RADIUS], target[RADIUS]):
            parts = 2
    origin = np.array([ox, oy, oz])
    total = _edges_about(target, source, normal, origin, parts) - _edges_about(source, target, normal, origin, parts)
    return 0.5 * total


@kernel
def _in_plane(target, source):
    """Whether the source lies in the plane of the target."""
    for k in range(4):
        x = source[CORNER + 3 * k] - target[CENTROID]
        y = source[CORNER + 3 * k + 1] - target[CENTROID + 1]
        z = source[CORNER + 3 * k + 2] - target[CENTROID + 2]
        size = _IN_PLANE * (target[RADIUS] + math.sqrt(x * x + y * y + z * z))
        if abs(x * target[NORMAL] + y * target[NORMAL + 1] + z * target[NORMAL + 2]) > size:
            return False
    return True


@kernel
def flux_integral(target, source):
    """Flux through the target panel, along its normal, of unit charge density on the source panel, m2.

    Parameters
    ----------
    target, source : (FRAME_SIZE,) float
        Rows of :func:`daraf.bem.frames.panel_frames`.

    Returns
    -------
    float, m2
        Relative error about 1e-6 of the source's area at worst.
    """
    rule, _ = pair_rule(source, target, _FAR, _MIDDLE)
    if rule > 0:
        return _far_flux(target, source, rule)
    if _in_plane(target, source):
        return 0.0
    if rule < 0:
        return middle_flux(target, source, -rule)
    return _close_flux(target, source)


@parallel_kernel
def flux_rows(frames, rows, matrix, known, first, last):
    """Fill rows `first` <= r < `last`: flux through panel ``rows[r]`` of every panel.

    Parameters
    ----------
    frames : (n, FRAME_SIZE) float
    rows : (m,) int
        Target panels.
    matrix : (last - first, n) float, m2
        ``Phi(rows[r], j)``; zero where both are the same.
    known : (3,) int
        The first ``known[0]`` rows are known already for the first ``known[1]`` of each ``known[2]`` panels.
    first, last : int
    """
    for r in prange(first, last):
        i = rows[r]
        for j in range(len(frames)):
            if r < known[0] and j % known[2] < known[1]:
                continue
            matrix[r - first, j] = 0.0 if i == j else flux_integral(frames[i], frames[j])
