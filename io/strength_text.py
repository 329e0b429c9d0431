"""The table of margins to corona and breakdown."""

from collections.abc import Callable
from typing import Any

from .units import engineering, rounded

__all__ = ["strength_table"]


def strength_table(document: dict[str, Any], wrapped: Callable[[str], list[str]]) -> list[str]:
    """Lines about the strength of the air.

    Parameters
    ----------
    document : dict
        Content of `result.json`.
    wrapped : callable
        Breaks a text into lines.

    Returns
    -------
    list of str
        None where it was not asked.
    """
    record = document.get("strength")
    if not record:
        return []
    lines = [f"Strength in air, relative density {record['relative_density']:.3f}"]
    lines += wrapped("margins: factors by which all potentials may rise; below 1 it is exceeded")
    for one in record["conductors"]:
        over = f" to {one['opposite']}" if one["opposite"] else ", field line leaves"
        gap = "" if one["gap"] is None else f", gap {engineering(one['gap'], 'm')}"
        lines.append(f"{one['conductor']}{over}: {engineering(one['voltage'], 'V')}{gap}")
        shape = {"sphere": "sphere", "parallel wires": "wire"}.get(one["peek_shape"], one["peek_shape"])
        radius = "" if one["radius"] is None else f", {shape} of radius {engineering(one['radius'], 'm')}"
        for key, word in (
            ("utilisation", "utilisation of the gap"),
            ("streamer", "margin to streamer inception"),
            ("peek", f"margin to visual corona (Peek{radius})"),
            ("withstand", "margin to the stated gradient"),
        ):
            if one[key] is not None:
                value, spread = rounded(one[key]["value"], one[key]["uncertainty"], 0)
                lines += wrapped(f"  {word} {value} ± {spread}")
    if record["not_screened"]:
        names = ", ".join(record["not_screened"])
        lines += wrapped(f"not screened, sharp edges without a stated edge_radius: {names}")
    return [*lines, *wrapped(f"caution: {record['caution']}")]
