"""Two-level residual indicator: what splitting each panel would add to the capacitance matrix.

The trial space is enriched panel by panel with the functions that its split would add. With the residual
``r_i`` of the solution for conductor i at 1 V and a new function psi, made orthogonal in the energy product to
the panel's constant, ``r_i(psi) r_j(psi) / a(psi, psi)`` is the gain of entry (i, j) from psi alone; the sum
over all panels estimates exact minus Galerkin value, signed, and its diagonal is never negative
(Mund, Stephan and Weisse, Computing 60 (1998) 243, for the energy norm; the product form is its polarisation).
"""

import math
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from .bisection import SPLIT_U, SPLIT_V, children, halves
from .frames import AREA, CENTROID, POINTS, RADIUS, panel_frames
from .jit import kernel, parallel_kernel, prange
from .near import close_pair_integral, self_integral
from .pairs import middle_integral
from .panels import Panels
from .polygon import polygon_distance, polygon_potential

__all__ = [
    "PANELS_AT_ONCE",
    "PartPotentials",
    "child_potentials",
    "direct_part_potentials",
    "part_integral",
    "self_integrals",
    "two_level_indicator",
]

FloatArray = NDArray[np.float64]
PartPotentials = Callable[[FloatArray, NDArray[np.int64]], FloatArray]

#: Panels whose parts are packed at once.
PANELS_AT_ONCE = 4_000
#: Pairs of panels per call of a kernel.
_PAIRS_AT_ONCE = 400_000

#: Centre distance over the sum of the radii of panel and source, beyond which one point on the part and one on
#: the source, or two by two on the source, are enough.
_PART_FAR, _PART_FAR_2 = 6.0, 1.5


@parallel_kernel
def child_potentials(parts, wholes, frames, density, moments):
    """Integrals of the potential of all panels over the parts of some of them.

    Parameters
    ----------
    parts : (m, 4, FRAME_SIZE) float
        Parts of each panel; one without area is passed over.
    wholes : (m, FRAME_SIZE) float
        Those panels.
    frames : (n, FRAME_SIZE) float
        All panels.
    density : (n, n_conductors) float
        Bare charge densities.
    moments : (m, 4, n_conductors) float
        Written: ``sum_j density_j int_part int_j dS dS / r``.

    Notes
    -----
    The rules are coarser than in the matrix: 1e-2 of a moment's *variation* over the panel is enough.
    """
    n_columns = density.shape[1]
    for p in prange(len(parts)):
        sums = np.zeros((4, n_columns))
        values = np.empty(4)
        for j in range(len(frames)):
            x = wholes[p, CENTROID] - frames[j, CENTROID]
            y = wholes[p, CENTROID + 1] - frames[j, CENTROID + 1]
            z = wholes[p, CENTROID + 2] - frames[j, CENTROID + 2]
            radii = wholes[p, RADIUS] + frames[j, RADIUS]
            ratio2 = (x * x + y * y + z * z) / (radii * radii)
            for c in range(4):
                values[c] = part_integral(parts[p, c], frames[j], ratio2)
            for c in range(4):
                for k in range(n_columns):
                    sums[c, k] += values[c] * density[j, k]
        for c in range(4):
            for k in range(n_columns):
                moments[p, c, k] = sums[c, k]


@kernel
def part_integral(part, source, ratio2):
    """Integral of 1/r over a part of a panel and a source panel, to about 1e-2 of its variation.

    `ratio2` is the square of the distance of panel and source over the sum of their radii.
    """
    if part[AREA] == 0.0:
        return 0.0
    px, py, pz = part[CENTROID], part[CENTROID + 1], part[CENTROID + 2]
    if ratio2 > _PART_FAR * _PART_FAR:
        x, y, z = px - source[CENTROID], py - source[CENTROID + 1], pz - source[CENTROID + 2]
        return part[AREA] * source[AREA] / math.sqrt(x * x + y * y + z * z)
    if ratio2 > _PART_FAR_2 * _PART_FAR_2:
        total = 0.0
        s = POINTS[2]
        for i in range(4):
            x, y, z = px - source[s + i], py - source[s + 4 + i], pz - source[s + 8 + i]
            total += source[s + 12 + i] / math.sqrt(x * x + y * y + z * z)
        return part[AREA] * total
    outer, inner = (part, source) if part[RADIUS] <= source[RADIUS] else (source, part)
    distance = polygon_distance(inner, outer[CENTROID], outer[CENTROID + 1], outer[CENTROID + 2])
    if distance > 3.0 * outer[RADIUS]:
        x, y, z = outer[CENTROID], outer[CENTROID + 1], outer[CENTROID + 2]
        return outer[AREA] * polygon_potential(inner, x, y, z)
    if distance > 1.2 * outer[RADIUS]:
        return middle_integral(outer, inner, 2)
    if distance > 0.6 * outer[RADIUS]:
        return middle_integral(outer, inner, 3)
    return middle_integral(outer, inner, 4)


@parallel_kernel
def _self_integrals(frames, values):
    for p in prange(len(frames)):
        values[p] = self_integral(frames[p])


def self_integrals(corners: FloatArray) -> FloatArray:
    """Double integrals of 1/r of panels with themselves, m3.

    Parameters
    ----------
    corners : (n, 4, 3) float, m

    Returns
    -------
    (n,) float
    """
    values = np.empty(len(corners))
    _self_integrals(panel_frames(corners, largest_rule=0), values)
    return values


@parallel_kernel
def _thirds_gram(parts, gram):
    """Galerkin matrices of the three parts of each triangle, (n, 3, 3), to 1e-5."""
    for p in prange(len(parts)):
        for c in range(3):
            gram[p, c, c] = self_integral(parts[p, c], True)
            for d in range(c):
                gram[p, c, d] = close_pair_integral(parts[p, c], parts[p, d], True)
                gram[p, d, c] = gram[p, c, d]


def direct_part_potentials(panels: Panels, density: FloatArray) -> PartPotentials:
    """Potentials of parts by sums over all panels.

    Parameters
    ----------
    panels : Panels
    density : (n_panels, n_conductors) float
        Bare charge densities.

    Returns
    -------
    callable
        ``part_potentials(parts, rows)`` of :func:`two_level_indicator`.
    """
    frames = panel_frames(panels.corners, largest_rule=4)
    step = max(8, _PAIRS_AT_ONCE // len(frames))

    def part_potentials(parts: FloatArray, rows: NDArray[np.int64]) -> FloatArray:
        moments = np.empty((len(rows), parts.shape[1], density.shape[1]))
        for first in range(0, len(rows), step):
            here = slice(first, first + step)
            child_potentials(parts[here], frames[rows[here]], frames, density, moments[here])
        return moments

    return part_potentials


def two_level_indicator(
    panels: Panels,
    self_terms: FloatArray,
    potentials: FloatArray,
    part_potentials: PartPotentials,
    *,
    progress: Callable[[float, float], None] | None = None,
) -> FloatArray:
    """Two-level gains of every panel.

    Parameters
    ----------
    panels : Panels
    self_terms : (n_panels,) float, m3
        Diagonal of the Galerkin matrix.
    potentials : (n_panels, n_conductors) float
        The potential of each panel in each excitation.
    part_potentials : callable
        ``part_potentials(parts, rows)``: integrals of the solved potential, (k, 4, n_conductors) m3, over packed
        parts (k, 4, FRAME_SIZE) of the panels `rows`.
    progress : callable, optional
        Told (panels done, panels in all).

    Returns
    -------
    gains : (n_panels, 2, n_conductors) float
        ``r_i(psi) / sqrt(a(psi, psi))``, bare: for a quadrilateral of the split along u and along v, for a
        triangle of two orthonormal functions of its split in three. The sum over panels of
        ``gain_i gain_j`` estimates exact minus Galerkin value of entry (i, j).
    """
    n = len(panels)
    gains = np.zeros((n, 2, potentials.shape[1]))
    for first in range(0, n, PANELS_AT_ONCE):
        rows = np.arange(first, min(n, first + PANELS_AT_ONCE))
        corners, n_corners = panels.corners[rows], panels.n_corners[rows]
        # in the coordinates of the panels: the parts are compared with them
        parts = panel_frames(children(corners, n_corners).reshape(-1, 4, 3), largest_rule=4)
        parts = parts.reshape(len(rows), 4, -1)
        moments = part_potentials(parts, rows)
        residual = parts[:, :, AREA, None] * potentials[rows, None, :] - moments
        quads, triangles = np.flatnonzero(n_corners == 4), np.flatnonzero(n_corners == 3)
        here = np.zeros((len(rows), 2, potentials.shape[1]))
        _quad_gains(corners[quads], residual[quads], self_terms[rows[quads]], here, quads)
        _triangle_gains(parts[triangles], residual[triangles], here, triangles)
        gains[rows] = here
        if progress is not None:
            progress(rows[-1] + 1, n)
    return gains


def _quad_gains(
    corners: FloatArray, residual: FloatArray, whole: FloatArray, gains: FloatArray, chosen: NDArray[np.int64]
) -> None:
    if len(chosen) == 0:
        return
    sum_residual = residual.sum(axis=1)
    for slot, direction in enumerate((SPLIT_U, SPLIT_V)):
        pair = halves(corners, direction)
        first, second = self_integrals(pair[:, 0]), self_integrals(pair[:, 1])
        # a(first, whole) from a(whole, whole) = a(1, 1) + a(2, 2) + 2 a(1, 2)
        share = 0.5 * (first + whole - second) / whole
        norm2 = first - share**2 * whole
        half = residual[:, 0] + residual[:, 1] if direction == SPLIT_U else residual[:, 0] + residual[:, 2]
        gains[chosen, slot] = (half - share[:, None] * sum_residual) / np.sqrt(norm2)[:, None]


def _triangle_gains(parts: FloatArray, residual: FloatArray, gains: FloatArray, chosen: NDArray[np.int64]) -> None:
    if len(chosen) == 0:
        return
    gram = np.empty((len(chosen), 3, 3))
    _thirds_gram(np.ascontiguousarray(parts), gram)
    with_whole = gram.sum(axis=2)
    whole = with_whole.sum(axis=1)
    share = with_whole / whole[:, None]
    local = gram - share[:, :, None] * with_whole[:, None, :]
    reduced = residual[:, :3] - share[:, :, None] * residual[:, :3].sum(axis=1)[:, None, :]
    # two of the three functions span the space; orthonormal combinations by Cholesky
    root = np.linalg.cholesky(local[:, :2, :2])
    gains[chosen] = np.linalg.solve(root, reduced[:, :2])
