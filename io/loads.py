"""Forces, torques and peak surface fields of a solved problem, as `result.json` and the tables tell them."""

import time
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daraf.bem.edge_peak import EdgePeak
from daraf.bem.force import Forces
from daraf.bem.network import Excitation
from daraf.bem.peak import PeakField
from daraf.bem.solution import CapacitanceSolution

from .mesh_units import METRES_PER_UNIT
from .problem import Problem
from .progress import ProgressCallback
from .strength_record import strength_document

__all__ = ["loads", "loads_document"]

#: Beyond so many panels the sums over all pairs of panels take minutes, and neither forces nor peak fields are given.
MOST_PANELS = 30_000


def loads(
    problem: Problem, solution: CapacitanceSolution, state: Excitation, *, progress: ProgressCallback | None = None
) -> tuple[dict[str, Any], dict[str, float], NDArray[np.float64] | None]:
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
        The keys "force", "torque", "surface_field" and, where air was asked for, "strength" of `result.json`.
    seconds : dict of str to float
    sides : (2, n_panels) float, V/m, or None
        Size of the field on every panel, on the side of its normal and on the other one.
    """
    # Here, not above: numba.
    from daraf.bem.charges import stated_charges
    from daraf.bem.edge_peak import edge_peaks
    from daraf.bem.force import conductor_forces
    from daraf.bem.peak import peak_fields, surface_sides
    from daraf.bem.sides import two_sided_bodies

    if len(solution.panels) > MOST_PANELS:
        text = f"forces and peak fields need sums over all pairs of panels, and are given up to {MOST_PANELS} panels"
        return {"warnings": [{"code": "too-many-panels", "text": text}]}, {}, None
    begin = time.perf_counter()
    charges = stated_charges(problem.surface, solution, state, facets=problem.case.content.facets)
    forces = conductor_forces(charges, progress=progress)
    middle = time.perf_counter()
    peaks = peak_fields(charges)
    edges = edge_peaks(charges, [entry.edge_radius for entry in problem.case.content.conductor])
    document = loads_document(forces, peaks, solution.conductor_names, problem.case.content.unit, edges=edges)
    seconds = {"forces": middle - begin, "peak fields": time.perf_counter() - middle}
    if problem.case.content.air is not None:
        begin = time.perf_counter()
        document["strength"] = strength_document(problem, solution, state, document["surface_field"], progress=progress)
        seconds["strength"] = time.perf_counter() - begin
    sides = surface_sides(charges, two_sided_bodies(charges.surface, charges.creases))
    return document, seconds, np.array(sides)


def loads_document(
    forces: Forces,
    peaks: Sequence[PeakField],
    names: Sequence[str],
    unit: str | None,
    *,
    edges: Sequence[EdgePeak | None] | None = None,
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
    edges : sequence of daraf.bem EdgePeak or None, optional
        The strongest edge of each conductor.

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
        "surface_field": [_peak(one, None if edges is None else edges[one.conductor], names, unit) for one in peaks],
    }


def _peak(one: PeakField, edge: EdgePeak | None, names: Sequence[str], unit: str | None) -> dict[str, Any]:
    """Peak of a conductor; at a sharp edge with a stated radius that of the rounded edge."""
    told = {
        "conductor": names[one.conductor],
        "peak": float(one.peak),
        "uncertainty": None if one.uncertainty is None else float(one.uncertainty),
        "at": np.asarray(one.at).tolist(),
        "bounded": bool(one.bounded),
        "exponent": one.exponent,
        "edge_radius_needed": _radius_needed(one, unit),
    }
    if one.bounded or edge is None:
        return told
    told["edge"] = {
        "intensity": edge.edge.intensity,
        "uncertainty": edge.edge.uncertainty,
        "exponent": edge.edge.exponent,
        "unit": "V/m m^exponent",
        "at": list(edge.edge.at),
        "radius": edge.radius,
    }
    if edge.peak is not None:
        told |= {"peak": edge.peak, "uncertainty": edge.uncertainty, "at": list(edge.edge.at), "bounded": True}
        told |= {"exponent": edge.edge.exponent, "edge_radius_needed": None}
    return told


def _radius_needed(one: PeakField, unit: str | None) -> str | None:
    """Which edge must be rounded in the drawing before there is a number."""
    if one.bounded or one.edge_at is None:
        return None
    shown = unit or "m"
    place = ", ".join(f"{value / METRES_PER_UNIT[shown] + 0.0:.4g}" for value in one.edge_at)
    law = "" if one.exponent is None else f"; the peak then falls as radius^-{one.exponent:.2f}"
    until = "; until then it is a panel's mean and grows with refinement"
    return f"radius of the edge or tip at ({place}) {shown}{law}{until}"
