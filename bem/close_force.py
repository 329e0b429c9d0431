"""Coulomb force and torque between two close uniformly charged panels that do not touch.

The return values are those of :mod:`daraf.bem.pair_force`.

Close panels in planes that meet: with the origin o on both planes the integrands are homogeneous of degree -2 and
-1 in the four in-plane coordinates, and the divergence theorem leaves

    F = 1/2 [ sum_{edges e of i} d_e int_e E_j dl - sum_{edges f of j} d_f int_f E_i dl ],

with E the closed-form field of a panel; T about o likewise with the factor 1/3 and the lever in the integral.

Close panels in parallel planes a height h apart: the force along the planes is ``- sum_e m_e int_e V_j dl`` with
the potential V; across them the function ``P = ln(R + h)`` has the planar Laplacian ``h/R^3``, so that

    F_n = - sum_{e, f} (m_e . m_f) int_e int_f P dl dl,

and the moment of that force follows from Green's second identity, since the lever is harmonic.
"""

import math

import numpy as np

from .field import polygon_field
from .frames import CENTROID, CORNER, DIRECTION, LENGTH, NORMAL, OUTWARD, RADIUS
from .gauss import GAUSS_NODES, GAUSS_WEIGHTS
from .jit import kernel
from .parallel import log_difference
from .polygon import polygon_potential
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

__all__ = ["close_force", "divided_force", "turned"]

#: Planes that meet further off than this many radii of the smaller panel cost digits.
_CANCEL = 4.0
#: Panels lower over each other than this many radii are not divided; if their planes meet further off than so
#: many radii they count as parallel.
_LOW, _CANCEL_LOW = 0.02, 50.0
#: Parts of a panel are halved until the edges of the other are further off than this many of their radii.
_DIVIDE = 2.6
#: Most parts, and most of them waiting to be looked at.
_MAX_PARTS, _MAX_BOXES = 4000, 100


@kernel
def turned(six):
    """What the other panel feels."""
    return -six[0], -six[1], -six[2], -six[3], -six[4], -six[5]


@kernel
def _field_along(line, other, w0, w1, origin):
    """Integrals along a segment of (field of `other`) x (weight, linear from w0 to w1), and of its moment."""
    breaks = np.empty(MAX_PIECES)
    n = pieces(breaks, line, other)
    slope = (w1 - w0) / line[6]
    fx, fy, fz, tx, ty, tz = 0.0, 0.0, 0.0, 0.0, 0.0, 0.0
    for b in range(n - 1):
        piece = breaks[b + 1] - breaks[b]
        for q in range(N_POINTS):
            s = breaks[b] + piece * CROWDED_NODES[q]
            x, y, z = line[0] + s * line[3], line[1] + s * line[4], line[2] + s * line[5]
            weight = piece * CROWDED_WEIGHTS[q] * (w0 + slope * s)
            gx, gy, gz = polygon_field(other, x, y, z)
            gx, gy, gz = weight * gx, weight * gy, weight * gz
            x, y, z = x - origin[0], y - origin[1], z - origin[2]
            fx, fy, fz = fx + gx, fy + gy, fz + gz
            tx, ty, tz = tx + y * gz - z * gy, ty + z * gx - x * gz, tz + x * gy - y * gx
    return fx, fy, fz, tx, ty, tz


@kernel
def _narrow_force(narrow, other, side, n):
    """Gauss points across a narrow panel, the field of the other one along each line; force on `narrow`."""
    line, origin = np.empty(7), np.zeros(3)
    fx, fy, fz, tx, ty, tz = 0.0, 0.0, 0.0, 0.0, 0.0, 0.0
    for q in range(n):
        w0, w1 = across(narrow, side, GAUSS_NODES[n, q], line)
        if line[6] > 0.0:
            gx, gy, gz, mx, my, mz = _field_along(line, other, w0, w1, origin)
            w = GAUSS_WEIGHTS[n, q]
            fx, fy, fz = fx + w * gx, fy + w * gy, fz + w * gz
            tx, ty, tz = tx + w * mx, ty + w * my, tz + w * mz
    return fx, fy, fz, tx, ty, tz


@kernel
def _edges_force(panel, other, origin):
    """Sum over the edges of `panel` of (distance from the origin) x (field of `other` along the edge)."""
    line = np.empty(7)
    fx, fy, fz, tx, ty, tz = 0.0, 0.0, 0.0, 0.0, 0.0, 0.0
    for k in range(4):
        if panel[LENGTH + k] == 0.0:
            continue
        c, o = CORNER + 3 * k, OUTWARD + 3 * k
        distance = (panel[c] - origin[0]) * panel[o] + (panel[c + 1] - origin[1]) * panel[o + 1]
        distance += (panel[c + 2] - origin[2]) * panel[o + 2]
        if abs(distance) > 1e-14 * panel[RADIUS]:
            edge_line(line, panel, k)
            gx, gy, gz, mx, my, mz = _field_along(line, other, distance, distance, origin)
            fx, fy, fz, tx, ty, tz = fx + gx, fy + gy, fz + gz, tx + mx, ty + my, tz + mz
    return fx, fy, fz, tx, ty, tz


@kernel
def _meeting_force(source, target, sin2):
    """Force and torque on `source` where the planes of the two panels meet."""
    nx, ny, nz = source[NORMAL], source[NORMAL + 1], source[NORMAL + 2]
    mx, my, mz = target[NORMAL], target[NORMAL + 1], target[NORMAL + 2]
    o = np.empty(3)
    # the origin starts half-way between the panels and is moved onto both planes
    for k in range(3):
        o[k] = 0.5 * (source[CENTROID + k] + target[CENTROID + k])
    g = nx * (source[CENTROID] - o[0]) + ny * (source[CENTROID + 1] - o[1]) + nz * (source[CENTROID + 2] - o[2])
    f = mx * (target[CENTROID] - o[0]) + my * (target[CENTROID + 1] - o[1]) + mz * (target[CENTROID + 2] - o[2])
    cosine = nx * mx + ny * my + nz * mz
    a, b = (g - cosine * f) / sin2, (f - cosine * g) / sin2
    o[0], o[1], o[2] = o[0] + a * nx + b * mx, o[1] + a * ny + b * my, o[2] + a * nz + b * mz
    fx, fy, fz, tx, ty, tz = _edges_force(source, target, o)
    gx, gy, gz, ux, uy, uz = _edges_force(target, source, o)
    fx, fy, fz = 0.5 * (fx - gx), 0.5 * (fy - gy), 0.5 * (fz - gz)
    tx, ty, tz = (tx - ux) / 3.0, (ty - uy) / 3.0, (tz - uz) / 3.0
    return fx, fy, fz, tx + o[1] * fz - o[2] * fy, ty + o[2] * fx - o[0] * fz, tz + o[0] * fy - o[1] * fx


@kernel
def _edge_of_p(q, h, t0, t1):
    """Integrals over t from t0 to t1 of P = ln(R + h) and of (R - h)/(R + h), R^2 = t^2 + q^2 + h^2, m."""
    p2 = q * q + h * h
    r0, r1 = math.sqrt(t0 * t0 + p2), math.sqrt(t1 * t1 + p2)
    log_ratio = log_difference(t0, r0, t1, r1, p2)
    angle = 0.0
    if q > 0.0:
        angle = math.atan2(t1, q) - math.atan2(t0, q)
        angle -= math.atan2(t1 * h, q * r1) - math.atan2(t0 * h, q * r0)
    logs = t1 * math.log(r1 + h) - t0 * math.log(r0 + h) + h * log_ratio - (t1 - t0) + q * angle
    ratio = t1 - t0 - 2.0 * h * log_ratio
    if q > 0.0:
        ratio += 2.0 * h * h / q * angle
    else:
        # angle / q for q -> 0: the integral of (1 - h/R)/t^2
        ratio += 2.0 * h * h * (_tail(t1, h, r1) - _tail(t0, h, r0))
    return logs, ratio


@kernel
def _tail(t, h, r):
    """Antiderivative over t of (1 - h/R)/t^2 at q = 0: ``(R - h)/(h t) = t/(h (R + h))``."""
    return t / (h * (r + h))


@kernel
def _parallel_force(source, target):
    """Force and torque on `source` where the panels lie in parallel planes."""
    # the part along the source's plane is exact for any tilt, so the rest is the part along its normal
    nx, ny, nz = source[NORMAL], source[NORMAL + 1], source[NORMAL + 2]
    h = nx * (source[CENTROID] - target[CENTROID]) + ny * (source[CENTROID + 1] - target[CENTROID + 1])
    h += nz * (source[CENTROID + 2] - target[CENTROID + 2])
    if h < 0.0:
        nx, ny, nz, h = -nx, -ny, -nz, -h
    lifted = h > 1e-12 * source[RADIUS]
    breaks, line = np.empty(MAX_PIECES), np.empty(7)
    fx, fy, fz, tx, ty, tz = 0.0, 0.0, 0.0, 0.0, 0.0, 0.0
    lift, ax, ay, az = 0.0, 0.0, 0.0, 0.0
    for k in range(4):
        if source[LENGTH + k] == 0.0:
            continue
        edge_line(line, source, k)
        mx, my, mz = source[OUTWARD + 3 * k], source[OUTWARD + 3 * k + 1], source[OUTWARD + 3 * k + 2]
        n = pieces(breaks, line, target)
        for b in range(n - 1):
            piece = breaks[b + 1] - breaks[b]
            for p in range(N_POINTS):
                s = breaks[b] + piece * CROWDED_NODES[p]
                x, y, z = line[0] + s * line[3], line[1] + s * line[4], line[2] + s * line[5]
                weight = piece * CROWDED_WEIGHTS[p]
                g = -weight * polygon_potential(target, x, y, z)
                fx, fy, fz = fx + g * mx, fy + g * my, fz + g * mz
                tx, ty, tz = tx + g * (y * mz - z * my), ty + g * (z * mx - x * mz), tz + g * (x * my - y * mx)
                if lifted:
                    force, area = _across_from(target, x, y, z, h, mx, my, mz)
                    lift += weight * force
                    # the lever is taken about the source's centroid: less to cancel
                    x, y, z = x - source[CENTROID], y - source[CENTROID + 1], z - source[CENTROID + 2]
                    ax += weight * (force * x - area * mx)
                    ay += weight * (force * y - area * my)
                    az += weight * (force * z - area * mz)
    ax, ay, az = ax + lift * source[CENTROID], ay + lift * source[CENTROID + 1], az + lift * source[CENTROID + 2]
    tx, ty, tz = tx + ay * nz - az * ny, ty + az * nx - ax * nz, tz + ax * ny - ay * nx
    return fx + lift * nx, fy + lift * ny, fz + lift * nz, tx, ty, tz


@kernel
def _across_from(target, x, y, z, h, mx, my, mz):
    """For a point on an edge with outward normal m: ``- sum_f (m . m_f) int_f P`` and ``int_target P dS``."""
    force, area = 0.0, 0.0
    for j in range(4):
        if target[LENGTH + j] == 0.0:
            continue
        c, d, o = CORNER + 3 * j, DIRECTION + 3 * j, OUTWARD + 3 * j
        rx, ry, rz = target[c] - x, target[c + 1] - y, target[c + 2] - z
        t = rx * target[d] + ry * target[d + 1] + rz * target[d + 2]
        q = rx * target[o] + ry * target[o + 1] + rz * target[o + 2]
        logs, ratio = _edge_of_p(abs(q), h, t, t + target[LENGTH + j])
        force -= (mx * target[o] + my * target[o + 1] + mz * target[o + 2]) * logs
        area += q * (0.5 * logs - 0.25 * ratio)
    return force, area


@kernel
def _edge_distance(frame, x, y, z):
    """Distance from a point to the nearest edge of a panel, m."""
    best = 1e300
    for k in range(4):
        length = frame[LENGTH + k]
        if length == 0.0:
            continue
        c, d = CORNER + 3 * k, DIRECTION + 3 * k
        rx, ry, rz = x - frame[c], y - frame[c + 1], z - frame[c + 2]
        along = min(max(rx * frame[d] + ry * frame[d + 1] + rz * frame[d + 2], 0.0), length)
        rx, ry, rz = rx - along * frame[d], ry - along * frame[d + 1], rz - along * frame[d + 2]
        best = min(best, rx * rx + ry * ry + rz * rz)
    return math.sqrt(best)


@kernel
def _bilinear(frame, u, v, jet):
    """Point of a panel at (u, v) in the unit square and its derivatives along u and v: `jet` (9,)."""
    for m in range(3):
        a, b = frame[CORNER + m], frame[CORNER + 3 + m]
        c, d = frame[CORNER + 6 + m], frame[CORNER + 9 + m]
        jet[3 + m] = (1.0 - v) * (b - a) + v * (c - d)
        jet[6 + m] = (1.0 - u) * (d - a) + u * (c - b)
        jet[m] = a + u * (b - a) + v * (d - a + u * (a - b + c - d))


@kernel
def divided_force(outer, inner):
    """Closed-form field of `inner` at Gauss points of parts of `outer`, halved until the edges are far off.

    Away from its edges the field of a panel is smooth, as long as the points stay on one side of it.
    """
    box, jet = np.empty((_MAX_BOXES, 4)), np.empty(9)
    box[0, 0], box[0, 1], box[0, 2], box[0, 3] = 0.0, 1.0, 0.0, 1.0
    n_boxes, parts = 1, 0
    fx, fy, fz, tx, ty, tz = 0.0, 0.0, 0.0, 0.0, 0.0, 0.0
    while n_boxes > 0:
        n_boxes -= 1
        u0, u1, v0, v1 = box[n_boxes, 0], box[n_boxes, 1], box[n_boxes, 2], box[n_boxes, 3]
        um, vm = 0.5 * (u0 + u1), 0.5 * (v0 + v1)
        _bilinear(outer, um, vm, jet)
        du = (u1 - u0) * math.sqrt(jet[3] ** 2 + jet[4] ** 2 + jet[5] ** 2)
        dv = (v1 - v0) * math.sqrt(jet[6] ** 2 + jet[7] ** 2 + jet[8] ** 2)
        far = _edge_distance(inner, jet[0], jet[1], jet[2]) > 0.5 * _DIVIDE * math.sqrt(du * du + dv * dv)
        if not far and parts < _MAX_PARTS and n_boxes < _MAX_BOXES - 2:
            u_half, v_half = (um, v1) if du >= dv else (u1, vm)
            box[n_boxes, 1], box[n_boxes, 3] = u_half, v_half
            n_boxes += 1
            box[n_boxes, 0], box[n_boxes, 1] = (um if du >= dv else u0), u1
            box[n_boxes, 2], box[n_boxes, 3] = (v0 if du >= dv else vm), v1
            n_boxes += 1
            parts += 1
            continue
        for i in range(5):
            for j in range(5):
                _bilinear(outer, u0 + (u1 - u0) * GAUSS_NODES[5, i], v0 + (v1 - v0) * GAUSS_NODES[5, j], jet)
                nx, ny = jet[4] * jet[8] - jet[5] * jet[7], jet[5] * jet[6] - jet[3] * jet[8]
                nz = jet[3] * jet[7] - jet[4] * jet[6]
                weight = GAUSS_WEIGHTS[5, i] * GAUSS_WEIGHTS[5, j] * (u1 - u0) * (v1 - v0)
                weight *= math.sqrt(nx * nx + ny * ny + nz * nz)
                x, y, z = jet[0], jet[1], jet[2]
                gx, gy, gz = polygon_field(inner, x, y, z)
                gx, gy, gz = weight * gx, weight * gy, weight * gz
                fx, fy, fz = fx + gx, fy + gy, fz + gz
                tx, ty, tz = tx + y * gz - z * gy, ty + z * gx - x * gz, tz + x * gy - y * gx
    return fx, fy, fz, tx, ty, tz


@kernel
def close_force(outer, inner):
    """Force and torque on `outer` of two close panels that do not touch; as `far_force`.

    The lines run along `outer` where there is a choice, so that should be the smaller panel.
    """
    line = np.empty(7)
    ratio, side = narrowness(outer, inner, line)
    if ratio > NARROW:
        return _narrow_force(outer, inner, side, narrow_rule(ratio))
    ratio, side = narrowness(inner, outer, line)
    if ratio > NARROW:
        return turned(_narrow_force(inner, outer, side, narrow_rule(ratio)))
    nx, ny, nz = outer[NORMAL], outer[NORMAL + 1], outer[NORMAL + 2]
    mx, my, mz = inner[NORMAL], inner[NORMAL + 1], inner[NORMAL + 2]
    lx, ly, lz = ny * mz - nz * my, nz * mx - nx * mz, nx * my - ny * mx
    sine = math.sqrt(lx * lx + ly * ly + lz * lz)
    height, size = height_over(outer, inner), min(outer[RADIUS], inner[RADIUS])
    # the tilt that is left out here changes the height over the panels by less than 1e-4 of itself
    if sine < PARALLEL or sine * max(outer[RADIUS], inner[RADIUS]) < 1e-4 * height:
        return _parallel_force(outer, inner)
    # the origin, where the planes meet, lies off by about height / sine: what cancels then is lost
    if height < _CANCEL * sine * size or height < min(_LOW, _CANCEL_LOW * sine) * size:
        return _meeting_force(outer, inner, sine * sine)
    if height > _LOW * size:
        return divided_force(outer, inner)
    return _parallel_force(outer, inner)
