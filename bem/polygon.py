"""Closed-form potential of a flat panel with uniform charge: the inner integral of every near pair."""

import math

from .frames import CORNER, LENGTH, NORMAL, OUTWARD, TWICE_AREA_1, TWICE_AREA_2
from .jit import kernel

__all__ = ["polygon_distance", "polygon_potential"]


@kernel
def polygon_potential(frame, x, y, z):
    """Integral of 1/r over a flat panel, seen from any point: on, off or in the plane of the panel.

    ``V = sum_e t_e ln((R_a + R_b + L)/(R_a + R_b - L)) - |h| |Omega|`` with the signed in-plane distance
    ``t_e`` from the point to edge e, the height h over the plane, and the solid angle Omega. The difference
    in the logarithm is kept away from zero by ``1e-15 (R_a + R_b)``: on an edge its factor ``t_e`` vanishes.

    Parameters
    ----------
    frame : (FRAME_SIZE,) float
        A row of :func:`daraf.bem.frames.panel_frames`.
    x, y, z : float, m

    Returns
    -------
    float, m
        About 1e-15 (distance / panel size)^2 relative: meant for near points.

    References
    ----------
    Wilton et al., IEEE Trans. Antennas Propag. 32 (1984) 276, eq. 5; the solid angle after
    van Oosterom and Strackee, IEEE Trans. Biomed. Eng. 30 (1983) 125, eq. 8, two triangles by one arctangent.
    """
    ax, ay, az = frame[CORNER] - x, frame[CORNER + 1] - y, frame[CORNER + 2] - z
    bx, by, bz = frame[CORNER + 3] - x, frame[CORNER + 4] - y, frame[CORNER + 5] - z
    cx, cy, cz = frame[CORNER + 6] - x, frame[CORNER + 7] - y, frame[CORNER + 8] - z
    dx, dy, dz = frame[CORNER + 9] - x, frame[CORNER + 10] - y, frame[CORNER + 11] - z
    ra = math.sqrt(ax * ax + ay * ay + az * az)
    rb = math.sqrt(bx * bx + by * by + bz * bz)
    rc = math.sqrt(cx * cx + cy * cy + cz * cz)
    rd = math.sqrt(dx * dx + dy * dy + dz * dz)
    o = OUTWARD
    total = _edge_term(ax * frame[o] + ay * frame[o + 1] + az * frame[o + 2], ra + rb, frame[LENGTH])
    o = OUTWARD + 3
    total += _edge_term(bx * frame[o] + by * frame[o + 1] + bz * frame[o + 2], rb + rc, frame[LENGTH + 1])
    o = OUTWARD + 6
    total += _edge_term(cx * frame[o] + cy * frame[o + 1] + cz * frame[o + 2], rc + rd, frame[LENGTH + 2])
    o = OUTWARD + 9
    total += _edge_term(dx * frame[o] + dy * frame[o + 1] + dz * frame[o + 2], rd + ra, frame[LENGTH + 3])
    h = abs(ax * frame[NORMAL] + ay * frame[NORMAL + 1] + az * frame[NORMAL + 2])
    if h > 0.0:
        ac = ax * cx + ay * cy + az * cz
        den1 = ra * rb * rc + (ax * bx + ay * by + az * bz) * rc + (bx * cx + by * cy + bz * cz) * ra + ac * rb
        num1 = h * frame[TWICE_AREA_1]
        if frame[TWICE_AREA_2] > 0.0:
            num2 = h * frame[TWICE_AREA_2]
            den2 = ra * rc * rd + ac * rd + (cx * dx + cy * dy + cz * dz) * ra + (dx * ax + dy * ay + dz * az) * rc
            num1, den1 = num1 * den2 + num2 * den1, den1 * den2 - num1 * num2
        total -= 2.0 * h * abs(math.atan2(num1, den1))
    return total


@kernel
def _edge_term(t, s, length):
    """One edge of the potential: ``t ln((s + L)/(s - L))``, safe on the edge, its ends and its extension."""
    if length == 0.0 or t == 0.0:
        return 0.0
    return t * math.log((s + length) / max(s - length, 1e-15 * s))


@kernel
def polygon_distance(frame, x, y, z):
    """Distance from a point to a flat convex panel, m.

    Inside the prism over the panel it is the height, elsewhere the distance to the nearest edge.
    """
    inside = True
    best = 1e300
    for k in range(4):
        length = frame[LENGTH + k]
        if length == 0.0:
            continue
        c = CORNER + 3 * k
        rx, ry, rz = x - frame[c], y - frame[c + 1], z - frame[c + 2]
        o = OUTWARD + 3 * k
        if rx * frame[o] + ry * frame[o + 1] + rz * frame[o + 2] > 0.0:
            inside = False
        d = c + 12
        along = rx * frame[d] + ry * frame[d + 1] + rz * frame[d + 2]
        along = min(max(along, 0.0), length)
        rx, ry, rz = rx - along * frame[d], ry - along * frame[d + 1], rz - along * frame[d + 2]
        best = min(best, rx * rx + ry * ry + rz * rz)
    if inside:
        h = (x - frame[CORNER]) * frame[NORMAL] + (y - frame[CORNER + 1]) * frame[NORMAL + 1]
        return abs(h + (z - frame[CORNER + 2]) * frame[NORMAL + 2])
    return math.sqrt(best)
