"""Clusters of neighbouring panels, and for each cluster the patch of panels that its charge is judged with.

Leaves of the tree are halved into clusters of a few panels. The patch of a cluster holds clusters that lie close by,
measured by the size of the smaller of the two, and come earlier in an order that puts large panels first: the fine
panels of a graded edge then meet few coarse ones, and a coarse panel never meets all the fine ones beside it.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .jit import kernel, parallel_kernel, prange
from .operator import FastOperator

__all__ = ["CLUSTER_SIZE", "Patches", "StoredEntries", "make_patches", "stored_entries"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Most panels of a cluster, and of a patch besides its own cluster.
CLUSTER_SIZE, PATCH_SIZE = 16, 256
#: Most clusters of a patch besides its own.
_SLOTS = 64
#: Clusters are neighbours if their boxes are closer than this many radii of the smaller one. Measured on graded sheets
#: of 17,000 panels, iterations to 1e-6 and set-up: 0.6 took 8 and 0.2 s, 1 took 6 and 0.4 s, 2 took 4 and 0.9 s; this
#: lies between.
NEIGHBOUR = 1.5


@dataclass(frozen=True, eq=False)
class StoredEntries:
    """Entries of a Galerkin matrix that are stored in blocks of pairs of leaves.

    Attributes
    ----------
    order : (n,) int
        Panel at each place of the tree.
    leaf_start : (n_leaves + 1,) int
        First place of each leaf.
    pairs : (n_blocks, 2) int
        Leaves, the smaller first, in ascending order; each leaf is paired with itself.
    start, stride : (n_blocks,) int
        First entry of each block, the first leaf's panels along the rows, and entries from one row to the next.
    values : (n_entries,) float
        Means of 1/r over pairs of panels, 1/m, times `unit`.
    corners : (n, 4, 3) float, m
        In the order of the panels.
    areas : (n,) float, m2
    unit : float, m
    """

    order: IntArray
    leaf_start: IntArray
    pairs: IntArray
    start: IntArray
    stride: IntArray
    values: NDArray[np.floating]
    corners: FloatArray
    areas: FloatArray
    unit: float


def stored_entries(operator: FastOperator) -> StoredEntries:
    """Near entries of a fast operator."""
    tree, layout = operator.plan.tree, operator.plan.layout
    # the blocks of one leaf stand side by side in one matrix
    leaf = layout.pairs[:, 0]
    width = np.diff(layout.start) // np.maximum(np.diff(tree.leaf_start), 1)
    return StoredEntries(
        order=tree.order,
        leaf_start=tree.leaf_start,
        pairs=layout.pairs,
        start=layout.start[leaf] + layout.column,
        stride=width[leaf],
        values=operator.near.values,
        corners=operator.corners,
        areas=operator.areas,
        unit=tree.scale,
    )


@dataclass(frozen=True, eq=False)
class Patches:
    """Clusters and their patches.

    Attributes
    ----------
    places : (n,) int
        Places of the tree, those of a cluster together.
    cluster_start : (n_clusters + 1,) int
        First of each cluster among `places`.
    leaf : (n_clusters,) int
    neighbours : (n_clusters, slots) int
        Earlier clusters close by, the nearest first; -1 where there are no more.
    """

    places: IntArray
    cluster_start: IntArray
    leaf: IntArray
    neighbours: NDArray[np.int32]


@kernel
def _halve(points, places, first, last, most):
    """Sort a stretch of `places` along the longest side of its box and return where to cut it: at whole clusters."""
    widest, axis = -1.0, 0
    for k in range(3):
        low, high = points[places[first], k], points[places[first], k]
        for i in range(first + 1, last):
            x = points[places[i], k]
            low, high = min(low, x), max(high, x)
        if high - low > widest:
            widest, axis = high - low, k
    stretch = places[first:last].copy()
    keys = np.empty(last - first)
    for i in range(last - first):
        keys[i] = points[stretch[i], axis]
    turn = np.argsort(keys, kind="mergesort")  # stable: ties keep the order of the tree
    for i in range(last - first):
        places[first + i] = stretch[turn[i]]
    half = (last - first + 1) // 2
    return first + most * ((half + most - 1) // most)


@kernel
def cut_leaves(points, leaf_start, most, places, cluster_start, leaf):
    """Cut leaves into clusters by halving them along their longest side.

    Parameters
    ----------
    points : (n, 3) float
        Centroids in the order of the tree.
    leaf_start : (n_leaves + 1,) int
    most : int
        Panels of a cluster.
    places : (n,) int
        Changed from 0, 1, ... to the places of the clusters.
    cluster_start, leaf : (n + 1,) int
        Written: first of each cluster among `places`, and its leaf.

    Returns
    -------
    int
        Number of clusters.
    """
    n = 0
    stack = np.empty((64, 2), np.int64)
    for a in range(len(leaf_start) - 1):
        stack[0, 0], stack[0, 1] = leaf_start[a], leaf_start[a + 1]
        depth = 1
        while depth > 0:
            depth -= 1
            first, last = stack[depth, 0], stack[depth, 1]
            if last - first <= most:
                cluster_start[n], leaf[n] = first, a
                n += 1
                continue
            middle = _halve(points, places, first, last, most)
            stack[depth, 0], stack[depth, 1] = middle, last
            stack[depth + 1, 0], stack[depth + 1, 1] = first, middle
            depth += 2
    cluster_start[n] = leaf_start[-1]
    return n


@kernel
def _box_distance(boxes, a, b):
    """Distance of two boxes (low, high)."""
    total = 0.0
    for k in range(3):
        gap = max(0.0, boxes[a, k] - boxes[b, 3 + k], boxes[b, k] - boxes[a, 3 + k])
        total += gap * gap
    return np.sqrt(total)


@kernel
def _centre_distance(boxes, a, b):
    """Distance of the centres of two boxes."""
    total = 0.0
    for k in range(3):
        x = 0.5 * (boxes[a, k] + boxes[a, 3 + k] - boxes[b, k] - boxes[b, 3 + k])
        total += x * x
    return np.sqrt(total)


@kernel
def _insert(keys, found, n, key, cluster):
    """Insert into a row sorted by key, the last one falling out of a full row; returns the new length."""
    if n == len(found):
        if key >= keys[n - 1]:
            return n
        n -= 1
    i = n
    while i > 0 and keys[i - 1] > key:
        keys[i], found[i] = keys[i - 1], found[i - 1]
        i -= 1
    keys[i], found[i] = key, cluster
    return n + 1


@parallel_kernel
def find_neighbours(boxes, rank, cluster_start, leaf, adjacent, limits, neighbours):
    """Write the neighbours of each cluster.

    Parameters
    ----------
    boxes : (n, 6) float
    rank : (n,) int
        Place in the order of elimination.
    cluster_start : (n + 1,) int
    leaf : (n,) int
    adjacent : tuple of (n_leaves + 1,) int, (m,) int, (n_leaves + 1,) int
        Leaves near each leaf: where its list starts, the leaves, and the first cluster of each leaf.
    limits : (2,) float
        Share of the radius, most panels.
    neighbours : (n, slots) int
        Filled with -1.
    """
    head, others, first_cluster = adjacent
    for c in prange(len(boxes)):
        keys = np.empty(neighbours.shape[1])
        n = 0
        radius = 0.5 * np.sqrt(((boxes[c, 3:] - boxes[c, :3]) ** 2).sum())
        for e in range(head[leaf[c]], head[leaf[c] + 1]):
            b = others[e]
            for d in range(first_cluster[b], first_cluster[b + 1]):
                if rank[d] >= rank[c]:
                    continue
                other = 0.5 * np.sqrt(((boxes[d, 3:] - boxes[d, :3]) ** 2).sum())
                distance = _box_distance(boxes, c, d)
                if distance <= limits[0] * min(radius, other):
                    # of those that touch, the ones whose middles are nearest
                    key = distance + 1e-3 * _centre_distance(boxes, c, d)
                    n = _insert(keys, neighbours[c], n, key, d)
        room = limits[1]
        for k in range(n):
            room -= cluster_start[neighbours[c, k] + 1] - cluster_start[neighbours[c, k]]
            if room < 0:
                neighbours[c, k:] = -1
                break


def make_patches(stored: StoredEntries) -> Patches:
    """Cut the leaves into clusters and find the patch of each.

    Parameters
    ----------
    stored : StoredEntries

    Returns
    -------
    Patches
    """
    corners = stored.corners[stored.order]
    n, leaf_start = len(corners), np.ascontiguousarray(stored.leaf_start, dtype=np.int64)
    points = np.ascontiguousarray(corners.mean(axis=1))
    places = np.arange(n)
    cluster_start, leaf = np.zeros(n + 1, dtype=np.int64), np.zeros(n + 1, dtype=np.int64)
    n_clusters = cut_leaves(points, leaf_start, CLUSTER_SIZE, places, cluster_start, leaf)
    cluster_start, leaf = cluster_start[: n_clusters + 1].copy(), leaf[:n_clusters].copy()
    corners = corners[places]
    radius = np.linalg.norm(corners - corners.mean(axis=1, keepdims=True), axis=2).max(axis=1)
    low = np.minimum.reduceat(corners.min(axis=1), cluster_start[:-1])
    high = np.maximum.reduceat(corners.max(axis=1), cluster_start[:-1])
    # halves of octaves would make neighbours of one size differ by rounding
    size = np.add.reduceat(np.log2(radius), cluster_start[:-1]) / np.diff(cluster_start)
    rank = np.empty(n_clusters, dtype=np.int64)
    rank[np.argsort(-np.rint(size), kind="stable")] = np.arange(n_clusters)
    both = np.concatenate([stored.pairs, stored.pairs[stored.pairs[:, 0] != stored.pairs[:, 1], ::-1]])
    both = both[np.argsort(both[:, 0], kind="stable")]
    leaves = np.arange(len(leaf_start))
    adjacent = (
        np.searchsorted(both[:, 0], leaves),
        np.ascontiguousarray(both[:, 1], dtype=np.int64),
        np.searchsorted(leaf, leaves),
    )
    neighbours = np.full((n_clusters, _SLOTS), -1, dtype=np.int32)
    limits = np.array([NEIGHBOUR, float(PATCH_SIZE)])
    find_neighbours(np.hstack([low, high]), rank, cluster_start, leaf, adjacent, limits, neighbours)
    return Patches(places, cluster_start, leaf, neighbours)
