"""What may stand in a case file: pydantic models, quantities turned into SI.

The models say what is allowed and check what can be seen without opening a surface file. `daraf.io.case`
reads the TOML file and turns the complaints of pydantic into one line each.
"""

from typing import Annotated, Any, Literal, Self

from pydantic import AfterValidator, Field, StrictBool
from pydantic import model_validator as whole

from daraf.bem.errors import InputError

from .case_values import (
    Accuracy,
    Axis,
    BodyChoice,
    Coarsening,
    Facets,
    Facetting,
    Name,
    Point,
    PositiveLength,
    Table,
    Unit,
    above_zero,
    not_negative,
    parse_accuracy,
    quantity,
)

__all__ = [
    "NOT_YET",
    "Air",
    "CaseContent",
    "ConductorEntry",
    "DielectricEntry",
    "HalfSpaceEntry",
    "Medium",
    "Part",
    "PlaneEntry",
    "Rotation",
    "json_schema",
    "parse_accuracy",
]

#: Keys that later versions solve, by table, with the words for the message. Never ignored silently.
NOT_YET = {
    "": {
        "given_charge": "given charges",
        "given_charges": "given charges",
        "external_field": "an external field",
        "field": "an external field",
        "probe": "probes",
        "probes": "probes",
        "variation": "variations",
        "variations": "variations",
    },
}


class Rotation(Table):
    """Turn by an angle about an axis through a point (right-hand rule)."""

    angle: quantity("angle")  # type: ignore[valid-type]
    axis: Axis
    about: Point = (0.0, 0.0, 0.0)


class Part(Table):
    """Bodies of one surface file, placed: first the rotation, then the shift."""

    surface: str = Field(min_length=1, description="surface file, relative to the case file")
    unit: Unit | None = Field(None, description="unit of this file if it differs from the case's")
    facet_tolerance: Facetting | None = None
    body: BodyChoice = ()
    rotation: Rotation | None = None
    shift: Point = (0.0, 0.0, 0.0)


class _Placed(Table):
    """Named bodies: one surface file, or several parts."""

    name: Name
    surface: str | None = Field(None, min_length=1, description="surface file, relative to the case file")
    unit: Unit | None = Field(None, description="unit of this file if it differs from the case's")
    facet_tolerance: Facetting | None = None
    body: BodyChoice = ()
    rotation: Rotation | None = None
    shift: Point = (0.0, 0.0, 0.0)
    part: tuple[Part, ...] = Field((), description="several surfaces that belong together")

    @whole(mode="after")
    def _check_parts(self) -> Self:
        placed = self.model_fields_set & {"unit", "facet_tolerance", "body", "rotation", "shift"}
        if self.part and (self.surface or placed):
            extra = ", ".join(sorted(placed | ({"surface"} if self.surface else set())))
            raise InputError(f"{extra} given beside 'part'; move that into the parts")
        if not self.part and not self.surface:
            raise InputError("'surface' is missing; name the surface file")
        return self

    @property
    def parts(self) -> tuple[Part, ...]:
        """The parts; there is one if there is one surface."""
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


class ConductorEntry(_Placed):
    """One conductor: its surface (or its parts), and its potential, its charge or ground."""

    potential: quantity("voltage") | None = None  # type: ignore[valid-type]
    charge: quantity("charge") | None = Field(None, description="floating: the total charge is given")  # type: ignore[valid-type]
    ground: StrictBool = False
    edge_radius: quantity("length") | None = Field(  # type: ignore[valid-type]
        None, description="of all its sharp convex edges, for the peak field; half the thickness of a sheet"
    )

    @whole(mode="after")
    def _check_stated(self) -> Self:
        if self.edge_radius is not None and self.edge_radius <= 0.0:
            raise InputError("edge_radius must be positive; leave it out for a sharp edge")
        if len(self.stated) > 1:
            raise InputError(f"{' and '.join(self.stated)} are both given; keep one of potential, charge, ground")
        return self

    @property
    def stated(self) -> list[str]:
        """Which of potential, charge and ground are given."""
        values = {"potential": self.potential, "charge": self.charge, "ground": self.ground or None}
        return [key for key, value in values.items() if value is not None]


Permittivity = Annotated[float, Field(ge=1.0, le=1e5, allow_inf_nan=False)]
Frequency = Annotated[quantity("frequency"), AfterValidator(above_zero)]  # type: ignore[valid-type]


class _Losses(Table):
    loss_tangent: Annotated[quantity("ratio"), AfterValidator(not_negative)] = 0.0  # type: ignore[valid-type]
    conductivity: Annotated[quantity("conductivity"), AfterValidator(not_negative)] = 0.0  # type: ignore[valid-type]


class DielectricEntry(_Placed, _Losses):
    """Closed bodies of a dielectric."""

    relative_permittivity: Permittivity


class Medium(_Losses):
    """What fills the space around the conductors."""

    relative_permittivity: Permittivity = 1.0


class PlaneEntry(Table):
    """A mirror plane through a point: the model is what lies on one side."""

    kind: Literal["electric", "magnetic"] = Field(
        description="electric: an earthed plane; magnetic: symmetry, or a surface that no field passes"
    )
    normal: Axis
    point: Point = (0.0, 0.0, 0.0)


class HalfSpaceEntry(Table):
    """Another medium beyond a plane, to infinity."""

    relative_permittivity: Permittivity
    normal: Axis = Field((0.0, 0.0, 1.0), description="points out of the half-space")
    point: Point = (0.0, 0.0, 0.0)


class Air(Table):
    """Air round the conductors: its table asks how far the potentials are from corona and breakdown."""

    pressure: quantity("pressure") = 101325.0  # type: ignore[valid-type]
    temperature: quantity("temperature") = 293.15  # type: ignore[valid-type]
    withstand: quantity("field") | None = Field(  # type: ignore[valid-type]
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


class CaseContent(Table):
    """A case: conductors, what is between and around them, and the accuracy asked."""

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
    dielectric: tuple[DielectricEntry, ...] = Field(
        (), description="in order of precedence: where bodies overlap, conductors come first, then those listed before"
    )
    plane: tuple[PlaneEntry, ...] = Field((), description="mirror planes, orthogonal to each other")
    half_space: HalfSpaceEntry | None = None
    conduction: StrictBool = Field(
        False, description="steady currents in media of the stated conductivities: conductances and resistances"
    )
    frequencies: tuple[Frequency, ...] = Field(  # type: ignore[valid-type]
        (), description="at which losses are asked: loss tangents and conductivities of the media"
    )

    @whole(mode="after")
    def _check(self) -> Self:
        seen: set[str] = set()
        for entry in self.conductor:
            if entry.name in seen:
                raise InputError(f"two conductors are named {entry.name!r}; give each its own name")
            seen.add(entry.name)
        self._check_media(set(seen))
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
    def media(self) -> list[tuple[str, Medium | DielectricEntry]]:
        """What surrounds everything, then the dielectrics, each with the words for messages."""
        return [("medium", self.medium), *((f"dielectric {one.name!r}", one) for one in self.dielectric)]

    def _check_media(self, taken: set[str]) -> None:
        for entry in self.dielectric:
            if entry.name in taken:
                raise InputError(f"two bodies are named {entry.name!r}; give each dielectric its own name")
            taken.add(entry.name)
        if not self.in_one_medium:
            self._refuse_what_media_lack()
        if self.conduction:
            self._check_conduction()
            return
        lossy = [where for where, one in self.media if max(one.loss_tangent, one.conductivity) > 0.0]
        if self.half_space and (self.dielectric or lossy):
            raise InputError(
                "half_space: images hold for conductors in media without losses only; leave the dielectrics and losses "
                "out, or model the half-space as a large dielectric body"
            )
        if lossy and not self.frequencies:
            raise InputError(f"{lossy[0]} has losses: add frequencies, such as frequencies = ['50 Hz', '1 kHz']")
        if self.frequencies and not lossy:
            raise InputError("frequencies: no medium has losses, so nothing depends on them; leave the key out")

    def _refuse_what_media_lack(self) -> None:
        """Keys that only conductors in one medium have so far."""
        lacking = {"sensitivities": self.sensitivities, "air": self.air, 'method = "fast"': self.method == "fast"}
        for key, value in lacking.items():
            if value:
                raise InputError(
                    f"{key}: this version has it for conductors in one medium without losses and planes; leave it out"
                )

    def _check_conduction(self) -> None:
        silent = [where for where, one in self.media if not one.conductivity]
        if silent:
            raise InputError(
                f"conduction: {silent[0]} has no conductivity; write one such as '0.01 S/m' "
                "(a surface that no current passes is a magnetic plane)"
            )
        if self.frequencies or self.half_space or any(entry.stated for entry in self.conductor):
            raise InputError("conduction: takes no frequencies, half-space, potentials or charges; leave them out")

    @property
    def in_one_medium(self) -> bool:
        """Whether one medium without losses fills all space."""
        return not (self.dielectric or self.frequencies or self.plane or self.half_space or self.conduction)

    @property
    def excited(self) -> bool:
        """Whether potentials or charges are stated at all."""
        return bool(self.conductor[0].stated)


def json_schema() -> dict[str, Any]:
    """JSON Schema (2020-12) of the case file."""
    dialect = "https://json-schema.org/draft/2020-12/schema"
    return {"$schema": dialect, **CaseContent.model_json_schema(), "title": "daraf case file"}
