"""Solve a problem with dielectrics or losses, and put it into the words of a result."""

from collections.abc import Sequence
from typing import Any

import numpy as np

from daraf.bem.facets import facet_meaning
from daraf.bem.solution import CapacitanceSolution

from .case import Case
from .mirror_planes import images_of
from .problem import Problem
from .progress import ProgressCallback

__all__ = ["media_document", "solve_with_media"]

_CAUTION = (
    "resistances hold for the conductivity stated, the same everywhere and all year: soil is layered, and its "
    "conductivity changes with season and moisture several times over. Touch and step voltages are a matter for the "
    "applicable earthing standard and licensed practice"
)


def solve_with_media(
    problem: Problem,
    *,
    accuracy: float,
    memory_limit: int | None = None,
    want: Sequence[tuple[int, int]] | None = None,
    progress: ProgressCallback | None = None,
) -> tuple[CapacitanceSolution, dict[str, Any]]:
    """Capacitances at the first frequency, and more keys for `result.json`.

    Parameters
    ----------
    problem : Problem
        With media.
    accuracy : float
    memory_limit : int, bytes, optional
    want : sequence of (int, int), optional
    progress : callable, optional

    Returns
    -------
    solution : daraf.bem CapacitanceSolution
        Its densities are of free charge, zero on interfaces.
    document : dict
        Keys "media" and "admittance".
    """
    # Here, not above: numba.
    from daraf.bem import admittance, solve_media

    assert problem.media is not None
    content = problem.case.content
    solved = solve_media(
        problem.surface,
        problem.media,
        images=images_of(problem.case),
        accuracy=accuracy,
        memory_limit=memory_limit,
        facets=content.facets,
        want=want,
        progress=progress,
    )
    solution = CapacitanceSolution(
        conductor_names=solved.conductor_names,
        maxwell=solved.maxwell[0].real,
        maxwell_uncertainty=solved.maxwell_uncertainty[0].real,
        to_infinity=solved.to_infinity[0].real,
        to_infinity_uncertainty=solved.to_infinity_uncertainty[0].real,
        budget={cause: line[0].real for cause, line in solved.budget.items()},
        accuracy=solved.accuracy,
        relative_permittivity=content.medium.relative_permittivity,
        reached=solved.reached,
        panels=solved.panels,
        densities=np.ascontiguousarray(solved.free[0].real),
        passes=solved.passes,
        method=solved.method,
        iterations=0,
        seconds=solved.seconds,
        peak_memory_bytes=solved.peak_memory_bytes,
        warnings=solved.warnings,
        interrupted=solved.interrupted,
        facets=facet_meaning(content.facets),
    )
    found = admittance(solved, content.frequencies) if content.frequencies else None
    rows = []
    for s in range(0 if found is None else len(found.frequency)):
        assert found is not None
        rows.append(
            {
                "frequency": float(found.frequency[s]),
                "capacitance": found.capacitance[s].tolist(),
                "capacitance_uncertainty": found.capacitance_uncertainty[s].tolist(),
                "conductance": found.conductance[s].tolist(),
                "conductance_uncertainty": found.conductance_uncertainty[s].tolist(),
            }
        )
    units = {"frequency": "Hz", "capacitance": "F", "conductance": "S"}
    more: dict[str, Any] = {"admittance": {"unit": units, "at": rows}} if rows else {}
    if content.conduction:
        more |= _conduction(problem.case, solution)
    return solution, {"media": media_document(problem.case), **more}


def _conduction(case: Case, solution: CapacitanceSolution) -> dict[str, Any]:
    """Conductances and resistances by duality, with what to be careful of."""
    from daraf.bem import conductance_by_duality

    smallest = min(one.conductivity for _, one in case.content.media)
    conductance, spread = conductance_by_duality(solution.maxwell, solution.maxwell_uncertainty, smallest)
    resistance = np.linalg.inv(conductance)
    return {
        "conduction": {
            "conductance": {"unit": "S", "value": conductance.tolist(), "uncertainty": spread.tolist()},
            "resistance": {
                "unit": "ohm",
                "value": resistance.tolist(),
                # to first order, without regard to sign
                "uncertainty": (np.abs(resistance) @ spread @ np.abs(resistance)).tolist(),
            },
        },
        "warnings": [{"code": "conduction", "text": _CAUTION}],
    }


def media_document(case: Case) -> list[dict[str, Any]]:
    """What surrounds everything, and the dielectrics in order of precedence."""
    names = ["surrounding medium", *(one.name for one in case.content.dielectric)]
    return [
        {
            "name": name,
            "relative_permittivity": float(one.relative_permittivity),
            "loss_tangent": float(one.loss_tangent),
            "conductivity": float(one.conductivity),
        }
        for name, (_, one) in zip(names, case.content.media, strict=True)
    ]
