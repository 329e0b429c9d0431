"""The main job in one call: case in, `Outcome` out, which prints itself and writes its folder."""

import time
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daraf.bem.errors import InputError
from daraf.bem.network import Excitation, MutualCapacitance, excite, mutual_capacitance
from daraf.bem.solution import CapacitanceSolution

from .account_text import account_text, counted
from .case import Case
from .document import daraf_version, result_document
from .loads import loads
from .media_outcome import solve_with_media
from .problem import Problem, build_problem
from .progress import Log, ProgressCallback
from .result import write_result
from .sensitivity_record import sensitivity_document
from .surface_file import SolvedSurface, surface_bytes
from .tables import result_text

__all__ = ["Outcome", "solve_case", "solve_problem"]


@dataclass(frozen=True, eq=False)
class Outcome:
    """A solved case.

    Attributes
    ----------
    problem : Problem
    solution : daraf.bem CapacitanceSolution
    mutual : daraf.bem MutualCapacitance
    state : daraf.bem Excitation or None
        Potentials, charges and energy; None if nothing was stated.
    document : dict
        Content of `result.json`.
    log_lines : list of str
    sides : (2, n_panels) float, V/m, or None
        Size of the field on every panel as stated, on the side of its normal and on the other one.
    """

    problem: Problem
    solution: CapacitanceSolution
    mutual: MutualCapacitance
    state: Excitation | None
    document: dict[str, Any]
    log_lines: list[str]
    sides: NDArray[np.float64] | None = None

    def text(self) -> str:
        """Return the tables, as `daraf solve` prints them."""
        return result_text(self.document)

    def write(self, folder: str | Path) -> Path:
        """Write the result folder.

        Parameters
        ----------
        folder : str or Path
            Replaced as a whole if it holds an older result.

        Returns
        -------
        Path

        Raises
        ------
        InputError
            If it cannot be written; nothing is left behind.
        """
        log = "\n".join([f"daraf {daraf_version()}", *self.log_lines, "", self.text()])
        surface = surface_bytes(self._solved_surface(), title=self.document["title"])
        return write_result(folder, self.document, surface, log)

    def _solved_surface(self) -> SolvedSurface:
        from daraf.bem.meaning import surface_meaning

        panels = self.solution.panels
        meaning = surface_meaning(self.problem.surface, panels, self.solution.facets)
        # interfaces carry no free charge
        rows = np.flatnonzero(panels.conductor < len(self.solution.conductor_names))
        densities = self.solution.densities[:, rows]
        return SolvedSurface(
            corners=panels.corners[rows],
            n_corners=panels.n_corners[rows],
            conductor=panels.conductor[rows],
            body=panels.body[rows],
            conductor_names=self.solution.conductor_names,
            body_names=self.problem.surface.body_names,
            densities=densities,
            density=None if self.state is None else self.state.potential @ densities,
            facet_offset=meaning.facet_offset[rows],
            body_fill=meaning.fill,
            field_sides=self.sides,
            previous=None if self.solution.previous is None else self.solution.previous[:, rows],
        )


def solve_case(
    case: Case,
    *,
    accuracy: float | None = None,
    method: str | None = None,
    memory_limit: int | None = None,
    progress: ProgressCallback | None = None,
) -> Outcome:
    """Solve a case.

    Parameters
    ----------
    case : Case
        From `load_case` or `make_case`.
    accuracy : float, optional
        Relative, overrides the case.
    method : {"auto", "dense", "fast"}, optional
        How the equations are solved, overrides the case.
    memory_limit : int, bytes, optional
    progress : callable, optional
        ``progress(stage, done, total, note)``.

    Returns
    -------
    Outcome

    Raises
    ------
    InputError
        If a file, a body, a placement or the size of the job cannot be used.
    """
    started = time.perf_counter()
    problem = build_problem(case, accuracy=accuracy)
    return solve_problem(
        problem,
        accuracy=accuracy,
        method=method,
        memory_limit=memory_limit,
        progress=progress,
        reading=time.perf_counter() - started,
    )


def solve_problem(
    problem: Problem,
    *,
    accuracy: float | None = None,
    method: str | None = None,
    memory_limit: int | None = None,
    progress: ProgressCallback | None = None,
    reading: float = 0.0,
) -> Outcome:
    """Solve a problem that was built before; arguments as in `solve_case`.

    Parameters
    ----------
    problem : Problem
    accuracy : float, optional
    method : str, optional
    memory_limit : int, bytes, optional
    progress : callable, optional
    reading : float, s
        Time spent on building the problem, for the record.

    Returns
    -------
    Outcome

    Raises
    ------
    InputError
        If the job does not fit into memory, or the method is not for what is around the conductors.
    """
    # Here, not above: the solver brings numba, which `daraf inspect` need not wait for.
    from daraf.bem import solve_capacitance

    started = time.perf_counter()
    log = Log(progress)
    content = problem.case.content
    surface = problem.surface
    counts = [("triangle", "triangles", len(surface.triangles)), ("body", "bodies", surface.n_bodies)]
    counts.append(("conductor", "conductors", len(content.conductor)))
    log.add(", ".join(counted(n, one, many) for one, many, n in counts))
    asked: dict[str, Any] = {
        "accuracy": content.accuracy if accuracy is None else accuracy,
        "memory_limit": memory_limit,
        "want": _wanted(problem),
        "progress": log,
    }
    extras: dict[str, Any] = {}
    if problem.media is None:
        solution = solve_capacitance(
            surface,
            relative_permittivity=content.medium.relative_permittivity,
            facets=content.facets,
            method=content.method if method is None else method,
            rounding=problem.rounding,
            **asked,
        )
    elif method == "fast":
        label = problem.case.label
        raise InputError(f"{label}: dielectrics and planes are solved with the full matrix; leave the method out")
    else:
        solution, extras = solve_with_media(problem, **asked)
    for one in solution.bodies:
        log.add(account_text(one))
    log.add("done" if solution.reached else "stopped before the accuracy asked was reached")
    mutual = mutual_capacitance(
        solution.maxwell,
        solution.maxwell_uncertainty,
        to_infinity=solution.to_infinity,
        to_infinity_uncertainty=solution.to_infinity_uncertainty,
    )
    state = _state(problem, solution)
    further: dict[str, float] = {}
    sides: NDArray[np.float64] | None = None
    if not solution.interrupted and problem.media is None:
        try:
            if state is not None:
                extras, further, sides = loads(problem, solution, state, progress=log)
            if content.sensitivities:
                began = time.perf_counter()
                extras["sensitivity"] = sensitivity_document(problem, solution, progress=log)
                further["sensitivities"] = time.perf_counter() - began
        except KeyboardInterrupt:
            # The capacitances are there and paid for: give them, and the exit code of an interruption.
            solution = replace(solution, interrupted=True)
    document = result_document(problem, solution, mutual, state, extras=extras)
    seconds = document["solution"]["seconds"]
    total = reading + time.perf_counter() - started
    document["solution"]["seconds"] = {"reading": reading, **seconds, **further, "total": total}
    return Outcome(problem, solution, mutual, state, document, log.lines, sides)


def _wanted(problem: Problem) -> list[tuple[int, int]] | None:
    """Return the couplings that must meet the accuracy, by number; None for all."""
    place = {entry.name: k for k, entry in enumerate(problem.case.content.conductor)}
    return [(place[one], place[two]) for one, two in problem.case.content.want] or None


def _state(problem: Problem, solution: CapacitanceSolution) -> Excitation | None:
    if problem.held is None or problem.values is None:
        return None
    return excite(
        solution.maxwell,
        solution.maxwell_uncertainty,
        problem.held,
        problem.values,
        to_infinity_uncertainty=solution.to_infinity_uncertainty,
    )
