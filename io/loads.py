"""Forces, torques and peak surface fields of a solved problem, as `result.json` and the tables tell them."""

import time
from collections.abc import Sequence
from typing import Any

import numpy as np

from daraf.bem.force import Forces
from daraf.bem.network import Excitation
from daraf.bem.peak import PeakField
from daraf.bem.solution import CapacitanceSolution

from .mesh_units import METRES_PER_UNIT
from .problem import Problem
from .progress import ProgressCallback

__all__ = ["loads", "loads_document"]

#: Beyond so many panels the sums over all pairs of panels take minutes, and neither forces nor peak fields are given.
MOST_PANELS = 30_000


def loads(
    problem: Problem, solution: CapacitanceSolution, state: Excitation, *, progress: ProgressCallback | None = None
) -> tuple[dict[str, Any], dict[str, float]]:
    """Compute forces, torques and peak surface fields.

    Parameters
    ----------
    problem : Problem
    solution : CapacitanceSolution
    state : Excitation
    progress : callable, optional
        ``progress(stage, done, total, note)``.

    Returns
    -------
    document : dict
        The keys "force", "torque" and "surface_field" of `result.json`.
    seconds : dict of str to float
    """
    # Here, not above: numba.
    from daraf.bem.charges import stated_charges
    from daraf.bem.force import conductor_forces
    from daraf.bem.peak import peak_fields

    if len(solution.panels) > MOST_PANELS:
        text = f"forces and peak fields need sums over all pairs of panels, and are given up to {MOST_PANELS} panels"
        return {"warnings": [{"code": "too-many-panels", "text": text}]}, {}
    begin = time.perf_counter()
    charges = stated_charges(problem.surface, solution, state, facets=problem.case.content.facets)
    forces = conductor_forces(charges, progress=progress)
    middle = time.perf_counter()
    peaks = peak_fields(charges)
    document = loads_document(forces, peaks, solution.conductor_names, problem.case.content.unit)
    return document, {"forces": middle - begin, "peak fields": time.perf_counter() - middle}


def loads_document(
    forces: Forces, peaks: Sequence[PeakField], names: Sequence[str], unit: str | None
) -> dict[str, Any]:
    """Put forces and peak fields into the words of `result.json`.

    Parameters
    ----------
    forces : daraf.bem Forces
    peaks : sequence of daraf.bem PeakField
    names : sequence of str
        Of the conductors.
    unit : str or None
        Of the places in texts; metres if None.

    Returns
    -------
    dict
    """
    return {
        "force": {"unit": "N", "value": forces.force.tolist(), "uncertainty": forces.force_uncertainty.tolist()},
        "torque": {
            "unit": "N m",
            "value": forces.torque.tolist(),
            "uncertainty": forces.torque_uncertainty.tolist(),
            "about": forces.about.tolist(),
        },
        "surface_field": [
            {
                "conductor": names[one.conductor],
                "peak": float(one.peak),
                "uncertainty": None if one.uncertainty is None else float(one.uncertainty),
                "at": np.asarray(one.at).tolist(),
                "bounded": bool(one.bounded),
                "exponent": one.exponent,
                "edge_radius_needed": _radius_needed(one, unit),
            }
            for one in peaks
        ],
    }


def _radius_needed(one: PeakField, unit: str | None) -> str | None:
    """Which edge must be rounded in the drawing before there is a number."""
    if one.bounded or one.edge_at is None:
        return None
    shown = unit or "m"
    place = ", ".join(f"{value / METRES_PER_UNIT[shown] + 0.0:.4g}" for value in one.edge_at)
    law = "" if one.exponent is None else f"; the peak then falls as radius^-{one.exponent:.2f}"
    until = "; until then it is a panel's mean and grows with refinement"
    return f"radius of the edge or tip at ({place}) {shown}{law}{until}"
