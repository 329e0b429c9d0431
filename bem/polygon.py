"""Closed-form potential of a flat panel with uniform charge: the inner integral of every near pair."""

import math

from .frames import CORNER, DIRECTION, LENGTH, NORMAL, OUTWARD, TWICE_AREA_1, TWICE_AREA_2
from .jit import kernel

__all__ = ["polygon_distance", "polygon_potential"]

#: Keeps the logarithm finite at a corner, where its factor is rounding.
_TINY = 1e-300


@kernel
def polygon_potential(frame, x, y, z):
    """Integral of 1/r over a flat panel, seen from any point: on, off or in the plane of the panel.

    ``V = sum_e t_e ln((R_a + R_b + L)/(R_a + R_b - L)) - |h| |Omega|`` with the signed in-plane distance
    ``t_e`` from the point to edge e, the height h over the plane, and the solid angle Omega. Close to the line of
    an edge the ratio in the logarithm is formed from the distances along the edge: R_a + R_b - L cancels there.

    Parameters
    ----------
    frame : (FRAME_SIZE,) float
        A row of :func:`daraf.bem.frames.panel_frames`.
    x, y, z : float, m

    Returns
    -------
    float, m
        About 1e-15 (distance / panel size)^2 relative: meant for near points. On a sliver nothing is lost.

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
    h = abs(ax * frame[NORMAL] + ay * frame[NORMAL + 1] + az * frame[NORMAL + 2])
    total = _edge_term(frame, 0, ax, ay, az, ra, rb, h)
    total += _edge_term(frame, 1, bx, by, bz, rb, rc, h)
    total += _edge_term(frame, 2, cx, cy, cz, rc, rd, h)
    total += _edge_term(frame, 3, dx, dy, dz, rd, ra, h)
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
def _edge_term(frame, k, x, y, z, r0, r1, h):
    """One edge of the potential: ``t ln((R_a + R_b + L)/(R_a + R_b - L))``, without cancellation near the edge."""
    length = frame[LENGTH + k]
    o = OUTWARD + 3 * k
    t = x * frame[o] + y * frame[o + 1] + z * frame[o + 2]
    if length == 0.0 or t == 0.0:
        return 0.0
    s = r0 + r1
    if s - length > 1e-3 * s:
        return t * math.log((s + length) / (s - length))
    # close to the edge's line: the same ratio from the distances along the edge
    d = DIRECTION + 3 * k
    l0 = x * frame[d] + y * frame[d + 1] + z * frame[d + 2]
    l1 = l0 + length
    if l0 >= 0.0:
        return t * math.log((l1 + r1) / max(l0 + r0, _TINY))
    if l1 <= 0.0:
        return t * math.log((r0 - l0) / max(r1 - l1, _TINY))
    return t * math.log((l1 + r1) * (r0 - l0) / max(t * t + h * h, _TINY))


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
