"""Near part of the product: closed-form integrals of the near pairs of leaves, stored once for both directions.

The matrix of a leaf holds the mean of 1/r over each pair of panels (their double integral over both areas), the
leaf's own panels along the rows, along the columns these again and then those of the near leaves behind it. Pairs
further apart than a few radii take the first terms of the expansion of 1/r, the other ones
:func:`daraf.bem.pairs.pair_integral`.

Tiles are runs of first leaves. A tile writes the rows of its own leaves; what it adds to leaves of other tiles goes
to rows of its own behind them, which are added up in the order of the tiles.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .frames import CENTROID, RADIUS, panel_frames
from .jit import kernel
from .multipole_lists import CellPairs
from .near import self_integral
from .pairs import far_integral, middle_integral, pair_integral
from .panels import polygon_geometry
from .polygon import polygon_distance
from .threads import run_tiles
from .tree import Tree

__all__ = ["Known", "NearBlocks", "NearLayout", "near_layout"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
Progress = Callable[[float, float], None]

_REORDER = {"reassoc", "contract", "arcp", "nsz"}
#: Distance from the smaller panel's centroid to the larger panel over the smaller one's radius, beyond which the
#: closed form at 3 x 3 and 4 x 4 points leaves less than 1e-5 in the root mean square: measured on spheres, plates,
#: soups and refined plates.
_COARSE_3, _COARSE_4 = 1.7, 1.2
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


@kernel
def _expanded(a, b):
    """Mean of 1/r over two panels a few radii apart: ``1/d + (3 d.C d / d^2 - tr C) / (2 d^3)``.

    Rows hold centroid, radius and the second central moments C over the area (xx, yy, zz, xy, xz, yz), of which
    the sum of both counts.
    """
    x, y, z = a[0] - b[0], a[1] - b[1], a[2] - b[2]
    xx, yy, zz = a[4] + b[4], a[5] + b[5], a[6] + b[6]
    xy, xz, yz = a[7] + b[7], a[8] + b[8], a[9] + b[9]
    over2 = 1.0 / (x * x + y * y + z * z)
    along = x * (xx * x + 2.0 * (xy * y + xz * z)) + y * (yy * y + 2.0 * yz * z) + zz * z * z
    return np.sqrt(over2) * (1.0 + 0.5 * over2 * (3.0 * along * over2 - xx - yy - zz))


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
    """Integral of 1/r over two panels, m3; with `coarse` 1.0 the rules of close pairs leave 1e-5 of it."""
    if coarse > 0.0:
        outer, inner = (source, target) if source[RADIUS] <= target[RADIUS] else (target, source)
        ratio = polygon_distance(inner, outer[CENTROID], outer[CENTROID + 1], outer[CENTROID + 2]) / outer[RADIUS]
        if ratio > _COARSE_3:
            return middle_integral(outer, inner, 3)
        if ratio > _COARSE_4:
            return middle_integral(outer, inner, 4)
    return pair_integral(source, target)


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
    simple : (n, 12) float
        In the tree's order: centroid, radius, second moments, area, panel.
    limits : (4,) float
        Distance over the sum of the radii beyond which the expansion does, beyond which three by three points do;
        factor of earlier values; 1.0 if the coarser rules of close pairs do.
    old : tuple
        Of earlier blocks: see :func:`_known_value`.
    values : (n_entries,) float
    """
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
                    value = _expanded(pi, pj)
                elif ratio2 > limits[1] ** 2:
                    value = far_integral(frames[frame_start[a] + i], frames[frame_start[b] + j], 3)
                    value /= pi[10] * pj[10]
                else:
                    value = limits[2] * _known_value(int(pi[11]), int(pj[11]), old)
                    if value < 0.0:
                        fi, fj = frames[frame_start[a] + i], frames[frame_start[b] + j]
                        value = self_integral(fi) if a == b and i == j else _close(fi, fj, limits[3])
                        value /= pi[10] * pj[10]
                values[at + i * width + j] = value
                if a == b:
                    values[at + j * width + i] = value


@kernel(fastmath=_REORDER)
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
    """Centroid, radius, second central moments, area and panel, in the tree's order."""
    c = corners[order]
    areas, centroids, _ = polygon_geometry(c)
    rows = np.empty((len(c), 12))
    rows[:, :3], rows[:, 10], rows[:, 11] = centroids, areas, order
    r = c - centroids[:, None, :]
    rows[:, 3] = np.sqrt((r**2).sum(axis=2).max(axis=1))
    second = np.zeros((len(c), 6))
    for k in (1, 2):
        corner = r[:, [0, k, k + 1]]
        area = 0.5 * np.linalg.norm(np.cross(corner[:, 1] - corner[:, 0], corner[:, 2] - corner[:, 0]), axis=1)
        total = corner.sum(axis=1)
        for m, (i, j) in enumerate(((0, 0), (1, 1), (2, 2), (0, 1), (0, 2), (1, 2))):
            moment = (corner[:, :, i] * corner[:, :, j]).sum(axis=1) + total[:, i] * total[:, j]
            second[:, m] += area / 12.0 * moment
    rows[:, 4:10] = second / areas[:, None]
    return rows


class NearBlocks:
    """Blocks of a geometry.

    Parameters
    ----------
    tree : Tree
    layout : NearLayout
    corners : (n, 4, 3) float
        Panels in their own order, in the tree's coordinates.
    beyond : (float, float, float)
        Distance over the sum of the radii beyond which a pair is expanded, and beyond which three by three points
        on both panels do; 1.0 if 1e-5 of a close pair may be left out, else 0.0.
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
        beyond: tuple[float, float, float],
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
        self, corners: FloatArray, beyond: tuple[float, float, float], known: Known | None, progress: Progress | None
    ) -> None:
        tree, layout = self.tree, self.layout
        simple = _simple_rows(corners, tree.order)
        old = _no_known(len(corners), self.values) if known is None else known.blocks.as_known(known.panel)
        factor = 1.0 if known is None else tree.scale / known.blocks.tree.scale
        limits = np.array([*beyond[:2], factor, beyond[2]])
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
        place_of = np.empty(len(tree.order), dtype=np.int64)
        place_of[tree.order] = np.arange(len(tree.order))
        place = np.where(panel >= 0, place_of[np.maximum(panel, 0)], -1)
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
