"""Changes that make bodies fit to solve, each of them listed in the notes of the body."""

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components

from daraf.bem.errors import InputError

from .bodies import Body
from .branching import split_branching
from .changes import Change, Mend, Place
from .holes import fill_loop, hole_loops
from .orientation import consistent, orient
from .topology import (
    boundary_loops,
    coincident_groups,
    compacted,
    connected_pieces,
    edges_of,
    proper_rows,
    signed_volume,
)
from .triangle_distance import sides_and_areas

__all__ = [
    "HOLE_SHARE",
    "fit_bodies",
    "flat_height",
    "flat_rows",
    "flat_triangles",
    "make_fit",
]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

#: Rounds of edge exchanges; each removes at least one triangle of a chain along one edge.
_ROUNDS = 100
#: Rounds without fewer triangles left after which no more are tried.
_IDLE = 5

#: A boundary loop whose cap would be a smaller share of the area looks like a hole, not like a rim.
HOLE_SHARE = 0.02


def flat_height(body: Body) -> float:
    """Height below which a triangle counts as having no area: one rounding step, or 1e-9 of the body.

    Parameters
    ----------
    body : Body

    Returns
    -------
    float, m
    """
    return max(2.0 * body.spacing, 1e-9 * body.diagonal)


def flat_triangles(vertices: FloatArray, triangles: IntArray, height: float) -> BoolArray:
    """Triangles with a repeated vertex or lower than a height.

    Parameters
    ----------
    vertices : (nv, 3) float, m
    triangles : (nt, 3) int
    height : float, m

    Returns
    -------
    (nt,) bool
    """
    return flat_rows(triangles, *sides_and_areas(vertices[triangles]), height)


def flat_rows(triangles: IntArray, sides: FloatArray, doubled: FloatArray, height: float) -> BoolArray:
    """As `flat_triangles`, of triangles whose sides (nt, 3) and doubled areas (nt,) are known."""
    flat: BoolArray = ~proper_rows(triangles) | (doubled <= height * sides.max(axis=1))
    return flat


def fit_bodies(bodies: Sequence[Body], mend: Mend | None = None) -> list[Body]:
    """Each body made fit, then all of them oriented.

    Parameters
    ----------
    bodies : sequence of Body
    mend : Mend, optional
        How far to go; with "list" the bodies are returned as they are.

    Returns
    -------
    list of Body
        In the same order; what was changed stands in the notes.

    Raises
    ------
    InputError
        If nothing of a body is left.
    """
    mend = mend or Mend()
    if not mend.changes:
        return list(bodies)
    fitted = [_filled(consistent(make_fit(body)), mend) for body in bodies]
    apart = [_taken_apart(body) for body in orient(fitted)]
    return [_checked(before, after) for before, after in zip(bodies, apart, strict=True)]


def make_fit(body: Body) -> Body:
    """Remove triangles without area and coincident ones; the shape stays as it is.

    Vertices closer than one rounding step along an edge are merged. A triangle whose corners lie on one line
    exchanges its longest edge with its neighbour, so that a closed body stays closed. Of coincident triangles
    one stays, unless they are a wall inside a body that is closed without them.

    Parameters
    ----------
    body : Body

    Returns
    -------
    Body
        The same object if nothing was to be done.

    Raises
    ------
    InputError
        If no triangle is left.
    """
    height = flat_height(body)
    notes: list[Change] = []
    triangles = _without_short_edges(body, height, notes)
    triangles = _without_coincident(body.vertices, triangles, notes)
    triangles = _without_flat(body.vertices, triangles, height, notes)
    if len(triangles) == 0:
        raise InputError(f"{body.file}: body {body.name!r} has no area left after cleaning; export it again")
    if not notes:
        return body
    n_pieces, _ = connected_pieces(triangles)
    if n_pieces > 1:
        notes.append(Change("fell-apart", n_pieces, None, f"it now consists of {n_pieces} separate pieces"))
    return _with_triangles(body, body.vertices, triangles, notes)


def _with_triangles(body: Body, vertices: FloatArray, triangles: IntArray, notes: list[Change]) -> Body:
    used, index = compacted(triangles, len(vertices))
    return replace(
        body,
        vertices=np.ascontiguousarray(vertices[used]),
        triangles=index,
        notes=[*body.notes, *notes],
    )


def _filled(body: Body, mend: Mend) -> Body:
    """Close the holes of a body that is closed but for small ones."""
    largest = mend.hole_size(body.diagonal)
    if largest == 0.0:
        return body
    _, areas = boundary_loops(body.vertices, body.triangles, edges_of(body.triangles))
    if len(areas) == 0 or (areas >= HOLE_SHARE * _area(body)).any():
        return body  # closed, or a large rim says that this is a sheet
    added, sizes, places = [], [], []
    for loop in hole_loops(body.triangles):
        points = body.vertices[loop]
        size = float(np.linalg.norm(np.ptp(points, axis=0)))
        cap = fill_loop(points) if size <= largest else None
        if cap is not None:
            added.append(loop[cap])
            sizes.append(size)
            places.append(_point(points.mean(axis=0)))
    if not added:
        return body
    faces = sum(len(cap) for cap in added)
    text = f"closed {_many(len(added), 'hole')}, the largest {max(sizes) / body.diagonal:.2g} of the body, with "
    note = Change("filled", len(added), places[0], text + f"{_many(faces, 'new panel')}")
    return _with_triangles(body, body.vertices, np.vstack([body.triangles, *added]), [note])


def _taken_apart(body: Body) -> Body:
    """Take a body apart along edges with more than two panels."""
    vertices, triangles, split = split_branching(body.vertices, body.triangles)
    if len(split) == 0:
        return body
    text = f"took {_many(len(split), 'edge')} with more than two panels apart; the shape is the same"
    note = Change("split-edges", len(split), _point(body.vertices[split[0]].mean(axis=0)), text)
    return replace(body, vertices=vertices, triangles=triangles, notes=[*body.notes, note])


def _checked(before: Body, after: Body) -> Body:
    """Tell what mending did to area and volume."""
    if after.notes == before.notes or after.triangles is before.triangles:
        return after
    area = _area(after) / _area(before) - 1.0
    text = f"area after mending {100.0 * area + 0.0:+.2g} %"
    if edges_of(before.triangles).closed and edges_of(after.triangles).closed:
        old = abs(signed_volume(before.vertices, before.triangles))
        new = abs(signed_volume(after.vertices, after.triangles))
        if old > 0.0:
            text += f", volume {100.0 * (new / old - 1.0) + 0.0:+.2g} %"
    return replace(after, notes=[*after.notes, Change("checked", 1, None, text)])


def _area(body: Body) -> float:
    return 0.5 * float(sides_and_areas(body.vertices[body.triangles])[1].sum())


def _point(point: FloatArray) -> Place:
    x, y, z = point
    return float(x), float(y), float(z)


def _middle(vertices: FloatArray, triangles: IntArray, rows: BoolArray | IntArray) -> Place:
    """Middle of the first of some triangles."""
    return _point(vertices[triangles[rows][0]].mean(axis=0))


def _without_short_edges(body: Body, height: float, notes: list[Change]) -> IntArray:
    """Merge the ends of edges no longer than a height, and drop the triangles that this collapses."""
    triangles = body.triangles
    edges = edges_of(triangles)
    length = np.linalg.norm(body.vertices[edges.ends[:, 0]] - body.vertices[edges.ends[:, 1]], axis=1)
    short = edges.ends[length <= height]
    if len(short):
        n = len(body.vertices)
        graph = coo_matrix((np.ones(len(short)), (short[:, 0], short[:, 1])), shape=(n, n))
        label = connected_components(graph, directed=False)[1]
        keep = np.unique(label, return_index=True)[1]
        triangles = keep[label][triangles]
        moved = n - len(keep)
        if moved:
            text = f"merged {_many(moved, 'vertex', 'vertices')} with a neighbour"
            notes.append(Change("merged-vertices", moved, _point(body.vertices[short[0, 0]]), text, height))
    collapsed = ~proper_rows(triangles)
    if collapsed.any():
        count = int(collapsed.sum())
        place = _middle(body.vertices, triangles, collapsed)
        notes.append(Change("dropped", count, place, f"dropped {_many(count, 'panel')} with two equal vertices"))
    return triangles[~collapsed]


def _without_flat(vertices: FloatArray, triangles: IntArray, height: float, notes: list[Change]) -> IntArray:
    """Remove triangles whose corners lie on one line by exchanging their longest edge."""
    exchanged = 0
    place: Place | None = None
    if not flat_triangles(vertices, triangles, height).any():
        return triangles
    triangles = triangles.copy()
    fewest, idle = len(triangles), 0
    for _ in range(_ROUNDS):
        flat = flat_triangles(vertices, triangles, height)
        left = int(flat.sum())
        fewest, idle = (left, 0) if left < fewest else (fewest, idle + 1)
        if idle > _IDLE:  # exchanges go around in a circle
            break
        if flat.any() and place is None:
            place = _middle(vertices, triangles, flat)
        if not flat.any():
            break
        done = _exchange_round(vertices, triangles, flat)
        exchanged += done
        if done == 0:
            break
    flat = flat_triangles(vertices, triangles, height)
    if exchanged:
        text = f"exchanged the edge of {_many(exchanged, 'panel')} without area; the shape is the same"
        notes.append(Change("exchanged", exchanged, place, text))
    if flat.any() and edges_of(triangles).closed and not edges_of(triangles[~flat]).closed:
        return triangles  # better a sliver than a hole: panels do without it
    if flat.any():
        count = int(flat.sum())
        place = _middle(vertices, triangles, flat)
        notes.append(Change("dropped", count, place, f"dropped {_many(count, 'panel')} without area"))
    return triangles[~flat]


def _exchange_round(vertices: FloatArray, triangles: IntArray, flat: BoolArray) -> int:
    """Exchange the longest edge of each flat triangle whose neighbour there has area; changes `triangles`."""
    edges = edges_of(triangles)
    corners = vertices[triangles]
    sides = np.linalg.norm(np.roll(corners, -1, axis=1) - corners, axis=2)
    flat_rows = np.flatnonzero(flat)
    longest = sides[flat_rows].argmax(axis=1)
    shared = edges.edge[flat_rows, longest]
    wanted = np.flatnonzero(np.isin(edges.edge.ravel(), shared))
    at_edge: dict[int, list[int]] = {}
    for corner in wanted:
        at_edge.setdefault(int(edges.edge.flat[corner]), []).append(int(corner))
    n = len(vertices)
    known = set((edges.ends[:, 0] * n + edges.ends[:, 1]).tolist())
    busy: set[int] = set()
    done = 0
    for row, side, edge in zip(flat_rows.tolist(), longest.tolist(), shared.tolist(), strict=True):
        others = [corner for corner in at_edge[edge] if corner // 3 != row]
        if len(others) != 1 or row in busy or others[0] // 3 in busy or flat[others[0] // 3]:
            continue
        neighbour, start = divmod(others[0], 3)
        between = int(triangles[row, (side + 2) % 3])
        s, t, d = (int(triangles[neighbour, (start + k) % 3]) for k in range(3))
        if d == between or min(between, d) * n + max(between, d) in known:
            continue
        triangles[neighbour] = s, between, d
        triangles[row] = between, t, d
        busy.update((row, neighbour))
        done += 1
    return done


def _without_coincident(vertices: FloatArray, triangles: IntArray, notes: list[Change]) -> IntArray:
    """Keep one of coincident triangles, or none of those that are a wall inside."""
    group, size = coincident_groups(triangles)
    if (size == 1).all():
        return triangles
    first = np.zeros(len(triangles), dtype=np.bool_)
    first[np.unique(group, return_index=True)[1]] = True
    several = size[group] > 1
    wall = first & several & (size[group] % 2 == 0)
    inner = _inner_walls(triangles, wall, ~several)
    keep = first & ~inner
    if inner.any():
        count = int(inner.sum())
        text = f"removed a wall of {_many(count, 'doubled panel')} inside the body"
        notes.append(Change("removed-wall", count, _middle(vertices, triangles, inner), text))
    extra = several & ~first & ~np.isin(group, group[inner])
    if extra.any():
        count = int(extra.sum())
        text = f"dropped {_many(count, 'panel')} that lay upon an equal one"
        notes.append(Change("dropped", count, _middle(vertices, triangles, extra), text))
    return triangles[keep]


def _inner_walls(triangles: IntArray, wall: BoolArray, single: BoolArray) -> BoolArray:
    """Of the patches of doubled triangles those whose rim is a closed edge of the rest of the body."""
    inner = np.zeros(len(triangles), dtype=np.bool_)
    rows = np.flatnonzero(wall)
    if len(rows) == 0:
        return inner
    edges = edges_of(triangles)
    single_count = np.bincount(edges.edge[single].ravel(), minlength=len(edges.ends))
    n_patches, patch = connected_pieces(triangles[rows])
    for k in range(n_patches):
        members = rows[patch == k]
        used, count = np.unique(edges.edge[members], return_counts=True)
        rim = used[count == 1]
        if len(rim) and (single_count[rim] == 2).all():
            inner[members] = True
    return inner


def _many(count: int, thing: str, things: str = "") -> str:
    """``1 panel``, ``1,234 panels``."""
    return f"{count:,} {thing if count == 1 else things or thing + 's'}"
