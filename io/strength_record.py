"""How far an arrangement in air is from corona and breakdown, in the words of `result.json`."""

from typing import Any

import numpy as np

from daraf.bem.constants import FOUR_PI_EPSILON_0
from daraf.bem.network import Excitation
from daraf.bem.screening import PeakPlace, Screening
from daraf.bem.solution import CapacitanceSolution

from .problem import Problem
from .progress import ProgressCallback

__all__ = ["CAUTION", "strength_document"]

#: Stands in every output about strength.
CAUTION = (
    "screening of a clean, dry, smooth geometry at peak values of potential, no design rule: surface condition, "
    "humidity, polarity, transients, insulating surfaces and triple junctions lower the strength; high voltage kills. "
    "Design and test to the applicable standard by qualified people"
)


def strength_document(
    problem: Problem,
    solution: CapacitanceSolution,
    state: Excitation,
    surface_field: list[dict[str, Any]],
    *,
    progress: ProgressCallback | None = None,
) -> dict[str, Any]:
    """Compute utilisation and margins of every conductor with a known peak field.

    Parameters
    ----------
    problem : Problem
        With a table of air.
    solution : CapacitanceSolution
    state : Excitation
    surface_field : list of dict
        The key of `result.json`.
    progress : callable, optional
        ``progress(stage, done, total, note)``.

    Returns
    -------
    dict
    """
    # Here, not above: numba.
    from daraf.bem.meaning import surface_meaning
    from daraf.bem.probing import charged_panels
    from daraf.bem.screening import screen
    from daraf.bem.strength import relative_air_density

    air = problem.case.content.air
    assert air is not None
    density = relative_air_density(air.pressure, air.temperature)
    meaning = surface_meaning(problem.surface, solution.panels, solution.facets)
    charged = charged_panels(
        solution.panels,
        solution.densities,
        state,
        FOUR_PI_EPSILON_0 * solution.relative_permittivity,
        fill=meaning.fill,
        facet_offset=meaning.facet_offset,
        previous=solution.previous,
    )
    names = list(solution.conductor_names)
    places = [_place(names.index(one["conductor"]), one) for one in surface_field if one["bounded"]]

    def told(done: float, total: float) -> None:
        if progress is not None:
            progress("strength", done, total)

    found = screen(charged, places, density, withstand=air.withstand, progress=told)
    spread = {place.conductor: place.uncertainty / place.peak for place in places if place.peak > 0.0}
    return {
        "caution": CAUTION,
        "gas": "air",
        "relative_density": density,
        "pressure": {"unit": "Pa", "value": air.pressure},
        "temperature": {"unit": "K", "value": air.temperature},
        "withstand": {"unit": "V/m", "value": air.withstand},
        "conductors": [_margins(one, names, spread[one.conductor]) for one in found],
        "not_screened": [one["conductor"] for one in surface_field if not one["bounded"]],
    }


def _place(conductor: int, one: dict[str, Any]) -> PeakPlace:
    edge = one.get("edge") or {}
    x, y, z = one["at"]
    return PeakPlace(conductor, one["peak"], one["uncertainty"], (x, y, z), edge.get("radius"), one["exponent"])


def _margins(one: Screening, names: list[str], spread: float) -> dict[str, Any]:
    """Margins with the relative uncertainty of the peak, which is what they mostly hang on."""
    told: dict[str, Any] = {
        "conductor": names[one.conductor],
        "opposite": names[one.opposite] if one.opposite >= 0 else None,
        "voltage": one.voltage,
        "gap": one.gap,
        "radius": None if one.radius is None or not np.isfinite(one.radius) else one.radius,
        "peek_shape": one.peek_shape,
    }
    for key in ("utilisation", "streamer", "peek", "withstand"):
        value = getattr(one, key)
        told[key] = None if value is None else {"value": float(value), "uncertainty": float(value * spread)}
    return told
