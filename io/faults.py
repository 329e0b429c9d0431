"""The faults of one body, each with its count, its first place and what to do."""

from collections.abc import Callable, Iterator

import numpy as np
from numpy.typing import NDArray

from .bodies import Fault
from .gaps import Shape
from .mending import coincident_groups, flat_height, flat_triangles
from .self_contact import self_contacts
from .topology import boundary_loops, edges_of, proper_rows, signed_volume, winding_flips

__all__ = ["faults_of"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Coordinates rounded to more than this share of the median edge are worth a word.
_COARSE = 0.01

#: A boundary loop whose cap would be a smaller share of the area looks like a hole, not like a rim.
_HOLE = 0.02


def faults_of(shape: Shape) -> list[Fault]:
    """Everything about one body, apart from its neighbours, that a drawing check would mark.

    Parameters
    ----------
    shape : Shape

    Returns
    -------
    list of Fault
        Those found while reading first.
    """
    checks: tuple[Callable[[Shape], Iterator[Fault]], ...] = (
        _coarse_coordinates,
        _degenerate,
        _duplicate,
        _non_manifold,
        _winding,
        _holes,
        _self_contact,
    )
    return [*shape.body.faults, *(fault for check in checks for fault in check(shape))]


def _place(point: FloatArray) -> tuple[float, float, float]:
    x, y, z = point
    return float(x), float(y), float(z)


def _count(count: int, thing: str, things: str = "") -> str:
    return f"{count:,} {thing if count == 1 else things or thing + 's'}"


def _single_rows(triangles: IntArray) -> IntArray:
    """Triangles with three different vertices, one of each that coincide."""
    group, size = coincident_groups(triangles)
    if len(size) == len(group):
        return np.flatnonzero(proper_rows(triangles))
    first = np.zeros(len(triangles), dtype=np.bool_)
    first[np.unique(group, return_index=True)[1]] = True
    return np.flatnonzero(first & proper_rows(triangles))


def _coarse_coordinates(shape: Shape) -> Iterator[Fault]:
    sides = np.linalg.norm(np.roll(shape.corners, -1, axis=1) - shape.corners, axis=2)
    edge = float(np.median(sides[sides > 0.0])) if (sides > 0.0).any() else 0.0
    if 0.0 < _COARSE * edge < shape.body.spacing:
        yield Fault(
            "coarse-coordinates",
            "warning",
            len(shape.body.vertices),
            None,
            f"coordinates are rounded to {shape.body.spacing / edge:.1%} of the median edge: the part lies "
            "far from the origin for single precision",
            "move the part to the origin in CAD and export it again",
        )


def _degenerate(shape: Shape) -> Iterator[Fault]:
    flat = np.flatnonzero(flat_triangles(shape.body.vertices, shape.body.triangles, flat_height(shape.body)))
    if len(flat):
        yield Fault(
            "degenerate-faces",
            "error" if len(flat) == len(shape.corners) else "warning",
            len(flat),
            _place(shape.corners[flat[0]].mean(axis=0)),
            f"{_count(len(flat), 'panel')} without area",
            "a solve removes them without changing the shape",
        )


def _duplicate(shape: Shape) -> Iterator[Fault]:
    group, size = coincident_groups(shape.body.triangles)
    if len(size) == len(group):
        return
    extra = np.setdiff1d(np.arange(len(group)), np.unique(group, return_index=True)[1])
    if len(extra):
        yield Fault(
            "duplicate-faces",
            "warning",
            len(extra),
            _place(shape.corners[extra[0]].mean(axis=0)),
            f"{_count(len(extra), 'panel')} lying upon an equal one",
            "a solve keeps one of each, and none of a wall inside a body",
        )


def _non_manifold(shape: Shape) -> Iterator[Fault]:
    edges = edges_of(shape.body.triangles[_single_rows(shape.body.triangles)])
    bad = np.flatnonzero(edges.count > 2)
    if len(bad):
        yield Fault(
            "non-manifold-edges",
            "warning",
            len(bad),
            _place(shape.body.vertices[edges.ends[bad[0]]].mean(axis=0)),
            f"{_count(len(bad), 'edge')} with more than two panels",
            "unite or separate the parts that meet there; harmless for the capacitance of one conductor",
        )


def _winding(shape: Shape) -> Iterator[Fault]:
    rows = _single_rows(shape.body.triangles)
    if len(rows) == 0:
        return
    proper = shape.body.triangles[rows]
    flip, _, orientable = winding_flips(proper)
    if not orientable:
        text = "the surface has a single side (a Moebius strip)"
        yield Fault("one-sided", "note", 1, None, text, "fine if that is meant: both sides count together")
        return
    turned = rows[flip]
    if len(turned):
        yield Fault(
            "flipped-normals",
            "warning",
            len(turned),
            _place(shape.corners[turned[0]].mean(axis=0)),
            f"{_count(len(turned), 'panel')} wound against the neighbours",
            "a solve turns them over",
        )
    proper = np.where(flip[:, None], proper[:, ::-1], proper)
    if edges_of(proper).closed and signed_volume(shape.body.vertices, proper) < 0.0:
        yield Fault(
            "inside-out",
            "warning",
            1,
            None,
            "the closed body is wound inwards",
            "a solve turns it over",
        )


def _holes(shape: Shape) -> Iterator[Fault]:
    body = shape.body
    proper = body.triangles[_single_rows(body.triangles)]
    if len(proper) == 0:
        return
    vertex, areas = boundary_loops(body.vertices, proper, edges_of(proper))
    corners = body.vertices[proper]
    area = 0.5 * np.linalg.norm(np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]), axis=1).sum()
    if len(vertex) and (areas < _HOLE * area).all():  # else a large rim says that this is a sheet
        yield Fault(
            "holes",
            "warning",
            len(vertex),
            _place(body.vertices[vertex[0]]),
            f"closed but for {_count(len(vertex), 'hole')}",
            "close it in CAD if the body is meant as a solid; a solve takes the surface as an open sheet",
        )


def _self_contact(shape: Shape) -> Iterator[Fault]:
    tolerance = 2.0 * flat_height(shape.body)
    _, place, crossing = self_contacts(shape, tolerance)
    for code, severity, chosen, verb in (
        ("self-crossing", "error", crossing, "cross"),
        ("self-touching", "warning", ~crossing, "touch"),
    ):
        if chosen.any():
            yield Fault(
                code,
                severity,
                int(chosen.sum()),
                _place(place[chosen][0]),
                f"{_count(int(chosen.sum()), 'pair')} of panels {verb} that are no neighbours",
                "unite the overlapping parts, or separate the touching ones, in CAD",
            )
