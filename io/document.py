"""What `result.json` says: numbers in SI in a fixed order of keys."""

from importlib.metadata import PackageNotFoundError, version
from typing import Any

import numpy as np

from daraf.bem.network import Excitation, MutualCapacitance
from daraf.bem.solution import CapacitanceSolution, Notice

from .account_text import account_document
from .problem import Problem
from .units import engineering

__all__ = ["daraf_version", "result_document", "voltage_caution"]

#: Beyond this a conductor is dangerous to touch: limit of extra-low voltage for alternating current, V
#: (120 V for direct current; IEC 61140 and IEC 60364, common practice, from memory).
EXTRA_LOW_VOLTAGE = 50.0

#: Only known where potentials or charges are stated, and missing if the solve was interrupted.
_LOADS = {
    "force": "forces",
    "torque": "torques",
    "surface_field": "peak surface fields",
}


def daraf_version() -> str:
    """Version of the installed package."""
    try:
        return version("daraf")
    except PackageNotFoundError:
        return "0+unknown"


def result_document(
    problem: Problem,
    solution: CapacitanceSolution,
    mutual: MutualCapacitance,
    state: Excitation | None,
    *,
    extras: dict[str, Any] | None = None,
) -> dict[str, Any]:
    """Content of `result.json`.

    Parameters
    ----------
    problem : Problem
    solution : CapacitanceSolution
    mutual : MutualCapacitance
    state : Excitation or None
        None if no potentials or charges were stated; these values are null then.
    extras : dict, optional
        Keys computed elsewhere ("force", "torque", "surface_field", more); they replace the nulls. A key
        "warnings" is added to the warnings.

    Returns
    -------
    dict
    """
    more = dict(extras or {})
    notices = [*problem.notices, *solution.warnings]
    caution = voltage_caution(state)
    if caution:
        notices.append(caution)
    absent = [words for key, words in _LOADS.items() if more.get(key) is None]
    if absent and state is not None:
        notices.append(Notice("not-computed", f"not computed: {', '.join(absent)}"))
    warnings = [{"code": one.code, "text": one.text} for one in notices] + list(more.pop("warnings", []))
    document: dict[str, Any] = {
        "daraf": daraf_version(),
        "title": problem.case.content.title,
        "case": problem.case.stated,
        "inputs": [{"file": one.file, "sha256": one.sha256, "bytes": one.bytes} for one in problem.inputs],
        "changes": [
            {"conductor": conductor, "body": body, "code": one.code, "count": one.count}
            | {"at": None if one.place is None else list(one.place), "moved": one.moved, "text": one.text}
            for conductor, body, one in problem.changes
        ],
        "conductors": list(solution.conductor_names),
        "capacitance": _capacitance(solution, mutual),
        **_state(state, len(solution.conductor_names)),
        "force": None,
        "torque": None,
        "surface_field": None,
        "budget": [_budget_line(solution, cause) for cause in solution.budget],
        "bodies": account_document(solution.bodies),
        "solution": _solution(solution),
    }
    return {**document, **more, "warnings": warnings}


def voltage_caution(state: Excitation | None) -> Notice | None:
    """Caution where a potential (given or floating) exceeds extra-low voltage."""
    if state is None:
        return None
    highest = float(np.max(np.abs(state.potential)))
    if highest <= EXTRA_LOW_VOLTAGE:
        return None
    return Notice(
        "voltage",
        f"potentials up to {engineering(highest, 'V', 3)}, beyond extra-low voltage (50 V AC, 120 V DC): "
        "touching live or charged parts can kill. Local codes and licensed practice come first; "
        "these numbers replace no insulation test and hold no safety factor",
    )


def _capacitance(solution: CapacitanceSolution, mutual: MutualCapacitance) -> dict[str, Any]:
    return {
        "unit": "F",
        "maxwell": _list(solution.maxwell),
        "maxwell_uncertainty": _list(solution.maxwell_uncertainty),
        "mutual": _list(mutual.value),
        "mutual_uncertainty": _list(mutual.uncertainty),
        "to_infinity": _list(solution.to_infinity),
        "to_infinity_uncertainty": _list(solution.to_infinity_uncertainty),
    }


def _budget_line(solution: CapacitanceSolution, cause: str) -> dict[str, Any]:
    """One cause: its contributions, and where it holds the largest share of the square of the uncertainty."""
    part, total = solution.budget[cause], solution.maxwell_uncertainty
    share = np.square(part / np.where(total > 0.0, total, np.inf))
    i, j = (int(k) for k in np.unravel_index(np.argmax(share), share.shape))
    names = solution.conductor_names
    return {
        "cause": cause,
        "maxwell": _list(part),
        "largest_share": float(share[i, j]),
        "largest_share_at": [names[i], names[j]],
    }


def _state(state: Excitation | None, n: int) -> dict[str, Any]:
    if state is None:
        nothing = {"value": None, "uncertainty": None}
        return {
            "charge": {"unit": "C", **nothing},
            "potential": {"unit": "V", **nothing},
            "energy": {"unit": "J", **nothing},
        }
    return {
        "charge": {"unit": "C", "value": _list(state.charge), "uncertainty": _list(state.charge_uncertainty)},
        "potential": {
            "unit": "V",
            "value": _list(state.potential),
            "uncertainty": _list(state.potential_uncertainty),
        },
        "energy": {"unit": "J", "value": float(state.energy), "uncertainty": float(state.energy_uncertainty)},
    }


def _solution(solution: CapacitanceSolution) -> dict[str, Any]:
    return {
        "panels": len(solution.panels),
        "unknowns": len(solution.panels),
        "passes": len(solution.passes),
        "method": solution.method,
        "iterations": int(solution.iterations),
        "seconds": {key: float(value) for key, value in solution.seconds.items()},
        "peak_memory_bytes": int(solution.peak_memory_bytes),
        "accuracy": float(solution.accuracy),
        "reached": bool(solution.reached),
        "interrupted": bool(solution.interrupted),
        "facets": solution.facets,
        "relative_permittivity": float(solution.relative_permittivity),
        "history": [
            {
                "panels": one.panels,
                "seconds": float(one.seconds),
                "maxwell": _list(one.maxwell),
                "estimate": _list(one.estimate),
                "uncertainty": float(one.uncertainty) if np.isfinite(one.uncertainty) else None,
                "at": [solution.conductor_names[k] for k in one.entry],
                "cause": one.cause,
            }
            for one in solution.passes
        ],
    }


def _list(array: Any) -> Any:
    return np.asarray(array, dtype=np.float64).tolist()
