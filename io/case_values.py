"""Values of a case file as pydantic types: quantities turned into SI, places, names, choices."""

import math
import re
from typing import Annotated, Any

from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict, WithJsonSchema

from daraf.bem.errors import InputError
from daraf.bem.facets import FACETS, facet_meaning

from .facet_tolerance import FacetTolerance, parse_facet_tolerance
from .mesh_units import length_unit
from .units import KINDS, parse_quantity

__all__ = [
    "Accuracy",
    "Axis",
    "BodyChoice",
    "Coarsening",
    "Facets",
    "Facetting",
    "Name",
    "Point",
    "PositiveLength",
    "Table",
    "Unit",
    "above_zero",
    "not_negative",
    "parse_accuracy",
    "quantity",
]

_NUMBER = r"([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)"
_THREE_NUMBERS = re.compile(rf"{_NUMBER}[,\s]\s*{_NUMBER}[,\s]\s*{_NUMBER}\s*([a-zA-Zµμ]+)")


def quantity(kind: str, **limits: float) -> Any:
    """Annotated float that takes a number in SI or text with a unit."""
    unit, example = KINDS[kind]
    text = f"{kind}: a number in {unit or '1'} or text with a unit, such as {example!r}"
    schema = {"anyOf": [{"type": "number"}, {"type": "string"}], "description": text}
    return Annotated[float, BeforeValidator(lambda value: parse_quantity(value, kind)), WithJsonSchema(schema | limits)]


def _point(value: Any) -> tuple[float, float, float]:
    """Three lengths: a list of three, or text such as "0 0 2.5 mm"."""
    example = "write three lengths such as '0 0 2.5 mm' or ['0 mm', '0 mm', '2.5 mm']"
    if isinstance(value, str):
        found = _THREE_NUMBERS.fullmatch(value.strip())
        if not found:
            raise InputError(f"{value!r} is no place or shift; {example}")
        value = [f"{found[k]} {found[4]}" for k in (1, 2, 3)]
    if not isinstance(value, list | tuple) or len(value) != 3:
        raise InputError(f"{value!r} is no place or shift; {example}")
    x, y, z = (parse_quantity(item, "length") for item in value)
    return x, y, z


def _axis(value: Any) -> tuple[float, float, float]:
    named = {"x": (1.0, 0.0, 0.0), "y": (0.0, 1.0, 0.0), "z": (0.0, 0.0, 1.0)}
    if isinstance(value, str) and value in named:
        return named[value]
    fits = isinstance(value, list | tuple) and len(value) == 3
    if not fits or not all(isinstance(item, int | float) and not isinstance(item, bool) for item in value):
        raise InputError(f"{value!r} is no axis; write 'x', 'y', 'z' or three numbers such as [0, 0, 1]")
    length = math.hypot(*value)
    if not math.isfinite(length) or length == 0.0:
        raise InputError(f"axis {value!r} must be finite and not zero")
    x, y, z = (float(item) / length for item in value)
    return x, y, z


def _bodies(value: Any) -> tuple[str | int, ...]:
    """Choice of bodies as a tuple of names and numbers; empty for all of the file."""
    if value == "all":
        return ()
    chosen = value if isinstance(value, list | tuple) else [value]
    for item in chosen:
        if isinstance(item, bool) or not isinstance(item, str | int):
            raise InputError(f"{item!r} chooses no body; write a name, a number from 1, a list of these, or 'all'")
    if not chosen:
        raise InputError("an empty list chooses no body; leave the key out for all bodies of the file")
    return tuple(chosen)


def _unit(value: Any) -> str:
    if not isinstance(value, str):
        raise InputError(f"{value!r} is no unit; write text such as 'mm'")
    return length_unit(value)


def _name(value: Any) -> str:
    if not isinstance(value, str) or not value.strip() or not value.isprintable() or len(value) > 80:
        raise InputError(f"{value!r} is no name; write 1 to 80 printable characters")
    return value.strip()


def parse_accuracy(value: Any) -> float:
    """Relative accuracy as a fraction, of a number or of text such as "0.5 %".

    Raises
    ------
    InputError
        If it is no ratio from 1e-6 to 0.5.
    """
    number = parse_quantity(value, "ratio")
    if not 1e-6 <= number <= 0.5:
        meant = f"{number:g} %" if 0.5 < number <= 50.0 else "1 %"
        raise InputError(
            f"accuracy {value!r} is outside 0.0001 % to 50 %; write text such as {meant!r} "
            f"({parse_quantity(meant, 'ratio'):g} is the same)"
        )
    return number


def _facets(value: Any) -> str:
    if value is True:
        return "as drawn"
    if isinstance(value, str):
        return facet_meaning(value)
    raise InputError(f"{value!r} does not say what facets are; write one of {', '.join(map(repr, FACETS))}")


def _positive(value: float) -> float:
    if value <= 0.0:
        raise InputError(f"{value:g} m is no size; write a length above 0 such as '0.01 mm'")
    return value


def not_negative(value: float) -> float:
    """The value of a loss; InputError if it is below zero."""
    if value < 0.0:
        raise InputError(f"{value:g} is below 0; losses are 0 or more")
    return value


def above_zero(value: float) -> float:
    """The frequency; InputError if it is not above zero."""
    if value <= 0.0:
        raise InputError(f"{value:g} Hz is no frequency of a loss; write one above 0 such as '50 Hz'")
    return value


def _coarsening(value: Any) -> float | str:
    if value in ("auto", "no"):
        return str(value)
    if value is False:
        return "no"
    try:
        return _positive(parse_quantity(value, "length"))
    except InputError:
        raise InputError(f"{value!r} says no coarsening; write 'auto', 'no' or a length such as '5 um'") from None


_THREE_LENGTHS = {
    "anyOf": [
        {"type": "string"},
        {"type": "array", "minItems": 3, "maxItems": 3, "items": {"type": ["number", "string"]}},
    ],
    "description": "three lengths: '0 0 2.5 mm', or a list of three; bare numbers are metres",
}
_AXIS = {
    "anyOf": [
        {"enum": ["x", "y", "z"]},
        {"type": "array", "minItems": 3, "maxItems": 3, "items": {"type": "number"}},
    ],
    "description": "'x', 'y', 'z' or a direction",
}
_BODY_CHOICE = {
    "anyOf": [
        {"type": "string"},
        {"type": "integer"},
        {"type": "array", "items": {"type": ["string", "integer"]}},
    ],
    "description": "name, number from 1 in the order of `daraf inspect`, a list of these, or 'all'",
}
Point = Annotated[tuple[float, float, float], BeforeValidator(_point), WithJsonSchema(_THREE_LENGTHS)]
Axis = Annotated[tuple[float, float, float], BeforeValidator(_axis), WithJsonSchema(_AXIS)]
BodyChoice = Annotated[tuple[str | int, ...], BeforeValidator(_bodies), WithJsonSchema(_BODY_CHOICE)]
Unit = Annotated[str, BeforeValidator(_unit), WithJsonSchema({"type": "string", "examples": ["mm", "in"]})]
Name = Annotated[str, BeforeValidator(_name), WithJsonSchema({"type": "string", "minLength": 1, "maxLength": 80})]
Facets = Annotated[
    str,
    BeforeValidator(_facets),
    WithJsonSchema(
        {
            "enum": list(FACETS),
            "description": "auto: facets in rows that turn by up to 35 degrees stand for a round surface, and what was "
            "assumed is told; round: by up to 50 degrees; as drawn: the facets are the part",
        }
    ),
]
Accuracy = Annotated[
    float,
    BeforeValidator(parse_accuracy),
    WithJsonSchema({"type": ["number", "string"], "description": "relative, such as '1 %'"}),
]


Facetting = Annotated[
    FacetTolerance,
    BeforeValidator(parse_facet_tolerance),
    WithJsonSchema(
        {
            "anyOf": [{"type": "number"}, {"type": "string"}],
            "description": "largest distance of facets from curved shapes (STEP): '0.02 mm', or '0.1 %' of the size",
        }
    ),
]
PositiveLength = Annotated[quantity("length"), AfterValidator(_positive)]  # type: ignore[valid-type]
Coarsening = Annotated[
    float | str,
    BeforeValidator(_coarsening),
    WithJsonSchema(
        {
            "anyOf": [{"enum": ["auto", "no"]}, {"type": ["number", "string"]}],
            "description": "auto: over-fine round parts of models too large otherwise; no: never; a length: within it",
        }
    ),
]


class Table(BaseModel):
    """A table of the case file: no other keys, nothing changes."""

    model_config = ConfigDict(extra="forbid", frozen=True)
