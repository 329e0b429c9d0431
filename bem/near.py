"""Double surface integrals of 1/r over close panels, reduced to integrals along their edges.

Two panels in planes that meet: with the origin o on both planes the integrand is homogeneous of degree -1 in
the four in-plane coordinates, and the divergence theorem over the product of the panels leaves

    I = 1/3 [ sum_{edges e of S} d_e int_e V_T dl + sum_{edges f of T} d_f int_f V_S dl ],

where d is the signed in-plane distance from o to the edge's line and V the closed-form potential of a panel
(the reduction of Lenoir and Salles, SIAM J. Sci. Comput. 34 (2012) A3057, stopped one step short of closed
form, since the last step cancels for slivers). It serves a panel with itself, panels that share an edge, part
of an edge or a corner, and close panels that do not touch; parallel planes have their own formula in
:mod:`daraf.bem.parallel`. The remaining integral along an edge is cut up by :mod:`daraf.bem.segments`.
"""

import math

import numpy as np

from .frames import CENTROID, CORNER, DIRECTION, LENGTH, NORMAL, OUTWARD, RADIUS
from .gauss import GAUSS_NODES, GAUSS_WEIGHTS
from .jit import kernel
from .parallel import parallel_integral
from .polygon import polygon_potential
from .segments import (
    COARSE_NODES,
    COARSE_WEIGHTS,
    CROWDED_NODES,
    CROWDED_WEIGHTS,
    MAX_PIECES,
    NARROW,
    PARALLEL,
    across,
    edge_line,
    height_over,
    narrow_rule,
    narrowness,
    pieces,
)

__all__ = ["close_pair_integral", "common_corner", "self_integral"]

#: Parallel planes no higher apart than this share of the smaller radius are one.
_COPLANAR = 1e-10
#: An origin further off than this many radii wants a finer rule.
_FAR_ORIGIN = 30.0


@kernel
def _potential_along(line, other, w0, w1, parts, coarse):
    """Integral of (potential of panel `other`) x (weight, linear from w0 to w1) along a segment.

    Each of its pieces is cut into `parts` equal ones; with `coarse` each takes the rule of fewer points.
    """
    nodes, weights = (COARSE_NODES, COARSE_WEIGHTS) if coarse else (CROWDED_NODES, CROWDED_WEIGHTS)
    breaks = np.empty(MAX_PIECES)
    n = pieces(breaks, line, other)
    slope = (w1 - w0) / line[6]
    total = 0.0
    for b in range((n - 1) * parts):
        k = b // parts
        piece = (breaks[k + 1] - breaks[k]) / parts
        start = breaks[k] + (b - k * parts) * piece
        part = 0.0
        for q in range(len(nodes)):
            s = start + piece * nodes[q]
            value = polygon_potential(other, line[0] + s * line[3], line[1] + s * line[4], line[2] + s * line[5])
            part += weights[q] * (w0 + slope * s) * value
        total += part * piece
    return total


@kernel
def _edges_about(panel, other, ox, oy, oz, parts, coarse):
    """Sum over the edges of `panel` of (distance from the origin) times (potential along the edge), m3."""
    line = np.empty(7)
    total = 0.0
    for k in range(4):
        if panel[LENGTH + k] == 0.0:
            continue
        c, o = CORNER + 3 * k, OUTWARD + 3 * k
        distance = (panel[c] - ox) * panel[o] + (panel[c + 1] - oy) * panel[o + 1] + (panel[c + 2] - oz) * panel[o + 2]
        if abs(distance) > 1e-14 * panel[RADIUS]:
            edge_line(line, panel, k)
            total += distance * _potential_along(line, other, 1.0, 1.0, parts, coarse)
    return total


@kernel
def self_integral(frame, coarse=False):
    """Integral of 1/r over a panel with itself, m3: all terms are positive, slivers lose nothing.

    With `coarse` 2e-6 of it may be left out.
    """
    x, y, z = frame[CENTROID], frame[CENTROID + 1], frame[CENTROID + 2]
    return 2.0 / 3.0 * _edges_about(frame, frame, x, y, z, 1, coarse)


@kernel
def _narrow_integral(narrow, other, side, n, coarse):
    """Gauss points across a narrow panel, the potential of the other one along each line, m3."""
    line = np.empty(7)
    total = 0.0
    for q in range(n):
        w0, w1 = across(narrow, side, GAUSS_NODES[n, q], line)
        if line[6] > 0.0:
            total += GAUSS_WEIGHTS[n, q] * _potential_along(line, other, w0, w1, 1, coarse)
    return total


@kernel
def close_pair_integral(source, target, coarse=False):
    """Integral of 1/r over two different panels that touch or nearly touch.

    Parameters
    ----------
    source, target : (FRAME_SIZE,) float
        Rows of :func:`daraf.bem.frames.panel_frames`; where both serve, the lines run along `source`, so
        that should be the smaller one.
    coarse : bool
        Whether 1e-6 of the integral in the root mean square, 1e-5 at worst, may be left out.

    Returns
    -------
    float, m3
        Relative error below 1e-7 for touching panels, 1e-6 at worst for close ones.
    """
    nx, ny, nz = source[NORMAL], source[NORMAL + 1], source[NORMAL + 2]
    mx, my, mz = target[NORMAL], target[NORMAL + 1], target[NORMAL + 2]
    ox, oy, oz, touching = common_corner(source, target, 1e-12 * min(source[RADIUS], target[RADIUS]))
    parts = 1
    if not touching:
        line = np.empty(7)
        ratio, side = narrowness(source, target, line)
        if ratio > NARROW:
            return _narrow_integral(source, target, side, narrow_rule(ratio), coarse)
        ratio, side = narrowness(target, source, line)
        if ratio > NARROW:
            return _narrow_integral(target, source, side, narrow_rule(ratio), coarse)
        # cross product of the normals: direction of the line where the planes meet, length the sine
        lx, ly, lz = ny * mz - nz * my, nz * mx - nx * mz, nx * my - ny * mx
        sin2 = lx * lx + ly * ly + lz * lz
        share = source[RADIUS] ** 2 / (source[RADIUS] ** 2 + target[RADIUS] ** 2)
        height = share * height_over(source, target) + (1.0 - share) * height_over(target, source)
        if sin2 < PARALLEL**2 and height > _COPLANAR * min(source[RADIUS], target[RADIUS]):
            return parallel_integral(source, target, height, coarse)
        # the origin starts half-way between the panels and is moved onto both planes
        ox = 0.5 * (source[CENTROID] + target[CENTROID])
        oy = 0.5 * (source[CENTROID + 1] + target[CENTROID + 1])
        oz = 0.5 * (source[CENTROID + 2] + target[CENTROID + 2])
        if sin2 < PARALLEL**2:
            # in one plane any origin will do
            total = _edges_about(source, target, ox, oy, oz, 1, coarse)
            return (total + _edges_about(target, source, ox, oy, oz, 1, coarse)) / 3.0
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
    total = _edges_about(source, target, ox, oy, oz, parts, coarse)
    return (total + _edges_about(target, source, ox, oy, oz, parts, coarse)) / 3.0


@kernel
def common_corner(source, target, tolerance):
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
