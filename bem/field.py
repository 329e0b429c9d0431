"""Closed-form field of a flat panel with uniform charge, and sums of it over all panels."""

import math

import numpy as np

from .frames import AREA, CENTROID, CORNER, LENGTH, NORMAL, OUTWARD, RADIUS, TWICE_AREA_1, TWICE_AREA_2
from .jit import kernel, parallel_kernel, prange

__all__ = ["normal_field", "panel_field", "polygon_field"]

#: Distance from the centroid over the radius of a panel, beyond which its charge acts as a point's.
_POINT = 30.0
#: Height over the plane of a panel, per radius, below which the point counts as in the plane.
_IN_PLANE = 1e-12


@kernel
def polygon_field(frame, x, y, z):
    """Integral of (x - y)/r^3 over a flat panel, seen from any point off its edges.

    The in-plane part is ``sum_e m_e ln((R_a + R_b + L)/(R_a + R_b - L))`` with the outward edge normals m_e,
    the normal part is the solid angle with the sign of the height; in the plane of the panel it is zero, the
    mean of both sides.

    Parameters
    ----------
    frame : (FRAME_SIZE,) float
        A row of :func:`daraf.bem.frames.panel_frames`.
    x, y, z : float, m

    Returns
    -------
    fx, fy, fz : float
        Dimensionless; the field is density / (4 pi eps) times this.

    References
    ----------
    Wilton et al., IEEE Trans. Antennas Propag. 32 (1984) 276, eq. 6 (minus the gradient of 1/R); solid angle
    after van Oosterom and Strackee, IEEE Trans. Biomed. Eng. 30 (1983) 125.
    """
    fx, fy, fz = 0.0, 0.0, 0.0
    px, py, pz = frame[CORNER] - x, frame[CORNER + 1] - y, frame[CORNER + 2] - z
    r0 = math.sqrt(px * px + py * py + pz * pz)
    first = r0
    for k in range(4):
        n = CORNER + 3 * ((k + 1) % 4)
        r1 = first
        if k < 3:
            r1 = math.sqrt((frame[n] - x) ** 2 + (frame[n + 1] - y) ** 2 + (frame[n + 2] - z) ** 2)
        length = frame[LENGTH + k]
        if length > 0.0:
            s = r0 + r1
            log = math.log((s + length) / max(s - length, 1e-15 * s))
            o = OUTWARD + 3 * k
            fx += log * frame[o]
            fy += log * frame[o + 1]
            fz += log * frame[o + 2]
        r0 = r1
    h = -(px * frame[NORMAL] + py * frame[NORMAL + 1] + pz * frame[NORMAL + 2])
    if abs(h) > _IN_PLANE * frame[RADIUS]:
        omega = _solid_angle(frame, x, y, z, abs(h))
        if h < 0.0:
            omega = -omega
        fx += omega * frame[NORMAL]
        fy += omega * frame[NORMAL + 1]
        fz += omega * frame[NORMAL + 2]
    return fx, fy, fz


@kernel
def _solid_angle(frame, x, y, z, h):
    """Solid angle of a panel from a point at height h, positive."""
    ax, ay, az = frame[CORNER] - x, frame[CORNER + 1] - y, frame[CORNER + 2] - z
    bx, by, bz = frame[CORNER + 3] - x, frame[CORNER + 4] - y, frame[CORNER + 5] - z
    cx, cy, cz = frame[CORNER + 6] - x, frame[CORNER + 7] - y, frame[CORNER + 8] - z
    ra, rb = math.sqrt(ax * ax + ay * ay + az * az), math.sqrt(bx * bx + by * by + bz * bz)
    rc = math.sqrt(cx * cx + cy * cy + cz * cz)
    ac = ax * cx + ay * cy + az * cz
    den = ra * rb * rc + (ax * bx + ay * by + az * bz) * rc + (bx * cx + by * cy + bz * cz) * ra + ac * rb
    num = h * frame[TWICE_AREA_1]
    if frame[TWICE_AREA_2] > 0.0:
        dx, dy, dz = frame[CORNER + 9] - x, frame[CORNER + 10] - y, frame[CORNER + 11] - z
        rd = math.sqrt(dx * dx + dy * dy + dz * dz)
        den2 = ra * rc * rd + ac * rd + (cx * dx + cy * dy + cz * dz) * ra + (dx * ax + dy * ay + dz * az) * rc
        num2 = h * frame[TWICE_AREA_2]
        num, den = num * den2 + num2 * den, den * den2 - num * num2
    return 2.0 * abs(math.atan2(num, den))


@kernel
def panel_field(frame, x, y, z):
    """Field of a panel as in :func:`polygon_field`; far away that of its charge in the centroid."""
    rx, ry, rz = x - frame[CENTROID], y - frame[CENTROID + 1], z - frame[CENTROID + 2]
    r2 = rx * rx + ry * ry + rz * rz
    if r2 > (_POINT * frame[RADIUS]) ** 2:
        weight = frame[AREA] / (r2 * math.sqrt(r2))
        return weight * rx, weight * ry, weight * rz
    return polygon_field(frame, x, y, z)


@parallel_kernel
def normal_field(points, normals, frames, density, result):
    """Normal component of the field of all panels at points on panels: the mean of the two sides.

    Parameters
    ----------
    points, normals : (m, 3) float
        Centroids of panels and their normals.
    frames : (n, FRAME_SIZE) float
    density : (n, n_columns) float
    result : (m, n_columns) float
        Written: ``sum_j density_j n . int_j (x - y)/r^3 dS``.
    """
    for p in prange(len(points)):
        total = np.zeros(density.shape[1])
        for j in range(len(frames)):
            fx, fy, fz = panel_field(frames[j], points[p, 0], points[p, 1], points[p, 2])
            value = fx * normals[p, 0] + fy * normals[p, 1] + fz * normals[p, 2]
            for k in range(len(total)):
                total[k] += value * density[j, k]
        for k in range(len(total)):
            result[p, k] = total[k]
