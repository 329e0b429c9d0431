"""Which way panels face: like their neighbours, outwards on closed bodies, inwards on the walls of cavities."""

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from .bodies import Body
from .changes import Change
from .contacts import cavity_walls, shapes_of
from .topology import edges_of, proper_rows, signed_volume, winding_flips

__all__ = ["consistent", "orient"]

BoolArray = NDArray[np.bool_]


def orient(bodies: Sequence[Body]) -> list[Body]:
    """Wind panels consistently, and closed bodies outwards; the walls of cavities inwards.

    Parameters
    ----------
    bodies : sequence of Body

    Returns
    -------
    list of Body
        What was changed stands in the notes; a body that was right is the same object.
    """
    alike = [consistent(body) for body in bodies]
    shapes = shapes_of(alike)
    walls = cavity_walls(shapes)
    result = []
    for k, (body, shape) in enumerate(zip(alike, shapes, strict=True)):
        if k in walls:
            text = f"is the wall of a cavity in {alike[walls[k]].name!r}: its normals point into the cavity"
            note = Change("cavity-wall", 1, None, text)
            result.append(body if note in body.notes else replace(body, notes=[*body.notes, note]))
        elif shape.volume is not None:
            result.append(_outward(body))
        else:
            result.append(body)
    return result


def consistent(body: Body) -> Body:
    """Wind panels like their neighbours; a surface with a single side is left as it is."""
    rows = proper_rows(body.triangles)
    flip = np.zeros(len(rows), dtype=np.bool_)
    notes: list[Change] = []
    if not rows.any():
        return body
    flip[rows], _, orientable = winding_flips(body.triangles[rows])
    if not orientable:
        text = "has a single side (a Moebius strip): its normals are left as they are"
        notes.append(Change("one-sided", 1, None, text))
        flip = np.zeros_like(flip)
    if flip.any():
        notes.append(_turned_over(body, flip, "neighbours agree"))
    return _turned(body, flip, notes)


def _outward(body: Body) -> Body:
    """Turn over the patches of a closed body that are closed themselves and enclose a negative volume."""
    _, patch, _ = winding_flips(body.triangles)
    n_patches = int(patch.max()) + 1
    flip = np.zeros(len(body.triangles), dtype=np.bool_)
    for k in range(n_patches):
        members = patch == k
        alone = n_patches == 1 or edges_of(body.triangles[members]).closed
        if alone and signed_volume(body.vertices, body.triangles[members]) < 0.0:
            flip |= members
    return _turned(body, flip, [_turned_over(body, flip, "the normals point outwards")] if flip.any() else [])


def _turned_over(body: Body, flip: BoolArray, purpose: str) -> Change:
    count = int(flip.sum())
    x, y, z = body.vertices[body.triangles[flip][0]].mean(axis=0)
    text = f"turned {count:,} panel{'' if count == 1 else 's'} over so that {purpose}"
    return Change("turned", count, (float(x), float(y), float(z)), text)


def _turned(body: Body, flip: BoolArray, notes: list[Change]) -> Body:
    new = [note for note in notes if note not in body.notes]
    if not flip.any() and not new:
        return body
    triangles = np.where(flip[:, None], body.triangles[:, ::-1], body.triangles)
    return replace(body, triangles=np.ascontiguousarray(triangles), notes=[*body.notes, *new])
