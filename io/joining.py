"""Bodies of a case made fit, those of one conductor united, and all joined into the surface that the solver takes."""

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from daraf.bem.errors import InputError
from daraf.bem.media import Media
from daraf.bem.solution import Notice
from daraf.bem.surface import Surface

from .bodies import Body
from .case import Case
from .changes import Change, Mend, place_text
from .coarsening import coarsen_bodies
from .contacts import cavity_walls, contacts, shapes_of
from .dielectrics import said, with_dielectrics
from .faults import faults_of, needs_mending
from .gaps import Shape
from .markers import MeetingError, contact_mark
from .mending import fit_bodies
from .narrow import narrow_notices, narrowest_gaps
from .uniting import unite

__all__ = ["bodies_to_surface", "joined", "mend_of", "unit_told"]

FloatArray = NDArray[np.float64]

_Changes = tuple[tuple[str, str, Change], ...]

_MEETS = {"touches": "touches", "crosses": "cuts through", "overlaps": "overlaps"}


def mend_of(case: Case) -> Mend:
    """How far mending may go, as a case states it."""
    content = case.content
    return Mend(content.mend, content.mend_within, content.close_holes)


def unit_told(case: Case, bodies: Sequence[Body]) -> str:
    """Unit in which places are told: that of the case, else of the first file that carries one."""
    carried = (body.unit for body in bodies if body.unit is not None)
    return case.content.unit or next(carried, "m")


def bodies_to_surface(
    bodies: Sequence[Body],
    conductor: Sequence[int] | None = None,
    *,
    names: Sequence[str] = (),
    deviation: Sequence[FloatArray] = (),
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
    deviation : sequence of (nt,) float, m
        How far the triangles of each body may lie from the drawing, if that is not nothing.

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
        triangle_deviation=np.concatenate(deviation) if len(deviation) else None,
    )


def joined(
    case: Case, bodies: list[Body], owner: list[int], accuracy: float | None
) -> tuple[Surface, Media | None, list[Notice], _Changes, FloatArray]:
    """Mend the placed bodies, unite those of a conductor, look at each and at every pair, and join them.

    Parameters
    ----------
    case : Case
    bodies : list of Body
        Placed, neither mended nor oriented.
    owner : list of int
        Conductor of each.
    accuracy : float or None
        Relative, overrides the case.

    Returns
    -------
    surface : daraf.bem Surface
    media : daraf.bem Media or None
    notices : list of Notice
    changes : tuple of (conductor, body, Change)
    rounding : (n_bodies,) float, m

    Raises
    ------
    InputError
        If a body is not fit, or conductors meet.
    """
    rule = mend_of(case)
    if not rule.changes:
        _refuse_unfit(case, bodies, owner)
    united = unite(fit_bodies(bodies, rule), owner, rule)
    bodies, owner = united.bodies, united.owner
    metal = [k for k, c in enumerate(owner) if c < len(case.content.conductor)]
    conductors, of = [bodies[k] for k in metal], [owner[k] for k in metal]
    told = _meeting(case, conductors, of)
    narrowest = narrowest_gaps(conductors, of)
    described = [_described(case, body, c) for body, c in zip(conductors, of, strict=True)]
    told += narrow_notices(conductors, described, narrowest, unit_told(case, bodies))
    deviation: Sequence[FloatArray] = ()
    if case.content.in_one_medium:
        gaps = [one[0] for one in narrowest]
        bodies, deviation = coarsen_bodies(bodies, gaps, accuracy or case.content.accuracy, case.content.coarsen)
    entries = (*case.content.conductor, *case.content.dielectric)
    changes = [(entries[c].name, body.name, note) for body, c in zip(bodies, owner, strict=True) for note in body.notes]
    changes += [(entries[c].name, "", note) for c, note in united.dropped]
    unit = unit_told(case, bodies)
    notices = [Notice("inner-surface", f"{said(case, c)}: {note.said(unit)}") for c, note in united.dropped]
    for body, conductor in zip(_cracks_told_once(bodies), owner, strict=True):
        notices += _body_notices(case, body, _described(case, body, conductor))
    notices += told
    if not case.content.in_one_medium:
        surface, filled, more, rounding = with_dielectrics(case, bodies, owner)
        return surface, filled, notices + more, tuple(changes), rounding
    names = [entry.name for entry in entries]
    rounding = np.array([body.spacing for body in bodies])
    return bodies_to_surface(bodies, owner, names=names, deviation=deviation), None, notices, tuple(changes), rounding


def _cracks_told_once(bodies: list[Body]) -> list[Body]:
    """Cracks between the faces of one part fall to all bodies that they cut it into: the first one tells of them."""
    seen: set[tuple[str, int]] = set()
    result = []
    for body in bodies:
        part = (body.file, body.solid)
        faults = [fault for fault in body.faults if fault.code != "cracks" or part not in seen]
        seen.add(part)
        result.append(replace(body, faults=faults))
    return result


def _refuse_unfit(case: Case, bodies: list[Body], owner: list[int]) -> None:
    """Refuse a body that a solve would have to mend."""
    cavities = cavity_walls(shapes_of(bodies))
    for k, (body, conductor) in enumerate(zip(bodies, owner, strict=True)):
        wrong = [
            fault
            for fault in faults_of(Shape(body))
            if needs_mending(fault) and not (fault.code == "inside-out" and k in cavities)
        ]
        if wrong:
            place = "" if wrong[0].place is None else f", at {place_text(wrong[0].place, unit_told(case, [body]))}"
            more = f" (and {len(wrong) - 1} more to mend)" if len(wrong) > 1 else ""
            raise InputError(
                f"{case.label}: {_described(case, body, conductor)}: {wrong[0].text}{place}{more}; "
                "mend = 'list' changes nothing: repair it in CAD, or allow mend = 'safe' or 'bold'"
            )


def _body_notices(case: Case, body: Body, name: str) -> list[Notice]:
    """What was changed of a body, and what is still wrong with it."""
    unit = unit_told(case, [body])
    walls = [note for note in body.notes if note.code == "cavity-wall"]
    changes = [note for note in body.notes if note not in walls]
    told = [Notice("cavity-wall", f"{name} {note}") for note in walls]
    if changes:
        told.append(Notice("mended", f"{name}: {'; '.join(note.said(unit) for note in changes)}"))
    for fault in faults_of(Shape(body)):
        # After mending only the wall of a cavity is wound inwards, as it should be.
        if fault.severity != "note" and fault.code != "inside-out":
            place = "" if fault.place is None else f" at {place_text(fault.place, unit)}"
            told.append(Notice(fault.code, f"{name}: {fault.text}{place}: {fault.remedy}"))
    return told


def _meeting(case: Case, bodies: list[Body], owner: list[int]) -> list[Notice]:
    """Refuse conductors that meet; tell of bodies of one conductor that do and could not be united."""
    notices, marks, texts = [], [], []
    shapes = shapes_of(bodies)
    unit = unit_told(case, bodies)
    for contact in contacts(bodies, owner, shapes=shapes):
        a, b = shapes[contact.body_a], shapes[contact.body_b]
        if not contact.meets:
            continue
        one, other = (_described(case, bodies[k], owner[k]) for k in (contact.body_a, contact.body_b))
        text = f"{one} {_MEETS[contact.kind]} {other} at {place_text(contact.place, unit)}"
        if not contact.same_conductor:
            texts.append(text)
            marks.append(contact_mark(a, b, contact.kind, text))
        elif a.volume is not None and b.volume is not None:
            if case.content.mend == "list":
                raise InputError(
                    f"{case.label}: {text}; mend = 'list' changes nothing: unite them in CAD, or allow mend = 'safe'"
                )
            notices.append(Notice("bodies-meet", f"{text}; better join them in CAD"))
    if texts:
        more = f" (and {len(texts) - 1} more such places)" if len(texts) > 1 else ""
        text = f"{case.label}: {texts[0]}{more}; leave a gap between them, or make them one conductor"
        raise MeetingError(text, marks, unit)
    return notices


def _described(case: Case, body: Body, conductor: int) -> str:
    what = said(case, conductor)
    return what if what.endswith(f" {body.name!r}") else f"{what} (body {body.name!r})"
