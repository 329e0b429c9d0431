"""Changes that make bodies fit to solve, each of them listed in the notes of the body."""

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components

from daraf.bem.errors import InputError

from .bodies import Body
from .contacts import cavity_walls, shapes_of
from .topology import connected_pieces, edges_of, proper_rows, signed_volume, winding_flips
from .triangle_distance import sides_and_areas

__all__ = ["coincident_groups", "fit_bodies", "flat_height", "flat_triangles", "make_fit", "orient"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

#: An odd number whose bits are spread: products with it hardly ever agree by chance (Knuth, TAOCP 3, 6.4).
_MIX = np.uint64(0x9E3779B97F4A7C15)

#: Rounds of edge exchanges; each removes at least one triangle of a chain along one edge.
_ROUNDS = 100


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
    sides, doubled = sides_and_areas(vertices[triangles])
    flat: BoolArray = ~proper_rows(triangles) | (doubled <= height * sides.max(axis=1))
    return flat


def coincident_groups(triangles: IntArray) -> tuple[IntArray, IntArray]:
    """Group of each triangle by its set of vertices, and the size of each group.

    Parameters
    ----------
    triangles : (nt, 3) int

    Returns
    -------
    group : (nt,) int
    size : (n_groups,) int
    """
    ordered = np.sort(triangles, axis=1)
    n = np.uint64(triangles.max(initial=0) + 1)
    a, b, c = ordered.astype(np.uint64).T
    key = np.sort(((a * n + b) * _MIX) ^ c)
    if (key[1:] != key[:-1]).all():  # the usual mesh: no two keys are equal, so no two triangles
        return np.arange(len(triangles)), np.ones(len(triangles), dtype=np.int64)
    _, group, size = np.unique(ordered, axis=0, return_inverse=True, return_counts=True)
    return group.ravel(), size


def fit_bodies(bodies: Sequence[Body]) -> list[Body]:
    """Each body made fit, then all of them oriented.

    Parameters
    ----------
    bodies : sequence of Body

    Returns
    -------
    list of Body
        In the same order; what was changed stands in the notes.

    Raises
    ------
    InputError
        If nothing of a body is left.
    """
    return orient([make_fit(body) for body in bodies])


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
    notes: list[str] = []
    triangles = _without_short_edges(body, height, notes)
    triangles = _without_coincident(triangles, notes)
    triangles = _without_flat(body.vertices, triangles, height, notes)
    if len(triangles) == 0:
        raise InputError(f"{body.file}: body {body.name!r} has no area left after cleaning; export it again")
    if not notes:
        return body
    n_pieces, _ = connected_pieces(triangles)
    if n_pieces > 1:
        notes.append(f"it now consists of {n_pieces} separate pieces")
    used, index = np.unique(triangles, return_inverse=True)
    return replace(
        body,
        vertices=np.ascontiguousarray(body.vertices[used]),
        triangles=np.ascontiguousarray(index.reshape(-1, 3), dtype=np.int64),
        notes=[*body.notes, *notes],
    )


def _without_short_edges(body: Body, height: float, notes: list[str]) -> IntArray:
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
            notes.append(f"merged {_many(moved, 'vertex', 'vertices')} at most {height:.2g} m from a neighbour")
    collapsed = ~proper_rows(triangles)
    if collapsed.any():
        notes.append(f"dropped {_many(int(collapsed.sum()), 'panel')} with two equal vertices")
    return triangles[~collapsed]


def _without_flat(vertices: FloatArray, triangles: IntArray, height: float, notes: list[str]) -> IntArray:
    """Remove triangles whose corners lie on one line by exchanging their longest edge."""
    exchanged = 0
    if not flat_triangles(vertices, triangles, height).any():
        return triangles
    triangles = triangles.copy()
    for _ in range(_ROUNDS):
        flat = flat_triangles(vertices, triangles, height)
        if not flat.any():
            break
        done = _exchange_round(vertices, triangles, flat)
        exchanged += done
        if done == 0:
            break
    flat = flat_triangles(vertices, triangles, height)
    if exchanged:
        notes.append(f"exchanged the edge of {_many(exchanged, 'panel')} without area; the shape is the same")
    if flat.any():
        notes.append(f"dropped {_many(int(flat.sum()), 'panel')} without area")
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
    known = {(int(a), int(b)) for a, b in edges.ends} if len(flat_rows) else set()
    busy: set[int] = set()
    done = 0
    for row, side, edge in zip(flat_rows.tolist(), longest.tolist(), shared.tolist(), strict=True):
        others = [corner for corner in at_edge[edge] if corner // 3 != row]
        if len(others) != 1 or row in busy or others[0] // 3 in busy or flat[others[0] // 3]:
            continue
        neighbour, start = divmod(others[0], 3)
        between = int(triangles[row, (side + 2) % 3])
        s, t, d = (int(triangles[neighbour, (start + k) % 3]) for k in range(3))
        if d == between or (min(between, d), max(between, d)) in known:
            continue
        triangles[neighbour] = s, between, d
        triangles[row] = between, t, d
        busy.update((row, neighbour))
        done += 1
    return done


def _without_coincident(triangles: IntArray, notes: list[str]) -> IntArray:
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
        notes.append(f"removed a wall of {_many(int(inner.sum()), 'doubled panel')} inside the body")
    extra = int((several & ~first & ~np.isin(group, group[inner])).sum())
    if extra:
        notes.append(f"dropped {_many(extra, 'panel')} that lay upon an equal one")
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
    consistent = [_consistent(body) for body in bodies]
    shapes = shapes_of(consistent)
    walls = cavity_walls(shapes)
    result = []
    for k, (body, shape) in enumerate(zip(consistent, shapes, strict=True)):
        if k in walls:
            note = f"is the wall of a cavity in {consistent[walls[k]].name!r}: its normals point into the cavity"
            result.append(body if note in body.notes else replace(body, notes=[*body.notes, note]))
        elif shape.volume is not None:
            result.append(_outward(body))
        else:
            result.append(body)
    return result


def _consistent(body: Body) -> Body:
    rows = proper_rows(body.triangles)
    flip = np.zeros(len(rows), dtype=np.bool_)
    notes: list[str] = []
    if not rows.any():
        return body
    flip[rows], _, orientable = winding_flips(body.triangles[rows])
    if not orientable:
        notes.append("has a single side (a Moebius strip): its normals are left as they are")
        flip = np.zeros_like(flip)
    if flip.any():
        notes.append(f"turned {_many(int(flip.sum()), 'panel')} over so that neighbours agree")
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
    notes = [f"turned {_many(int(flip.sum()), 'panel')} over so that the normals point outwards"]
    return _turned(body, flip, notes if flip.any() else [])


def _turned(body: Body, flip: BoolArray, notes: list[str]) -> Body:
    new = [note for note in notes if note not in body.notes]
    if not flip.any() and not new:
        return body
    triangles = np.where(flip[:, None], body.triangles[:, ::-1], body.triangles)
    return replace(body, triangles=np.ascontiguousarray(triangles), notes=[*body.notes, *new])


def _many(count: int, thing: str, things: str = "") -> str:
    """``1 panel``, ``1,234 panels``."""
    return f"{count:,} {thing if count == 1 else things or thing + 's'}"
