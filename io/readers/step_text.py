"""What the text of a STEP file (ISO 10303-21) says by itself: its unit of length (ISO 10303-41) and its points."""

import re
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from daraf.bem.errors import InputError

from ..mesh_units import METRES_PER_UNIT

__all__ = ["StepUnit", "count_faces", "point_span", "step_unit"]

#: All patterns are bounded: what a damaged file repeats a million times must not be searched a million times.
_STRING = re.compile(rb"'(?:[^']|'')*'")
_CONTEXT = re.compile(rb"GLOBAL_UNIT_ASSIGNED_CONTEXT\s{0,9}\(\s{0,9}\(([^()]{0,999})\)\s{0,9}\)")
_SI = re.compile(rb"SI_UNIT\s*\(\s*(?:\*\s*,\s*)?(\$|\.\w+\.)\s*,\s*\.METRE\.\s*\)")
_CONVERSION = re.compile(rb"CONVERSION_BASED_UNIT\s*\([^,]*,\s*#(\d{1,15})\s*\)")
_MEASURE = re.compile(rb"MEASURE_WITH_UNIT\s*\(\s*(?:\w+\s*\(\s*)?([-+0-9.E]+)\s*\)?\s*,\s*#(\d{1,15})\s*\)")
_POINT = re.compile(rb"CARTESIAN_POINT\s{0,9}\([^,]{0,999},\s{0,9}\(([-+0-9.E,\s]{1,199})\)")
_ROUND = re.compile(
    rb"(?:CIRCLE|SPHERICAL_SURFACE|CYLINDRICAL_SURFACE)\s{0,9}\([^,]{0,999},\s{0,9}#\d{1,15}\s{0,9},"
    rb"\s{0,9}([-+0-9.E]{1,40})"
)
_FACE = re.compile(rb"\b(?:ADVANCED_FACE|FACE_SURFACE)\s{0,9}\(")
_SOLID = re.compile(rb"\b(?:MANIFOLD_SOLID_BREP|BREP_WITH_VOIDS|FACETED_BREP)\s{0,9}\(")
_ENTITY = re.compile(rb"\s*#(\d{1,15})\s*=(.*)", re.DOTALL)

_PREFIXES = {
    b"$": 1.0,
    b".KILO.": 1e3,
    b".DECI.": 0.1,
    b".CENTI.": 1e-2,
    b".MILLI.": 1e-3,
    b".MICRO.": 1e-6,
    b".NANO.": 1e-9,
}
#: Units built on units: an inch on a millimetre is one step; more are a circle.
_DEEPEST = 4


@dataclass(frozen=True)
class StepUnit:
    """Unit of length of a file.

    Attributes
    ----------
    metres : float, m
        In one unit in which its geometry is handed on.
    name : str or None
        Of that unit; None if the file names none, and then the kernel takes millimetres.
    own : float, m
        In one unit of the file itself.
    said : str or None
        The file's own unit where that is another one.
    """

    metres: float
    name: str | None
    own: float
    said: str | None = None


def step_unit(path: Path, data: bytes) -> StepUnit:
    """Unit of length by the units that the representation contexts of the file assign.

    Parameters
    ----------
    path : Path
    data : bytes

    Returns
    -------
    StepUnit

    Raises
    ------
    InputError
        If a unit cannot be understood.
    """
    text = _STRING.sub(b"''", _without_comments(data))
    units = _units(text)
    found: list[float] = []
    for context in _CONTEXT.finditer(text):
        for number in re.findall(rb"#(\d{1,15})", context[1]):
            if b"LENGTH_UNIT" not in units.get(int(number), b""):
                continue
            metres = _metres(path, units, int(number))
            if metres not in found:
                found.append(metres)
    if not found:
        return StepUnit(METRES_PER_UNIT["mm"], None, METRES_PER_UNIT["mm"])
    for name, metres in METRES_PER_UNIT.items():
        if abs(found[0] / metres - 1.0) < 1e-9:
            said = " and ".join(f"{one:.6g} m" for one in found) if len(found) > 1 else None
            return StepUnit(metres, name, metres, said)
    return StepUnit(METRES_PER_UNIT["mm"], "mm", found[0], f"{found[0]:.6g} m")


def _without_comments(data: bytes) -> bytes:
    pieces = data.split(b"/*")
    return b" ".join([pieces[0], *(piece.partition(b"*/")[2] for piece in pieces[1:])])


def _units(text: bytes) -> dict[int, bytes]:
    """All entities that say something about a unit, by number."""
    units = {}
    for piece in text.split(b";"):
        found = _ENTITY.match(piece) if b"_UNIT" in piece else None
        if found:
            units[int(found[1])] = found[2].upper()
    return units


def _metres(path: Path, units: dict[int, bytes], number: int, depth: int = 0) -> float:
    """Metres in a unit by its number."""
    entry = units.get(number, b"")
    plain = _SI.search(entry)
    if plain and plain[1] in _PREFIXES:
        return _PREFIXES[plain[1]]
    built = _CONVERSION.search(entry)
    measure = built and _MEASURE.search(units.get(int(built[1]), b""))
    if measure and depth < _DEEPEST:
        try:
            metres = float(measure[1]) * _metres(path, units, int(measure[2]), depth + 1)
        except ValueError:
            metres = 0.0
        if 0.0 < metres < float("inf"):
            return metres
    raise InputError(f"{path}: its unit of length (entity #{number}) cannot be understood; export it again")


def point_span(data: bytes, metres: float) -> float:
    """Diagonal of the box about all points in the text and the round things at them: about the size, m.

    Parameters
    ----------
    data : bytes
    metres : float, m
        In one unit of the file.

    Returns
    -------
    float, m
        0 if there are no points.
    """
    points = [_three(found[1]) for found in _POINT.finditer(data)]
    if not points:
        return 0.0
    spans = np.ptp(np.array(points), axis=0)
    radii = [radius for found in _ROUND.finditer(data) if (radius := abs(_number(found[1]))) <= spans.max()]
    return float(np.linalg.norm(spans + 2.0 * max(radii, default=0.0))) * metres


def count_faces(data: bytes) -> tuple[int, int]:
    """Faces and solids that the text describes.

    Parameters
    ----------
    data : bytes

    Returns
    -------
    n_faces, n_solids : int
    """
    return len(_FACE.findall(data)), len(_SOLID.findall(data))


def _three(text: bytes) -> list[float]:
    numbers = [_number(word) for word in text.split(b",")]
    return [*numbers, 0.0, 0.0][:3]


def _number(text: bytes) -> float:
    try:
        number = float(text)
    except ValueError:
        return 0.0
    return number if abs(number) < 1e300 else 0.0
