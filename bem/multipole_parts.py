"""Potentials tested with parts of the panels: what the two-level estimate needs, from expansions and near leaves."""

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from .frames import AREA, CENTROID, CORNER, RADIUS, panel_frames
from .indicator import part_integral
from .jit import kernel
from .multipole import FarField, panel_moments
from .near_blocks import NearLayout
from .threads import run_tiles

if TYPE_CHECKING:
    from .operator import Expansion

__all__ = ["part_sums"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Panels whose parts are done in one call of the kernel.
_PANELS_PER_TILE = 500


@kernel
def _near_parts(parts, own, sources, near_start, near_panels, density, sums):
    """Add near sources to the integrals over parts.

    Parameters
    ----------
    parts : (m, 4, FRAME_SIZE) float
    own : (m,) int
        Row of `sources` of the panel that the parts belong to.
    sources : (k, FRAME_SIZE) float
    near_start, near_panels : (m + 1,), (n,) int
        Rows of the sources near each panel, one panel after the other.
    density : (k, n_columns) float
    sums : (m, 4, n_columns) float
    """
    for p in range(len(parts)):
        whole = sources[own[p]]
        for k in range(near_start[p], near_start[p + 1]):
            source = sources[near_panels[k]]
            x, y, z = (
                whole[CENTROID] - source[CENTROID],
                whole[CENTROID + 1] - source[CENTROID + 1],
                whole[CENTROID + 2] - source[CENTROID + 2],
            )
            radii = whole[RADIUS] + source[RADIUS]
            ratio2 = (x * x + y * y + z * z) / (radii * radii)
            for c in range(4):
                value = part_integral(parts[p, c], source, ratio2)
                for d in range(density.shape[1]):
                    sums[p, c, d] += value * density[near_panels[k], d]


@kernel
def _far_parts(parts, centre, origin, scale, rules, locals_, factor, sums):
    """Add the local expansion of one leaf, (n_columns, n_coefficients), to the integrals over parts of its panels.

    `origin` and `scale` lead from metres to the tree's coordinates, `centre` holds the cell's centre and one over
    its edge, `factor` (n_columns,) what turns a mean potential there into metres.
    """
    row = np.empty(locals_.shape[1])
    corners = np.empty((4, 3))
    for p in range(len(parts)):
        for c in range(4):
            if parts[p, c, AREA] == 0.0:
                continue
            for k in range(4):
                for m in range(3):
                    corners[k, m] = (parts[p, c, CORNER + 3 * k + m] - origin[m]) / scale
            panel_moments(corners, centre[:3], centre[3], rules, row)
            for d in range(len(locals_)):
                total = 0.0
                for j in range(len(row)):
                    total += row[j] * locals_[d, j]
                sums[p, c, d] += parts[p, c, AREA] * total * factor[d]


def part_sums(
    far: FarField, layout: NearLayout, corners: FloatArray, parts: FloatArray, chosen: IntArray, field: "Expansion"
) -> FloatArray:
    """Integrals of the potential over parts: see :meth:`daraf.bem.operator.FastOperator.at_parts`."""
    tree = far.tree
    start, neighbours = layout.neighbours
    place = tree.place[chosen]
    leaf = np.searchsorted(tree.leaf_start, place, side="right") - 1
    by_leaf = np.argsort(leaf, kind="stable")
    result = np.zeros((len(parts), 4, field.density.shape[1]))
    cuts = np.arange(0, len(parts) + _PANELS_PER_TILE, _PANELS_PER_TILE)

    def task(tile: int) -> None:
        rows = by_leaf[cuts[tile] : cuts[tile + 1]]
        leaves, first = np.unique(leaf[rows], return_index=True)
        last = np.append(first[1:], len(rows))
        here = np.ascontiguousarray(parts[rows])
        sums = np.zeros((len(rows), 4, result.shape[2]))
        for k, a, b in zip(leaves, first, last, strict=True):
            cell = tree.leaves[k]
            centre = np.append(tree.centre[cell], 2.0 ** tree.level[cell])
            locals_ = field.locals[cell].astype(np.float64)
            _far_parts(
                here[a:b], centre, tree.origin, tree.scale, far.rules, locals_, field.largest / tree.scale, sums[a:b]
            )
        near = [neighbours[start[k] : start[k + 1]] for k in leaves]
        wanted = np.unique(np.concatenate(near))
        places = np.concatenate([np.arange(tree.leaf_start[w], tree.leaf_start[w + 1]) for w in wanted])
        # rows of a near leaf's panels among the sources of this tile
        first_row = np.concatenate([[0], np.cumsum(tree.leaf_start[wanted + 1] - tree.leaf_start[wanted])])
        shift = first_row[:-1] - tree.leaf_start[wanted]
        lists = []
        for group in near:
            k = np.searchsorted(wanted, group)
            lists.append(np.concatenate([np.arange(first_row[i], first_row[i + 1]) for i in k]))
        size = np.repeat([len(one) for one in lists], last - first)
        of_panel = np.concatenate([np.tile(one, b - a) for one, a, b in zip(lists, first, last, strict=True)])
        own = place[rows] + np.repeat(shift[np.searchsorted(wanted, leaves)], last - first)
        near_start = np.concatenate([[0], np.cumsum(size)]).astype(np.int64)
        sources = panel_frames(corners[tree.order[places]], largest_rule=4)
        density = field.density[tree.order[places]]
        _near_parts(here, own, sources, near_start, of_panel, density, sums)
        result[rows] = sums

    run_tiles(task, len(cuts) - 1)
    return result
