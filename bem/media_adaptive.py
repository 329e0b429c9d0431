"""One pass with media: integrals, state and adjoint of every set of permittivities, estimate, and the next plan.

As :mod:`daraf.bem.adaptive`, with two gains per function where the symmetric system has one: the extrapolated value
adds ``left_i right_j`` and need not rise. All sets of permittivities (frequencies) share panels and integrals.
"""

import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lu_factor, lu_solve

from .adaptive import REFINED_SHARE, sides_by_direction
from .bisection import SPLIT_U, SPLIT_V, split_panels, split_sides
from .extrapolation import GREATEST_DECAY, SMOOTH_DECAY, decay_of_parts, realised_share
from .given_charge import Load
from .images import Images
from .load_columns import LoadColumns, load_columns
from .media import Media, PanelMedia
from .media_extrapolation import DOUBTFUL_DECAY, feared_media_gains, weighted_gains
from .media_indicator import MediaGains, media_gains
from .media_matrix import MediaIntegrals, media_integrals, self_terms, system_matrix
from .panels import Panels
from .refinement import choose_splits
from .solution import Notice

__all__ = ["MediaPass", "MediaPlan", "media_pass", "media_worth", "plan_next_media"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]
Array = NDArray[Any]


@dataclass(frozen=True, eq=False)
class MediaPass:
    """What one pass found; bare values, multiply by 4 pi epsilon_0 for farads. S states, n conductors.

    Attributes
    ----------
    panels : Panels
    integrals : MediaIntegrals or None
    state, adjoint : (S, n_panels, n) float or complex
        Total charge density of each conductor at 1 V, and the adjoint: on conductors the free charge density.
    value, limit : (S, n, n) float or complex, m
        Solved and extrapolated Maxwell matrix.
    defect : (S, n, n) float, m
        Half the difference between an entry and its mirror image.
    gains, feared : list of MediaGains
        One for each state; feared: or what a panel may hide by symmetry where that is more.
    symmetric, sides, refined, decay, realised, drift
        As in :class:`daraf.bem.adaptive.PassResult`.
    change : (S, n, n) or None
        ``limit`` less that of the pass before.
    seconds : dict of str to float
    notices : list of Notice
    """

    panels: Panels
    integrals: MediaIntegrals | None
    state: Array
    adjoint: Array
    value: Array
    limit: Array
    defect: FloatArray
    gains: list[MediaGains]
    feared: list[MediaGains]
    symmetric: BoolArray
    sides: FloatArray
    refined: IntArray
    decay: FloatArray
    realised: float
    drift: float
    change: Array | None
    seconds: dict[str, float]
    notices: list[Notice] = field(default_factory=list)


@dataclass(frozen=True, eq=False)
class MediaPlan:
    """Panels for the next pass; attributes as in :class:`daraf.bem.adaptive.Plan`."""

    panels: Panels
    symmetric: BoolArray
    sides: FloatArray
    refined: IntArray
    kept: IntArray | None = None
    parent: IntArray | None = None
    was_split: BoolArray | None = None
    worth: FloatArray | None = None
    weights: FloatArray | None = None
    before: MediaPass | None = None


def media_pass(
    plan: MediaPlan,
    media: Media,
    images: Images,
    report: Callable[[str, float, float], None],
    loads: Sequence[Load] = (),
) -> MediaPass:
    """Assemble, solve state and adjoint, and estimate.

    Parameters
    ----------
    plan : MediaPlan
    media : Media
    images : Images
    report : callable
        Told (stage, done, total).
    loads : sequence of Load
        They follow the conductors as rows and columns of the matrix.
    """
    panels, before = plan.panels, plan.before
    seconds: dict[str, float] = {}
    start = time.perf_counter()
    placed = images.place(panels)
    filled = [media.at(panels, s) for s in range(media.n_states)]
    integrals = media_integrals(
        panels,
        filled[0],
        placed=placed,
        known=None if before is None else before.integrals,
        kept=plan.kept,
        progress=lambda done, total: report("matrix", done, total),
    )
    seconds["matrix"] = time.perf_counter() - start
    start = time.perf_counter()
    columns = load_columns(loads, panels, media, images) if loads else None
    solved = []
    for s, at in enumerate(filled):
        report("factorisation", float(s), float(media.n_states))
        solved.append(_solve(integrals, at, panels, media.n_conductors, columns[s] if columns else None))
    state, adjoint, value = (np.array(column) for column in zip(*solved, strict=True))
    mirrored = value.transpose(0, 2, 1)
    defect, value = 0.5 * np.abs(value - mirrored), 0.5 * (value + mirrored)
    seconds["factorisation"] = time.perf_counter() - start
    start = time.perf_counter()
    gains, feared = [], []
    own, direct = np.zeros(len(panels)), placed.direct
    own[integrals.metal] = self_terms(panels.corners[integrals.metal])
    for s, at in enumerate(filled):
        received = (at.jump[integrals.crossed] / (4.0 * np.pi)) @ integrals.flux if integrals.closed else None
        gains.append(
            media_gains(
                panels,
                at,
                (state[s], adjoint[s]),
                own,
                received,
                placed=placed,
                loads=columns[s] if columns else None,
                progress=lambda done, total: report("estimate", done, total),
            )
        )
        pair = (state[s], adjoint[s])
        feared.append(feared_media_gains(panels, at, gains[s], pair, direct * own, plan.symmetric, plan.sides))
    decay, realised = _history(plan, value, gains)
    weighted = [weighted_gains(g, np.minimum(decay, GREATEST_DECAY), realised) for g in gains]
    limit = value + np.array([_symmetric(left.T @ right) for left, right in weighted])
    seconds["estimate"] = time.perf_counter() - start
    return MediaPass(
        panels=panels,
        integrals=integrals,
        state=state,
        adjoint=adjoint,
        value=value,
        limit=limit,
        defect=defect,
        gains=gains,
        feared=feared,
        symmetric=plan.symmetric,
        sides=plan.sides,
        refined=plan.refined,
        decay=decay,
        realised=realised,
        drift=0.0 if before is None else realised - before.realised,
        change=None if before is None else limit - before.limit,
        seconds=seconds,
    )


def _symmetric(matrix: Array) -> Array:
    return np.asarray(0.5 * (matrix + matrix.T))


def _solve(
    integrals: MediaIntegrals, media: PanelMedia, panels: Panels, n_conductors: int, loads: LoadColumns | None
) -> tuple[Array, ...]:
    """State, adjoint and extended Maxwell matrix, by LU factorisation."""
    matrix, scale, charge = system_matrix(integrals, media, panels)
    held = (panels.conductor[:, None] == np.arange(n_conductors)) & ~media.interface[:, None]
    wanted = panels.areas[:, None] * held
    direct = np.zeros((n_conductors, 0))
    if loads is not None:
        flux = (media.jump / (4.0 * np.pi))[:, None] * loads.flux.sum(axis=1)
        wanted = np.hstack([wanted, np.where(media.interface[:, None], -flux, -loads.potential.sum(axis=1))])
        charge = np.vstack([charge, -loads.weight.sum(axis=1).T])
        direct = held.T @ flux
    factor = lu_factor(matrix, overwrite_a=True, check_finite=False)
    state = lu_solve(factor, scale[:, None] * wanted, check_finite=False)
    adjoint = scale[:, None] * lu_solve(factor, charge.T, trans=1, check_finite=False)
    value = charge @ state
    value[:n_conductors, n_conductors:] += direct
    return np.ascontiguousarray(state), np.ascontiguousarray(adjoint), value


def media_worth(gains: list[MediaGains], weights: FloatArray) -> FloatArray:
    """Worth of each gain, (n_panels, 2): its products over all entries and states, weighted by `weights` (S, n, n)."""
    worth = np.zeros(gains[0].left.shape[:2])
    for g, weight in zip(gains, weights, strict=True):
        worth += np.einsum("pdi,pdi->pd", np.abs(g.left) @ weight, np.abs(g.right))
    return worth


def _history(plan: MediaPlan, value: Array, gains: list[MediaGains]) -> tuple[FloatArray, float]:
    """Decay of each panel's gains and the realised share of what was promised."""
    before = plan.before
    if before is None or plan.parent is None or plan.was_split is None or plan.worth is None or plan.weights is None:
        start = sides_by_direction(plan.sides)
        start[plan.panels.n_corners == 3] = SMOOTH_DECAY
        return start, 1.0
    now = media_worth(gains, plan.weights)
    decay = decay_of_parts(plan.parent, plan.was_split, plan.worth, now, before.decay, greatest=DOUBTFUL_DECAY)
    promised, gained = [], []
    for s, g in enumerate(before.gains):
        diagonal = np.maximum(np.abs(np.diag(value[s])), np.finfo(float).tiny)
        promised.append(np.einsum("pdi,pdi,pd->i", g.left, g.right, plan.was_split).real / diagonal)
        gained.append((np.diag(value[s]) - np.diag(before.value[s])).real / diagonal)
    return decay, realised_share(np.concatenate(gained), np.concatenate(promised))


def plan_next_media(result: MediaPass, weights: FloatArray) -> MediaPlan:
    """Split the panels that hold most of what is missing.

    Parameters
    ----------
    result : MediaPass
    weights : (S, n, n) float
        How much each entry matters.

    Returns
    -------
    MediaPlan
    """
    worth = media_worth(result.gains, weights)
    split = choose_splits(media_worth(result.feared, weights))
    panels, parent = split_panels(result.panels, split)
    sides = split_sides(result.panels, split, result.sides, SMOOTH_DECAY)
    kept = parent[: int(np.count_nonzero(split == 0))]
    was_split = np.stack([(split & SPLIT_U) > 0, (split & SPLIT_V) > 0], axis=1)
    was_split[result.panels.n_corners == 3] = (split > 0)[result.panels.n_corners == 3, None]
    symmetric = (result.symmetric & ~was_split)[parent]
    body, measured = result.panels.body, worth.sum(axis=1)
    of_body = np.bincount(body, measured, len(result.refined))
    was = np.bincount(body, np.where(split > 0, measured, 0.0), len(result.refined))
    return MediaPlan(
        panels,
        symmetric,
        sides,
        result.refined + (was > REFINED_SHARE * of_body),
        kept,
        parent,
        was_split & ~result.symmetric,
        worth,
        weights,
        result,
    )
