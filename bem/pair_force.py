"""Coulomb force and torque between two uniformly charged flat panels, the rule chosen by their distance.

All functions return ``F = int_i int_j (x - y)/r^3`` and ``T = int_i int_j x cross (x - y)/r^3`` about the origin of
the coordinates, x on the first panel, y on the second: multiplied by both densities over 4 pi eps they are what
the first panel feels. Both change sign when the panels change places, so that Newton's third law holds as far as
the sums are taken pair by pair.

| pair | rule |
| --- | --- |
| far | product of Gauss rules on both panels |
| middle | closed-form field of the larger panel at Gauss points of the smaller one |
| close | integrals along the edges, :mod:`daraf.bem.close_force` |
"""

import math

from .close_force import close_force, turned
from .field import polygon_field
from .frames import POINTS
from .jit import REORDER, kernel, parallel_kernel, prange
from .pair_rule import pair_rule

__all__ = ["far_force", "interaction_rows", "middle_force", "pair_force"]

#: Limits of :func:`daraf.bem.pair_rule.pair_rule`.
_FAR, _MIDDLE = (15.0, 4.0, 2.6), (5.5, 2.8, 1.9)


@kernel(fastmath=REORDER)
def far_force(source, target, n):
    """Force and torque by n x n Gauss points on both of two well separated panels.

    Parameters
    ----------
    source, target : (FRAME_SIZE,) float
    n : int
        From 2 to 5.

    Returns
    -------
    fx, fy, fz : float, m2
    tx, ty, tz : float, m3
    """
    s, t, count = POINTS[n], POINTS[n], n * n
    fx, fy, fz, tx, ty, tz = 0.0, 0.0, 0.0, 0.0, 0.0, 0.0
    for i in range(count):
        px, py, pz = source[s + i], source[s + count + i], source[s + 2 * count + i]
        gx, gy, gz = 0.0, 0.0, 0.0
        for j in range(count):
            x, y, z = px - target[t + j], py - target[t + count + j], pz - target[t + 2 * count + j]
            r2 = x * x + y * y + z * z
            weight = target[t + 3 * count + j] / (r2 * math.sqrt(r2))
            gx += weight * x
            gy += weight * y
            gz += weight * z
        weight = source[s + 3 * count + i]
        gx, gy, gz = weight * gx, weight * gy, weight * gz
        fx, fy, fz = fx + gx, fy + gy, fz + gz
        tx, ty, tz = tx + py * gz - pz * gy, ty + pz * gx - px * gz, tz + px * gy - py * gx
    return fx, fy, fz, tx, ty, tz


@kernel
def middle_force(outer, inner, n):
    """Force and torque on `outer`: closed-form field of `inner` at its n x n Gauss points; as `far_force`."""
    s, count = POINTS[n], n * n
    fx, fy, fz, tx, ty, tz = 0.0, 0.0, 0.0, 0.0, 0.0, 0.0
    for i in range(count):
        x, y, z = outer[s + i], outer[s + count + i], outer[s + 2 * count + i]
        weight = outer[s + 3 * count + i]
        gx, gy, gz = polygon_field(inner, x, y, z)
        gx, gy, gz = weight * gx, weight * gy, weight * gz
        fx, fy, fz = fx + gx, fy + gy, fz + gz
        tx, ty, tz = tx + y * gz - z * gy, ty + z * gx - x * gz, tz + x * gy - y * gx
    return fx, fy, fz, tx, ty, tz


@kernel
def pair_force(source, target):
    """Force and torque on `source` by `target`, the rule chosen by their distance.

    Parameters
    ----------
    source, target : (FRAME_SIZE,) float
        Rows of :func:`daraf.bem.frames.panel_frames`; the panels must not touch.

    Returns
    -------
    fx, fy, fz : float, m2
    tx, ty, tz : float, m3
        About the origin of the coordinates.
    """
    rule, swapped = pair_rule(source, target, _FAR, _MIDDLE)
    if rule > 0:
        return far_force(source, target, rule)
    outer, inner = (target, source) if swapped else (source, target)
    six = middle_force(outer, inner, -rule) if rule < 0 else close_force(outer, inner)
    return turned(six) if swapped else six


@parallel_kernel
def interaction_rows(frames, conductor, density, rows, first, last):
    """Force and torque on each panel `first` <= i < `last` by the panels j < i of other conductors.

    Parameters
    ----------
    frames : (n, FRAME_SIZE) float
    conductor : (n,) int
    density : (n, n_columns) float
        Several distributions of charge at once.
    rows : (last - first, n_conductors, n_columns, 6) float
        Written: sums over the panels of each other conductor, ``density_i density_j (F, T)``.
    first, last : int
    """
    n_columns = density.shape[1]
    for i in prange(first, last):
        row = rows[i - first]
        row[:] = 0.0
        for j in range(i):
            if conductor[j] == conductor[i]:
                continue
            fx, fy, fz, tx, ty, tz = pair_force(frames[i], frames[j])
            for k in range(n_columns):
                weight = density[i, k] * density[j, k]
                row[conductor[j], k, 0] += weight * fx
                row[conductor[j], k, 1] += weight * fy
                row[conductor[j], k, 2] += weight * fz
                row[conductor[j], k, 3] += weight * tx
                row[conductor[j], k, 4] += weight * ty
                row[conductor[j], k, 5] += weight * tz
