"""One pass of the adaptive loop: assemble, solve, estimate; and the plan for the next."""

import time
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lapack
from threadpoolctl import ThreadpoolController

from .bisection import SPLIT_U, SPLIT_V, split_panels, split_sides
from .companion import companion_gains
from .errors import NumericalError
from .extrapolation import (
    SMOOTH_DECAY,
    decay_of_parts,
    extrapolate,
    first_opinion,
    realised_share,
    second_opinion,
    smooth_factor,
)
from .galerkin import galerkin_matrix
from .hidden import unseen_fringe
from .indicator import two_level_indicator
from .panels import Panels
from .refinement import choose_splits, gain_worth, marked_share
from .solution import Notice

__all__ = ["PassResult", "Plan", "plan_next", "run_pass"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]
Progress = Callable[..., None]

#: The factorisation is repeated with this share added to the diagonal if it fails: two panels coincide.
COINCIDENT = 1e-10
#: A body counts as refined once more if the panels split hold this share of its measured gains.
REFINED_SHARE = 0.2
#: An even companion counts as much as this multiple of it in the two-level estimate: it shows 0.17 to 0.27 of what is
#: missing at an edge, against 0.5 to 0.7 (in energy; less, so that it speaks up only where halves are alike).
COMPANION_WORTH = 1.4
#: Below this many panels LAPACK runs on one thread.
SERIAL = 3000


@dataclass(frozen=True, eq=False)
class PassResult:
    """What one pass found; bare values, multiply by 4 pi eps for farads.

    Attributes
    ----------
    panels : Panels
    matrix : (n_panels, n_panels) float, m3
        Galerkin matrix, lower triangle.
    density : (n_panels, n_conductors) float
        Solution of ``A density = areas`` for each conductor at 1 V.
    value : (n_conductors, n_conductors) float, m
        Galerkin value of the capacitance matrix.
    gains : (n_panels, 2, n_conductors) float
        Two-level gains.
    companion : (n_panels, 2, n_conductors) float
        Gains of the even companions at edges and where halves may be equal by symmetry; zero elsewhere.
    unseen : (n_panels, 2, n_conductors) float
        What panels may hide in narrow gaps: see :mod:`daraf.bem.hidden`.
    first, second : (n_panels, 2, n_conductors) float
        Two opinions on what each panel is off.
    symmetric : (n_panels, 2) bool
        Directions in which halves may be equal by symmetry.
    sides : (n_panels, 4) float
        Decay of splits toward each side, from the edge it lies on.
    refined : (n_bodies,) int
        How often each body has been refined.
    decay : (n_panels, 2) float
        How much less each further split gains.
    realised : float
        What the splits before this pass gained over what was promised.
    limit : (n_conductors, n_conductors) float, m
        Extrapolated value.
    change : (n_conductors, n_conductors) float or None
        ``limit`` less that of the pass before.
    seconds : dict of str to float
    notices : list of Notice
    """

    panels: Panels
    matrix: FloatArray
    density: FloatArray
    value: FloatArray
    gains: FloatArray
    companion: FloatArray
    unseen: FloatArray
    first: FloatArray
    second: FloatArray
    symmetric: BoolArray
    sides: FloatArray
    refined: IntArray
    decay: FloatArray
    realised: float
    limit: FloatArray
    change: FloatArray | None
    seconds: dict[str, float]
    notices: list[Notice] = field(default_factory=list)

    @property
    def steering(self) -> FloatArray:
        """Gains to refine by, (n_panels, 2, n_conductors): the strongest of what is measured and what may be hidden."""
        return _stronger(_stronger(self.gains, COMPANION_WORTH * self.companion), self.unseen)


@dataclass(frozen=True, eq=False)
class Plan:
    """Panels for the next pass, and what is known about them.

    Attributes
    ----------
    panels : Panels
        Those taken over from the pass before come first.
    known : (m, m) float or None
        Galerkin matrix of the first m panels.
    parent : (n_panels,) int
        Panel of the pass before.
    symmetric : (n_panels, 2) bool
        Directions in which halves may be equal by symmetry.
    sides : (n_panels, 4) float
        Decay of splits toward each side, from the edge it lies on.
    was_split : (n_before, 2) bool
        Directions of the splits whose gain had been measured.
    worth : (n_before, 2) float
        Of the gains before the split.
    weights : (n_conductors, n_conductors) float
        With which the worth was measured.
    before : PassResult or None
        Without its matrix.
    """

    panels: Panels
    symmetric: BoolArray
    sides: FloatArray
    refined: IntArray
    known: FloatArray | None = None
    parent: IntArray | None = None
    was_split: BoolArray | None = None
    worth: FloatArray | None = None
    weights: FloatArray | None = None
    before: PassResult | None = None


def run_pass(plan: Plan, report: Callable[[str, float, float], None]) -> PassResult:
    """Assemble, solve and estimate.

    Parameters
    ----------
    plan : Plan
    report : callable
        Told (stage, done, total).

    Returns
    -------
    PassResult

    Raises
    ------
    NumericalError
        If the matrix is not positive definite.
    """
    panels = plan.panels
    seconds: dict[str, float] = {}
    start = time.perf_counter()
    matrix = galerkin_matrix(
        panels.corners, known=plan.known, progress=lambda done, total: report("matrix", done, total)
    )
    seconds["matrix"] = time.perf_counter() - start
    start = time.perf_counter()
    report("factorisation", 0.0, 1.0)
    potentials = (panels.conductor[:, None] == np.arange(panels.n_conductors)).astype(np.float64)
    charges = panels.areas[:, None] * potentials
    density, notices = _solve(matrix, charges)
    value = charges.T @ density
    value = 0.5 * (value + value.T)
    seconds["factorisation"] = time.perf_counter() - start
    start = time.perf_counter()
    self_terms = np.diag(matrix).copy()
    gains = two_level_indicator(
        panels, density, self_terms, potentials, progress=lambda done, total: report("estimate", done, total)
    )
    edge = sides_by_direction(plan.sides)
    judged = ((edge > SMOOTH_DECAY) | plan.symmetric) & (panels.n_corners == 4)[:, None]
    companion = companion_gains(panels, density, self_terms, potentials, judged)
    unseen = unseen_fringe(panels, _stronger(gains, companion), plan.sides)
    decay, realised = _history(plan, value, gains)
    smooth = smooth_factor(panels.lengths, realised)
    first = first_opinion(gains, decay, realised, judged, smooth)
    second = second_opinion(gains, companion, edge, judged, smooth)
    limit = extrapolate(value, first, second)
    change = None if plan.before is None else limit - plan.before.limit
    seconds["estimate"] = time.perf_counter() - start
    return PassResult(
        panels,
        matrix,
        density,
        value,
        gains,
        companion,
        unseen,
        first,
        second,
        plan.symmetric,
        plan.sides,
        plan.refined,
        decay,
        realised,
        limit,
        change,
        seconds,
        notices,
    )


def sides_by_direction(sides: FloatArray) -> FloatArray:
    """Decay toward the sharper of the two sides that splits along u and along v run alongside, (n_panels, 2)."""
    return np.stack([sides[:, [1, 3]].max(axis=1), sides[:, [0, 2]].max(axis=1)], axis=1)


def _stronger(one: FloatArray, two: FloatArray) -> FloatArray:
    """Of two gains of each panel and direction, the larger for all conductors."""
    return np.where((np.abs(two).max(axis=2) > np.abs(one).max(axis=2))[:, :, None], two, one)


def _solve(matrix: FloatArray, charges: FloatArray) -> tuple[FloatArray, list[Notice]]:
    """Bare densities by Cholesky factorisation of the lower triangle."""
    notices = []
    # a small factorisation gains nothing from threads and waits long for them where the machine is busy
    with _thread_pools().limit(limits=1 if len(matrix) < SERIAL else None):
        factor, info = _cholesky(matrix, 1.0)
        if info != 0:
            factor, info = _cholesky(matrix, 1.0 + COINCIDENT)
            text = (
                "panels coincide: bodies of one conductor overlap or touch along a face; the capacitances hold, "
                "but how the charge is shared there is arbitrary"
            )
            notices.append(Notice("coincident-panels", text))
        if info != 0:
            raise NumericalError(
                f"the matrix of {len(matrix)} panels is not positive definite: panels coincide or cross"
            )
        density, _ = lapack.dpotrs(factor, charges, lower=0)
    return np.ascontiguousarray(density), notices


@lru_cache(maxsize=1)
def _thread_pools() -> ThreadpoolController:
    """Pools of the libraries loaded, looked for once: the search takes as long as a small factorisation."""
    return ThreadpoolController()


def _cholesky(matrix: FloatArray, diagonal: float) -> tuple[FloatArray, int]:
    # the transpose of the lower triangle in C order is the upper one in Fortran order: no copy but this one
    copy = np.array(matrix.T, order="F")
    copy[np.diag_indices_from(copy)] *= diagonal
    factor, info = lapack.dpotrf(copy, lower=0, clean=0, overwrite_a=1)
    return factor, int(info)


def _history(plan: Plan, value: FloatArray, gains: FloatArray) -> tuple[FloatArray, float]:
    """Decay of each panel's gains and the realised share of what was promised."""
    before = plan.before
    if before is None or plan.parent is None or plan.was_split is None or plan.worth is None or plan.weights is None:
        start = sides_by_direction(plan.sides)
        start[plan.panels.n_corners == 3] = SMOOTH_DECAY
        return start, 1.0
    promised = np.einsum("pdi,pd->i", before.gains**2, plan.was_split) / np.diag(value)
    gained = (np.diag(value) - np.diag(before.value)) / np.diag(value)
    decay = decay_of_parts(plan.parent, plan.was_split, plan.worth, gain_worth(gains, plan.weights), before.decay)
    return decay, realised_share(gained, promised)


def plan_next(result: PassResult, weights: FloatArray, excess: float) -> Plan:
    """Split the panels that hold most of what is missing.

    Parameters
    ----------
    result : PassResult
    weights : (n_conductors, n_conductors) float
        How much each entry of the capacitance matrix matters.
    excess : float
        Uncertainty over the one asked, where it is largest.

    Returns
    -------
    Plan
    """
    worth = gain_worth(result.gains, weights)
    split = choose_splits(gain_worth(result.steering, weights), marked_share(excess))
    panels, parent = split_panels(result.panels, split)
    sides = split_sides(result.panels, split, result.sides, SMOOTH_DECAY)
    kept = parent[: int(np.count_nonzero(split == 0))]
    was_split = np.stack([(split & SPLIT_U) > 0, (split & SPLIT_V) > 0], axis=1)
    was_split[result.panels.n_corners == 3] = (split > 0)[result.panels.n_corners == 3, None]
    known = result.matrix[np.ix_(kept, kept)]
    symmetric = (result.symmetric & ~was_split)[parent]
    measured = was_split & ~result.symmetric
    # splitting for what is hidden says nothing about the gains that are measured
    body, measured_worth = result.panels.body, worth.sum(axis=1)
    of_body = np.bincount(body, measured_worth, len(result.refined))
    was = np.bincount(body, np.where(split > 0, measured_worth, 0.0), len(result.refined))
    refined = result.refined + (was > REFINED_SHARE * of_body)
    return Plan(panels, symmetric, sides, refined, known, parent, measured, worth, weights, _without_matrix(result))


def _without_matrix(result: PassResult) -> PassResult:
    return replace(result, matrix=np.zeros((0, 0)))
