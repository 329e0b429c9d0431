"""A tree of boxes over triangles, and the walk over two trees that finds near pairs."""

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

__all__ = ["BoxTree", "near_pairs"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Pairs of boxes handled at once; bounds the memory of a walk.
_BLOCK = 1 << 17


class BoxTree:
    """Axis-parallel boxes of triangles along a space-filling curve, joined two by two up to one root.

    Parameters
    ----------
    corners : (n, 3, 3) float, m

    Attributes
    ----------
    order : (n,) int
        Triangle of each leaf.
    low, high : list of (m, 3) float, m
        Boxes of each level; level 0 holds the leaves, the last level the root.
    """

    def __init__(self, corners: FloatArray) -> None:
        low, high = corners.min(axis=1), corners.max(axis=1)
        self.order = np.argsort(_morton(0.5 * (low + high)), kind="stable")
        self.low, self.high = [low[self.order]], [high[self.order]]
        while len(self.low[-1]) > 1:
            self.low.append(_join(self.low[-1], np.minimum))
            self.high.append(_join(self.high[-1], np.maximum))

    @property
    def top(self) -> int:
        """Level of the root."""
        return len(self.low) - 1


def _join(boxes: FloatArray, pick: np.ufunc) -> FloatArray:
    joined = boxes[0::2].copy()
    right = boxes[1::2]
    joined[: len(right)] = pick(joined[: len(right)], right)
    return joined


def _morton(points: FloatArray) -> NDArray[np.uint64]:
    """Position of points along the Z-order curve (Morton, 1966), 21 bits per axis."""
    low = points.min(axis=0)
    size = float(np.ptp(points, axis=0).max()) or 1.0
    cell = ((points - low) / size * (2**21 - 1)).astype(np.uint64)
    for shift, mask in (
        (32, 0x1F00000000FFFF),
        (16, 0x1F0000FF0000FF),
        (8, 0x100F00F00F00F00F),
        (4, 0x10C30C30C30C30C3),
        (2, 0x1249249249249249),
    ):
        cell = (cell | (cell << np.uint64(shift))) & np.uint64(mask)
    curve: NDArray[np.uint64] = cell[:, 0] | (cell[:, 1] << np.uint64(1)) | (cell[:, 2] << np.uint64(2))
    return curve


def near_pairs(
    a: BoxTree, b: BoxTree, limit: list[float], *, itself: bool = False
) -> Iterator[tuple[IntArray, IntArray, FloatArray]]:
    """Pairs of triangles whose boxes are no farther apart than a limit, in blocks, near ones first.

    Parameters
    ----------
    a, b : BoxTree
    limit : list of one float, m
        Read again at every step: the caller may lower it while the walk goes on.
    itself : bool
        Whether both trees are one and the same; each pair is then met once and no triangle with itself.

    Yields
    ------
    i, j : (m,) int
        Triangles of `a` and of `b`.
    gap : (m,) float, m
        Distance of their boxes, in rising order: a lower bound of the distance of the triangles.
    """
    root = np.zeros(1, dtype=np.int64)
    stack = [(a.top, b.top, root, root, np.zeros(1))]
    while stack:
        level_a, level_b, i, j, gap = stack.pop()
        keep = gap <= limit[0]
        i, j, gap = i[keep], j[keep], gap[keep]
        if len(i) == 0:
            continue
        if level_a == 0 and level_b == 0:
            order = np.argsort(gap, kind="stable")
            yield a.order[i[order]], b.order[j[order]], gap[order]
            continue
        if level_a > 0 and (level_a >= level_b):
            i, j = _children(i, j, len(a.low[level_a - 1]))
            both = level_b == level_a
            level_a -= 1
        else:
            both = False
        if level_b > 0 and (both or level_b > level_a):
            j, i = _children(j, i, len(b.low[level_b - 1]))
            level_b -= 1
        if itself:
            keep = i < j if level_a == 0 else i <= j
            i, j = i[keep], j[keep]
        apart = np.maximum(a.low[level_a][i] - b.high[level_b][j], b.low[level_b][j] - a.high[level_a][i])
        gap = np.linalg.norm(np.maximum(apart, 0.0), axis=1)
        keep = gap <= limit[0]
        i, j, gap = i[keep], j[keep], gap[keep]
        if len(i) > _BLOCK:  # the nearest block is handled first: it lowers the limit for the others
            order = np.argsort(gap, kind="stable")
            i, j, gap = i[order], j[order], gap[order]
        for start in range((len(i) - 1) // _BLOCK * _BLOCK if len(i) else 0, -1, -_BLOCK):
            part = slice(start, start + _BLOCK)
            stack.append((level_a, level_b, i[part], j[part], gap[part]))


def _children(i: IntArray, j: IntArray, n_below: int) -> tuple[IntArray, IntArray]:
    """Both children of each box `i`, with its partner `j` repeated."""
    child = np.concatenate([2 * i, 2 * i + 1])
    partner = np.concatenate([j, j])
    keep = child < n_below
    return child[keep], partner[keep]
