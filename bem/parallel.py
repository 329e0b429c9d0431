"""Double surface integral of 1/r over two panels in parallel planes.

With the planes a height h apart the function F = R - h ln(R + h) has the planar Laplacian 1/R, and the divergence
theorem in both planes leaves

    I = - sum_{e, f} (m_e . m_f) int_e int_f F dl dl,

with the outward in-plane normals m; its inner integral is closed.
"""

import math

import numpy as np

from .frames import CORNER, DIRECTION, LENGTH, OUTWARD
from .jit import kernel
from .segments import (
    COARSE_NODES,
    COARSE_WEIGHTS,
    CROWDED_NODES,
    CROWDED_WEIGHTS,
    MAX_PIECES,
    edge_line,
    pieces,
)

__all__ = ["log_difference", "parallel_integral"]


@kernel
def log_difference(t0, r0, t1, r1, p2):
    """``ln(t1 + R1) - ln(t0 + R0)`` with R^2 = t^2 + p2, without cancellation for negative t."""
    if t0 >= 0.0:
        return math.log((t1 + r1) / max(t0 + r0, 1e-300))
    if t1 <= 0.0:
        return math.log((r0 - t0) / max(r1 - t1, 1e-300))
    return math.log((t1 + r1) * (r0 - t0) / max(p2, 1e-300))


@kernel
def _inner_of_f(q2, h, t0, t1):
    """Integral of F = R - h ln(R + h), R^2 = t^2 + q2 + h^2, over t from t0 to t1, m2."""
    p2 = q2 + h * h
    r0, r1 = math.sqrt(t0 * t0 + p2), math.sqrt(t1 * t1 + p2)
    log_ratio = log_difference(t0, r0, t1, r1, p2)
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
def parallel_integral(source, target, h, coarse=False):
    """Integral of 1/r over two panels in parallel planes a height h apart, m3; with `coarse` by fewer points."""
    nodes, weights = (COARSE_NODES, COARSE_WEIGHTS) if coarse else (CROWDED_NODES, CROWDED_WEIGHTS)
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
                for p in range(len(nodes)):
                    s = breaks[b] + piece * nodes[p]
                    rx = source[c] + s * source[d] - target[cj]
                    ry = source[c + 1] + s * source[d + 1] - target[cj + 1]
                    rz = source[c + 2] + s * source[d + 2] - target[cj + 2]
                    t = rx * target[dj] + ry * target[dj + 1] + rz * target[dj + 2]
                    q = rx * target[oj] + ry * target[oj + 1] + rz * target[oj + 2]
                    part += weights[p] * _inner_of_f(q * q, h, -t, target[LENGTH + j] - t)
                total -= weight * part * piece
    return total
