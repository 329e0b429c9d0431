"""The faults of one body, each with its count, its first place and what to do."""

from collections.abc import Callable, Iterator

import numpy as np
from numpy.typing import NDArray

from .bodies import Fault
from .changes import HOLE_SIZE
from .gaps import Shape
from .holes import hole_loops
from .mending import HOLE_SHARE, flat_height, flat_rows
from .self_contact import self_contacts
from .topology import boundary_loops, coincident_groups, edges_of, signed_volume, winding_flips

__all__ = ["faults_of", "needs_mending"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Coordinates rounded to more than this share of the median edge are worth a word.
_COARSE = 0.01


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


def needs_mending(fault: Fault) -> bool:
    """Whether a solve that may change nothing refuses the body."""
    tolerable = ("coarse-coordinates", "self-touching")
    return fault.severity != "note" and fault.code not in tolerable and not fault.code.endswith("-other")


def _place(point: FloatArray) -> tuple[float, float, float]:
    x, y, z = point
    return float(x), float(y), float(z)


def _count(count: int, thing: str, things: str = "") -> str:
    return f"{count:,} {thing if count == 1 else things or thing + 's'}"


def _coarse_coordinates(shape: Shape) -> Iterator[Fault]:
    sides, _ = shape.measures
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
    sides, doubled = shape.measures
    flat = np.flatnonzero(flat_rows(shape.body.triangles, sides, doubled, flat_height(shape.body)))
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
    if len(shape.single_rows) == len(shape.body.triangles):
        return
    group, _ = coincident_groups(shape.body.triangles)
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
    edges = edges_of(shape.single)
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
    rows, proper = shape.single_rows, shape.single
    if len(rows) == 0:
        return
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
    if len(turned):
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
    rows, proper = shape.single_rows, shape.single
    if len(rows) == 0:
        return
    vertex, areas = boundary_loops(body.vertices, proper, edges_of(proper))
    area = 0.5 * float(shape.measures[1][rows].sum())
    if len(vertex) and (areas < HOLE_SHARE * area).all():  # else a large rim says that this is a sheet
        across = [np.linalg.norm(np.ptp(body.vertices[loop], axis=0)) for loop in hole_loops(proper)]
        share = max(across, default=0.0) / body.diagonal
        size = f", the largest {share:.2g} of the body across" if across else ""
        limit = " (state how large a hole it may close)" if share > HOLE_SIZE else ""
        yield Fault(
            "holes",
            "warning",
            len(vertex),
            _place(body.vertices[vertex[0]]),
            f"closed but for {_count(len(vertex), 'hole')}{size}",
            f"a solve takes it as an open sheet unless bold mending closes it{limit}",
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
