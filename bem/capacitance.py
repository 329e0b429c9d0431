"""The main job: Maxwell capacitance matrix of conductors in one medium, with its uncertainty."""

import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from .account import account_bodies, change_notices, facet_notices
from .adaptive import PassResult, Plan, plan_next, run_pass
from .coarse import region_deviation, take_as_drawn
from .constants import FOUR_PI_EPSILON_0
from .creases import find_creases
from .errors import InputError
from .extrapolation import extrapolation_uncertainty
from .facets import Facets, facet_meaning, find_facets, greatest_turn, move_facets
from .flats import panel_regions
from .forecast import Goal
from .memory import dense_bytes, fast_bytes, free_memory, panels_that_fit, peak_memory, refuse_if_too_large
from .refinement import accuracy_targets
from .regions import find_regions
from .rounding import checked_rounding
from .shape_doubts import ShapeDoubts
from .solution import BodyAccount, CapacitanceSolution, Notice, Pass
from .start import side_decays, starting_panels
from .surface import Surface
from .system import uses_fast

__all__ = ["solve_capacitance"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
Progress = Callable[..., None]

#: Most panels that refinement goes to with the dense matrix, whose factorisation takes minutes a pass beyond, and with
#: the fast operator, where a pass takes minutes. Meshes that start with more are solved as far as memory allows.
MOST_DENSE, MOST_FAST = 15_000, 400_000
METHODS = ("auto", "dense", "fast")
#: Most panels that edges are graded to before the first pass.
MOST_AT_START = 3_750
#: Relative error of the matrix entries, and with it of the energies, that the rules of
#: :mod:`daraf.bem.pairs` leave at worst; expanded uncertainty of the line "integration".
INTEGRATION = 1e-6
#: After one pass the discretisation must be below this share of what is asked: panels wider than a gap show no error.
FIRST_PASS = 0.2
#: Splitting panels is pointless once it can lower the uncertainty of no entry by more than this share.
POINTLESS = 0.3


@dataclass(frozen=True, eq=False)
class _Judgement:
    """Value, uncertainty and what drives it, bare; the last column is the sum over all conductors."""

    value: FloatArray
    lines: dict[str, FloatArray]
    total: FloatArray
    targets: FloatArray  # infinite where the accuracy of an entry is not asked
    n_passes: int

    @property
    def missed(self) -> BoolArray:
        """Entries that are not accurate enough yet; after one pass alone they must be so by far to be believed."""
        n = len(self.value)
        missed = self.total[:, :n] > self.targets
        if self.n_passes == 1:
            missed |= self.lines["discretisation"][:, :n] > FIRST_PASS * self.targets
        return np.asarray(missed)

    @property
    def reached(self) -> bool:
        """Whether every entry is accurate enough."""
        return not self.missed.any()

    @property
    def pointless(self) -> bool:
        """Whether no entry that misses its target would gain from smaller panels."""
        n = len(self.value)
        fixed = np.sqrt(sum(line**2 for cause, line in self.lines.items() if cause != "discretisation"))[:, :n]
        return bool((~self.missed | (self.lines["discretisation"][:, :n] < POINTLESS * fixed)).all())

    @property
    def worst(self) -> tuple[float, tuple[int, int], str]:
        """Largest uncertainty over its target, where that is, and the cause that drives it."""
        n = len(self.value)
        excess = self.total[:, :n] / self.targets
        i, j = (int(k) for k in np.unravel_index(np.argmax(excess), (n, n)))
        return float(excess[i, j]), (i, j), max(self.lines, key=lambda line: self.lines[line][i, j])


@dataclass(frozen=True)
class _Means:
    """How a solve is done and what it may use: bytes of memory, panels."""

    method: str
    limit: int
    most: int


def solve_capacitance(  # noqa: PLR0913  the one door to the main job
    surface: Surface,
    *,
    relative_permittivity: float = 1.0,
    accuracy: float = 0.01,
    memory_limit: int | None = None,
    facets: str = "auto",
    method: str = "auto",
    want: Sequence[tuple[int, int]] | None = None,
    rounding: FloatArray | None = None,
    progress: Progress | None = None,
) -> CapacitanceSolution:
    """Maxwell capacitance matrix of conductors in one homogeneous medium.

    Symmetric Galerkin boundary elements with one constant charge density per flat panel, refined where the
    two-level indicator asks for it, extrapolated, with a budget of uncertainty.

    Parameters
    ----------
    surface : Surface
        Outward oriented closed bodies and open sheets, m.
    relative_permittivity : float
        Of the medium, at least 1.
    accuracy : float
        Relative expanded uncertainty (k = 2) asked of every self entry and every coupling above 1e-3 of
        ``sqrt(C_ii C_jj)``; weaker couplings are held to that floor.
    memory_limit : int, optional
        Bytes; nine tenths of the free memory by default.
    facets : {"auto", "round", "as drawn"}
        What the facets mean, see :func:`daraf.bem.facets.facet_meaning`: whether edges that turn gently in rows stand
        for a smooth surface, whose capacitance is wanted, or the facets are the part.
    method : {"auto", "dense", "fast"}
        How the equations are solved: "dense" by factorising the full matrix, "fast" by the fast multipole method and
        conjugate gradients, "auto" by whichever is quicker for so many panels. The values agree within their
        uncertainties.
    want : sequence of (int, int), optional
        Entries of the matrix that must meet the accuracy; all by default. Panels are spent on these alone, and
        the uncertainty of the others is still given.
    rounding : (n_bodies,) float, m, optional
        How far the coordinates of each body may be off, for the line "coordinates" of the budget.
    progress : callable, optional
        Called with (stage, done, total, note). It may raise KeyboardInterrupt: what the finished passes
        gave is then returned, marked ``interrupted``.

    Returns
    -------
    CapacitanceSolution

    Raises
    ------
    InputError
        If a parameter is out of range.
    MemoryRefused
        If the coarsest panels would not fit into memory.
    """
    if not 0.0 < accuracy < 1.0:
        raise InputError(f"accuracy must lie between 0 and 1, got {accuracy:g}")
    if not 1.0 <= relative_permittivity < float("inf"):
        raise InputError(f"relative permittivity must be at least 1, got {relative_permittivity:g}")
    if method not in METHODS:
        raise InputError(f"{method!r} is no method; write one of {', '.join(map(repr, METHODS))}")
    meaning = facet_meaning(facets)
    accuracies = _accuracies(accuracy, want, surface.n_conductors)
    if rounding is not None:
        rounding = checked_rounding(rounding, surface.n_bodies)
    begin = time.perf_counter()
    limit = memory_limit if memory_limit is not None else int(0.9 * free_memory())
    report = progress or _silent
    report("panels", 0.0, 1.0, "")
    start, round_parts, coarse, notices, bodies = _prepare(surface, meaning, limit, method)
    doubts = ShapeDoubts(round_parts, rounding, coarse)
    means = _Means(method, limit, _most_panels(len(start.panels), surface.n_conductors, limit, method))
    goal = Goal(accuracy, means.most, surface.conductor_names)
    seconds = {"panels": time.perf_counter() - begin}
    passes: list[Pass] = []
    plan: Plan | None = start
    result = judgement = previous = None
    interrupted = False
    try:
        while plan is not None:
            result, judgement = _pass(plan, doubts, accuracies, goal, passes, report, method)
            if plan.before is not None:
                previous = plan.before.density[plan.parent]
            for stage, time_spent in result.seconds.items():
                seconds[stage] = seconds.get(stage, 0.0) + time_spent
            notices += [notice for notice in result.notices if notice not in notices]
            plan = None if judgement.reached or judgement.pointless else _next(result, judgement, means)
    except KeyboardInterrupt:
        if result is None:
            raise
        interrupted = True
    assert result is not None
    assert judgement is not None
    seconds["total"] = time.perf_counter() - begin
    n = surface.n_conductors
    farads = FOUR_PI_EPSILON_0 * relative_permittivity
    value, total = farads * judgement.value, farads * judgement.total
    return CapacitanceSolution(
        conductor_names=surface.conductor_names,
        maxwell=value[:, :n],
        maxwell_uncertainty=total[:, :n],
        to_infinity=value[:, n],
        to_infinity_uncertainty=total[:, n],
        budget={cause: farads * line[:, :n] for cause, line in judgement.lines.items()},
        accuracy=accuracy,
        relative_permittivity=relative_permittivity,
        reached=judgement.reached,
        panels=result.panels,
        densities=np.ascontiguousarray(farads * result.density.T),
        passes=[
            replace(p, maxwell=farads * p.maxwell, estimate=farads * p.estimate, spread=farads * p.spread)
            for p in passes
        ],
        method=result.method,
        iterations=sum(p.iterations for p in passes),
        seconds=seconds,
        peak_memory_bytes=peak_memory(),
        warnings=notices + _guards(surface, judgement, value, total),
        previous=None if previous is None else np.ascontiguousarray(farads * previous.T),
        interrupted=interrupted,
        facets=meaning,
        bodies=bodies,
    )


def _accuracies(accuracy: float, want: Sequence[tuple[int, int]] | None, n: int) -> FloatArray:
    """Relative uncertainty allowed of each entry: any where it is not asked."""
    if want is None:
        return np.full((n, n), accuracy)
    allowed = np.full((n, n), np.inf)
    for i, j in want:
        if not (0 <= i < n and 0 <= j < n):
            raise InputError(f"want: ({i}, {j}) names a conductor that does not exist; there are {n}, from 0")
        allowed[i, j] = allowed[j, i] = accuracy
    if not np.isfinite(allowed).any():
        raise InputError("want: an empty list asks for nothing; leave it out for all entries")
    return allowed


def _silent(stage: str, done: float, total: float, note: str = "") -> None:
    return None


def _prepare(
    surface: Surface, meaning: str, limit: int, method: str
) -> tuple[Plan, Facets | None, FloatArray | None, list[Notice], tuple[BodyAccount, ...]]:
    """Panels to start from, the round parts, what coarsening moved, notices, what became of the bodies."""
    regions, notices = find_regions(surface)
    creases = find_creases(surface, regions, greatest_turn=greatest_turn(meaning))
    panels, more = panel_regions(surface, regions, creases=creases)
    refuse_if_too_large(len(panels), surface.n_conductors, limit, fast=method != "dense")
    most = _most_panels(len(panels), surface.n_conductors, limit, method)
    round_parts = None if meaning == "as drawn" else find_facets(surface, regions, creases)
    coarse = region_deviation(surface, regions)
    if coarse is not None and round_parts is not None:
        round_parts = take_as_drawn(round_parts, regions, coarse)
    bodies = account_bodies(surface, regions, creases, panels, round_parts)
    notices += more + change_notices(bodies) + facet_notices(surface, regions, creases, bodies, meaning)
    decays = side_decays(surface, creases, panels)
    if round_parts is not None:
        panels = move_facets(round_parts, panels)
    start = starting_panels(panels, decays, max(len(panels), min(MOST_AT_START, most // 4)))
    plan = Plan(start.panels, start.symmetric, start.sides, np.zeros(surface.n_bodies, dtype=np.int64))
    return plan, round_parts, coarse, notices, bodies


def _most_panels(n_panels: int, n_conductors: int, limit: int, method: str) -> int:
    """Most panels that refinement of so many may go to."""
    most = MOST_DENSE if method == "dense" else MOST_FAST
    return max(n_panels, min(most, panels_that_fit(limit, n_conductors, fast=method != "dense")))


def _pass(
    plan: Plan,
    doubts: ShapeDoubts,
    accuracies: FloatArray,
    goal: Goal,
    passes: list[Pass],
    report: Progress,
    method: str,
) -> tuple[PassResult, _Judgement]:
    start = time.perf_counter()
    note = f"pass {len(passes) + 1}, {len(plan.panels)} panels"

    def told(stage: str, done: float, total: float) -> None:
        report(stage, done, total, note)

    result = run_pass(plan, told, accuracy=goal.accuracy, method=method)
    judgement = _judge(result, doubts, accuracies, len(passes) + 1)
    estimate, n = result.limit - result.value, len(result.value)
    excess, entry, cause = judgement.worst
    spent, largest = time.perf_counter() - start, excess * goal.accuracy
    spread = judgement.total[:, :n]
    passes.append(
        Pass(len(result.panels), result.value, estimate, spread, spent, largest, entry, cause, result.iterations)
    )
    report("pass", float(len(passes)), 0.0, f"{note}: {goal.standing(passes)}")
    return result, judgement


def _judge(result: PassResult, doubts: ShapeDoubts, accuracy: FloatArray, n_passes: int) -> _Judgement:
    """Extrapolated value with the lines of its budget, one column more for the sum over all conductors."""
    n = len(result.value)
    sums = np.hstack([np.eye(n), np.ones((n, 1))])
    value = result.limit @ sums
    scale = np.sqrt(np.outer(np.diag(result.limit), np.diag(result.limit)))
    lines = {
        "discretisation": extrapolation_uncertainty(
            result.first,
            result.second,
            result.unseen,
            result.panels.body,
            result.change,
            sums,
            result.refined,
            result.realised,
        ),
        "integration": INTEGRATION * np.hstack([scale, scale.max(axis=1, keepdims=True)]),
        **{cause: np.hstack([part, part.sum(axis=1, keepdims=True)]) for cause, part in result.open.items()},
        **doubts.lines(result.panels, result.density, sums),
    }
    # a weak coupling that the estimate moves by as much as is left of it is not known better than that
    added = np.abs((result.limit - result.value) @ sums)
    unsure = added * np.minimum(added / np.maximum(np.abs(value), 1e-300), 1.0)
    lines["discretisation"] = np.maximum(lines["discretisation"], unsure)
    total = np.sqrt(sum(line**2 for line in lines.values()))
    return _Judgement(value, lines, total, accuracy_targets(value[:, :n], accuracy), n_passes)


def _next(result: PassResult, judgement: _Judgement, means: _Means) -> Plan | None:
    """Plan of the next pass, or None if there is no room for it."""
    n = len(judgement.value)
    plan = plan_next(result, judgement.lines["discretisation"][:, :n] / judgement.targets**2)
    if len(plan.panels) > means.most:
        return None
    if uses_fast(len(plan.panels), means.method):
        needed = fast_bytes(len(plan.panels), n) + fast_bytes(len(result.panels), n)
    else:
        needed = dense_bytes(len(plan.panels), len(result.panels))
    return plan if needed <= means.limit else None


def _guards(surface: Surface, judgement: _Judgement, value: FloatArray, total: FloatArray) -> list[Notice]:
    """Signs that a capacitance matrix must have, and what kept the accuracy from being reached."""
    n = surface.n_conductors
    notices = []
    names = surface.conductor_names
    for i in range(n):
        for j in range(i + 1, n):
            if value[i, j] > total[i, j]:
                text = (
                    f"coupling {names[i]} - {names[j]} has the wrong sign: {value[i, j]:.3g} F, "
                    f"uncertainty {total[i, j]:.2g} F"
                )
                notices.append(Notice("maxwell-sign", text))
        if value[i, n] < -total[i, n]:
            text = f"row sum of {names[i]} is negative: {value[i, n]:.3g} F, uncertainty {total[i, n]:.2g} F"
            notices.append(Notice("maxwell-sign", text))
    if not judgement.reached:
        _, worst, cause = judgement.worst
        place = " - ".join(dict.fromkeys(names[k] for k in worst))
        text = f"the accuracy asked was not reached: {place} is driven by {cause}"
        if cause == "coordinates":
            text += ", which the file rounds; move the part to the origin in CAD, or export more digits"
        if cause == "facets":
            text += '; export round parts with a finer tolerance, or say facets = "as drawn" if they are the part'
        if cause == "coarsening":
            text += "; forbid it or state a smaller distance (coarsen)"
        notices.append(Notice("accuracy-not-reached", text))
    return notices
