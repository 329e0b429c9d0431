"""One pass of the adaptive loop: assemble, solve, estimate; and the plan for the next."""

import time
from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from .bisection import SPLIT_U, SPLIT_V, split_panels, split_sides
from .companion import companion_gains
from .extrapolation import (
    SMOOTH_DECAY,
    decay_of_parts,
    extrapolate,
    first_opinion,
    realised_share,
    second_opinion,
    smooth_factor,
)
from .hidden import unseen_fringe
from .indicator import two_level_indicator
from .panels import Panels
from .refinement import choose_splits, gain_worth
from .solution import Notice
from .system import Carried, DenseSystem, FastSystem, make_system

__all__ = ["PassResult", "Plan", "plan_next", "run_pass"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]
Progress = Callable[..., None]

#: A body counts as refined once more if the panels split hold this share of its measured gains.
REFINED_SHARE = 0.2
#: An even companion counts as much as this multiple of it in the two-level estimate: it shows 0.17 to 0.27 of what is
#: missing at an edge, against 0.5 to 0.7 (in energy; less, so that it speaks up only where halves are alike).
COMPANION_WORTH = 1.4


@dataclass(frozen=True, eq=False)
class PassResult:
    """What one pass found; bare values, multiply by 4 pi eps for farads.

    Attributes
    ----------
    panels : Panels
    system : DenseSystem, FastSystem or None
        The equations; None once they are given up.
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
    open : dict of str to (n_conductors, n_conductors) float, m
        Expanded uncertainty of the value by cause: what the solution of the equations left open.
    method : str
    iterations : int
    seconds : dict of str to float
    notices : list of Notice
    """

    panels: Panels
    system: DenseSystem | FastSystem | None
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
    open: dict[str, FloatArray]
    method: str
    iterations: int
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
    carried : Carried or None
        What the equations of the pass before know about the first panels.
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
        Without its equations.
    """

    panels: Panels
    symmetric: BoolArray
    sides: FloatArray
    refined: IntArray
    carried: Carried | None = None
    parent: IntArray | None = None
    was_split: BoolArray | None = None
    worth: FloatArray | None = None
    weights: FloatArray | None = None
    before: PassResult | None = None


def run_pass(
    plan: Plan,
    report: Callable[[str, float, float], None],
    *,
    accuracy: float = 0.01,
    method: str = "auto",
) -> PassResult:
    """Assemble, solve and estimate.

    Parameters
    ----------
    plan : Plan
    report : callable
        Told (stage, done, total).
    accuracy : float
        Relative uncertainty asked: what an iteration may leave open follows from it.
    method : {"auto", "dense", "fast"}
        See :func:`daraf.bem.system.make_system`.

    Returns
    -------
    PassResult

    Raises
    ------
    NumericalError
        If the matrix is not positive definite.
    """
    seconds: dict[str, float] = {}
    start = time.perf_counter()
    panels = plan.panels
    low, high = panels.corners.min(axis=(0, 1)), panels.corners.max(axis=(0, 1))
    # about the middle of the model, which stays the same from pass to pass
    here = replace(panels, corners=panels.corners - 0.5 * (low + high))
    system = make_system(here, accuracy, method, plan.carried, report)
    seconds["matrix"] = time.perf_counter() - start
    start = time.perf_counter()
    potentials = (panels.conductor[:, None] == np.arange(panels.n_conductors)).astype(np.float64)
    guess = None if plan.before is None or plan.parent is None else plan.before.density[plan.parent]
    solved = system.solve(here.areas[:, None] * potentials, guess, report)
    density, value = solved.density, solved.value
    seconds["solution"] = time.perf_counter() - start
    start = time.perf_counter()
    self_terms, read = system.diagonal, system.read(density)
    gains = two_level_indicator(
        here, self_terms, potentials, read, progress=lambda done, total: report("estimate", done, total)
    )
    edge = sides_by_direction(plan.sides)
    judged = ((edge > SMOOTH_DECAY) | plan.symmetric) & (panels.n_corners == 4)[:, None]
    companion = companion_gains(here, self_terms, potentials, judged, read)
    unseen = unseen_fringe(here, _stronger(gains, companion), plan.sides)
    decay, realised = _history(plan, value, gains)
    smooth = smooth_factor(panels.lengths, realised)
    first = first_opinion(gains, decay, realised, judged, smooth)
    second = second_opinion(gains, companion, edge, judged, smooth)
    limit = extrapolate(value, first, second)
    change = None if plan.before is None else limit - plan.before.limit
    seconds["estimate"] = time.perf_counter() - start
    return PassResult(
        panels,
        system,
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
        solved.open,
        system.method,
        solved.iterations,
        seconds,
        solved.notices,
    )


def sides_by_direction(sides: FloatArray) -> FloatArray:
    """Decay toward the sharper of the two sides that splits along u and along v run alongside, (n_panels, 2)."""
    return np.stack([sides[:, [1, 3]].max(axis=1), sides[:, [0, 2]].max(axis=1)], axis=1)


def _stronger(one: FloatArray, two: FloatArray) -> FloatArray:
    """Of two gains of each panel and direction, the larger for all conductors."""
    return np.where((np.abs(two).max(axis=2) > np.abs(one).max(axis=2))[:, :, None], two, one)


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


def plan_next(result: PassResult, weights: FloatArray) -> Plan:
    """Split the panels that hold most of what is missing.

    Parameters
    ----------
    result : PassResult
    weights : (n_conductors, n_conductors) float
        How much each entry of the capacitance matrix matters.

    Returns
    -------
    Plan
    """
    worth = gain_worth(result.gains, weights)
    split = choose_splits(gain_worth(result.steering, weights))
    panels, parent = split_panels(result.panels, split)
    sides = split_sides(result.panels, split, result.sides, SMOOTH_DECAY)
    kept = parent[: int(np.count_nonzero(split == 0))]
    was_split = np.stack([(split & SPLIT_U) > 0, (split & SPLIT_V) > 0], axis=1)
    was_split[result.panels.n_corners == 3] = (split > 0)[result.panels.n_corners == 3, None]
    carried = None if result.system is None else result.system.carried(kept)
    symmetric = (result.symmetric & ~was_split)[parent]
    measured = was_split & ~result.symmetric
    # splitting for what is hidden says nothing about the gains that are measured
    body, measured_worth = result.panels.body, worth.sum(axis=1)
    of_body = np.bincount(body, measured_worth, len(result.refined))
    was = np.bincount(body, np.where(split > 0, measured_worth, 0.0), len(result.refined))
    refined = result.refined + (was > REFINED_SHARE * of_body)
    return Plan(
        panels, symmetric, sides, refined, carried, parent, measured, worth, weights, replace(result, system=None)
    )
