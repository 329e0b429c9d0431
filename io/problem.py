"""From a case to a problem: surface files read, bodies chosen, placed and assigned to conductors."""

import hashlib
import os
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daraf.bem.errors import InputError
from daraf.bem.media import Media
from daraf.bem.solution import Notice
from daraf.bem.surface import Surface

from .bodies import Body, pick_bodies, read_bodies
from .case import Case, make_case
from .changes import Change
from .facet_tolerance import FacetTolerance, parse_facet_tolerance
from .joining import joined, mend_of
from .readers import may_be_curved
from .schema import Part

__all__ = [
    "InputFile",
    "PlacedBodies",
    "Problem",
    "build_problem",
    "place",
    "placed_bodies",
    "problem_from_files",
]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
_Source = tuple[str, str | None, FacetTolerance | None]

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
    changes : tuple of (conductor, body, Change)
        Everything that was changed of the geometry, by name of conductor and body.
    rounding : (n_bodies,) float, m, or None
        How far the coordinates of each body may be off by the rounding of its file; None if not known.
    media : daraf.bem Media or None
        What lies on either side of each body; None if all lies in one medium without losses.
    """

    case: Case
    surface: Surface
    inputs: tuple[InputFile, ...]
    held: BoolArray | None
    values: FloatArray | None
    notices: tuple[Notice, ...]
    changes: tuple[tuple[str, str, Change], ...] = ()
    rounding: FloatArray | None = None
    media: Media | None = None


def problem_from_files(
    paths: Sequence[str | Path],
    unit: str | None,
    *,
    accuracy: float | str | None = None,
    facet_tolerance: float | str | None = None,
    mending: Mapping[str, Any] | None = None,
) -> Problem:
    """Problem in which each body of the files is a conductor, without potentials or charges.

    Parameters
    ----------
    paths : sequence of str or Path
    unit : str or None
    accuracy : float or str, optional
    facet_tolerance : float or str, optional
        Of curved shapes, such as "0.02 mm" or "0.1 %"; a bare number is metres.
    mending : mapping, optional
        Keys of the case that say how far mending goes: mend, mend_within, close_holes, coarsen.

    Returns
    -------
    Problem

    Raises
    ------
    InputError
        If a file cannot be used, the unit is missing, or bodies touch or overlap.
    """
    tolerance = None if facet_tolerance is None else parse_facet_tolerance(facet_tolerance)
    more = dict(mending or {})
    # checked before any file is read
    rule = mend_of(make_case({"conductor": [{"name": "any", "surface": "any"}], **more}, folder="."))
    bodies = read_bodies([str(path) for path in paths], unit, facet_tolerance=tolerance, mend=rule)
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
        **more,
    }
    stated |= {} if unit is None else {"unit": unit}
    stated |= {} if accuracy is None else {"accuracy": accuracy}
    stated |= {} if facet_tolerance is None else {"facet_tolerance": facet_tolerance}
    case = make_case(stated, folder=folder)
    return build_problem(case, known=known)


def build_problem(
    case: Case, *, known: dict[_Source, list[Body]] | None = None, accuracy: float | None = None
) -> Problem:
    """Read the surface files of a case, choose and place its bodies.

    Parameters
    ----------
    case : Case
    known : dict, optional
        Bodies read before, by path and unit.
    accuracy : float, optional
        Relative, overrides the case: how far round parts may be coarsened depends on it.

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
    surface, media, told, changes, rounding = joined(case, bodies, owner, accuracy)
    held, values = _stated(case)
    inputs = tuple(_input_file(case, entry) for entry in dict.fromkeys([*_surfaces(case), *_side_files(case, placed)]))
    return Problem(case, surface, inputs, held, values, (*notices, *told), changes, rounding, media)


@dataclass(frozen=True, eq=False)
class PlacedBodies:
    """Bodies of a case where it puts them, neither mended nor oriented.

    Attributes
    ----------
    bodies : tuple of Body
    owner : tuple of int
        Conductor of each, or the number of conductors plus that of the dielectric.
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
    for index, entry in enumerate((*case.content.conductor, *case.content.dielectric)):
        what = f"{'conductor' if index < len(case.content.conductor) else 'dielectric'} {entry.name!r}"
        for number, part in enumerate(entry.parts):
            where = f"{case.label}: {what}" + (f", part {number + 1}" if entry.part else "")
            for body in _chosen(case, part, where, files):
                _refuse_second_use((_source(case, part), body.index_in_file), part, body, what, used, where)
                notices += _placement_notice(part, body, what)
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
            files[source] = read_bodies(
                [source[0]],
                part.unit,
                other_unit=case.content.unit,
                facet_tolerance=source[2],
                mend=mend_of(case),
            )
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
            f"{where}: body {body.name!r} of {part.surface} already belongs to {used[key]}; "
            "choose other bodies, or place it elsewhere with shift or rotation"
        )
    used.setdefault(key, name)


def _placement_notice(part: Part, body: Body, what: str) -> list[Notice]:
    size, distance = body.diagonal, float(np.linalg.norm(part.shift))
    if distance <= _FAR * size:
        return []
    text = (
        f"{what} is shifted by {distance:.4g} m, {distance / size:.0f} times its size; "
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
            verb = "belongs" if len(idle) == 1 else "belong"
            shown = ", ".join(repr(name) for name in idle[:6]) + (", ..." if len(idle) > 6 else "")
            text = f"{Path(source[0]).name}: {len(idle)} of {len(bodies)} bodies {verb} to no conductor: {shown}"
            notices.append(Notice("unused-body", text + "; left out of the computation"))
    return notices


def _stated(case: Case) -> tuple[BoolArray | None, FloatArray | None]:
    if not case.content.excited:
        return None, None
    entries = case.content.conductor
    held = np.array([entry.charge is None for entry in entries])
    values = np.array([(entry.potential or 0.0) if entry.charge is None else entry.charge for entry in entries])
    return held, values


def _surfaces(case: Case) -> list[str]:
    return [part.surface for entry in (*case.content.conductor, *case.content.dielectric) for part in entry.parts]


def _side_files(case: Case, placed: PlacedBodies) -> list[str]:
    """Files that surface files name and that were read with them, relative to the case where they lie below it."""
    files = dict.fromkeys(file for body in placed.bodies for file in body.side_files)
    near = {file: os.path.relpath(file, case.folder) for file in files}
    return [str(Path(file).absolute()) if near[file].startswith("..") else near[file] for file in files]


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
