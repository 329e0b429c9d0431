"""Adaptive octree over panels: cells by centroid, large panels kept in an ancestor cell, true extents.

A panel goes no deeper than cells of a few times its own radius. Where such a panel stays behind in a cell that is
divided, the panels left behind form one more child, a leaf of the same edge and centre. So leaves alone hold panels,
however graded or thin these are. A cell knows the radius of the ball about its centre that holds its panels; whether
two cells are far apart is judged by that, not by the cell's edge.
"""

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from .jit import kernel

__all__ = ["OWN", "Tree", "build_tree"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Octant of the child that holds the large panels of a cell: the eight others are the parts of the cube.
OWN = 8
#: Deepest level: coordinates are cut to this many bits.
MAX_LEVEL = 20
#: Largest radius of a panel over the edge of its cell.
LARGEST = 0.35


@dataclass(frozen=True, eq=False)
class Tree:
    """Cells in order of their depth; children of one cell stand together. Lengths are in units of the root's edge.

    Attributes
    ----------
    origin : (3,) float, m
    scale : float, m
        Centre and edge of the root; ``(x - origin) / scale`` are the coordinates used here.
    order : (n,) int
        Panel at each place; those of a cell stand together.
    level, parent, octant : (n_cells,) int
        The edge is ``2**-level``.
    child, n_children : (n_cells,) int
    first, last : (n_cells,) int
        Places of the panels of a cell and all below.
    centre : (n_cells, 3) float
    radius : (n_cells,) float
        Of the ball about the centre that holds these panels.
    depth_start : (n_depths + 1,) int
        First cell of each depth.
    """

    origin: FloatArray
    scale: float
    order: IntArray
    level: IntArray
    parent: IntArray
    octant: IntArray
    child: IntArray
    n_children: IntArray
    first: IntArray
    last: IntArray
    centre: FloatArray
    radius: FloatArray
    depth_start: IntArray

    @cached_property
    def place(self) -> IntArray:
        """Place of each panel in `order`."""
        place = np.empty(len(self.order), dtype=np.int64)
        place[self.order] = np.arange(len(self.order))
        return place

    @cached_property
    def leaves(self) -> IntArray:
        """Cells without children, in order of their panels."""
        found = np.nonzero(self.n_children == 0)[0]
        return found[np.argsort(self.first[found], kind="stable")]

    @cached_property
    def leaf_of_cell(self) -> IntArray:
        """Place of a cell among the leaves; -1 for others."""
        place = np.full(len(self.level), -1, dtype=np.int64)
        place[self.leaves] = np.arange(len(self.leaves))
        return place

    @cached_property
    def leaf_start(self) -> IntArray:
        """Place of the first panel of each leaf, and the number of panels, (n_leaves + 1,)."""
        return np.append(self.first[self.leaves], len(self.order))


@kernel
def _codes(centroids, codes):
    """Interleaved bits of the coordinates, which lie in [-1/2, 1/2]: panels of one cell get one range."""
    for p in range(len(centroids)):
        code = 0
        x, y, z = centroids[p, 0], centroids[p, 1], centroids[p, 2]
        for _ in range(MAX_LEVEL):
            octant = 0
            x, y, z = 2.0 * x, 2.0 * y, 2.0 * z
            if x >= 0.0:
                octant |= 1
                x -= 0.5
            else:
                x += 0.5
            if y >= 0.0:
                octant |= 2
                y -= 0.5
            else:
                y += 0.5
            if z >= 0.0:
                octant |= 4
                z -= 0.5
            else:
                z += 0.5
            code = code * 8 + octant
        codes[p] = code


@kernel
def _divide(cells, order, codes, deepest, leaf_size, children):
    """Divide the cells of one depth; returns the number of children.

    Parameters
    ----------
    cells : (n, 4) int
        First and last place, level, octant.
    order : (n_panels,) int
        Changed: panels of each child are brought together.
    codes, deepest : (n_panels,) int
        Of the panels in their own order: interleaved bits, deepest level allowed.
    leaf_size : int
    children : (9 n, 5) int
        Written: first and last place, level, octant, parent among `cells`.
    """
    n = 0
    spare = np.empty(len(order), np.int64)
    start = np.empty(10, np.int64)
    for c in range(len(cells)):
        first, last, level = cells[c, 0], cells[c, 1], cells[c, 2]
        if cells[c, 3] == OWN or level >= MAX_LEVEL:
            continue
        shift = 3 * (MAX_LEVEL - 1 - level)
        for k in range(10):
            start[k] = 0
        for i in range(first, last):
            p = order[i]
            octant = OWN if deepest[p] <= level else (codes[p] >> shift) & 7
            start[octant + 1] += 1
        if last - first - start[OWN + 1] <= leaf_size:
            continue
        for k in range(9):
            start[k + 1] += start[k]
        for k in range(9):
            if start[k + 1] > start[k]:
                children[n, 0], children[n, 1] = first + start[k], first + start[k + 1]
                children[n, 2] = level if k == OWN else level + 1
                children[n, 3], children[n, 4] = k, c
                n += 1
        for i in range(first, last):
            p = order[i]
            octant = OWN if deepest[p] <= level else (codes[p] >> shift) & 7
            spare[first + start[octant]] = p
            start[octant] += 1
        for i in range(first, last):
            order[i] = spare[i]
    return n


@kernel
def _radii(corners, order, first, last, centre, radius):
    """Largest distance of a corner of its panels from the centre of each cell."""
    for c in range(len(first)):
        largest = 0.0
        for i in range(first[c], last[c]):
            p = order[i]
            for k in range(4):
                x, y, z = (
                    corners[p, k, 0] - centre[c, 0],
                    corners[p, k, 1] - centre[c, 1],
                    corners[p, k, 2] - centre[c, 2],
                )
                largest = max(largest, x * x + y * y + z * z)
        radius[c] = np.sqrt(largest)


def build_tree(corners: FloatArray, leaf_size: int) -> Tree:
    """Octree over panels.

    Parameters
    ----------
    corners : (n, 4, 3) float, m
    leaf_size : int
        A cell with no more panels than this, large ones aside, is not divided.

    Returns
    -------
    Tree
    """
    centroids = corners.mean(axis=1)
    low, high = centroids.min(axis=0), centroids.max(axis=0)
    origin = 0.5 * (low + high)
    extent = float(np.abs(corners - origin).max())
    # a hair more, so that rounding leaves no centroid outside
    scale = max(float((high - low).max()) * (1.0 + 1e-9), 1e-3 * extent)
    places = np.ascontiguousarray((centroids - origin) / scale)
    radii = np.linalg.norm(corners - centroids[:, None, :], axis=2).max(axis=1) / scale
    deepest = np.floor(np.log2(LARGEST / np.maximum(radii, 2.0**-MAX_LEVEL))).clip(0, MAX_LEVEL).astype(np.int64)
    codes = np.empty(len(corners), dtype=np.int64)
    _codes(places, codes)
    order = np.argsort(codes, kind="stable")
    depths = [np.array([[0, len(corners), 0, 0, -1]], dtype=np.int64)]
    while True:
        cells = np.ascontiguousarray(depths[-1][:, :4])
        room = np.empty((9 * len(cells), 5), dtype=np.int64)
        n = _divide(cells, order, codes, deepest, leaf_size, room)
        if n == 0:
            break
        depths.append(room[:n].copy())
    return _assemble((corners - origin) / scale, depths, order, origin, scale)


def _assemble(corners: FloatArray, depths: list[IntArray], order: IntArray, origin: FloatArray, scale: float) -> Tree:
    start = np.concatenate([[0], np.cumsum([len(cells) for cells in depths])])
    centre = np.zeros((int(start[-1]), 3))
    parent = np.full(int(start[-1]), -1, dtype=np.int64)
    cells = np.concatenate(depths)
    for d in range(1, len(depths)):
        here = slice(start[d], start[d + 1])
        parent[here] = depths[d][:, 4] + start[d - 1]
        octant, level = depths[d][:, 3], depths[d][:, 2]
        sign = np.where(octant[:, None] == OWN, 0, 2 * ((octant[:, None] >> np.arange(3)) & 1) - 1)
        centre[here] = centre[parent[here]] + 0.5 * sign * (0.5**level)[:, None]
    child = np.zeros(len(cells), dtype=np.int64)
    n_children = np.bincount(parent[1:], minlength=len(cells))
    # children of one depth stand in the order of their parents
    child[n_children > 0] = 1 + np.concatenate([[0], np.cumsum(n_children[n_children > 0])[:-1]])
    radius = np.empty(len(cells))
    first, last = np.ascontiguousarray(cells[:, 0]), np.ascontiguousarray(cells[:, 1])
    _radii(np.ascontiguousarray(corners), order, first, last, centre, radius)
    level, octant = np.ascontiguousarray(cells[:, 2]), np.ascontiguousarray(cells[:, 3])
    return Tree(origin, scale, order, level, parent, octant, child, n_children, first, last, centre, radius, start)
