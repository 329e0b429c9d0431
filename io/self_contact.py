"""Where a body touches or crosses itself."""

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from .gaps import Shape
from .triangle_boxes import near_pairs
from .triangle_distance import edge_crossings, pair_distances, sides_and_areas, slab_gaps

__all__ = ["self_contacts"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

_EXACT = 1024

#: Bodies with more panels are worth the compiled sieve.
_SIEVED = 20_000
_BLOCK = 200_000

#: Two panels over a common edge that enclose a smaller angle (radians) lie upon one another.
_FOLD = 1e-5


def self_contacts(shape: Shape, tolerance: float) -> tuple[IntArray, FloatArray, BoolArray]:
    """Pairs of triangles of one body that come closer than the tolerance away from what they share.

    Triangles lower than the tolerance are left out: they touch their neighbours' neighbours by nature.

    Parameters
    ----------
    shape : Shape
    tolerance : float, m

    Returns
    -------
    pair : (m, 2) int
    place : (m, 3) float, m
    crossing : (m,) bool
        Whether an edge of one passes through the other.
    """
    low = _heights(shape.corners) <= tolerance
    pairs, places, crossings = [], [], []
    for i, j in _near_pairs(shape, tolerance):
        tall = ~(low[i] | low[j])
        for found, place in _touching(shape, i[tall], j[tall], tolerance):
            pairs.append(found)
            places.append(place)
            first, second = shape.corners[found[:, 0]], shape.corners[found[:, 1]]
            crossings.append(_crossing(first, second, tolerance) | _crossing(second, first, tolerance))
    if not pairs:
        return np.zeros((0, 2), dtype=np.int64), np.zeros((0, 3)), np.zeros(0, dtype=np.bool_)
    return np.concatenate(pairs), np.concatenate(places), np.concatenate(crossings)


def _near_pairs(shape: Shape, tolerance: float) -> Iterator[tuple[IntArray, IntArray]]:
    """Pairs that may meet, in blocks; of large bodies through a compiled sieve that leaves few."""
    if len(shape.corners) < _SIEVED:
        for i, j, _ in near_pairs(shape.tree, shape.tree, [tolerance], itself=True):
            yield i, j
        return
    from daraf.bem.self_pairs import self_pairs

    tree, order = shape.tree, shape.tree.order
    boxes = np.concatenate([np.column_stack(both) for both in zip(tree.low, tree.high, strict=True)])
    levels = np.cumsum([0, *(len(low) for low in tree.low)])
    pairs = self_pairs(
        shape.corners[order], shape.body.triangles[order], shape.normals[order], boxes, levels, tolerance
    )
    for start in range(0, len(pairs), _BLOCK):
        block = order[pairs[start : start + _BLOCK]]
        yield block[:, 0], block[:, 1]


def _heights(corners: FloatArray) -> FloatArray:
    """Smallest height of each triangle, m."""
    sides, doubled = sides_and_areas(corners)
    longest = sides.max(axis=1)
    heights: FloatArray = doubled / np.where(longest > 0.0, longest, 1.0)
    return heights


def _crossing(a: FloatArray, b: FloatArray, tolerance: float) -> BoolArray:
    segments = np.stack([a, np.roll(a, -1, axis=1)], axis=2)
    return np.asarray(edge_crossings(segments, b[:, None], tolerance, strict=True)[0].any(axis=1), dtype=np.bool_)


def _touching(shape: Shape, i: IntArray, j: IntArray, tolerance: float) -> Iterator[tuple[IntArray, FloatArray]]:
    """Sort near pairs by the number of vertices they share, and test each sort in its own way."""
    near = slab_gaps(shape.corners[i], shape.normals[i], shape.corners[j], shape.normals[j]) <= tolerance
    i, j = i[near], j[near]
    triangles = shape.body.triangles
    same = triangles[i][:, :, None] == triangles[j][:, None, :]
    shared = same.sum(axis=(1, 2))
    yield from _apart(shape, i[shared == 0], j[shared == 0], tolerance)
    one = np.flatnonzero(shared == 1)
    yield from _hinged(shape, i[one], j[one], same[one], tolerance)
    two = np.flatnonzero(shared == 2)
    folded = two[_folded(shape, i[two], j[two], same[two])]
    if len(folded):
        yield np.column_stack([i[folded], j[folded]]), shape.corners[i[folded]].mean(axis=1)


def _apart(shape: Shape, i: IntArray, j: IntArray, tolerance: float) -> Iterator[tuple[IntArray, FloatArray]]:
    for start in range(0, len(i), _EXACT):
        a, b = i[start : start + _EXACT], j[start : start + _EXACT]
        distance, place, _ = pair_distances(shape.corners[a], shape.corners[b])
        hit = np.flatnonzero(distance <= tolerance)
        hit = hit[~_joined_by_short_edge(shape, a[hit], b[hit], tolerance)]
        if len(hit):
            yield np.column_stack([a[hit], b[hit]]), place[hit]


def _hinged(
    shape: Shape, i: IntArray, j: IntArray, same: BoolArray, tolerance: float
) -> Iterator[tuple[IntArray, FloatArray]]:
    """Pairs with one common vertex of which the edge opposite to it meets the other triangle."""
    at_i, at_j = same.any(axis=2).argmax(axis=1), same.any(axis=1).argmax(axis=1)
    first, second = _from_corner(shape.corners[i], at_i), _from_corner(shape.corners[j], at_j)
    open_pairs = np.flatnonzero(~_cones_apart(first, second))
    for start in range(0, len(open_pairs), _EXACT):
        rows = open_pairs[start : start + _EXACT]
        a, b = first[rows], second[rows]
        over_a, place_a, _ = pair_distances(a[:, [1, 2, 2]], b)
        over_b, place_b, _ = pair_distances(b[:, [1, 2, 2]], a)
        hit = np.flatnonzero(np.minimum(over_a, over_b) <= tolerance)
        hit = hit[~_joined_by_short_edge(shape, i[rows[hit]], j[rows[hit]], tolerance)]
        if len(hit):
            place = np.where((over_a <= over_b)[:, None], place_a, place_b)
            yield np.column_stack([i[rows[hit]], j[rows[hit]]]), place[hit]


def _from_corner(corners: FloatArray, start: IntArray) -> FloatArray:
    """The same triangles, beginning at the corner asked for."""
    turn = (start[:, None] + np.arange(3)) % 3
    return np.take_along_axis(corners, turn[:, :, None], axis=1)


def _cones_apart(a: FloatArray, b: FloatArray) -> BoolArray:
    """Whether a plane through the common first corner has the triangles on different sides.

    Tried are the plane midway between them and those square upon each triangle along its edges; a pair that
    none of them separates is computed exactly.
    """
    da, db = a[:, 1:] - a[:, :1], b[:, 1:] - b[:, :1]
    da = da / np.linalg.norm(da, axis=2, keepdims=True)
    db = db / np.linalg.norm(db, axis=2, keepdims=True)
    small = 1e-9
    middle = da.sum(axis=1) - db.sum(axis=1)
    to_a, to_b = np.einsum("nki,ni->nk", da, middle), np.einsum("nki,ni->nk", db, middle)
    apart = (to_a > small).all(axis=1) & (to_b < -small).all(axis=1)
    for one, other in ((da, db), (db, da)):
        normal = np.cross(one[:, 0], one[:, 1])
        for outward in (-np.cross(normal, one[:, 0]), np.cross(normal, one[:, 1])):
            apart |= (np.einsum("nki,ni->nk", other, outward) > small).all(axis=1)
    result: BoolArray = apart
    return result


def _folded(shape: Shape, i: IntArray, j: IntArray, same: BoolArray) -> BoolArray:
    """Pairs with a common edge that lie upon one another."""
    free_i = (~same.any(axis=2)).argmax(axis=1)
    free_j = (~same.any(axis=1)).argmax(axis=1)
    a, b = _from_corner(shape.corners[i], free_i), _from_corner(shape.corners[j], free_j)
    along = a[:, 2] - a[:, 1]
    along = along / np.linalg.norm(along, axis=1, keepdims=True)
    rise = []
    for triangle in (a, b):
        up = triangle[:, 0] - a[:, 1]
        up = up - np.einsum("ni,ni->n", up, along)[:, None] * along
        rise.append(up / np.linalg.norm(up, axis=1, keepdims=True))
    towards = np.einsum("ni,ni->n", rise[0], rise[1]) > 0.0
    folded: BoolArray = towards & (np.linalg.norm(np.cross(rise[0], rise[1]), axis=1) < _FOLD)
    return folded


def _joined_by_short_edge(shape: Shape, i: IntArray, j: IntArray, tolerance: float) -> BoolArray:
    """Pairs that are close only because an edge shorter than the tolerance lies between them."""
    if len(i) == 0:
        return np.zeros(0, dtype=np.bool_)
    triangles = shape.body.triangles
    sides = np.stack([triangles, np.roll(triangles, -1, axis=1)], axis=2).reshape(-1, 2)
    length = np.linalg.norm(shape.body.vertices[sides[:, 0]] - shape.body.vertices[sides[:, 1]], axis=1)
    short = np.sort(sides[length <= 2.0 * tolerance], axis=1)
    n = len(shape.body.vertices)
    p, q = np.broadcast_arrays(triangles[i][:, :, None], triangles[j][:, None, :])
    key = np.minimum(p, q) * n + np.maximum(p, q)
    return np.asarray(np.isin(key, short[:, 0] * n + short[:, 1]).any(axis=(1, 2)), dtype=np.bool_)
