"""Matrices of conductors with dielectric interfaces: potentials, fluxes and the system made of them.

The integrals do not know the permittivities, so that one set serves every state and frequency.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .errors import InputError
from .flux import flux_rows
from .frames import panel_frames
from .images import Images, PlacedImages
from .jit import parallel_kernel, prange
from .media import PanelMedia
from .near import self_integral
from .pairs import pair_integral
from .panels import Panels

__all__ = ["MediaIntegrals", "free_charge_rows", "media_integrals", "self_terms", "system_matrix"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

#: Entries per call of a kernel: short enough for progress and Ctrl-C.
_ENTRIES = 200_000
#: Column sums of a closed boundary may differ from a multiple of 2 pi by this, per 2 pi: where moved facets
#: part by hairs these hide up to a tenth of what a panel sees next to it.
_CLOSED = 0.3


@parallel_kernel
def potential_rows(frames, rows, matrix, known, first, last):
    """Fill rows `first` <= r < `last`: potential of every panel's charge, integrated over panel ``rows[r]``.

    Parameters
    ----------
    frames : (n, FRAME_SIZE) float
    rows : (m,) int
        Target panels.
    matrix : (last - first, n) float, m3
    known : (3,) int
        The first ``known[0]`` rows are known already for the first ``known[1]`` of each ``known[2]`` panels.
    first, last : int
    """
    for r in prange(first, last):
        i = rows[r]
        for j in range(len(frames)):
            if r < known[0] and j % known[2] < known[1]:
                continue
            matrix[r - first, j] = self_integral(frames[i]) if i == j else pair_integral(frames[i], frames[j])


@parallel_kernel
def _self_rows(frames, values):
    for p in prange(len(frames)):
        values[p] = self_integral(frames[p])


def self_terms(corners: FloatArray) -> FloatArray:
    """Integral of 1/r over each panel with itself, without images, (n,) m3; corners (n, 4, 3) m."""
    values = np.empty(len(corners))
    _self_rows(panel_frames(corners, largest_rule=0), values)
    return values


@dataclass(frozen=True, eq=False)
class MediaIntegrals:
    """Integrals of one set of panels.

    Attributes
    ----------
    metal, crossed : (m,), (k,) int
        Panels of conductors, and panels with different permittivities on their two sides.
    potential : (m, n_panels) float, m3
        Row by row for `metal`.
    flux : (k, n_panels) float, m2
        Row by row for `crossed`.
    closed : bool
        Whether every medium's boundary is closed; false where one is open toward an earthed plane.
    """

    metal: IntArray
    crossed: IntArray
    potential: FloatArray
    flux: FloatArray
    closed: bool


def media_integrals(
    panels: Panels,
    media: PanelMedia,
    *,
    placed: PlacedImages | None = None,
    known: MediaIntegrals | None = None,
    kept: IntArray | None = None,
    progress: Callable[[float, float], None] | None = None,
) -> MediaIntegrals:
    """Integrals that the system needs.

    Parameters
    ----------
    panels : Panels
    media : PanelMedia
    placed : PlacedImages, optional
    known : MediaIntegrals, optional
        Of the pass before.
    kept : (m,) int, optional
        Panels of the pass before that are the first m panels now.
    progress : callable, optional
        Told (entries done, entries in all).

    Returns
    -------
    MediaIntegrals

    Raises
    ------
    InputError
        If the boundary of a medium is not closed.
    """
    placed = placed or Images().place(panels)
    frames = panel_frames(placed.corners - panels.corners.reshape(-1, 3).mean(axis=0))
    metal = np.flatnonzero(~media.interface)
    crossed = np.flatnonzero(media.crossed)
    done, total = 0.0, float((len(metal) + len(crossed)) * len(panels))

    def tick(entries: int) -> None:
        nonlocal done
        done += entries
        if progress is not None:
            progress(done, total)

    old = None if known is None or kept is None else (known.metal, known.potential, kept)
    potential = _filled(potential_rows, frames, metal, placed, old, tick)
    old = None if known is None or kept is None else (known.crossed, known.flux, kept)
    flux = _filled(flux_rows, frames, crossed, placed, old, tick)
    closed = _keep_gauss(flux, crossed, panels, media, may_be_open=bool((placed.factors < 0.0).any()))
    return MediaIntegrals(metal, crossed, potential, flux, closed)


def _filled(
    fill: Callable[..., None],
    frames: FloatArray,
    rows: IntArray,
    placed: PlacedImages,
    old: tuple[IntArray, FloatArray, IntArray] | None,
    tick: Callable[[int], None],
) -> FloatArray:
    """Rows of a matrix, taking over what the rows, matrix and kept panels of the pass before hold already."""
    n = len(placed.side)
    matrix = np.empty((len(rows), n))
    known = np.array([0, 0, n], dtype=np.int64)
    if old is not None and len(old[0]):
        old_rows, old_matrix, kept = old
        place = np.minimum(np.searchsorted(old_rows, kept), len(old_rows) - 1)
        taken = old_rows[place] == kept
        known[:2] = np.count_nonzero(taken), len(kept)
        matrix[: known[0], : known[1]] = old_matrix[np.ix_(place[taken], kept)]
    step = max(8, _ENTRIES // len(frames))
    for first in range(0, len(rows), step):
        last = min(len(rows), first + step)
        block = np.zeros((last - first, len(frames)))
        fill(frames, rows, block, known, first, last)
        folded = placed.folded(block, placed.side[rows[first:last]])
        here = max(0, min(int(known[0]), last) - first)
        matrix[first : first + here, known[1] :] = folded[:here, known[1] :]
        matrix[first + here : last] = folded[here:]
        tick(folded.size)
    return matrix


def _keep_gauss(flux: FloatArray, crossed: IntArray, panels: Panels, media: PanelMedia, *, may_be_open: bool) -> bool:
    """Make the fluxes through the boundary of every medium add up to 4 pi, 2 pi or 0 times the source's area.

    The least change, weighted by the size of the entries: what is missing goes where the rules are least exact and
    where moved facets part by hairs.
    """
    if not media.boundary:
        return True
    sign = np.array(media.boundary)[:, crossed].astype(np.float64)
    unit = 2.0 * np.pi * panels.areas
    turns = sign @ flux / unit
    off = np.abs(turns - np.round(turns)).max(axis=1)
    closed = not may_be_open or bool((off <= _CLOSED).all())
    if may_be_open:
        # flux leaves through the earthed plane: no law binds the rest of the boundary
        sign, turns = sign[off <= _CLOSED], turns[off <= _CLOSED]
        if len(sign) == 0:
            return closed
    missing = (np.round(turns) - turns) * unit
    worst = np.unravel_index(np.argmax(np.abs(turns - np.round(turns))), turns.shape)
    if abs(turns[worst] - np.round(turns[worst])) > _CLOSED:
        x, y, z = panels.centroids[worst[1]]
        raise InputError(
            f"the boundary of a medium is not closed: seen from ({x:.4g}, {y:.4g}, {z:.4g}) m it fills "
            f"{abs(turns[worst]):.3f} half spaces; close the surfaces or take out what crosses"
        )
    for j in range(flux.shape[1]):
        weighted = sign * np.abs(flux[:, j])
        change = np.linalg.lstsq(weighted @ sign.T, missing[:, j], rcond=1e-10)[0]
        flux[:, j] += change @ weighted
    return closed


def free_charge_rows(integrals: MediaIntegrals, media: PanelMedia, panels: Panels) -> NDArray[Any]:
    """Free charge of the panels with a medium on either side, per unit of density, (k, n_panels) m2."""
    rows = integrals.crossed
    matrix = (media.jump[rows] / (4.0 * np.pi))[:, None] * integrals.flux
    matrix[np.arange(len(rows)), rows] += media.mean[rows] * panels.areas[rows]
    return np.asarray(matrix)


def system_matrix(
    integrals: MediaIntegrals, media: PanelMedia, panels: Panels
) -> tuple[NDArray[Any], FloatArray, NDArray[Any]]:
    """The system: potentials of conductor panels, free charges of interface panels, rows scaled.

    Returns
    -------
    matrix : (n_panels, n_panels) float or complex
    scale : (n_panels,) float
        Factor that each row was multiplied by.
    charge : (n_conductors, n_panels) float or complex
        Free charge of every conductor, per unit of density.
    """
    n = len(panels)
    free = free_charge_rows(integrals, media, panels)
    matrix = np.empty((n, n), dtype=free.dtype)
    matrix[integrals.metal] = integrals.potential
    between = media.interface[integrals.crossed]
    matrix[integrals.crossed[between]] = free[between]
    n_conductors = int(panels.conductor[integrals.metal].max(initial=-1)) + 1
    charge = np.zeros((n_conductors, n), dtype=free.dtype)
    plain = ~media.interface & ~media.crossed
    charge[panels.conductor[plain], np.flatnonzero(plain)] = (media.mean * panels.areas)[plain]
    mixed = ~between
    np.add.at(charge, panels.conductor[integrals.crossed[mixed]], free[mixed])
    scale = 1.0 / np.abs(np.diag(matrix))
    matrix *= scale[:, None]
    return matrix, scale, charge
