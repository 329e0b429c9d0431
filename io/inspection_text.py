"""An inspection as text, 80 columns wide."""

import textwrap
from math import ceil, log10
from pathlib import Path
from typing import TYPE_CHECKING

from .bodies import Fault
from .faults import needs_mending
from .mesh_units import METRES_PER_UNIT, length_unit, metric_unit, plausible_units, size_text

if TYPE_CHECKING:
    from .inspection import BodyReport, Inspection, Spread

__all__ = ["inspection_to_text"]

_WIDTH = 80
_LABEL = 11
_GAPS_SHOWN = 6
_MARKS = {"note": "·", "warning": "!", "error": "x"}


def inspection_to_text(inspection: "Inspection", unit: str | None = None) -> str:
    """Describe every body, one paragraph each, and end with a verdict.

    Parameters
    ----------
    inspection : Inspection
    unit : str, optional
        Unit to show lengths in; that of the files by default. Where the files have none, box and area are
        shown in each plausible unit and the rest in the unit of the files.

    Returns
    -------
    str
    """
    shown = inspection.unit if unit is None or inspection.unit is None else length_unit(unit)
    low, high = inspection.box
    ruler = _Ruler(shown, float(((high - low) ** 2).sum() ** 0.5))
    count = sum(body.panels for body in inspection.bodies)
    names = ", ".join(Path(file).name for file in inspection.files)
    bodies = _many(len(inspection.bodies), "body", "bodies")
    lines = _wrap(f"{names}: {bodies}, {_many(count, 'panel')}, {ruler.said}", "")
    if shown is None:
        lines += ["", *_in_plausible_units(inspection)]
    for body in inspection.bodies:
        lines += ["", *_body(body, ruler)]
    lines += ["", *_wrap(_verdict(inspection), "")]
    return "\n".join(lines) + "\n"


class _Ruler:
    """Lengths as text in one unit."""

    def __init__(self, unit: str | None, size: float) -> None:
        self.factor = 1.0 if unit is None else 1.0 / METRES_PER_UNIT[unit]
        self.unit = "" if unit is None else f" {unit}"
        self.said = "unit unknown" if unit is None else f"lengths in {unit}"
        self.size = size
        self.name = unit

    def length(self, metres: float) -> str:
        return f"{metres * self.factor:.4g}{self.unit}"

    def place(self, metres: tuple[float, float, float]) -> str:
        """Five digits, more where the model lies far off; what is nothing beside the model is 0."""
        far = max(abs(x) for x in metres) / self.size if self.size > 0.0 else 1.0
        digits = 5 + ceil(log10(far)) if far > 1.0 else 5
        kept = (x * self.factor if abs(x) > 1e-9 * self.size else 0.0 for x in metres)
        return "(" + ", ".join(f"{x:.{digits}g}" for x in kept) + ")"

    def spread(self, spread: "Spread") -> str:
        values = " / ".join(f"{v * self.factor:.3g}" for v in (spread.smallest, spread.median, spread.largest))
        return f"{values}{self.unit}"

    def power(self, value: float, exponent: int) -> str:
        unit = f"{self.unit}{exponent}" if self.unit else ""
        return f"{_number(value * self.factor**exponent)}{unit}"


def _in_plausible_units(inspection: "Inspection") -> list[str]:
    """Box and area as they would be in each unit that gives a sensible size."""
    low, high = inspection.box
    extents = high - low
    area = sum(body.area for body in inspection.bodies)
    lines = [f"Without a unit, {size_text(extents)} could be", ""]
    for unit in plausible_units(float((extents**2).sum() ** 0.5)):
        metres = METRES_PER_UNIT[unit]
        shown = metric_unit(float(extents.max()) * metres)
        size = size_text(extents * metres / METRES_PER_UNIT[shown])
        square = area * (metres / METRES_PER_UNIT[shown]) ** 2
        lines.append(f"  if {unit:<3}  {size + ' ' + shown:<38} area {_number(square)} {shown}2")
    return [*lines, "", *_wrap("State the unit with --unit. Lengths below are in the unit of the files.", "")]


def _body(body: "BodyReport", ruler: _Ruler) -> list[str]:
    if body.closed:
        state = "closed"
    else:
        state = f"open sheet, {_many(body.loops, 'boundary loop')}; carries both sides together"
    lines = _wrap(f"{body.number}  {body.name}  ({_many(body.panels, 'panel')}, {state})", "   ")
    low, high = body.box
    box = f"{size_text((high - low) * ruler.factor)}{ruler.unit}"
    lines += _labelled("box", f"{box}, from {ruler.place(tuple(low))} to {ruler.place(tuple(high))}")
    content = "" if body.volume is None else f", volume {ruler.power(body.volume, 3)}"
    lines += _labelled("area", ruler.power(body.area, 2) + content)
    lines += _labelled("edges", f"{ruler.spread(body.edges)} (smallest, median, largest)")
    aspect = " / ".join(f"{v:.3g}" for v in (body.aspect.smallest, body.aspect.median, body.aspect.largest))
    lines += _labelled("aspect", f"{aspect} (longest edge over the height upon it)")
    for k, gap in enumerate(body.gaps[:_GAPS_SHOWN]):
        text = f"{ruler.length(gap.distance)} to {gap.other}, at {ruler.place(gap.place)}"
        lines += _labelled("gap" if k == 0 else "", text)
    if len(body.gaps) > _GAPS_SHOWN:
        lines += _labelled("", f"and {_many(len(body.gaps) - _GAPS_SHOWN, 'wider one')}")
    for note in body.notes:
        lines += _labelled("changed", note.said(ruler.name))
    if not any(fault.severity != "note" for fault in body.faults):
        lines += _labelled("faults", "none")
    for fault in body.faults:
        lines += _fault(fault, ruler)
    return lines


def _fault(fault: Fault, ruler: _Ruler) -> list[str]:
    where = "" if fault.place is None else f", {'first ' if fault.count > 1 else ''}at {ruler.place(fault.place)}"
    text = f"{fault.text}{where}: {fault.remedy}"
    return _wrap(f"   {_MARKS[fault.severity]} {text}", "     ")


def _verdict(inspection: "Inspection") -> str:
    severities = [{fault.severity for fault in body.faults} for body in inspection.bodies]
    broken = [b.name for b, s in zip(inspection.bodies, severities, strict=True) if "error" in s]
    doubtful = [b.name for b, s in zip(inspection.bodies, severities, strict=True) if "warning" in s - {"error"}]
    refused = [body.name for body in inspection.bodies if any(needs_mending(fault) for fault in body.faults)]
    if refused and inspection.mend == "list":
        return f"A solve that may change nothing refuses {', '.join(refused)}: mend in CAD, or allow safe mending."
    if broken:
        return f"To be mended before a solve can be trusted: {', '.join(broken)}."
    if doubtful:
        meet = any(f.code.endswith("-other") and f.severity == "warning" for b in inspection.bodies for f in b.faults)
        more = " Bodies that meet must be one conductor: a case file says so." if meet else ""
        return f"Fit to solve, with remarks on {', '.join(doubtful)}.{more}"
    return "Fit to solve."


def _number(value: float) -> str:
    """Five digits, without a power of ten where a reader can do without."""
    if 1e5 <= abs(value) < 1e9:
        return f"{float(f'{value:.4e}'):,.0f}"
    return f"{value:.5g}"


def _labelled(label: str, text: str) -> list[str]:
    return _wrap(f"   {label:<{_LABEL - 3}}{text}", " " * _LABEL)


def _wrap(text: str, indent: str) -> list[str]:
    return textwrap.wrap(text, _WIDTH, subsequent_indent=indent, break_on_hyphens=False, drop_whitespace=True) or [""]


def _many(count: int, thing: str, things: str = "") -> str:
    return f"{count:,} {thing if count == 1 else things or thing + 's'}"
