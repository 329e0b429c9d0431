"""From a case to a problem: surface files read, bodies chosen, placed and assigned to conductors."""

import hashlib
import os
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daraf.bem.errors import InputError
from daraf.bem.solution import Notice
from daraf.bem.surface import Surface

from .bodies import Body, pick_bodies, read_bodies
from .case import Case, make_case
from .contacts import contacts
from .facet_tolerance import FacetTolerance, parse_facet_tolerance
from .faults import faults_of
from .gaps import Shape
from .mending import fit_bodies
from .mesh_units import METRES_PER_UNIT
from .readers import may_be_curved
from .schema import ConductorEntry, Part

__all__ = [
    "InputFile",
    "PlacedBodies",
    "Problem",
    "bodies_to_surface",
    "build_problem",
    "place",
    "placed_bodies",
    "problem_from_files",
]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
_Source = tuple[str, str | None, FacetTolerance | None]

_MEETS = {"touches": "touches", "crosses": "cuts through", "overlaps": "overlaps"}

#: How the note of a body begins that is no change of it.
_WALL = "is the wall of a cavity"
#: Remarks of readers that stand beside a result.
_TOLD = ("facet-tolerance", "no-unit", "odd-unit")

#: A shift of more than so many times the size of what is shifted is worth a question.
_FAR = 100.0


@dataclass(frozen=True)
class InputFile:
    """A surface file as it was when it was read."""

    file: str
    sha256: str
    bytes: int


@dataclass(frozen=True, eq=False)
class Problem:
    """Everything the solver needs, and what to tell with the result.

    Attributes
    ----------
    case : Case
    surface : daraf.bem Surface
        Conductors in the order of the case.
    inputs : tuple of InputFile
    held : (n,) bool or None
        Whether the potential is given (else the charge); None if nothing is stated.
    values : (n,) float, V or C, or None
    notices : tuple of Notice
    rounding : (n_bodies,) float, m, or None
        How far the coordinates of each body may be off by the rounding of its file; None if not known.
    """

    case: Case
    surface: Surface
    inputs: tuple[InputFile, ...]
    held: BoolArray | None
    values: FloatArray | None
    notices: tuple[Notice, ...]
    rounding: FloatArray | None = None


def problem_from_files(
    paths: Sequence[str | Path],
    unit: str | None,
    *,
    accuracy: float | str | None = None,
    facet_tolerance: float | str | None = None,
) -> Problem:
    """Problem in which each body of the files is a conductor, without potentials or charges.

    Parameters
    ----------
    paths : sequence of str or Path
    unit : str or None
    accuracy : float or str, optional
    facet_tolerance : float or str, optional
        Of curved shapes, such as "0.02 mm" or "0.1 %"; a bare number is metres.

    Returns
    -------
    Problem

    Raises
    ------
    InputError
        If a file cannot be used, the unit is missing, or bodies touch or overlap.
    """
    tolerance = None if facet_tolerance is None else parse_facet_tolerance(facet_tolerance)
    bodies = read_bodies([str(path) for path in paths], unit, facet_tolerance=tolerance)
    folder = Path(paths[0]).absolute().parent
    known: dict[_Source, list[Body]] = {}
    conductors = []
    for body in bodies:
        surface = os.path.relpath(body.file, folder)
        known.setdefault((str(folder / surface), None, tolerance if may_be_curved(surface) else None), []).append(body)
        conductors.append({"name": body.name, "surface": surface, "body": body.index_in_file})
    stated: dict[str, Any] = {
        "title": ", ".join(Path(file).name for file, _, _ in known)[:200],
        "conductor": conductors,
    }
    stated |= {} if unit is None else {"unit": unit}
    stated |= {} if accuracy is None else {"accuracy": accuracy}
    stated |= {} if facet_tolerance is None else {"facet_tolerance": facet_tolerance}
    case = make_case(stated, folder=folder)
    return build_problem(case, known=known)


def build_problem(case: Case, *, known: dict[_Source, list[Body]] | None = None) -> Problem:
    """Read the surface files of a case, choose and place its bodies.

    Parameters
    ----------
    case : Case
    known : dict, optional
        Bodies read before, by path and unit.

    Returns
    -------
    Problem

    Raises
    ------
    InputError
        If a file, a body or a placement cannot be used, or conductors touch or overlap.
    """
    placed = placed_bodies(case, known=known)
    bodies, owner = list(placed.bodies), list(placed.owner)
    notices = placed.notices
    surface, changes = _surface(case, bodies, owner)
    held, values = _stated(case)
    inputs = tuple(_input_file(case, entry) for entry in dict.fromkeys(_surfaces(case)))
    rounding = np.array([body.spacing for body in bodies])
    return Problem(case, surface, inputs, held, values, (*notices, *changes), rounding)


@dataclass(frozen=True, eq=False)
class PlacedBodies:
    """Bodies of a case where it puts them, neither mended nor oriented.

    Attributes
    ----------
    bodies : tuple of Body
    owner : tuple of int
        Conductor of each.
    notices : tuple of Notice
    """

    bodies: tuple[Body, ...]
    owner: tuple[int, ...]
    notices: tuple[Notice, ...]


def placed_bodies(case: Case, *, known: dict[_Source, list[Body]] | None = None) -> PlacedBodies:
    """Read the surface files of a case, choose and place its bodies.

    Parameters
    ----------
    case : Case
    known : dict, optional
        Bodies read before, by path and unit.

    Returns
    -------
    PlacedBodies

    Raises
    ------
    InputError
        If a file, a body or a placement cannot be used.
    """
    files = dict(known or {})
    used: dict[tuple[_Source, int], str] = {}
    bodies: list[Body] = []
    owner: list[int] = []
    notices: list[Notice] = []
    for index, entry in enumerate(case.content.conductor):
        for number, part in enumerate(entry.parts):
            where = f"{case.label}: conductor {entry.name!r}" + (f", part {number + 1}" if entry.part else "")
            for body in _chosen(case, part, where, files):
                _refuse_second_use((_source(case, part), body.index_in_file), part, body, entry.name, used, where)
                notices += _placement_notice(part, body, entry)
                bodies.append(place(body, part))
                owner.append(index)
    notices += [*_told_by_files(case, files), *_unused(files, used)]
    return PlacedBodies(tuple(bodies), tuple(owner), tuple(notices))


def place(body: Body, part: Part) -> Body:
    """Body after the rotation and then the shift of a part.

    Parameters
    ----------
    body : Body
    part : Part

    Returns
    -------
    Body
    """
    vertices = body.vertices
    if part.rotation is not None:
        turn = _rotation_matrix(part.rotation.axis, part.rotation.angle)
        about = np.array(part.rotation.about)
        vertices = (vertices - about) @ turn.T + about
    return replace(body, vertices=np.ascontiguousarray(vertices + np.array(part.shift)))


def bodies_to_surface(
    bodies: Sequence[Body], conductor: Sequence[int] | None = None, *, names: Sequence[str] = ()
) -> Surface:
    """Join bodies into the surface that the solver takes.

    The bodies are taken as they are; `fit_bodies` mends and orients them, `build_problem` does it by itself.

    Parameters
    ----------
    bodies : sequence of Body
    conductor : sequence of int, optional
        Conductor of each body; each body is one by default.
    names : sequence of str, optional
        Of the conductors; those of the bodies if each is one.

    Returns
    -------
    daraf.bem Surface

    Raises
    ------
    InputError
        If the numbers do not fit the bodies.
    """
    if not bodies:
        raise InputError("no conductor; give at least one body")
    owner = np.arange(len(bodies)) if conductor is None else np.asarray(conductor, dtype=np.int64)
    starts = np.concatenate([[0], np.cumsum([len(body.vertices) for body in bodies])])
    triangles = [body.triangles + start for body, start in zip(bodies, starts[:-1], strict=True)]
    return Surface(
        vertices=np.concatenate([body.vertices for body in bodies]),
        triangles=np.concatenate(triangles),
        triangle_body=np.repeat(np.arange(len(bodies)), [len(body.triangles) for body in bodies]),
        body_conductor=owner,
        conductor_names=tuple(names) or (tuple(body.name for body in bodies) if conductor is None else ()),
        body_names=tuple(body.name for body in bodies),
    )


def _source(case: Case, part: Part) -> _Source:
    tolerance = part.facet_tolerance
    if tolerance is None and may_be_curved(part.surface):
        tolerance = case.content.facet_tolerance
    return str(case.folder / part.surface), part.unit, tolerance


def _chosen(case: Case, part: Part, where: str, files: dict[_Source, list[Body]]) -> list[Body]:
    """Bodies of a part; each file is read once."""
    source = _source(case, part)
    try:
        if source not in files:
            files[source] = read_bodies([source[0]], part.unit, other_unit=case.content.unit, facet_tolerance=source[2])
        return pick_bodies(files[source], part.body) if part.body else files[source]
    except InputError as error:
        raise InputError(f"{where}: {error}") from None


def _refuse_second_use(
    key: tuple[_Source, int],
    part: Part,
    body: Body,
    name: str,
    used: dict[tuple[_Source, int], str],
    where: str,
) -> None:
    """Refuse a body that stands in the case twice, unless it is placed elsewhere the second time."""
    unplaced = part.rotation is None and not any(part.shift)
    if unplaced and key in used:
        raise InputError(
            f"{where}: body {body.name!r} of {part.surface} already belongs to conductor {used[key]!r}; "
            "choose other bodies, or place it elsewhere with shift or rotation"
        )
    used.setdefault(key, name)


def _placement_notice(part: Part, body: Body, entry: ConductorEntry) -> list[Notice]:
    size, distance = body.diagonal, float(np.linalg.norm(part.shift))
    if distance <= _FAR * size:
        return []
    text = (
        f"conductor {entry.name!r} is shifted by {distance:.4g} m, {distance / size:.0f} times its size; "
        "bare numbers are metres, write text such as '2 mm' if that was meant"
    )
    return [Notice("far-shift", text)]


def _told_by_files(case: Case, files: dict[_Source, list[Body]]) -> list[Notice]:
    """What each file says of itself that a reader of the result should know."""
    if case.content.facet_tolerance is not None and not any(may_be_curved(surface) for surface in _surfaces(case)):
        raise InputError(f"{case.label}: facet_tolerance: all surfaces are facets as drawn; take the key out")
    notices = []
    for (path, stated, _), bodies in files.items():
        file, own, general = Path(path).name, bodies[0].unit, case.content.unit
        if stated is None and None not in (own, general) and own != general:
            text = f"{file}: is in {own}, as the file says; the case's {general} is for files that carry no unit"
            notices.append(Notice("own-unit", text))
        for fault in bodies[0].faults:
            if fault.code in _TOLD:
                notices.append(Notice(fault.code, f"{file}: {fault.text}"))
    return notices


def _unused(files: dict[_Source, list[Body]], used: dict[tuple[_Source, int], str]) -> list[Notice]:
    notices = []
    for source, bodies in files.items():
        idle = [body.name for body in bodies if (source, body.index_in_file) not in used]
        if idle:
            shown = ", ".join(repr(name) for name in idle[:6]) + (", ..." if len(idle) > 6 else "")
            text = f"{Path(source[0]).name}: {len(idle)} of {len(bodies)} bodies belong to no conductor: {shown}"
            notices.append(Notice("unused-body", text + "; left out of the computation"))
    return notices


def _surface(case: Case, bodies: list[Body], owner: list[int]) -> tuple[Surface, list[Notice]]:
    """Mend the placed bodies, look at each and at every pair, and join them."""
    bodies = fit_bodies(bodies)
    notices = []
    for body, conductor in zip(bodies, owner, strict=True):
        notices += _body_notices(case, body, _described(case, body, conductor))
    notices += _meeting(case, bodies, owner)
    names = [entry.name for entry in case.content.conductor]
    return bodies_to_surface(bodies, owner, names=names), notices


def _body_notices(case: Case, body: Body, name: str) -> list[Notice]:
    """What was changed of a body, and what is still wrong with it."""
    walls = [note for note in body.notes if note.startswith(_WALL)]
    changes = [note for note in body.notes if note not in walls]
    told = [Notice("cavity-wall", f"{name} {note}") for note in walls]
    if changes:
        told.append(Notice("mended", f"{name}: {'; '.join(changes)}"))
    for fault in faults_of(Shape(body)):
        # After mending only the wall of a cavity is wound inwards, as it should be.
        if fault.severity != "note" and fault.code != "inside-out":
            place = "" if fault.place is None else f" at {_place_text(fault.place, case.content.unit)}"
            told.append(Notice(fault.code, f"{name}: {fault.text}{place}: {fault.remedy}"))
    return told


def _meeting(case: Case, bodies: list[Body], owner: list[int]) -> list[Notice]:
    """Refuse conductors that meet; tell of bodies of one conductor that do."""
    notices = []
    for contact in contacts(bodies, owner):
        if not contact.meets:
            continue
        one, other = (_described(case, bodies[k], owner[k]) for k in (contact.body_a, contact.body_b))
        place = _place_text(contact.place, case.content.unit)
        text = f"{one} {_MEETS[contact.kind]} {other} at {place}"
        if not contact.same_conductor:
            raise InputError(f"{case.label}: {text}; leave a gap between them, or make them one conductor")
        notices.append(Notice("bodies-meet", f"{text}; better join them in CAD"))
    return notices


def _described(case: Case, body: Body, conductor: int) -> str:
    name = case.content.conductor[conductor].name
    return f"conductor {name!r}" if body.name == name else f"conductor {name!r} (body {body.name!r})"


def _place_text(place: tuple[float, float, float], unit: str | None) -> str:
    """Place in the unit of the case, such as "(1, 0, 2.5) mm"."""
    shown = unit or "m"
    numbers = ", ".join(f"{value / METRES_PER_UNIT[shown] + 0.0:.5g}" for value in place)
    return f"({numbers}) {shown}"


def _stated(case: Case) -> tuple[BoolArray | None, FloatArray | None]:
    if not case.content.excited:
        return None, None
    entries = case.content.conductor
    held = np.array([entry.charge is None for entry in entries])
    values = np.array([(entry.potential or 0.0) if entry.charge is None else entry.charge for entry in entries])
    return held, values


def _surfaces(case: Case) -> list[str]:
    return [part.surface for entry in case.content.conductor for part in entry.parts]


def _input_file(case: Case, surface: str) -> InputFile:
    path = case.folder / surface
    digest = hashlib.sha256()
    with path.open("rb") as stream:
        for block in iter(lambda: stream.read(1 << 20), b""):
            digest.update(block)
    # The place of an absolute path says something about a machine, nothing about the job.
    shown = Path(surface).name if Path(surface).is_absolute() else surface
    return InputFile(shown, digest.hexdigest(), path.stat().st_size)


def _rotation_matrix(axis: tuple[float, float, float], angle: float) -> FloatArray:
    """Rotation by an angle about a unit axis (Rodrigues' formula), right-handed."""
    x, y, z = axis
    cross = np.array([[0.0, -z, y], [z, 0.0, -x], [-y, x, 0.0]])
    turn: FloatArray = np.eye(3) + np.sin(angle) * cross + (1.0 - np.cos(angle)) * (cross @ cross)
    return turn
