"""An inspection as plain numbers, lists and words, ready for JSON."""

from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from .inspection import BodyReport, Inspection, Spread

__all__ = ["inspection_to_dict"]


def inspection_to_dict(inspection: "Inspection") -> dict[str, Any]:
    """The inspection as plain numbers, lists and words, ready for JSON; lengths in m.

    Parameters
    ----------
    inspection : Inspection

    Returns
    -------
    dict
        ``length_unit`` is ``"m"``, or ``"file"`` if the unit of the files is not known.
    """
    return {
        "files": inspection.files,
        "unit": inspection.unit,
        "length_unit": "m" if inspection.unit else "file",
        "bodies": [_body_to_dict(body) for body in inspection.bodies],
    }


def _body_to_dict(body: "BodyReport") -> dict[str, Any]:
    return {
        "number": body.number,
        "name": body.name,
        "file": body.file,
        "panels": body.panels,
        "closed": body.closed,
        "boundary_loops": body.loops,
        "box": {"low": body.box[0].tolist(), "high": body.box[1].tolist()},
        "area": body.area,
        "volume": body.volume,
        "edge_length": _spread_to_dict(body.edges),
        "aspect_ratio": _spread_to_dict(body.aspect),
        "gaps": [
            {
                "other": gap.other,
                "distance": gap.distance,
                "at": list(gap.place),
                "at_other": list(gap.place_other),
            }
            for gap in body.gaps
        ],
        "faults": [
            {
                "code": fault.code,
                "severity": fault.severity,
                "count": fault.count,
                "at": None if fault.place is None else list(fault.place),
                "text": fault.text,
                "remedy": fault.remedy,
            }
            for fault in body.faults
        ],
        "changes": [
            {
                "code": note.code,
                "count": note.count,
                "at": None if note.place is None else list(note.place),
                "moved": note.moved,
                "text": note.text,
            }
            for note in body.notes
        ],
    }


def _spread_to_dict(spread: "Spread") -> dict[str, float | None]:
    finite = np.isfinite(spread.largest)
    return {
        "min": spread.smallest if finite else None,
        "median": spread.median if finite else None,
        "max": spread.largest if finite else None,
    }
