"""Bodies that touch, cross, overlap or enclose one another."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from .bodies import Body
from .gaps import Shape, box_gap, crosses, encloses, first_contact, touch_tolerance

__all__ = ["Contact", "cavity_walls", "contacts", "how_they_meet", "shapes_of"]


@dataclass(frozen=True)
class Contact:
    """Two bodies that meet, or of which one lies inside the other.

    Attributes
    ----------
    body_a, body_b : int
        Numbers in the list of bodies; for ``inside`` the first is the inner one.
    kind : {"touches", "crosses", "overlaps", "inside"}
        Meets at the surface only; cuts through the surface; shares volume; lies within, without contact.
    place : tuple of 3 float, m
        Where; for ``inside`` a vertex of the inner body.
    same_conductor : bool
    """

    body_a: int
    body_b: int
    kind: str
    place: tuple[float, float, float]
    same_conductor: bool

    @property
    def meets(self) -> bool:
        """Whether the surfaces meet, which two conductors must not do."""
        return self.kind != "inside"


def shapes_of(bodies: Sequence[Body]) -> list[Shape]:
    """Bodies prepared for questions about distances."""
    return [Shape(body) for body in bodies]


def contacts(
    bodies: Sequence[Body], conductor: Sequence[int] | None = None, *, shapes: list[Shape] | None = None
) -> list[Contact]:
    """All pairs of bodies that touch, cross, overlap or lie one inside the other.

    Parameters
    ----------
    bodies : sequence of Body
        Placed as they are to be solved.
    conductor : sequence of int, optional
        Conductor of each body; each body is one by default.
    shapes : list of Shape, optional
        Of the bodies, if at hand.

    Returns
    -------
    list of Contact
        Those of different conductors first.
    """
    owner = range(len(bodies)) if conductor is None else conductor
    shapes = shapes_of(bodies) if shapes is None else shapes
    found = []
    for i, a in enumerate(shapes):
        for j in range(i + 1, len(shapes)):
            b = shapes[j]
            if box_gap(a, b) > touch_tolerance(a.body, b.body):
                continue
            same = owner[i] == owner[j]
            meeting = how_they_meet(a, b)
            if meeting is not None:
                found.append(Contact(i, j, *meeting, same))
            elif encloses(b, a):
                found.append(Contact(i, j, "inside", _first_vertex(a), same))
            elif encloses(a, b):
                found.append(Contact(j, i, "inside", _first_vertex(b), same))
    return sorted(found, key=lambda contact: contact.same_conductor)


def how_they_meet(a: Shape, b: Shape) -> tuple[str, tuple[float, float, float]] | None:
    """Whether two bodies touch, cross or overlap, and where; None if they do not meet.

    Parameters
    ----------
    a, b : Shape

    Returns
    -------
    tuple of str and place in m, or None
    """
    tolerance = touch_tolerance(a.body, b.body)
    touch = first_contact(a, b, tolerance)
    if touch is None:
        return None
    cut = crosses(a, b, tolerance)
    if encloses(a, b, tolerance) or encloses(b, a, tolerance):
        return "overlaps", cut or touch
    return ("touches", touch) if cut is None else ("crosses", cut)


def cavity_walls(shapes: Sequence[Shape]) -> dict[int, int]:
    """Closed bodies wound inwards that lie inside a body of the same solid of the same file.

    Parameters
    ----------
    shapes : sequence of Shape
        Consistently wound.

    Returns
    -------
    dict of int to int
        Number of the wall, and of the body in which it bounds a cavity.
    """
    walls = {}
    for i, inner in enumerate(shapes):
        if inner.volume is None or inner.volume >= 0.0:
            continue
        source = (inner.body.file, inner.body.solid)
        for j, outer in enumerate(shapes):
            if i != j and (outer.body.file, outer.body.solid) == source and encloses(outer, inner):
                walls[i] = j
                break
    return walls


def _first_vertex(shape: Shape) -> tuple[float, float, float]:
    x, y, z = np.asarray(shape.corners[0, 0], dtype=float)
    return float(x), float(y), float(z)
