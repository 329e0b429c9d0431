"""Which cells act on each other through expansions, and which leaves through direct integrals.

One walk over pairs of cells from the root: a pair of cells whose balls are small against the distance of their
centres is far and goes through expansions; a pair of leaves that are not is near; any other pair is divided. Far
pairs are mostly of one level; a leaf may also be far from a finer cell. Positions are those of a grid of half edges
of the finer cell, so that few different translations serve all levels: they are found here and numbered.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .jit import kernel
from .tree import Tree

__all__ = ["CellPairs", "cell_pairs"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Most levels between a leaf and a finer cell far from it.
MOST_LEVELS_APART = 3
#: Leaves with fewer pairs of panels than this act directly: an expansion would cost more.
FEW_PAIRS = 256


@dataclass(frozen=True, eq=False)
class CellPairs:
    """Pairs of cells, each once.

    Attributes
    ----------
    near : (n_near, 2) int
        Places among the leaves, the smaller first; a leaf with itself included; in ascending order.
    far : (n_far, 2) int
        Cells [target, source] in one orientation: the target is never finer than the source.
    translation : (n_far,) int
        Number of the translation of each far pair.
    offsets : (n_translations, 3) float
        From the source's centre to the target's in edges of the source.
    levels_apart : (n_translations,) int
    """

    near: IntArray
    far: IntArray
    translation: IntArray
    offsets: FloatArray
    levels_apart: IntArray


@kernel
def _walk(level, child, n_children, n_panels, centre, radius, theta, pairs):
    """Walk over pairs of cells; `pairs` (capacity, 3) takes cell, cell, 1 for far or 0 for near.

    Returns the number of pairs; those beyond the capacity are counted and not stored.
    """
    stack = np.empty((4096, 2), np.int64)
    stack[0, 0], stack[0, 1] = 0, 0
    top, n = 1, 0
    while top > 0:
        top -= 1
        a, b = stack[top, 0], stack[top, 1]
        kind = -1
        if a == b:
            if n_children[a] == 0:
                kind = 0
        else:
            x, y, z = centre[a, 0] - centre[b, 0], centre[a, 1] - centre[b, 1], centre[a, 2] - centre[b, 2]
            distance = np.sqrt(x * x + y * y + z * z)
            far = radius[a] + radius[b] <= theta * distance and abs(level[a] - level[b]) <= MOST_LEVELS_APART
            leaves = n_children[a] == 0 and n_children[b] == 0
            if far and n_panels[a] * n_panels[b] >= FEW_PAIRS:
                kind = 1
            elif leaves:
                kind = 0
            elif far and not leaves:
                kind = 1
        if kind >= 0:
            if n < len(pairs):
                pairs[n, 0], pairs[n, 1], pairs[n, 2] = a, b, kind
            n += 1
            continue
        # children of both, unless one has none
        na, nb = max(n_children[a], 1), max(n_children[b], 1)
        if top + na * nb > len(stack):
            grown = np.empty((2 * len(stack), 2), np.int64)
            for i in range(top):
                grown[i, 0], grown[i, 1] = stack[i, 0], stack[i, 1]
            stack = grown
        for i in range(na):
            ca = child[a] + i if n_children[a] > 0 else a
            for j in range(i if a == b else 0, nb):
                stack[top, 0] = ca
                stack[top, 1] = child[b] + j if n_children[b] > 0 else b
                top += 1
    return n


def walk_pairs(tree: Tree, theta: float) -> IntArray:
    """All pairs of cells that the walk ends at, (n, 3): cell, cell, 1 for far or 0 for near."""
    n_panels = tree.last - tree.first
    capacity = 40 * len(tree.level) + 1000
    while True:
        pairs = np.empty((capacity, 3), dtype=np.int64)
        n = _walk(tree.level, tree.child, tree.n_children, n_panels, tree.centre, tree.radius, theta, pairs)
        if n <= capacity:
            return pairs[:n]
        capacity = n


def cell_pairs(tree: Tree, theta: float) -> CellPairs:
    """Near and far pairs of a tree.

    Parameters
    ----------
    tree : Tree
    theta : float
        Largest sum of the radii over the distance of the centres of a far pair.

    Returns
    -------
    CellPairs
    """
    pairs = walk_pairs(tree, theta)
    far = pairs[pairs[:, 2] == 1, :2]
    near = np.sort(tree.leaf_of_cell[pairs[pairs[:, 2] == 0, :2]], axis=1)
    near = near[np.lexsort((near[:, 1], near[:, 0]))]
    target, source = far[:, 0], far[:, 1]
    apart = tree.level[source] - tree.level[target]
    steps = np.rint(
        (tree.centre[target] - tree.centre[source])
        * 2.0 ** (1 + np.maximum(tree.level[source], tree.level[target]))[:, None]
    )
    steps = steps.astype(np.int64)
    # one orientation: the target is the coarser cell; among equals the offset points up
    lead = np.where(steps[:, 2] != 0, steps[:, 2], np.where(steps[:, 1] != 0, steps[:, 1], steps[:, 0]))
    turn = (apart < 0) | ((apart == 0) & (lead < 0))
    far = np.where(turn[:, None], far[:, ::-1], far)
    steps = np.where(turn[:, None], -steps, steps)
    apart = np.abs(apart)
    code = ((apart * 1024 + steps[:, 2] + 512) * 1024 + steps[:, 1] + 512) * 1024 + steps[:, 0] + 512
    _, one, translation = np.unique(code, return_index=True, return_inverse=True)
    return CellPairs(
        near, np.ascontiguousarray(far), translation.reshape(-1), 0.5 * steps[one].reshape(-1, 3), apart[one]
    )
