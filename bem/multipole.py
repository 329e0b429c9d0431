"""Far part of the product: moments of panels and cells, their translation, and local expansions.

Moments of a panel are the means of the regular harmonics over it, about the centre of its leaf; by symmetry the same
row turns a local expansion into the mean potential over the panel. They are integrated exactly: a product rule of n
points a side is exact for the polynomials that the harmonics are.

Arrays of expansions are (n_cells, n_columns, n_coefficients): for many columns the translations become products of
larger matrices, which cost less a column.
"""

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from .gauss import GAUSS_NODES, GAUSS_WEIGHTS
from .jit import kernel
from .multipole_lists import CellPairs
from .threads import run_tiles
from .translations import n_coefficients, shift_matrix, translation_matrices
from .tree import OWN, Tree

__all__ = ["FarField", "panel_moments"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Sums may be reordered, so that the compiler can use vector instructions; nan and inf stay what they are.
_REORDER = {"reassoc", "contract", "arcp", "nsz"}
#: Cells of one tile of translations: enough rows for a matrix product, few enough for the cache.
_CELLS_PER_TILE = 2000
#: Panels of one tile of the other steps.
_PANELS_PER_TILE = 8192


@kernel(fastmath=_REORDER)
def _mean_harmonics(x, y, z, weight, degree, row):
    """Weighted sums over points of the regular harmonics (:mod:`daraf.bem.translations`) into `row`.

    ``Q_(l+1)^m = ((2 l + 1) z Q_l^m - sqrt(l^2 - m^2) r^2 Q_(l-1)^m) / sqrt((l+1)^2 - m^2)`` times the real and
    imaginary part of (x + i y)^m.
    """
    n = len(x)
    cosine, sine, low, high, r2 = np.empty(n), np.empty(n), np.empty(n), np.empty(n), np.empty(n)
    for q in range(n):
        cosine[q], sine[q] = weight[q], 0.0
        r2[q] = x[q] * x[q] + y[q] * y[q] + z[q] * z[q]
    for m in range(degree + 1):
        if m > 0:
            # the factor of the diagonal goes into the powers of x + i y
            factor = -1.0 if m == 1 else -np.sqrt((2.0 * m - 1.0) / (2.0 * m))
            for q in range(n):
                c = factor * (x[q] * cosine[q] - y[q] * sine[q])
                sine[q] = factor * (x[q] * sine[q] + y[q] * cosine[q])
                cosine[q] = c
        for q in range(n):
            low[q], high[q] = 0.0, 1.0
        for k in range(m, degree + 1):
            c, s = 0.0, 0.0
            for q in range(n):
                c += high[q] * cosine[q]
                s += high[q] * sine[q]
            row[k * k + k + m] = c
            if m > 0:
                row[k * k + k - m] = s
            over = 1.0 / np.sqrt((k + 1.0) ** 2 - m * m)
            a, b = (2.0 * k + 1.0) * over, np.sqrt(float(k * k - m * m)) * over
            for q in range(n):
                up = a * z[q] * high[q] - b * r2[q] * low[q]
                low[q], high[q] = high[q], up


@kernel
def panel_moments(corners, centre, scale, rules, row):
    """Means of the regular harmonics over a flat panel.

    Parameters
    ----------
    corners : (4, 3) float
    centre : (3,) float
    scale : float
        One over the length that is the unit of the harmonics.
    rules : (3, n) float
        Nodes and weights of a rule on [0, 1], n = degree // 2 + 1; and the degree in the third row.
    row : (n_coefficients,) float
        Written.
    """
    n = rules.shape[1]
    x, y, z, weight = np.empty(n * n), np.empty(n * n), np.empty(n * n), np.empty(n * n)
    ax, ay, az = corners[0, 0] - centre[0], corners[0, 1] - centre[1], corners[0, 2] - centre[2]
    ux, uy, uz = corners[1, 0] - corners[0, 0], corners[1, 1] - corners[0, 1], corners[1, 2] - corners[0, 2]
    vx, vy, vz = corners[3, 0] - corners[0, 0], corners[3, 1] - corners[0, 1], corners[3, 2] - corners[0, 2]
    wx = corners[2, 0] - corners[1, 0] - vx
    wy = corners[2, 1] - corners[1, 1] - vy
    wz = corners[2, 2] - corners[1, 2] - vz
    total = 0.0
    for i in range(n):
        for j in range(n):
            u, v = rules[0, i], rules[0, j]
            q = i * n + j
            x[q] = scale * (ax + u * ux + v * vx + u * v * wx)
            y[q] = scale * (ay + u * uy + v * vy + u * v * wy)
            z[q] = scale * (az + u * uz + v * vz + u * v * wz)
            # area swept: cross product of the derivatives by u and by v
            px, py, pz = ux + v * wx, uy + v * wy, uz + v * wz
            qx, qy, qz = vx + u * wx, vy + u * wy, vz + u * wz
            cx, cy, cz = py * qz - pz * qy, pz * qx - px * qz, px * qy - py * qx
            weight[q] = rules[1, i] * rules[1, j] * np.sqrt(cx * cx + cy * cy + cz * cz)
            total += weight[q]
    for q in range(n * n):
        weight[q] /= total
    _mean_harmonics(x, y, z, weight, int(rules[2, 0]), row)


@kernel
def _leaf_moments(corners, order, centre, scale, rules, moments):
    """Moments of the panels of one leaf; `corners` of all, `order` and `moments` of the leaf."""
    row = np.empty(moments.shape[1])
    for i in range(len(order)):
        panel_moments(corners[order[i]], centre, scale, rules, row)
        for j in range(len(row)):
            moments[i, j] = row[j]


@kernel(fastmath=_REORDER)
def _gather_charges(leaves, start, moments, charges, multipoles):
    """Add the charges (n, n_columns) of panels to the multipoles of their leaves; `start` are places of panels."""
    for k in range(len(leaves)):
        if charges.shape[1] > 1:
            here = charges[start[k] : start[k + 1]]
            np.dot(here.T, moments[start[k] : start[k + 1]], multipoles[leaves[k]])
            continue
        row = multipoles[leaves[k], 0]
        for i in range(start[k], start[k + 1]):
            q, panel = charges[i, 0], moments[i]
            for j in range(len(row)):
                row[j] += q * panel[j]


@kernel(fastmath=_REORDER)
def _add_means(leaves, start, moments, locals_, sums):
    """Add the mean potentials of panels from the local expansions of their leaves to sums (n, n_columns)."""
    for k in range(len(leaves)):
        if sums.shape[1] > 1:
            means = np.dot(moments[start[k] : start[k + 1]], locals_[leaves[k]].T)
            for i in range(len(means)):
                for c in range(sums.shape[1]):
                    sums[start[k] + i, c] += means[i, c]
            continue
        row = locals_[leaves[k], 0]
        for i in range(start[k], start[k + 1]):
            panel, total = moments[i], sums[i, 0]
            for j in range(len(row)):
                total += panel[j] * row[j]
            sums[i, 0] = total


@kernel
def _move(where, other, octant, shifts, expansions):
    """Add the expansions of cells `other`, moved by the matrix of each octant, to the cells `where`.

    Rows times ``shifts[octant]``; octant 8 is added as it is.
    """
    n_columns, n = expansions.shape[1], expansions.shape[2]
    rows = np.empty((len(where) * n_columns, n), expansions.dtype)
    moved = np.empty((len(where) * n_columns, n), expansions.dtype)
    for o in range(9):
        count = 0
        for k in range(len(where)):
            if octant[k] == o:
                for c in range(n_columns):
                    for j in range(n):
                        rows[count, j] = expansions[other[k], c, j]
                    count += 1
        if count == 0:
            continue
        if o != OWN:
            np.dot(rows[:count], shifts[o], moved[:count])
        result, count = rows if o == OWN else moved, 0
        for k in range(len(where)):
            if octant[k] == o:
                for c in range(n_columns):
                    for j in range(n):
                        expansions[where[k], c, j] += result[count, j]
                    count += 1


@kernel
def _translate(groups, pairs, factor, matrices, multipoles, locals_):
    """Translate the multipoles of sources to local expansions of targets, group by group of one translation.

    Parameters
    ----------
    groups : (n_groups, 4) int
        First and last pair, start of the matrix, number of coefficients it keeps.
    pairs : (n, 2) int
        Target, source.
    factor : (n,) float
        One over the edge of the finer cell.
    matrices : (n,) float
        All matrices, [source, target], one after the other.
    multipoles, locals_ : (n_cells, n_columns, n_coefficients) float
    """
    n_columns = multipoles.shape[1]
    longest = 0
    for g in range(len(groups)):
        longest = max(longest, (groups[g, 1] - groups[g, 0]) * groups[g, 3])
    gathered = np.empty(longest * n_columns, multipoles.dtype)
    moved = np.empty(longest * n_columns, multipoles.dtype)
    for g in range(len(groups)):
        first, last, n = groups[g, 0], groups[g, 1], groups[g, 3]
        count = (last - first) * n_columns
        rows = gathered[: count * n].reshape(count, n)
        out = moved[: count * n].reshape(count, n)
        matrix = matrices[groups[g, 2] : groups[g, 2] + n * n].reshape(n, n)
        r = 0
        for k in range(first, last):
            for c in range(n_columns):
                row = multipoles[pairs[k, 1], c]
                for j in range(n):
                    rows[r, j] = factor[k] * row[j]
                r += 1
        np.dot(rows, matrix, out)
        r = 0
        for k in range(first, last):
            for c in range(n_columns):
                row = locals_[pairs[k, 0], c]
                for j in range(n):
                    row[j] += out[r, j]
                r += 1


@dataclass(frozen=True, eq=False)
class FarField:
    """Everything of the far part that depends on the geometry alone.

    Parameters
    ----------
    tree : Tree
    pairs : CellPairs
    corners : (n, 4, 3) float
        Panels in their own order, in the tree's coordinates.
    degree : int
    dropped : float
        Root mean square, relative to the potential of a far pair, of what a translation may leave out.
    real : type
        Single or double precision of all that is stored and multiplied.
    """

    tree: Tree
    pairs: CellPairs
    corners: FloatArray
    degree: int
    dropped: float
    real: type

    @cached_property
    def rules(self) -> FloatArray:
        """Rule exact for harmonics of the degree over a panel: nodes, weights, and the degree."""
        n = self.degree // 2 + 1
        return np.array([GAUSS_NODES[n, :n], GAUSS_WEIGHTS[n, :n], np.full(n, float(self.degree))])

    @cached_property
    def tiles(self) -> IntArray:
        """First leaf of each tile of panels, and the number of leaves."""
        n = max(1, len(self.tree.order) // _PANELS_PER_TILE)
        start = self.tree.leaf_start
        cuts = np.searchsorted(start, np.linspace(0, start[-1], n + 1))
        return np.unique(np.append(cuts, len(start) - 1))

    @cached_property
    def moments(self) -> NDArray[np.floating]:
        """Moments of the panels in the tree's order, (n, n_coefficients)."""
        tree = self.tree
        moments: NDArray[np.floating] = np.empty((len(tree.order), n_coefficients(self.degree)), dtype=self.real)

        def task(tile: int) -> None:
            for leaf in range(self.tiles[tile], self.tiles[tile + 1]):
                here = slice(tree.leaf_start[leaf], tree.leaf_start[leaf + 1])
                cell = tree.leaves[leaf]
                scale = 2.0 ** tree.level[cell]
                _leaf_moments(self.corners, tree.order[here], tree.centre[cell], scale, self.rules, moments[here])

        run_tiles(task, len(self.tiles) - 1)
        return moments

    @cached_property
    def shifts(self) -> NDArray[np.floating]:
        """Matrices that move local expansions from a cell to the child of each octant, as rows times matrix."""
        sign = 2.0 * ((np.arange(8)[:, None] >> np.arange(3)) & 1) - 1.0
        half = 0.5 ** np.concatenate([np.full(2 * k + 1, k) for k in range(self.degree + 1)])
        moves = [half[:, None] * shift_matrix(0.5 * s, self.degree) for s in sign]
        return np.ascontiguousarray(moves, dtype=self.real)

    @cached_property
    def back_shifts(self) -> NDArray[np.floating]:
        """The transposes, which move multipoles from a child to its cell."""
        return np.ascontiguousarray(self.shifts.transpose(0, 2, 1))

    @cached_property
    def translations(self) -> tuple[NDArray[np.floating], IntArray]:
        """All matrices [source, target], both ways of each pair, one after the other; start and size of each."""
        pairs, tree = self.pairs, self.tree
        full = translation_matrices(pairs.offsets, self.degree)
        of = np.concatenate([np.full(2 * k + 1, k) for k in range(self.degree + 1)])
        # radii in edges of their own cells: the largest that occurs with each translation
        edge = 0.5 ** tree.level[pairs.far]
        ratio = tree.radius[pairs.far] / edge
        target, source = np.zeros(len(full)), np.zeros(len(full))
        np.maximum.at(target, pairs.translation, ratio[:, 0])
        np.maximum.at(source, pairs.translation, ratio[:, 1])
        parts, table, start = [], np.empty((2 * len(full), 2), dtype=np.int64), 0
        for k in range(len(full)):
            translation = full[k] * (2.0 ** (pairs.levels_apart[k] * of))[:, None]
            n = n_coefficients(_degree_needed(translation, target[k], source[k], self.degree, self.dropped))
            for way, matrix in enumerate((translation[:n, :n].T, translation[:n, :n])):
                parts.append(matrix.astype(self.real).ravel())
                table[2 * k + way] = start, n
                start += n * n
        return np.concatenate(parts) if parts else np.empty(0, dtype=self.real), table

    @cached_property
    def schedule(self) -> tuple[list[IntArray], IntArray, NDArray[np.floating]]:
        """Groups of each tile, pairs (target, source) and factors, in the order of the tiles and translations."""
        far, level = self.pairs.far, self.tree.level
        pairs = np.concatenate([far, far[:, ::-1]])
        kind = np.concatenate([2 * self.pairs.translation, 2 * self.pairs.translation + 1])
        n_tiles = max(1, min(4, len(level) // 200), -(-len(level) // _CELLS_PER_TILE))
        tile = pairs[:, 0] * n_tiles // len(level)
        order = np.lexsort((pairs[:, 0], kind, tile))
        pairs, kind, tile = pairs[order], kind[order], tile[order]
        new = np.nonzero(np.diff(kind, prepend=-1) | np.diff(tile, prepend=-1))[0]
        table = self.translations[1]
        end = np.append(new[1:], len(kind))[: len(new)]
        groups = np.column_stack([new, end, table[kind[new], 0], table[kind[new], 1]]).astype(np.int64)
        of_tile = np.searchsorted(tile[new], np.arange(n_tiles + 1))
        factor = (2.0 ** level[pairs].max(axis=1)).astype(self.real)
        return [groups[of_tile[t] : of_tile[t + 1]] for t in range(n_tiles)], pairs.astype(np.int32), factor

    def prepare(self) -> None:
        """Make all tables, so that a product finds them."""
        _ = self.moments, self.shifts, self.back_shifts, self.schedule

    @property
    def bytes(self) -> int:
        """Memory held, bytes."""
        groups, pairs, factor = self.schedule
        held = [self.moments, self.translations[0], self.shifts, self.back_shifts, pairs, factor, self.corners, *groups]
        return sum(int(a.nbytes) for a in held)

    def multipoles(self, charges: NDArray[np.floating]) -> NDArray[np.floating]:
        """Multipoles of all cells.

        Parameters
        ----------
        charges : (n, n_columns) float
            In the tree's order.
        """
        tree = self.tree
        shape = (len(tree.level), charges.shape[1], n_coefficients(self.degree))
        result: NDArray[np.floating] = np.zeros(shape, dtype=self.real)

        def gather(tile: int) -> None:
            first, last = self.tiles[tile], self.tiles[tile + 1]
            start = tree.leaf_start[first : last + 1]
            _gather_charges(tree.leaves[first:last], start, self.moments, charges, result)

        run_tiles(gather, len(self.tiles) - 1)
        for depth in range(len(tree.depth_start) - 2, 0, -1):
            cells = slice(tree.depth_start[depth], tree.depth_start[depth + 1])
            self._move(tree.parent[cells], cells, self.back_shifts, result, up=True)
        return result

    def _move(
        self,
        parent: IntArray,
        cells: slice,
        shifts: NDArray[np.floating],
        expansions: NDArray[np.floating],
        *,
        up: bool,
    ) -> None:
        """Move expansions between the cells of one depth and their parents, in tiles of whole families."""
        n = cells.stop - cells.start
        children = np.arange(cells.start, cells.stop)
        n_tiles = max(1, n // 500)
        cuts = np.searchsorted(parent, parent[np.linspace(0, n - 1, n_tiles + 1).astype(np.int64)])
        cuts[-1] = n

        def task(tile: int) -> None:
            here = slice(cuts[tile], cuts[tile + 1])
            octant = self.tree.octant[cells][here]
            if up:
                _move(parent[here], children[here], octant, shifts, expansions)
            else:
                _move(children[here], parent[here], octant, shifts, expansions)

        run_tiles(task, n_tiles)

    def locals(self, multipoles: NDArray[np.floating]) -> NDArray[np.floating]:
        """Local expansions of all cells: from all that is far from them or from a cell they lie in."""
        tree = self.tree
        groups, pairs, factor = self.schedule
        result = np.zeros_like(multipoles)
        matrices = self.translations[0]
        run_tiles(lambda t: _translate(groups[t], pairs, factor, matrices, multipoles, result), len(groups))
        for depth in range(1, len(tree.depth_start) - 1):
            cells = slice(tree.depth_start[depth], tree.depth_start[depth + 1])
            self._move(tree.parent[cells], cells, self.shifts, result, up=False)
        return result

    def add_means(self, locals_: NDArray[np.floating], sums: NDArray[np.floating]) -> None:
        """Add the mean potentials of the panels to sums (n or more, n_columns), in the tree's order."""
        tree = self.tree

        def task(tile: int) -> None:
            first, last = self.tiles[tile], self.tiles[tile + 1]
            _add_means(tree.leaves[first:last], tree.leaf_start[first : last + 1], self.moments, locals_, sums)

        run_tiles(task, len(self.tiles) - 1)


def _degree_needed(translation: FloatArray, target: float, source: float, degree: int, dropped: float) -> int:
    """Least degree whose omitted terms stay below `dropped` in the root mean square.

    For charges of random sign spread evenly over discs of these radii, relative to the potential of their sum.
    """
    k = np.arange(degree + 1)
    of = np.concatenate([np.full(2 * j + 1, j) for j in k])
    weight_t = (target ** (2.0 * k) / ((k + 1) * (2 * k + 1)))[of]
    weight_s = (source ** (2.0 * k) / ((k + 1) * (2 * k + 1)))[of]
    power = translation * translation * weight_t[:, None] * weight_s[None, :]
    kept = np.array([power[: (j + 1) ** 2, : (j + 1) ** 2].sum() for j in k])
    enough = (power.sum() - kept) <= dropped**2 * power[0, 0]
    return int(np.argmax(enough))
