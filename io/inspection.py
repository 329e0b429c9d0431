"""What is in mesh files: bodies, sizes, gaps and faults."""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from daraf.bem.errors import InputError

from .bodies import Body, Fault, read_mesh_set
from .changes import Change, Mend
from .contacts import Contact, cavity_walls, contacts, shapes_of
from .facet_tolerance import parse_facet_tolerance
from .faults import faults_of
from .gaps import Approach, Shape, box_gap, closest_approach
from .inspection_document import inspection_to_dict
from .inspection_text import inspection_to_text
from .markers import Mark, contact_mark, fault_marks
from .mending import fit_bodies, make_fit
from .progress import ProgressCallback, Silence
from .topology import boundary_loops, edges_of

__all__ = [
    "BodyReport",
    "Gap",
    "Inspection",
    "Spread",
    "inspect_bodies",
    "inspect_files",
    "inspection_to_dict",
    "inspection_to_text",
]

FloatArray = NDArray[np.float64]
Place = tuple[float, float, float]

#: Up to so many bodies every gap is computed; beyond, those to the nearest few of each body.
_ALL_PAIRS = 24
_NEAREST = 3


@dataclass(frozen=True)
class Spread:
    """Smallest, median and largest of many values."""

    smallest: float
    median: float
    largest: float


@dataclass(frozen=True)
class Gap:
    """Smallest distance to another body: its name, metres, the place on this and on that body."""

    other: str
    distance: float
    place: Place
    place_other: Place


@dataclass(frozen=True, eq=False)
class BodyReport:
    """What there is to say about one body.

    Attributes
    ----------
    name, file : str
    number : int
        From 1, in the order read.
    panels : int
    closed : bool
    loops : int
        Boundary loops of an open body.
    box : (2, 3) float, m
    area : float, m2
    volume : float or None, m3
        Of a closed body.
        Like edges and aspect without the panels that a solve removes.
    edges : Spread, m
    aspect : Spread
        Longest edge over the height upon it; 1.15 for an equilateral triangle.
    gaps : list of Gap
        Nearest first.
    faults : list of Fault
    notes : list of Change
        What reading and mending changed.
    """

    name: str
    file: str
    number: int
    panels: int
    closed: bool
    loops: int
    box: FloatArray
    area: float
    volume: float | None
    edges: Spread
    aspect: Spread
    gaps: list[Gap]
    faults: list[Fault]
    notes: list[Change] = field(default_factory=list)


@dataclass(frozen=True, eq=False)
class Inspection:
    """All bodies of some files.

    Attributes
    ----------
    files : list of str
    unit : str or None
        Unit of the files; None if none is known, and then every length is in the unit of the files.
    bodies : list of BodyReport
    marks : list of Mark
        Places of faults and contacts, to be drawn; not part of the text.
    mend : str
        How far a solve was supposed to mend.
    """

    files: list[str]
    unit: str | None
    bodies: list[BodyReport]
    marks: list[Mark] = field(default_factory=list)
    mend: str = "safe"

    @property
    def box(self) -> FloatArray:
        """Lower and upper corner of the box about all bodies, (2, 3) m."""
        boxes = np.array([body.box for body in self.bodies])
        return np.array([boxes[:, 0].min(axis=0), boxes[:, 1].max(axis=0)])


def inspect_files(
    paths: str | Path | Iterable[str | Path],
    unit: str | None = None,
    *,
    mend: Mend | None = None,
    marked: bool = False,
    facet_tolerance: float | str | None = None,
    progress: ProgressCallback | None = None,
) -> Inspection:
    """Read mesh files and look at every body.

    Parameters
    ----------
    paths : str, Path or several
    unit : str, optional
        Unit of the files that carry none. Without one, lengths stay in the unit of the files.
    mend : Mend, optional
        What a solve would be allowed to change.
    marked : bool
        Whether to draw marks too, which takes as long again where bodies meet.
    facet_tolerance : float or str, optional
        Of curved shapes, such as "0.02 mm" or "0.1 %"; a bare number is metres.
    progress : callable, optional

    Returns
    -------
    Inspection

    Raises
    ------
    InputError
        If a file cannot be used.
    """
    tell = progress or Silence()
    tell("reading", 0, 1)
    tolerance = None if facet_tolerance is None else parse_facet_tolerance(facet_tolerance)
    read = read_mesh_set(paths, unit, unit_needed=False, facet_tolerance=tolerance, mend=mend)
    seen = inspect_bodies(read.bodies, mend=mend, marked=marked, progress=tell)
    return replace(seen, files=read.files, unit=read.unit)


def inspect_bodies(
    bodies: Sequence[Body],
    unit: str | None = None,
    *,
    mend: Mend | None = None,
    marked: bool = False,
    owner: Sequence[int] | None = None,
    progress: ProgressCallback | None = None,
) -> Inspection:
    """Look at every body and at every pair of them.

    Parameters
    ----------
    bodies : sequence of Body
        As read, neither mended nor oriented.
    unit : str, optional
        Unit to show lengths in.
    mend : Mend, optional
        What a solve would be allowed to change.
    marked : bool
        Whether to draw marks too, which takes as long again where bodies meet.
    owner : sequence of int, optional
        Conductor of each body, where that is known.
    progress : callable, optional

    Returns
    -------
    Inspection
    """
    tell, mend = progress or Silence(), mend or Mend()
    total = sum(len(body.triangles) for body in bodies)
    tell("mending on trial", 0, 1)
    shapes = shapes_of(_as_solved(bodies, mend))
    tell("looking for contacts and gaps", 0, 1)
    found = contacts([shape.body for shape in shapes], owner, shapes=shapes)
    cavities = cavity_walls(shapes)
    gaps = _gaps(shapes, found)
    reports, faulty = [], []
    done = 0
    for k, (body, shape) in enumerate(zip(bodies, shapes, strict=True)):
        tell("looking for faults", done, total)
        done += len(body.triangles)
        own = faults_of(shape if shape.body is body else Shape(body))
        if k in cavities:
            own = [_cavity(bodies[cavities[k]]) if fault.code == "inside-out" else fault for fault in own]
        faults = [*own, *_contact_faults(k, found, bodies, owner is not None, mend)]
        reports.append(_report(k, replace(body, faults=faults), shape, gaps[k]))
        faulty.append(replace(body, faults=own))
    if marked:
        tell("drawing marks", 0, 1)
    marks = fault_marks(faulty) if marked else []
    if marked:
        marks += [_contact_mark(one, shapes) for one in found if one.meets and not one.same_conductor]
    return Inspection(list(dict.fromkeys(body.file for body in bodies)), unit, reports, marks, mend.mode)


def _contact_mark(contact: Contact, shapes: list[Shape]) -> Mark:
    a, b = shapes[contact.body_a], shapes[contact.body_b]
    return contact_mark(a, b, contact.kind, f"{a.body.name!r} {contact.kind} {b.body.name!r}")


def _as_solved(bodies: Sequence[Body], mend: Mend) -> list[Body]:
    """Bodies as a solve would take them: open or closed, and what encloses what, is asked of these."""
    try:
        return fit_bodies(bodies, mend)
    except InputError:  # some body has nothing left, as its faults say: leave that one as it is
        fits = [_something_left(body) for body in bodies]
    fitted = iter(fit_bodies([body for body, fit in zip(bodies, fits, strict=True) if fit], mend))
    return [next(fitted) if fit else body for body, fit in zip(bodies, fits, strict=True)]


def _something_left(body: Body) -> bool:
    try:
        make_fit(body)
    except InputError:
        return False
    return True


def _report(k: int, body: Body, shape: Shape, gaps: list[Gap]) -> BodyReport:
    lengths, doubled = shape.measures
    longest = lengths.max(axis=1)
    sized = doubled > 1e-12 * longest**2
    solved = shape.body
    loops = len(boundary_loops(solved.vertices, solved.triangles, edges_of(solved.triangles))[0])
    return BodyReport(
        name=body.name,
        file=body.file,
        number=k + 1,
        panels=len(body.triangles),
        closed=shape.volume is not None,
        loops=loops,
        box=shape.box,
        area=float(0.5 * doubled.sum()),
        volume=None if shape.volume is None else abs(shape.volume),
        edges=_spread(lengths.ravel()),
        aspect=_spread(longest[sized] ** 2 / doubled[sized]),
        gaps=gaps,
        faults=body.faults,
        notes=list(solved.notes),
    )


def _spread(values: FloatArray) -> Spread:
    if len(values) == 0:
        return Spread(float("inf"), float("inf"), float("inf"))
    return Spread(float(values.min()), float(np.median(values)), float(values.max()))


def _gaps(shapes: list[Shape], found: list[Contact]) -> list[list[Gap]]:
    """Gaps of each body to the others, nearest first; 0 where two bodies meet."""
    n = len(shapes)
    meeting = {(contact.body_a, contact.body_b): contact for contact in found if contact.meets}
    known: dict[tuple[int, int], Approach] = {}
    bounds = np.array([[box_gap(a, b) for b in shapes] for a in shapes])
    result: list[list[Gap]] = []
    for i in range(n):
        near: list[tuple[float, int]] = []
        for j in np.argsort(bounds[i], kind="stable").tolist():
            full = len(near) >= _NEAREST and n > _ALL_PAIRS
            if j == i or (full and bounds[i, j] > sorted(near)[_NEAREST - 1][0]):
                continue
            pair = (min(i, j), max(i, j))
            if pair not in known:
                known[pair] = _approach(shapes, pair, meeting)
            near.append((known[pair].distance, j))
        near.sort()
        result.append([_gap(shapes, i, j, known) for _, j in (near if n <= _ALL_PAIRS else near[:_NEAREST])])
    return result


def _approach(shapes: list[Shape], pair: tuple[int, int], meeting: dict[tuple[int, int], Contact]) -> Approach:
    if pair in meeting:
        place = meeting[pair].place
        return Approach(0.0, place, place, 0, 0)
    return closest_approach(shapes[pair[0]], shapes[pair[1]])


def _gap(shapes: list[Shape], i: int, j: int, known: dict[tuple[int, int], Approach]) -> Gap:
    approach = known[min(i, j), max(i, j)]
    here, there = approach.point_a, approach.point_b
    if i > j:
        here, there = there, here
    return Gap(shapes[j].body.name, approach.distance, here, there)


def _cavity(outer: Body) -> Fault:
    text = f"is the wall of a cavity in {outer.name!r}"
    return Fault("cavity-wall", "note", 1, None, text, "its normals point into the cavity")


def _contact_faults(k: int, found: list[Contact], bodies: Sequence[Body], assigned: bool, mend: Mend) -> list[Fault]:
    """Contacts of one body with others, told from its own side; `assigned`: it is known which conductor has which."""
    faults = []
    for contact in found:
        if k not in (contact.body_a, contact.body_b):
            continue
        other = bodies[contact.body_b if contact.body_a == k else contact.body_a].name
        if contact.kind == "inside":
            if contact.body_a == k:
                text, remedy = f"lies inside {other!r}", "fine if that is meant"
                faults.append(Fault("inside-other", "note", 1, contact.place, text, remedy))
            continue
        severity, text = "warning", f"{contact.kind} {other!r}"
        remedy = "give both to one conductor, or separate them in CAD"
        if assigned and contact.same_conductor:
            severity = "note" if mend.changes else "error"
            text += " of the same conductor"
            remedy = "a solve makes one body of them" if mend.changes else "unite them in CAD, or allow safe mending"
        elif assigned:
            severity = "error"
            text += " of another conductor"
            remedy = "leave a gap between them, or make them one conductor"
        faults.append(Fault(f"{contact.kind}-other", severity, 1, contact.place, text, remedy))
    return faults
