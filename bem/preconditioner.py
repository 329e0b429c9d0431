"""Preconditioner of the single-layer matrix: a sparse factored inverse over patches of neighbouring panels.

``M^-1 = D G^T G D`` with D the reciprocal roots of the diagonal. The rows of G that belong to a cluster of panels are
the last rows of the inverse Cholesky factor of the matrix of its patch (Kolotilina and Yeremin, SIAM J. Matrix Anal.
Appl. 14 (1993) 45, with blocks for rows): among all G of this pattern the one nearest to the inverse factor. It is
positive definite whatever the patches, needs no entry but those among neighbours, and each cluster stands alone. Why
patches of a hundred panels suffice: given the charge around it, a panel hardly feels what is farther off, and the few
smooth distributions that patches cannot see are found by the conjugate gradients themselves in a few steps
(scripts/bench/iterations.py).
"""

from collections.abc import Callable
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from .jit import kernel, parallel_kernel, prange
from .patches import CLUSTER_SIZE, Patches, StoredEntries, make_patches

__all__ = ["FactoredInverse", "Preconditioner", "factored_inverse"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
Progress = Callable[[float, float], None]

#: Pivots of a patch, of a matrix with ones on its diagonal, are kept above this: panels that coincide, and entries
#: stored in single precision, leave less.
LEAST_PIVOT = 1e-6
#: Sums within a row may be reordered.
_REORDER = {"reassoc", "contract", "arcp", "nsz"}
#: Clusters per call of a kernel.
_BLOCK = 4096


class Preconditioner(Protocol):
    """What the solvers ask of a preconditioner."""

    def apply(self, residual: FloatArray) -> FloatArray:
        """Approximate solution for (n, n_columns) right-hand sides."""


@kernel
def _block_of(pairs, head, a, b):
    """Place of the block of leaves a <= b among `pairs`; -1 if it is not stored."""
    low, high = head[a], head[a + 1]
    while low < high:
        middle = (low + high) // 2
        if pairs[middle, 1] < b:
            low = middle + 1
        else:
            high = middle
    return low if low < head[a + 1] and pairs[low, 1] == b else -1


@kernel
def patch_matrix(members, leaf, stored, scale, points):
    """Matrix of a patch with ones on its diagonal; pairs that are not stored as two points.

    Parameters
    ----------
    members : (m,) int
        Places.
    leaf : (m,) int
        Their leaves; members of one leaf stand together.
    stored : tuple
        pairs, first block of each leaf, start, stride, leaf_start, values; the latter times `unit`.
    scale : (n,) float
        Reciprocal roots of the stored diagonal.
    points : (n, 3) float
        Centroids in multiples of the unit.

    Returns
    -------
    (m, m) float
        Lower triangle.
    """
    pairs, head, start, stride, leaf_start, values = stored
    m = len(members)
    matrix = np.zeros((m, m))
    first = 0
    while first < m:
        last = first
        while last < m and leaf[last] == leaf[first]:
            last += 1
        other = 0
        while other < last:
            end = other
            while end < last and leaf[end] == leaf[other]:
                end += 1
            a, b = leaf[first], leaf[other]
            block = _block_of(pairs, head, min(a, b), max(a, b))
            for i in range(first, last):
                p = members[i]
                for j in range(other, min(end, i + 1)):
                    q = members[j]
                    if block >= 0:
                        row, column = p - leaf_start[a], q - leaf_start[b]
                        if a > b:
                            row, column = column, row
                        value = float(values[start[block] + row * stride[block] + column])
                    else:
                        value = 1.0 / np.sqrt(((points[p] - points[q]) ** 2).sum())
                    matrix[i, j] = value * scale[p] * scale[q]
            other = end
        first = last
    return matrix


@kernel(fastmath=_REORDER)
def last_inverse_rows(matrix, n_last, least):
    """Last rows of the inverse Cholesky factor of a symmetric matrix.

    Parameters
    ----------
    matrix : (m, m) float
        Lower triangle; its factor is written over it.
    n_last : int
    least : float
        Pivots below this are raised to it.

    Returns
    -------
    (m, n_last) float
        Columns are the rows asked for.
    """
    m = len(matrix)
    for i in range(m):
        row = matrix[i]
        for j in range(i):
            other, s = matrix[j], 0.0
            for k in range(j):
                s += row[k] * other[k]
            row[j] = (row[j] - s) * other[j]  # diagonals hold their reciprocals
        s = row[i]
        for k in range(i):
            s -= row[k] * row[k]
        row[i] = 1.0 / np.sqrt(max(s, least))
    rows = np.zeros((n_last, m))
    for c in range(n_last):
        x = rows[c]
        i = m - n_last + c
        x[i] = 1.0
        for k in range(i, -1, -1):
            x[k] *= matrix[k, k]
            factor, row = x[k], matrix[k]
            for j in range(k):
                x[j] -= factor * row[j]
    return rows.T.copy()


@parallel_kernel
def _factor(clusters, stored, scale, points, rows, values):
    """Write the rows of clusters; `clusters` are first, last, cluster_start, leaves; `rows` row_start, members."""
    first, last, cluster_start, leaf_of_place = clusters
    row_start, members = rows
    for c in prange(first, last):
        here = members[row_start[c] : row_start[c + 1]].astype(np.int64)
        matrix = patch_matrix(here, leaf_of_place[here], stored, scale, points)
        n_own = cluster_start[c + 1] - cluster_start[c]
        found = last_inverse_rows(matrix, n_own, LEAST_PIVOT)
        for k in range(len(here)):
            row = values[row_start[c] + k]
            row[:] = 0.0
            for i in range(n_own):
                row[i] = found[k, i]


@parallel_kernel(fastmath=_REORDER)
def _forward(row_start, members, values, x, y):
    """``y = G x``: x (n_columns, n) by place, y (n_columns, n_clusters, CLUSTER_SIZE)."""
    for c in prange(len(row_start) - 1):
        for column in range(len(x)):
            source, out = x[column], y[column, c]
            for i in range(CLUSTER_SIZE):
                out[i] = 0.0
            k, last = row_start[c], row_start[c + 1]
            while k + 4 <= last:
                v0, v1, v2, v3 = values[k], values[k + 1], values[k + 2], values[k + 3]
                x0, x1 = source[members[k]], source[members[k + 1]]
                x2, x3 = source[members[k + 2]], source[members[k + 3]]
                for i in range(CLUSTER_SIZE):
                    out[i] += x0 * v0[i] + x1 * v1[i] + x2 * v2[i] + x3 * v3[i]
                k += 4
            while k < last:
                v0, x0 = values[k], source[members[k]]
                for i in range(CLUSTER_SIZE):
                    out[i] += x0 * v0[i]
                k += 1


@parallel_kernel(fastmath=_REORDER)
def _row_products(row_start, values, y, products):
    """Product of each row of values with the part of y (n_clusters, CLUSTER_SIZE) of its cluster."""
    for c in prange(len(row_start) - 1):
        own, k, last = y[c], row_start[c], row_start[c + 1]
        while k + 2 <= last:
            v0, v1 = values[k], values[k + 1]
            t0, t1 = 0.0, 0.0
            for i in range(CLUSTER_SIZE):
                t0 += v0[i] * own[i]
                t1 += v1[i] * own[i]
            products[k], products[k + 1] = t0, t1
            k += 2
        while k < last:
            v0, t0 = values[k], 0.0
            for i in range(CLUSTER_SIZE):
                t0 += v0[i] * own[i]
            products[k] = t0
            k += 1


@parallel_kernel
def _gather(occurrence_start, occurrences, products, z):
    """Sum the products of the rows that belong to each place: with `_row_products` the transpose of `_forward`."""
    for p in prange(len(occurrence_start) - 1):
        total = 0.0
        for e in range(occurrence_start[p], occurrence_start[p + 1]):
            total += products[occurrences[e]]
        z[p] = total


class FactoredInverse:
    """Sparse factored inverse; made by :func:`factored_inverse`.

    Parameters
    ----------
    stored : StoredEntries
    patches : Patches
    progress : callable, optional
        Told (clusters done, in all); it may raise to interrupt.

    Attributes
    ----------
    bytes : int
        Memory held.
    mean_patch : float
        Mean number of panels of a patch.
    """

    def __init__(self, stored: StoredEntries, patches: Patches, progress: Progress | None = None) -> None:
        self._order = stored.order
        n, places, starts = len(stored.order), patches.places, patches.cluster_start
        # patches: clusters, those of one leaf together, their own cluster last
        lists, owner = _patch_lists(patches)
        size = np.diff(starts)
        counts = size[lists]
        n_rows = np.bincount(owner, counts, len(size)).astype(np.int64)
        self._row_start = np.concatenate([[0], np.cumsum(n_rows)])
        within = np.arange(int(counts.sum())) - np.repeat(np.cumsum(counts) - counts, counts)
        self._members = places[np.repeat(starts[lists], counts) + within].astype(np.int32)
        by_place = np.argsort(self._members, kind="stable")
        self._occurrence_start = np.searchsorted(self._members[by_place], np.arange(n + 1))
        self._occurrences = by_place.astype(np.int32)
        diagonal = _stored_diagonal(stored)
        self._scale = np.sqrt(stored.unit / diagonal) / stored.areas[stored.order]
        self._values = np.empty((len(self._members), CLUSTER_SIZE), dtype=np.float32)
        self._fill(stored, patches, 1.0 / np.sqrt(diagonal), progress)

    def _fill(self, stored: StoredEntries, patches: Patches, scale: FloatArray, progress: Progress | None) -> None:
        n_leaves = len(stored.leaf_start) - 1
        head = np.searchsorted(stored.pairs[:, 0], np.arange(n_leaves + 1))
        leaf_of_place = np.repeat(np.arange(n_leaves), np.diff(stored.leaf_start))
        points = stored.corners[stored.order].mean(axis=1) / stored.unit
        entries = (
            np.ascontiguousarray(stored.pairs, dtype=np.int64),
            head,
            np.ascontiguousarray(stored.start, dtype=np.int64),
            np.ascontiguousarray(stored.stride, dtype=np.int64),
            np.ascontiguousarray(stored.leaf_start, dtype=np.int64),
            stored.values,
        )
        rows = (self._row_start, self._members)
        for first in range(0, len(patches.leaf), _BLOCK):
            last = min(first + _BLOCK, len(patches.leaf))
            clusters = (first, last, patches.cluster_start, leaf_of_place)
            _factor(clusters, entries, scale, points, rows, self._values)
            if progress is not None:
                progress(float(last), float(len(patches.leaf)))

    @property
    def bytes(self) -> int:
        """Memory held, bytes."""
        held = [self._members, self._occurrences, self._values, self._scale]
        held += [self._row_start, self._occurrence_start]
        return int(sum(array.nbytes for array in held))

    @property
    def mean_patch(self) -> float:
        """Mean number of panels of a patch."""
        return float(len(self._members) / max(1, len(self._row_start) - 1))

    def apply(self, residual: FloatArray) -> FloatArray:
        """Approximate solution of ``A x = residual``.

        Parameters
        ----------
        residual : (n, n_columns) float

        Returns
        -------
        (n, n_columns) float
        """
        x = np.ascontiguousarray((residual[self._order] * self._scale[:, None]).T)
        y = np.empty((len(x), len(self._row_start) - 1, CLUSTER_SIZE))
        _forward(self._row_start, self._members, self._values, x, y)
        products = np.empty(len(self._members))
        for column in range(len(x)):
            _row_products(self._row_start, self._values, y[column], products)
            _gather(self._occurrence_start, self._occurrences, products, x[column])
        result = np.empty_like(residual)
        result[self._order] = (x * self._scale).T
        return result


def _patch_lists(patches: Patches) -> tuple[IntArray, IntArray]:
    """Clusters of each patch, those of one leaf together and its own last, and the cluster they serve."""
    n = len(patches.leaf)
    own, slot = np.nonzero(patches.neighbours >= 0)
    lists = np.concatenate([patches.neighbours[own, slot].astype(np.int64), np.arange(n)])
    owner = np.concatenate([own, np.arange(n)])
    is_own = np.concatenate([np.zeros(len(own), bool), np.ones(n, bool)])
    turn = np.lexsort((lists, patches.leaf[lists], is_own, owner))
    return lists[turn], owner[turn]


def _stored_diagonal(stored: StoredEntries) -> FloatArray:
    """Stored values of panels with themselves, (n,) by place."""
    own = np.flatnonzero(stored.pairs[:, 0] == stored.pairs[:, 1])
    size = np.diff(stored.leaf_start)
    within = np.arange(int(stored.leaf_start[-1])) - np.repeat(stored.leaf_start[:-1], size)
    found = stored.values[np.repeat(stored.start[own], size) + within * (np.repeat(stored.stride[own], size) + 1)]
    return np.asarray(found, dtype=np.float64)


def factored_inverse(stored: StoredEntries, progress: Progress | None = None) -> FactoredInverse:
    """Sparse factored inverse of a Galerkin matrix.

    Parameters
    ----------
    stored : StoredEntries
        Its entries among neighbours.
    progress : callable, optional
        Told (clusters done, in all); it may raise to interrupt.

    Returns
    -------
    FactoredInverse
    """
    return FactoredInverse(stored, make_patches(stored), progress)
