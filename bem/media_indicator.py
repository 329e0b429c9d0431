"""Two-level estimate with media: residuals of the state and of its adjoint against the functions of a split.

A new function psi of the trial space adds to entry (i, j)

    E_ij(psi) = left_i(psi) right_j(psi),   right_j = r_j(psi) / norm,   left_i = r*_i(psi) / norm,

with the residual r of the state, r* of the adjoint, and norm^2 the system's diagonal at psi: the energy of psi on
conductors, (e+ + e-)/2 times its square integral on interfaces. In one medium left and right are equal up to its
permittivity, and this is :mod:`daraf.bem.indicator`.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .bisection import SPLIT_U, SPLIT_V, children
from .field import polygon_field
from .flux import middle_flux
from .frames import AREA, CENTROID, NORMAL, RADIUS, panel_frames
from .images import Images, PlacedImages
from .indicator import _quad_gains, _triangle_gains, child_potentials
from .jit import kernel, parallel_kernel, prange
from .load_columns import LoadColumns
from .media import PanelMedia
from .panels import Panels
from .polygon import polygon_distance

__all__ = ["MediaGains", "child_fluxes", "media_gains"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
Array = NDArray[Any]

#: Centre distance over the sum of the radii of panel and source, beyond which one point on each is enough.
_PART_FAR = 6.0


@kernel
def _one_point(target, source):
    x, y = target[CENTROID] - source[CENTROID], target[CENTROID + 1] - source[CENTROID + 1]
    z = target[CENTROID + 2] - source[CENTROID + 2]
    r2 = x * x + y * y + z * z
    normal = x * target[NORMAL] + y * target[NORMAL + 1] + z * target[NORMAL + 2]
    return target[AREA] * source[AREA] * normal / (r2 * math.sqrt(r2))


@kernel
def _part_flux(target, source, ratio2):
    """Flux of a panel (or part) through another, to about 1e-2 of its variation, m2."""
    if ratio2 > _PART_FAR * _PART_FAR:
        return _one_point(target, source)
    small, large, sign = source, target, -1.0
    if source[RADIUS] > target[RADIUS]:
        small, large, sign = target, source, 1.0
    x, y, z = small[CENTROID], small[CENTROID + 1], small[CENTROID + 2]
    distance = polygon_distance(large, x, y, z)
    if distance > 3.0 * small[RADIUS]:
        fx, fy, fz = polygon_field(large, x, y, z)
        return sign * small[AREA] * (fx * target[NORMAL] + fy * target[NORMAL + 1] + fz * target[NORMAL + 2])
    if distance > 1.2 * small[RADIUS]:
        return middle_flux(target, source, 2)
    if distance > 0.6 * small[RADIUS]:
        return middle_flux(target, source, 3)
    return middle_flux(target, source, 5)


@parallel_kernel
def child_fluxes(parts, frames, columns, crossed, through, onto, first, last):
    """Fluxes through the parts of panels, and of the parts through all panels, for `first` <= p < `last`.

    Parameters
    ----------
    parts : (n, 4, FRAME_SIZE) float
    frames : (n, FRAME_SIZE) float
    columns : (n, m1 + m2) float
        Charge densities of the sources, then weights of the targets.
    crossed : (n,) bool
        Panels whose fluxes count.
    through : (n, 4, m1) float
        Written for crossed panels: ``sum_j density_j Phi(part, j)``.
    onto : (n, 4, m2) float
        Written: ``sum_k weight_k Phi(k, part)`` over crossed panels k.
    """
    m = through.shape[2]
    for p in prange(first, last):
        through[p] = 0.0
        onto[p] = 0.0
        for j in range(len(frames)):
            if j == p or not (crossed[p] or crossed[j]):
                continue
            x = frames[p, CENTROID] - frames[j, CENTROID]
            y = frames[p, CENTROID + 1] - frames[j, CENTROID + 1]
            z = frames[p, CENTROID + 2] - frames[j, CENTROID + 2]
            radii = frames[p, RADIUS] + frames[j, RADIUS]
            ratio2 = (x * x + y * y + z * z) / (radii * radii)
            for c in range(4):
                if parts[p, c, AREA] == 0.0:
                    continue
                if crossed[p]:
                    value = _part_flux(parts[p, c], frames[j], ratio2)
                    for k in range(m):
                        through[p, c, k] += value * columns[j, k]
                if crossed[j]:
                    value = _part_flux(frames[j], parts[p, c], ratio2)
                    for k in range(onto.shape[2]):
                        onto[p, c, k] += value * columns[j, m + k]


@dataclass(frozen=True, eq=False)
class MediaGains:
    """Two-level gains of the adjoint (left) and of the state (right), (n_panels, 2, n_conductors) each."""

    left: Array
    right: Array


def media_gains(
    panels: Panels,
    media: PanelMedia,
    solved: tuple[Array, Array],
    self_terms: FloatArray,
    received: Array | None,
    *,
    placed: PlacedImages | None = None,
    loads: LoadColumns | None = None,
    progress: Callable[[float, float], None] | None = None,
) -> MediaGains:
    """Two-level gains of every panel.

    Parameters
    ----------
    panels : Panels
    media : PanelMedia
    solved : two (n_panels, n_conductors) float or complex
        Bare total charge densities per volt, and the solution of the transposed system for the free charge of each
        conductor.
    self_terms : (n_panels,) float, m3
        Integral of 1/r over each conductor panel with itself, without images; not used on interfaces.
    received : (n_panels,) float or complex, m2, or None
        ``sum_k jump_k Phi(k, p) / (4 pi)`` of each panel p. By Gauss's law it is the same all over the panel: the
        rules here, which are coarse, are set right by it, since in the adjoint all but little cancels. None where
        a boundary is open toward an earthed plane.
    placed : PlacedImages, optional
    loads : LoadColumns, optional
        Of the last columns of state and adjoint.
    progress : callable, optional
        Told (panels done, panels in all).

    Returns
    -------
    MediaGains
        Bare: the sum over panels of ``left_i right_j`` estimates exact minus computed value of entry (i, j).
    """
    state, adjoint = solved
    centre = panels.corners.reshape(-1, 3).mean(axis=0)
    n = len(panels)
    parts = panel_frames(children(panels.corners - centre, panels.n_corners).reshape(-1, 4, 3), largest_rule=5)
    parts = parts.reshape(n, 4, -1)
    placed = placed or Images().place(panels)
    frames = panel_frames(placed.corners - centre, largest_rule=5)
    metal = ~media.interface
    ones = (panels.conductor[:, None] == np.arange(state.shape[1])) & metal[:, None]
    free = np.where(metal[:, None], adjoint, 0.0)
    # minus the potential of the adjoint state: known on conductors, the solution itself on interfaces
    opposed = np.where(metal[:, None], -1.0 * ones, adjoint)
    jump = (media.jump / (4.0 * np.pi))[:, None]
    weights = np.hstack([jump * opposed, jump])
    through, onto, of_state, of_free = _moments(parts, frames, media.crossed, (state, weights, free), placed, progress)
    areas = parts[:, :, AREA, None]
    even = onto[:, :, -1:] if received is None else areas * (received / panels.areas)[:, None, None]
    onto = onto[:, :, :-1] - opposed[:, None, :] * (onto[:, :, -1:] - even)
    local = media.mean[:, None, None] * areas
    right = np.where(
        metal[:, None, None],
        areas * ones[:, None, :] - of_state,
        -jump[:, None, :] * through - local * state[:, None, :],
    )
    left = -of_free - onto - local * opposed[:, None, :]
    if loads is not None:
        first = state.shape[1] - loads.potential.shape[2]
        right[:, :, first:] -= np.where(metal[:, None, None], loads.potential, jump[:, None, :] * loads.flux)
        left[:, :, first:] -= loads.weight
    # the energy of a function is that of its own charge, as its medium weakens it
    direct = np.sqrt(placed.direct)[:, None, None]
    return MediaGains(
        _gains(panels, parts, left, media, self_terms, 1.0 / media.mean) / direct,
        _gains(panels, parts, right, media, self_terms) / direct,
    )


def _moments(
    parts: FloatArray,
    frames: FloatArray,
    crossed: BoolArray,
    columns: tuple[Array, Array, Array],
    placed: PlacedImages,
    progress: Callable[[float, float], None] | None,
) -> tuple[Array, Array, Array, Array]:
    """Fluxes through and of the parts, and potentials of state and free charge on them, (n, 4, n_conductors)."""
    lossy = any(np.iscomplexobj(column) for column in columns)
    state, weights, free = (_real_columns(column, lossy) for column in columns)
    n, m = state.shape
    through, onto = np.zeros((n, 4, m)), np.zeros((n, 4, weights.shape[1]))
    n_sides = placed.n_sides
    potentials = np.empty((n, 4, 2 * m * n_sides))
    of_side = [placed.of_source(side)[:, None] for side in range(n_sides)]
    copies = placed.factors.shape[0]
    both = np.tile(np.hstack([state, free]), (copies, 1))
    density = np.ascontiguousarray(np.hstack([factor * both for factor in of_side]))
    pairs = np.ascontiguousarray(of_side[0] * np.tile(np.hstack([state, weights]), (copies, 1)))
    counted = np.tile(crossed, copies)
    block = max(8, 200_000 // len(frames))
    for first in range(0, n, block):
        last = min(n, first + block)
        rows = slice(first, last)
        child_potentials(parts[rows], frames[rows], frames, density, potentials[rows])
        if crossed.any():
            child_fluxes(parts, frames, pairs, counted, through, onto, first, last)
        if progress is not None:
            progress(last, n)
    seen = potentials.reshape(n, 4, n_sides, 2 * m)[np.arange(n), :, placed.side]
    found = (through, onto, seen[:, :, :m], seen[:, :, m:])
    return tuple(_joined(values, lossy) for values in found)  # type: ignore[return-value]


def _joined(values: FloatArray, lossy: bool) -> Array:
    if not lossy:
        return values
    half = values.shape[2] // 2
    return np.asarray(values[:, :, :half] + 1j * values[:, :, half:])


def _real_columns(column: Array, lossy: bool) -> FloatArray:
    return np.asarray(np.hstack([column.real, column.imag]) if lossy else column.real, dtype=np.float64)


def _gains(
    panels: Panels,
    parts: FloatArray,
    residual: Array,
    media: PanelMedia,
    self_terms: FloatArray,
    factor: Array | None = None,
) -> Array:
    """Residuals against the normed functions of the splits; on interfaces times `factor`."""
    gains = np.zeros((len(panels), 2, residual.shape[2]), dtype=residual.dtype)
    quads = panels.n_corners == 4
    rows = np.flatnonzero(quads & ~media.interface)
    _quad_gains(panels.corners[rows], residual[rows], self_terms[rows], gains, rows)
    rows = np.flatnonzero(~quads & ~media.interface)
    _triangle_gains(parts[rows], residual[rows], gains, rows)
    _flat_gains(parts, residual, gains, np.flatnonzero(media.interface), quads)
    if factor is not None:
        gains[media.interface] *= factor[media.interface][:, None, None]
    return gains


def _flat_gains(parts: FloatArray, residual: Array, gains: Array, rows: NDArray[np.int64], quads: BoolArray) -> None:
    """Gains in the square integral: functions constant on the parts, without mean, of unit norm."""
    areas = parts[rows][:, :, AREA]
    whole = areas.sum(axis=1)
    of_whole = residual[rows].sum(axis=1)
    for slot, direction in enumerate((SPLIT_U, SPLIT_V)):
        pair = (0, 1) if direction == SPLIT_U else (0, 2)
        chosen = quads[rows]
        first = areas[:, pair[0]] + areas[:, pair[1]]
        norm2 = first * (1.0 - first / whole)
        part = residual[rows][:, pair[0]] + residual[rows][:, pair[1]]
        value = (part - (first / whole)[:, None] * of_whole) / np.sqrt(np.where(chosen, norm2, 1.0))[:, None]
        gains[rows[chosen], slot] = value[chosen]
    chosen = ~quads[rows]
    areas, whole, of_whole, part = areas[chosen], whole[chosen], of_whole[chosen], residual[rows[chosen]]
    gram = np.zeros((len(areas), 2, 2))
    gram[:, [0, 1], [0, 1]] = areas[:, :2]
    gram -= areas[:, :2, None] * areas[:, None, :2] / whole[:, None, None]
    reduced = part[:, :2] - (areas[:, :2] / whole[:, None])[:, :, None] * of_whole[:, None, :]
    gains[rows[chosen]] = np.linalg.solve(np.linalg.cholesky(gram), reduced)
