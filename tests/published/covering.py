"""Does the stated uncertainty cover the true error? Runs cases of the exact-solution set and sums up."""

import time
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from daraf.bem import solve_capacitance
from daraf.bem.refinement import accuracy_targets
from published.cases import Case

__all__ = ["Summary", "Verdict", "by_cause", "judge", "part_of", "summarise"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Verdict:
    """One case solved and compared.

    Attributes
    ----------
    name : str
    accuracy : float
        Asked.
    panels, passes : int
    seconds : float
    reached : bool
        Whether the run says that the accuracy asked was met.
    entry : list of str
    error, uncertainty, target : (m,) float
        Of the entries whose true value is known, relative to it (to the geometric mean of the self entries where
        the true value is zero); `target` is what was asked.
    lines : dict of str to (m,) float
        The budget, relative likewise; empty for what is derived from the matrix.
    """

    name: str
    accuracy: float
    panels: int
    passes: int
    seconds: float
    reached: bool
    entry: list[str]
    error: FloatArray
    uncertainty: FloatArray
    target: FloatArray
    lines: dict[str, FloatArray]

    @property
    def hit(self) -> NDArray[np.bool_]:
        """Whether each true value lies within the uncertainty."""
        return np.asarray(np.abs(self.error) <= self.uncertainty)

    @property
    def truly_met(self) -> NDArray[np.bool_]:
        """Whether each true error is within what was asked."""
        return np.asarray(np.abs(self.error) <= self.target)

    @property
    def worst(self) -> int:
        """Index of the entry whose error is largest against its uncertainty."""
        return int(np.argmax(np.abs(self.error) / self.uncertainty))


@dataclass(frozen=True)
class Summary:
    """Figures over all entries of many cases.

    Attributes
    ----------
    cases, entries : int
    hit_rate : float
        Share of entries whose true error is within the uncertainty.
    median_ratio, worst_ratio : float
        Of uncertainty over true error: the median, and the smallest (which must not fall below 1).
    truly_met : float
        Share of entries whose true error is within the accuracy asked.
    claimed : float
        Share of cases that claim to have met it.
    panels : int
    seconds : float
    """

    cases: int
    entries: int
    hit_rate: float
    median_ratio: float
    worst_ratio: float
    truly_met: float
    claimed: float
    panels: int
    seconds: float


def part_of(cases: Sequence[Case], part: int, parts: int) -> list[Case]:
    """Every `parts`-th case from the `part`-th on, which counts from 1."""
    return list(cases[part - 1 :: parts])


def judge(case: Case, accuracy: float, memory_limit: int | None = None) -> Verdict:
    """Solve a case and compare.

    Parameters
    ----------
    case : Case
    accuracy : float
    memory_limit : int, optional
        Bytes.

    Returns
    -------
    Verdict
    """
    surface = case.surface()
    start = time.perf_counter()
    solution = solve_capacitance(surface, accuracy=accuracy, memory_limit=memory_limit, want=case.want)
    seconds = time.perf_counter() - start
    exact = case.reference()
    value, spread = case.observe(solution)
    square = exact.ndim == 2
    target = accuracy_targets(exact, accuracy) if square else accuracy * np.abs(exact)
    if case.want is not None:
        asked = np.zeros_like(exact, dtype=bool)
        asked[tuple(np.transpose(case.want))] = True
        target = np.where(asked | asked.T, target, np.inf)
    floor = np.sqrt(np.outer(np.diag(exact), np.diag(exact))) if square else np.nanmax(np.abs(exact))
    scale = np.where(exact == 0.0, floor, np.abs(exact))
    known = np.isfinite(exact) & (np.triu(np.ones_like(exact)) > 0 if square else True)
    direct = value is solution.maxwell
    lines = {cause: (line / scale)[known] for cause, line in solution.budget.items()} if direct else {}
    return Verdict(
        name=case.name,
        accuracy=accuracy,
        panels=len(solution.panels),
        passes=len(solution.passes),
        seconds=seconds,
        reached=solution.reached,
        entry=[",".join(str(k + 1) for k in place) for place in np.argwhere(known).tolist()],
        error=((value - exact) / scale)[known],
        uncertainty=(spread / scale)[known],
        target=(target / scale)[known],
        lines=lines,
    )


def summarise(verdicts: Sequence[Verdict]) -> Summary:
    """Figures over all entries; each entry counts alike."""
    error = np.concatenate([v.error for v in verdicts])
    uncertainty = np.concatenate([v.uncertainty for v in verdicts])
    ratio = uncertainty / np.maximum(np.abs(error), np.finfo(float).tiny)
    return Summary(
        cases=len(verdicts),
        entries=len(error),
        hit_rate=float(np.mean(ratio >= 1.0)),
        median_ratio=float(np.median(ratio)),
        worst_ratio=float(ratio.min()),
        truly_met=float(np.mean(np.concatenate([v.truly_met for v in verdicts]))),
        claimed=float(np.mean([v.reached for v in verdicts])),
        panels=sum(v.panels for v in verdicts),
        seconds=sum(v.seconds for v in verdicts),
    )


def by_cause(verdicts: Sequence[Verdict]) -> dict[str, FloatArray]:
    """True error over the largest line of the budget, all entries that this line drives, sorted.

    Where errors of one cause rule, 95 % of these should be below 1 and half of them above 1/5.

    Returns
    -------
    dict of str to (m,) float
    """
    found: dict[str, list[float]] = {}
    for verdict in verdicts:
        for k in range(len(verdict.error)) if verdict.lines else ():
            cause = max(verdict.lines, key=lambda line: verdict.lines[line][k])
            found.setdefault(cause, []).append(abs(verdict.error[k]) / verdict.lines[cause][k])
    return {cause: np.sort(ratios) for cause, ratios in found.items()}
