"""Near part of the product: closed-form integrals of the near pairs of leaves, stored once for both directions.

The matrix of a leaf holds the mean of 1/r over each pair of panels (their double integral over both areas), the
leaf's own panels along the rows, along the columns these again and then those of the near leaves behind it. Pairs
further apart than a few radii take the first terms of the expansion of 1/r, the other ones
:func:`daraf.bem.pairs.pair_integral`.

Tiles are runs of first leaves. A tile writes the rows of its own leaves; what it adds to leaves of other tiles goes
to rows of its own behind them, which are added up in the order of the tiles.
"""

import functools
import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .frames import AREA, CENTROID, POINTS, RADIUS, panel_frames
from .jit import REORDER, kernel
from .multipole_lists import CellPairs
from .near import self_integral
from .pairs import far_integral, middle_integral, pair_integral
from .polygon import polygon_distance
from .threads import run_tiles
from .tree import Tree

__all__ = ["Known", "NearBlocks", "NearLayout", "near_layout"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
Progress = Callable[[float, float], None]

#: Place of the moments in a row of :func:`_simple_rows`.
_MOMENTS = 6
#: Distance from the smaller panel's centroid to the larger panel over the smaller one's radius, beyond which the
#: closed form at 3 x 3 and 4 x 4 points leaves less than 1e-5 in the root mean square: measured on spheres, plates,
#: soups and refined plates.
_COARSE_3, _COARSE_4 = 1.7, 1.2
#: Panels whose moments are made at once.
_ROWS_AT_ONCE = 20_000
#: Entries of one tile: short enough for progress and balance, long enough that few rows belong to two tiles.
_ENTRIES_PER_TILE = 2_000_000


@dataclass(frozen=True, eq=False)
class NearLayout:
    """Where the blocks stand, and the tiles.

    Attributes
    ----------
    pairs : (n_blocks, 2) int
        Leaves, the smaller place first, in ascending order: for each leaf itself, then its near leaves behind it.
    column : (n_blocks,) int
        First column of a block in the matrix of its first leaf.
    place : (n_blocks,) int
        Where the second leaf's sums of a block begin: its own place, or one behind all panels.
    head : (n_leaves + 1,) int
        First block of each leaf.
    start : (n_leaves + 1,) int
        First entry of the matrix of each leaf.
    tile : (n_tiles + 1,) int
        First leaf of each tile.
    extra : (n_extra, 2) int
        Place behind the panels and leaf, in the order in which they are added.
    rows : int
        Panels and places behind them.
    """

    pairs: IntArray
    column: IntArray
    place: IntArray
    head: IntArray
    start: IntArray
    tile: IntArray
    extra: IntArray
    rows: int

    @functools.cached_property
    def neighbours(self) -> tuple[IntArray, IntArray]:
        """Where the near leaves of each leaf begin, and these, both ways, ascending."""
        off = self.pairs[self.pairs[:, 0] != self.pairs[:, 1]]
        both = np.concatenate([self.pairs, off[:, ::-1]])
        both = both[np.lexsort((both[:, 1], both[:, 0]))]
        return np.searchsorted(both[:, 0], np.arange(len(self.head))), both[:, 1]


def near_layout(tree: Tree, pairs: CellPairs) -> NearLayout:
    """Lay out the near blocks of a tree."""
    near, leaf_start = pairs.near, tree.leaf_start
    size = np.diff(leaf_start)
    head = np.searchsorted(near[:, 0], np.arange(len(size) + 1))
    columns = np.concatenate([[0], np.cumsum(size[near[:, 1]])])
    width = columns[head[1:]] - columns[head[:-1]]
    start = np.concatenate([[0], np.cumsum(size * width)])
    n_tiles = max(1, round(start[-1] / _ENTRIES_PER_TILE))
    tile = np.searchsorted(start, np.linspace(0, start[-1], n_tiles + 1))
    tile = np.unique(np.concatenate([[0], tile[1:-1], [len(size)]]))
    tile_of_leaf = np.searchsorted(tile, np.arange(len(size)), side="right") - 1
    other = tile_of_leaf[near[:, 0]] != tile_of_leaf[near[:, 1]]
    # one stretch for each tile and leaf of another tile
    code = tile_of_leaf[near[other, 0]] * len(size) + near[other, 1]
    found, inverse = np.unique(code, return_inverse=True)
    stretch = np.concatenate([[0], np.cumsum(size[found % len(size)])]) + leaf_start[-1]
    place = leaf_start[near[:, 1]].copy()
    place[other] = stretch[inverse.reshape(-1)]
    order = np.argsort(found % len(size), kind="stable")
    extra = np.column_stack([stretch[:-1], found % len(size)])[order]
    column = columns[:-1] - columns[head[near[:, 0]]]
    return NearLayout(near, column, place, head, start, tile, extra, int(stretch[-1]))


@kernel(fastmath=REORDER)
def _expanded_mean(x, y, z, m):
    """Mean of 1/r over a panel, seen from d = (x, y, z) off its centroid, by the first terms of its expansion.

    ``1/d + (3 d.C d / d^2 - tr C) / (2 d^3) + (5 T:ddd / d^2 - 3 tr T.d) / (2 d^5)``

    `m` holds the central moments over the area: C (xx, yy, zz, xy, xz, yz), T (xxx, yyy, zzz, xxy, xxz, yyx, yyz,
    zzx, zzy, xyz).
    """
    over2 = 1.0 / (x * x + y * y + z * z)
    along = x * (m[0] * x + 2.0 * (m[3] * y + m[4] * z)) + y * (m[1] * y + 2.0 * m[5] * z) + m[2] * z * z
    cubic = x * x * (m[6] * x + 3.0 * (m[9] * y + m[10] * z)) + y * y * (m[7] * y + 3.0 * (m[11] * x + m[12] * z))
    cubic += z * z * (m[8] * z + 3.0 * (m[13] * x + m[14] * y)) + 6.0 * m[15] * x * y * z
    trace = x * (m[6] + m[11] + m[13]) + y * (m[7] + m[9] + m[14]) + z * (m[8] + m[10] + m[12])
    second = 3.0 * along * over2 - m[0] - m[1] - m[2]
    third = (5.0 * cubic * over2 - 3.0 * trace) * over2
    return math.sqrt(over2) * (1.0 + 0.5 * over2 * (second + third))


@kernel
def _expanded(a, b, both):
    """Mean of 1/r over two panels by the first terms of its expansion about both centroids; `both` is space for 16.

    Rows of :func:`_simple_rows`: the moments of both add up, the third ones with the sign of the direction.
    """
    for k in range(6):
        both[k] = a[_MOMENTS + k] + b[_MOMENTS + k]
    for k in range(6, 16):
        both[k] = a[_MOMENTS + k] - b[_MOMENTS + k]
    return _expanded_mean(b[0] - a[0], b[1] - a[1], b[2] - a[2], both)


@kernel(fastmath=REORDER)
def _half_expanded(frame, small):
    """Mean of 1/r over two panels: 3 x 3 points on one, the expansion of the other, the smaller one."""
    s, n = POINTS[3], 9
    px, py, pz, weight = frame[s : s + n], frame[s + n : s + 2 * n], frame[s + 2 * n : s + 3 * n], frame[s + 3 * n :]
    cx, cy, cz = small[0], small[1], small[2]
    xx, yy, zz, xy, xz, yz = small[6], small[7], small[8], 2.0 * small[9], 2.0 * small[10], 2.0 * small[11]
    xxx, yyy, zzz = 5.0 * small[12], 5.0 * small[13], 5.0 * small[14]
    xxy, xxz, yyx = 15.0 * small[15], 15.0 * small[16], 15.0 * small[17]
    yyz, zzx, zzy, xyz = 15.0 * small[18], 15.0 * small[19], 15.0 * small[20], 30.0 * small[21]
    tx, ty, tz = small[12] + small[17] + small[19], small[13] + small[15] + small[20], small[14] + small[16] + small[18]
    trace = xx + yy + zz
    total = 0.0
    for i in range(n):
        x, y, z = px[i] - cx, py[i] - cy, pz[i] - cz
        over2 = 1.0 / (x * x + y * y + z * z)
        along = x * (xx * x + xy * y + xz * z) + y * (yy * y + yz * z) + zz * z * z
        cubic = x * x * (xxx * x + xxy * y + xxz * z) + y * y * (yyy * y + yyx * x + yyz * z)
        cubic += z * (z * (zzz * z + zzx * x + zzy * y) + xyz * x * y)
        third = (cubic * over2 - 3.0 * (tx * x + ty * y + tz * z)) * over2
        total += weight[i] * math.sqrt(over2) * (1.0 + 0.5 * over2 * (3.0 * along * over2 - trace + third))
    return total / frame[AREA]


@kernel
def _known_value(p, q, old):
    """Entry of the panels p, q in earlier blocks, or -1 where it is not stored."""
    place, leaf_of_place, leaf_start, head, pairs, column, start, values = old
    i, j = place[p], place[q]
    if i < 0 or j < 0:
        return -1.0
    a, b = leaf_of_place[i], leaf_of_place[j]
    if a > b:
        a, b, i, j = b, a, j, i
    low, high = head[a], head[a + 1]
    while low < high:
        middle = (low + high) // 2
        if pairs[middle, 1] < b:
            low = middle + 1
        else:
            high = middle
    if low == head[a + 1] or pairs[low, 1] != b:
        return -1.0
    width = (start[a + 1] - start[a]) // (leaf_start[a + 1] - leaf_start[a])
    return float(values[start[a] + (i - leaf_start[a]) * width + column[low] + j - leaf_start[b]])


@kernel
def _close(source, target, coarse):
    """Integral of 1/r over two panels, m3; with `coarse` 1 or 2 the rules of close pairs leave 1e-6, 1e-5 of it."""
    if coarse > 1.0:
        outer, inner = (source, target) if source[RADIUS] <= target[RADIUS] else (target, source)
        ratio = polygon_distance(inner, outer[CENTROID], outer[CENTROID + 1], outer[CENTROID + 2]) / outer[RADIUS]
        if ratio > _COARSE_3:
            return middle_integral(outer, inner, 3)
        if ratio > _COARSE_4:
            return middle_integral(outer, inner, 4)
    return pair_integral(source, target, coarse > 0.0)


@kernel
def _fill(blocks, leaf_start, frames, frame_start, simple, limits, old, values):
    """Fill blocks.

    Parameters
    ----------
    blocks : (n, 4) int
        Leaves, first entry, and entries of a row.
    leaf_start : (n_leaves + 1,) int
    frames : (m, FRAME_SIZE) float
        Of the panels of these leaves, each leaf's together.
    frame_start : (n_leaves,) int
        First frame of a leaf.
    simple : (n, 22) float
        In the tree's order: see :func:`_simple_rows`.
    limits : (5,) float
        Distance over the sum of the radii beyond which the expansion does, beyond which the expansion of one panel
        does, beyond which three by three points do; factor of earlier values; 0, 1 or 2 as the rules of close pairs
        may leave 1e-7, 1e-6 or 1e-5.
    old : tuple
        Of earlier blocks: see :func:`_known_value`.
    values : (n_entries,) float
    """
    both = np.empty(16)
    for k in range(len(blocks)):
        a, b, at, width = blocks[k, 0], blocks[k, 1], blocks[k, 2], blocks[k, 3]
        first, n = leaf_start[b], leaf_start[b + 1] - leaf_start[b]
        for i in range(leaf_start[a + 1] - leaf_start[a]):
            pi = simple[leaf_start[a] + i]
            for j in range(i + 1 if a == b else n):
                pj = simple[first + j]
                x, y, z = pi[0] - pj[0], pi[1] - pj[1], pi[2] - pj[2]
                ratio2 = (x * x + y * y + z * z) / (pi[3] + pj[3]) ** 2
                if ratio2 > limits[0] ** 2:
                    value = _expanded(pi, pj, both)
                elif ratio2 > limits[1] ** 2:
                    if pi[3] >= pj[3]:
                        value = _half_expanded(frames[frame_start[a] + i], pj)
                    else:
                        value = _half_expanded(frames[frame_start[b] + j], pi)
                elif ratio2 > limits[2] ** 2:
                    value = far_integral(frames[frame_start[a] + i], frames[frame_start[b] + j], 3)
                    value /= pi[4] * pj[4]
                else:
                    value = limits[3] * _known_value(int(pi[5]), int(pj[5]), old)
                    if value < 0.0:
                        fi, fj = frames[frame_start[a] + i], frames[frame_start[b] + j]
                        value = self_integral(fi) if a == b and i == j else _close(fi, fj, limits[4])
                        value /= pi[4] * pj[4]
                values[at + i * width + j] = value
                if a == b:
                    values[at + j * width + i] = value


@kernel(fastmath=REORDER)
def _both_ways(block, xa, xb, ya, yb):
    """``ya += block xb`` and ``yb += block^T xa`` with one pass over the block (n_a, n_b), four rows at a time."""
    n_a, n_b = block.shape
    i = 0
    while i + 4 <= n_a:
        r0, r1, r2, r3 = block[i], block[i + 1], block[i + 2], block[i + 3]
        x0, x1, x2, x3 = xa[i, 0], xa[i + 1, 0], xa[i + 2, 0], xa[i + 3, 0]
        s0, s1, s2, s3 = ya[i, 0], ya[i + 1, 0], ya[i + 2, 0], ya[i + 3, 0]
        for j in range(n_b):
            v0, v1, v2, v3, x = r0[j], r1[j], r2[j], r3[j], xb[j, 0]
            s0 += v0 * x
            s1 += v1 * x
            s2 += v2 * x
            s3 += v3 * x
            yb[j, 0] += v0 * x0 + v1 * x1 + v2 * x2 + v3 * x3
        ya[i, 0], ya[i + 1, 0], ya[i + 2, 0], ya[i + 3, 0] = s0, s1, s2, s3
        i += 4
    while i < n_a:
        row, x0, s0 = block[i], xa[i, 0], ya[i, 0]
        for j in range(n_b):
            s0 += row[j] * xb[j, 0]
            yb[j, 0] += row[j] * x0
        ya[i, 0] = s0
        i += 1


@kernel
def _multiply(leaves, head, pairs, place, leaf_start, start, values, vectors):
    """Add the products of the matrices of leaves, first to last of `leaves`, to y.

    `vectors` are x (n, n_columns) and y (rows, n_columns); the other arrays those of :class:`NearLayout`.
    """
    x, y = vectors
    n_columns = x.shape[1]
    widest = 0
    for a in range(leaves[0], leaves[1]):
        widest = max(widest, (start[a + 1] - start[a]) // (leaf_start[a + 1] - leaf_start[a]))
    near, back = np.empty((widest, n_columns), x.dtype), np.empty((widest, n_columns), x.dtype)
    for a in range(leaves[0], leaves[1]):
        a0, a1 = leaf_start[a], leaf_start[a + 1]
        n_a = a1 - a0
        width = (start[a + 1] - start[a]) // n_a
        block = values[start[a] : start[a + 1]].reshape(n_a, width)
        n = 0
        for k in range(head[a], head[a + 1]):
            for i in range(leaf_start[pairs[k, 1]], leaf_start[pairs[k, 1] + 1]):
                for c in range(n_columns):
                    near[n, c], back[n, c] = x[i, c], 0.0
                n += 1
        if n_columns == 1:
            _both_ways(block, x[a0:a1], near[:n], y[a0:a1], back[:n])
        else:
            forward = np.dot(block, near[:n])
            np.dot(block.T, x[a0:a1], back[:n])
            for i in range(n_a):
                for c in range(n_columns):
                    y[a0 + i, c] += forward[i, c]
        n = n_a
        for k in range(head[a] + 1, head[a + 1]):
            b = pairs[k, 1]
            for i in range(leaf_start[b + 1] - leaf_start[b]):
                for c in range(n_columns):
                    y[place[k] + i, c] += back[n, c]
                n += 1


@kernel
def _add_extra(extra, leaf_start, y):
    """Add the places behind the panels to the leaves they belong to, in this order."""
    for e in range(len(extra)):
        first = leaf_start[extra[e, 1]]
        for i in range(leaf_start[extra[e, 1] + 1] - first):
            for c in range(y.shape[1]):
                y[first + i, c] += y[extra[e, 0] + i, c]


@dataclass(frozen=True, eq=False)
class Known:
    """Near blocks of an earlier geometry, and which of its panels are still there.

    Parameters
    ----------
    blocks : NearBlocks
    panel : (n,) int
        Panel of the earlier geometry that each panel is; -1 where it is new.
    """

    blocks: "NearBlocks"
    panel: IntArray


def _simple_rows(corners: FloatArray, order: IntArray) -> FloatArray:
    """Centroid, radius, area, panel, and from _MOMENTS on the central moments, in the tree's order."""
    rows = np.empty((len(order), _MOMENTS + 16))
    for first in range(0, len(order), _ROWS_AT_ONCE):
        here = slice(first, min(first + _ROWS_AT_ONCE, len(order)))
        frames = panel_frames(corners[order[here]], largest_rule=3)
        rows[here, :3], rows[here, 3], rows[here, 4] = (
            frames[:, CENTROID : CENTROID + 3],
            frames[:, RADIUS],
            frames[:, AREA],
        )
        rows[here, 5] = order[here]
        points = frames[:, POINTS[3] :].reshape(-1, 4, 9)
        x, y, z = (points[:, k] - frames[:, CENTROID + k, None] for k in range(3))
        weight = points[:, 3] / frames[:, AREA, None]
        xx, yy, zz, xy = x * x, y * y, z * z, x * y
        second = (xx, yy, zz, xy, x * z, y * z)
        third = (xx * x, yy * y, zz * z, xx * y, xx * z, yy * x, yy * z, zz * x, zz * y, xy * z)
        for k, product in enumerate(second + third):
            rows[here, _MOMENTS + k] = (weight * product).sum(axis=1)
    return rows


class NearBlocks:
    """Blocks of a geometry.

    Parameters
    ----------
    tree : Tree
    layout : NearLayout
    corners : (n, 4, 3) float
        Panels in their own order, in the tree's coordinates.
    beyond : (float, float, float, float)
        Distance over the sum of the radii beyond which a pair is expanded, one of its panels is, and beyond which
        three by three points on both do; 0, 1 or 2 as 1e-7, 1e-6 or 1e-5 of a close pair may be left out.
    real : type
        Precision they are stored in; they are computed in double precision.
    known : Known, optional
    progress : callable, optional
        Told (entries done, entries in all).
    """

    def __init__(
        self,
        tree: Tree,
        layout: NearLayout,
        corners: FloatArray,
        beyond: tuple[float, float, float, float],
        real: type,
        known: Known | None = None,
        progress: Progress | None = None,
    ) -> None:
        self.tree, self.layout = tree, layout
        self.values: NDArray[np.floating] = np.empty(int(layout.start[-1]), dtype=real)
        self._assemble(corners, beyond, known, progress)

    @property
    def bytes(self) -> int:
        """Memory held, bytes."""
        return int(self.values.nbytes)

    def _assemble(
        self,
        corners: FloatArray,
        beyond: tuple[float, float, float, float],
        known: Known | None,
        progress: Progress | None,
    ) -> None:
        tree, layout = self.tree, self.layout
        simple = _simple_rows(corners, tree.order)
        old = _no_known(len(corners), self.values) if known is None else known.blocks.as_known(known.panel)
        factor = 1.0 if known is None else tree.scale / known.blocks.tree.scale
        limits = np.array([*beyond[:3], factor, beyond[3]])
        done = 0.0

        def task(tile: int) -> None:
            nonlocal done
            here = slice(layout.head[layout.tile[tile]], layout.head[layout.tile[tile + 1]])
            pairs, lead = layout.pairs[here], layout.pairs[here, 0]
            width = np.diff(layout.start)[lead] // np.diff(tree.leaf_start)[lead]
            blocks = np.column_stack([pairs, layout.start[lead] + layout.column[here], width])
            leaves = np.unique(pairs)
            size = np.diff(tree.leaf_start)[leaves]
            frame_start = np.full(len(tree.leaves), -1, dtype=np.int64)
            frame_start[leaves] = np.concatenate([[0], np.cumsum(size)[:-1]])
            panels = np.concatenate([tree.order[tree.leaf_start[k] : tree.leaf_start[k + 1]] for k in leaves])
            frames = panel_frames(corners[panels])
            _fill(blocks, tree.leaf_start, frames, frame_start, simple, limits, old, self.values)
            done += float(layout.start[layout.tile[tile + 1]] - layout.start[layout.tile[tile]])
            if progress is not None:
                progress(done, float(len(self.values)))

        run_tiles(task, len(layout.tile) - 1)

    def as_known(self, panel: IntArray) -> tuple[NDArray[np.generic], ...]:
        """Arrays by which entries are found, for panels that are `panel` here or new (-1)."""
        tree, layout = self.tree, self.layout
        place = np.where(panel >= 0, tree.place[np.maximum(panel, 0)], -1)
        leaf_of_place = np.repeat(np.arange(len(tree.leaves)), np.diff(tree.leaf_start))
        of_tree = place, leaf_of_place, tree.leaf_start
        return *of_tree, layout.head, layout.pairs, layout.column, layout.start, self.values

    def multiply(self, charges: NDArray[np.floating]) -> NDArray[np.floating]:
        """Near part of the potentials.

        Parameters
        ----------
        charges : (n, n_columns) float
            In the tree's order.

        Returns
        -------
        (layout.rows, n_columns) float
            The first n rows are the sums.
        """
        tree, layout = self.tree, self.layout
        y: NDArray[np.floating] = np.zeros((layout.rows, charges.shape[1]), dtype=self.values.dtype)

        def task(tile: int) -> None:
            leaves = layout.tile[tile : tile + 2]
            blocks = layout.head, layout.pairs, layout.place, tree.leaf_start
            _multiply(leaves, *blocks, layout.start, self.values, (charges, y))

        run_tiles(task, len(layout.tile) - 1)
        _add_extra(layout.extra, tree.leaf_start, y)
        return y

    def leaf_block(self, leaf: int) -> NDArray[np.floating]:
        """Means of 1/r among the panels of a leaf, (n, n), in the tree's order and coordinates."""
        n = int(self.tree.leaf_start[leaf + 1] - self.tree.leaf_start[leaf])
        start, end = self.layout.start[leaf], self.layout.start[leaf + 1]
        return self.values[start:end].reshape(n, -1)[:, :n]


def _no_known(n: int, values: NDArray[np.floating]) -> tuple[NDArray[np.generic], ...]:
    none, pairs = np.empty(0, dtype=np.int64), np.empty((0, 2), dtype=np.int64)
    return np.full(n, -1, dtype=np.int64), none, none, none, pairs, none, none, values
