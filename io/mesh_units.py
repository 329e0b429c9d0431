"""Units of length that a mesh file may be drawn in."""

import difflib
import unicodedata

import numpy as np
from numpy.typing import NDArray

from daraf.bem.errors import InputError

__all__ = ["METRES_PER_UNIT", "box_in_plausible_units", "length_unit", "plausible_units", "size_text"]

#: Metres in one unit; the inch is 25.4 mm exactly (international yard and pound agreement, 1959).
METRES_PER_UNIT = {"m": 1.0, "cm": 1e-2, "mm": 1e-3, "um": 1e-6, "in": 0.0254, "mil": 2.54e-5, "ft": 0.3048}

_SYNONYMS = {
    "m": ("metre", "metres", "meter", "meters"),
    "cm": ("centimetre", "centimetres", "centimeter", "centimeters"),
    "mm": ("millimetre", "millimetres", "millimeter", "millimeters"),
    "um": ("μm", "micron", "microns", "micrometre", "micrometres", "micrometer", "micrometers"),
    "in": ("inch", "inches"),
    "mil": ("mils", "thou"),
    "ft": ("foot", "feet"),
}
_CANONICAL = {word: unit for unit, words in _SYNONYMS.items() for word in (unit, *words)}

#: A conductor assembly smaller or larger than this, in metres, is hardly meant.
_SMALLEST, _LARGEST = 1e-6, 1e3


def length_unit(text: str) -> str:
    """Short name of a unit of length.

    Parameters
    ----------
    text : str
        ``m, cm, mm, um, in, mil, ft`` or a full word such as ``micron`` or ``inches``; case is ignored.

    Returns
    -------
    str
        A key of `METRES_PER_UNIT`.

    Raises
    ------
    InputError
        If the unit is unknown.
    """
    word = unicodedata.normalize("NFKC", str(text)).strip().lower()
    if word in _CANONICAL:
        return _CANONICAL[word]
    near = difflib.get_close_matches(word, _CANONICAL, n=1)
    hint = f" (did you mean {near[0]!r}?)" if near else ""
    raise InputError(f"unit {text!r} is unknown{hint}: state one of {', '.join(METRES_PER_UNIT)}")


def plausible_units(diagonal: float) -> list[str]:
    """Units in which a model of this size would be between a micrometre and a kilometre across.

    Parameters
    ----------
    diagonal : float
        Diagonal of the bounding box, in the unit of the file.

    Returns
    -------
    list of str
        All units if none is plausible.
    """
    fit = [unit for unit, metres in METRES_PER_UNIT.items() if _SMALLEST <= diagonal * metres <= _LARGEST]
    return fit or list(METRES_PER_UNIT)


def size_text(extents: NDArray[np.float64]) -> str:
    """``40 x 20 x 1.6``: the sides of a box, four digits.

    Parameters
    ----------
    extents : (3,) float
    """
    return " x ".join(f"{value:.4g}" for value in extents)


def box_in_plausible_units(extents: NDArray[np.float64]) -> str:
    """The sides of a box as they would be, in metric lengths, in each plausible unit.

    Parameters
    ----------
    extents : (3,) float
        Sides in the unit of the file.

    Returns
    -------
    str
        ``mm: 40 x 20 x 1.6 mm; in: 1.016 x 0.508 x 0.04064 m; ...``.
    """
    parts = []
    for unit in plausible_units(float(np.linalg.norm(extents))):
        metres = extents * METRES_PER_UNIT[unit]
        shown = metric_unit(float(metres.max()))
        parts.append(f"{unit}: {size_text(metres / METRES_PER_UNIT[shown])} {shown}")
    return "; ".join(parts)


def metric_unit(metres: float) -> str:
    """Metric unit in which a length reads well: ``m``, ``mm`` or ``um``.

    Parameters
    ----------
    metres : float, m
    """
    if metres >= 1.0:
        return "m"
    return "mm" if metres >= 1e-3 else "um"
