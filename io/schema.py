"""What may stand in a case file: pydantic models, quantities turned into SI.

The models say what is allowed and check what can be seen without opening a surface file. `daraf.io.case`
reads the TOML file and turns the complaints of pydantic into one line each.
"""

import math
import re
from typing import Annotated, Any, Literal, Self

from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict, Field, StrictBool, WithJsonSchema
from pydantic import model_validator as whole

from daraf.bem.errors import InputError
from daraf.bem.facets import FACETS, facet_meaning

from .facet_tolerance import FacetTolerance, parse_facet_tolerance
from .mesh_units import length_unit
from .units import KINDS, parse_quantity

__all__ = [
    "NOT_YET",
    "Air",
    "CaseContent",
    "ConductorEntry",
    "Medium",
    "Part",
    "Rotation",
    "json_schema",
    "parse_accuracy",
]

#: Keys that later versions solve, by table, with the words for the message. Never ignored silently.
NOT_YET = {
    "": {
        "dielectric": "dielectric bodies",
        "dielectrics": "dielectric bodies",
        "mirror": "mirror planes",
        "mirrors": "mirror planes",
        "mirror_plane": "mirror planes",
        "half_space": "a dielectric or earth half-space",
        "earth": "a dielectric or earth half-space",
        "given_charge": "given charges",
        "given_charges": "given charges",
        "external_field": "an external field",
        "field": "an external field",
        "probe": "probes",
        "probes": "probes",
        "variation": "variations",
        "variations": "variations",
    },
    "medium": {"loss_tangent": "losses of the medium", "conductivity": "a conducting medium"},
}


_NUMBER = r"([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)"
_THREE_NUMBERS = re.compile(rf"{_NUMBER}[,\s]\s*{_NUMBER}[,\s]\s*{_NUMBER}\s*([a-zA-Zµμ]+)")


def _quantity(kind: str, **limits: float) -> Any:
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
PositiveLength = Annotated[_quantity("length"), AfterValidator(_positive)]  # type: ignore[valid-type]
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


class _Table(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


class Rotation(_Table):
    """Turn by an angle about an axis through a point (right-hand rule)."""

    angle: _quantity("angle")  # type: ignore[valid-type]
    axis: Axis
    about: Point = (0.0, 0.0, 0.0)


class Part(_Table):
    """Bodies of one surface file, placed: first the rotation, then the shift."""

    surface: str = Field(min_length=1, description="surface file, relative to the case file")
    unit: Unit | None = Field(None, description="unit of this file if it differs from the case's")
    facet_tolerance: Facetting | None = None
    body: BodyChoice = ()
    rotation: Rotation | None = None
    shift: Point = (0.0, 0.0, 0.0)


class ConductorEntry(_Table):
    """One conductor: its surface (or its parts), and its potential, its charge or ground."""

    name: Name
    surface: str | None = Field(None, min_length=1, description="surface file, relative to the case file")
    unit: Unit | None = Field(None, description="unit of this file if it differs from the case's")
    facet_tolerance: Facetting | None = None
    body: BodyChoice = ()
    rotation: Rotation | None = None
    shift: Point = (0.0, 0.0, 0.0)
    part: tuple[Part, ...] = Field((), description="several surfaces that make one conductor")
    potential: _quantity("voltage") | None = None  # type: ignore[valid-type]
    charge: _quantity("charge") | None = Field(None, description="floating: the total charge is given")  # type: ignore[valid-type]
    ground: StrictBool = False
    edge_radius: _quantity("length") | None = Field(  # type: ignore[valid-type]
        None, description="of all its sharp convex edges, for the peak field; half the thickness of a sheet"
    )

    @whole(mode="after")
    def _check(self) -> Self:
        stated = self.stated
        if self.edge_radius is not None and self.edge_radius <= 0.0:
            raise InputError("edge_radius must be positive; leave it out for a sharp edge")
        if len(stated) > 1:
            raise InputError(f"{' and '.join(stated)} are both given; keep one of potential, charge, ground")
        placed = self.model_fields_set & {"unit", "facet_tolerance", "body", "rotation", "shift"}
        if self.part and (self.surface or placed):
            extra = ", ".join(sorted(placed | ({"surface"} if self.surface else set())))
            raise InputError(f"{extra} given beside 'part'; move that into the parts")
        if not self.part and not self.surface:
            raise InputError("'surface' is missing; name the surface file")
        return self

    @property
    def stated(self) -> list[str]:
        """Which of potential, charge and ground are given."""
        values = {"potential": self.potential, "charge": self.charge, "ground": self.ground or None}
        return [key for key, value in values.items() if value is not None]

    @property
    def parts(self) -> tuple[Part, ...]:
        """The parts; a conductor of one surface has one."""
        if self.part:
            return self.part
        assert self.surface is not None
        return (
            Part.model_construct(
                surface=self.surface,
                unit=self.unit,
                facet_tolerance=self.facet_tolerance,
                body=self.body,
                rotation=self.rotation,
                shift=self.shift,
            ),
        )


class Medium(_Table):
    """What fills the space around the conductors."""

    relative_permittivity: float = Field(1.0, ge=1.0, le=1e5, allow_inf_nan=False)


class Air(_Table):
    """Air round the conductors: its table asks how far the potentials are from corona and breakdown."""

    pressure: _quantity("pressure") = 101325.0  # type: ignore[valid-type]
    temperature: _quantity("temperature") = 293.15  # type: ignore[valid-type]
    withstand: _quantity("field") | None = Field(  # type: ignore[valid-type]
        None, description="gradient, peak value, that a surface may carry"
    )

    @whole(mode="after")
    def _check(self) -> Self:
        for key, low, high in (("pressure", 1e3, 1e6), ("temperature", 200.0, 400.0)):
            value = getattr(self, key)
            if not low <= value <= high:
                raise InputError(f"{key} {value:g} is outside {low:g} to {high:g} in SI, where the laws of air hold")
        if self.withstand is not None and self.withstand <= 0.0:
            raise InputError("withstand must be positive; leave it out if there is no such limit")
        return self


class CaseContent(_Table):
    """A case: conductors in a medium and the accuracy asked."""

    title: str = Field("", max_length=200)
    unit: Unit | None = Field(None, description="length unit of the surface files that carry none")
    facet_tolerance: Facetting | None = None
    accuracy: Accuracy = 0.01
    facets: Facets = "auto"
    method: Literal["auto", "dense", "fast"] = Field(
        "auto",
        description="how the equations are solved: dense (full matrix), fast (multipoles, iteration), auto: by size",
    )
    mend: Literal["list", "safe", "bold"] = Field(
        "safe",
        description="list: change nothing, refuse what is not fit; safe: only what keeps the shape; "
        "bold: also sew visible cracks and close small holes",
    )
    mend_within: PositiveLength | None = Field(None, description="nothing moves farther than this")  # type: ignore[valid-type]
    close_holes: PositiveLength | None = Field(None, description="largest hole that bold closes")  # type: ignore[valid-type]
    coarsen: Coarsening = "auto"
    want: tuple[tuple[str, str], ...] = Field(
        (), description="couplings that must meet the accuracy, as pairs of conductors; all if left out"
    )
    sensitivities: StrictBool = Field(
        False, description="also tell how the capacitances move when a body is shifted, turned or grows"
    )
    medium: Medium = Medium(relative_permittivity=1.0)
    air: Air | None = None
    conductor: tuple[ConductorEntry, ...] = Field(min_length=1)

    @whole(mode="after")
    def _check(self) -> Self:
        seen: set[str] = set()
        for entry in self.conductor:
            if entry.name in seen:
                raise InputError(f"two conductors are named {entry.name!r}; give each its own name")
            seen.add(entry.name)
        for name in (name for pair in self.want for name in pair):
            if name not in seen:
                known = ", ".join(repr(entry.name) for entry in self.conductor)
                raise InputError(f"want: no conductor is named {name!r}; there are {known}")
        if self.air is not None and not self.conductor[0].stated:
            raise InputError(
                "air: the strength hangs on potentials; state potential, charge or ground of all conductors"
            )
        silent = [entry.name for entry in self.conductor if not entry.stated]
        if silent and len(silent) < len(self.conductor):
            raise InputError(
                f"conductor {silent[0]!r} states no potential, charge or ground but others do; "
                "add one (charge = 0 for a floating one), or take all of them out for capacitances only"
            )
        return self

    @property
    def excited(self) -> bool:
        """Whether potentials or charges are stated at all."""
        return bool(self.conductor[0].stated)


def json_schema() -> dict[str, Any]:
    """JSON Schema (2020-12) of the case file."""
    dialect = "https://json-schema.org/draft/2020-12/schema"
    return {"$schema": dialect, **CaseContent.model_json_schema(), "title": "daraf case file"}
