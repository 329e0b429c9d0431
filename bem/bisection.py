"""Splitting panels: quadrilaterals across either or both directions, triangles into three quadrilaterals.

Panels need not conform to their neighbours (piecewise constant charge), so each is split alone. A quadrilateral
split through the midpoints of opposite sides stays flat and convex; a triangle split through its centroid and
the midpoints of its sides gives three convex quadrilaterals, each with two sides on the triangle's edges, which
can then follow an edge in one direction only.
"""

import numpy as np
from numpy.typing import NDArray

from .panels import Panels

__all__ = ["SPLIT_BOTH", "SPLIT_NONE", "SPLIT_U", "SPLIT_V", "children", "halves", "split_panels", "split_sides"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

SPLIT_NONE, SPLIT_U, SPLIT_V, SPLIT_BOTH = 0, 1, 2, 3


def halves(corners: FloatArray, direction: int) -> FloatArray:
    """Halves of quadrilaterals, cut through the midpoints of two opposite sides.

    Parameters
    ----------
    corners : (n, 4, 3) float
    direction : SPLIT_U or SPLIT_V
        U halves the sides 0-1 and 3-2, V the sides 0-3 and 1-2.

    Returns
    -------
    (n, 2, 4, 3) float
        The half at corner 0 first.
    """
    a, b, c, d = (corners[:, k] for k in range(4))
    if direction == SPLIT_U:
        p, q = 0.5 * (a + b), 0.5 * (d + c)
        first, second = (a, p, q, d), (p, b, c, q)
    else:
        p, q = 0.5 * (a + d), 0.5 * (b + c)
        first, second = (a, b, q, p), (p, q, c, d)
    return np.stack([np.stack(first, axis=1), np.stack(second, axis=1)], axis=1)


def _thirds(corners: FloatArray) -> FloatArray:
    """Three quadrilaterals of each triangle, (n, 3, 4, 3)."""
    centre = corners[:, :3].mean(axis=1)
    parts = []
    for k in range(3):
        a, b, c = corners[:, k], corners[:, (k + 1) % 3], corners[:, (k + 2) % 3]
        parts.append(np.stack([a, 0.5 * (a + b), centre, 0.5 * (a + c)], axis=1))
    return np.stack(parts, axis=1)


def children(corners: FloatArray, n_corners: IntArray) -> FloatArray:
    """All parts of every panel: four of a quadrilateral, three of a triangle.

    Returns
    -------
    (n, 4, 4, 3) float
        Quadrilaterals: u first half with v first and second half, then u second half likewise. The fourth part
        of a triangle is its centroid, without area.
    """
    parts = np.empty((len(corners), 4, 4, 3))
    quads = n_corners == 4
    if quads.any():
        u = halves(corners[quads], SPLIT_U)
        parts[quads, :2] = halves(u[:, 0], SPLIT_V)
        parts[quads, 2:] = halves(u[:, 1], SPLIT_V)
    if not quads.all():
        parts[~quads, :3] = _thirds(corners[~quads])
        parts[~quads, 3] = corners[~quads, :3].mean(axis=1)[:, None, :]
    return parts


def split_panels(panels: Panels, split: IntArray) -> tuple[Panels, IntArray]:
    """Split panels as marked; those that stay come first, in their order.

    Parameters
    ----------
    panels : Panels
    split : (n,) int
        SPLIT_NONE, SPLIT_U, SPLIT_V or SPLIT_BOTH; for a triangle any mark but SPLIT_NONE splits it in three.

    Returns
    -------
    panels : Panels
    parent : (n_new,) int
        The panel that each one is or comes from.
    """
    groups = _groups(panels, split)
    parent = np.concatenate([np.repeat(chosen, _PARTS[mark]) for mark, chosen in groups])
    corners = [_split_corners(panels.corners[chosen], mark).reshape(-1, 4, 3) for mark, chosen in groups]
    n_corners = panels.n_corners[parent]
    n_corners[len(groups[0][1]) :] = 4
    return (
        Panels(
            np.concatenate(corners), n_corners, panels.body[parent], panels.conductor[parent], panels.region[parent]
        ),
        parent,
    )


def split_sides(panels: Panels, split: IntArray, sides: FloatArray, inner: float) -> FloatArray:
    """What is known of the sides of panels, after a split.

    Parameters
    ----------
    panels : Panels
        Before the split.
    split : (n,) int
        As for :func:`split_panels`.
    sides : (n, 4) float
        Of side k, from corner k to corner k + 1.
    inner : float
        For sides that a split makes.

    Returns
    -------
    (n_new, 4) float
        In the order of :func:`split_panels`.
    """
    parts = []
    for mark, chosen in _groups(panels, split):
        padded = np.append(sides[chosen], np.full((len(chosen), 1), inner), axis=1)
        parts.append(padded[:, _SIDES[mark]].reshape(-1, 4))
    return np.concatenate(parts)


#: Parts of a split, and for each part the side of the whole that its sides lie on; 4 stands for none.
_THIRDS = 4
_PARTS = {SPLIT_NONE: 1, SPLIT_U: 2, SPLIT_V: 2, SPLIT_BOTH: 4, _THIRDS: 3}
_SIDES = {
    SPLIT_NONE: [[0, 1, 2, 3]],
    SPLIT_U: [[0, 4, 2, 3], [0, 1, 2, 4]],
    SPLIT_V: [[0, 1, 4, 3], [4, 1, 2, 3]],
    SPLIT_BOTH: [[0, 4, 4, 3], [4, 4, 2, 3], [0, 1, 4, 4], [4, 1, 2, 4]],
    _THIRDS: [[0, 4, 4, 3], [1, 4, 4, 0], [3, 4, 4, 1]],
}


def _groups(panels: Panels, split: IntArray) -> list[tuple[int, IntArray]]:
    """Panels by the kind of their split, those that stay first."""
    quads = panels.n_corners == 4
    groups = [(SPLIT_NONE, np.flatnonzero(split == SPLIT_NONE))]
    groups += [(mark, np.flatnonzero(quads & (split == mark))) for mark in (SPLIT_U, SPLIT_V, SPLIT_BOTH)]
    groups.append((_THIRDS, np.flatnonzero(~quads & (split != SPLIT_NONE))))
    return groups


def _split_corners(corners: FloatArray, mark: int) -> FloatArray:
    """Parts of panels of one kind of split, (n, parts, 4, 3)."""
    if mark == SPLIT_NONE:
        return corners[:, None]
    if mark == _THIRDS:
        return _thirds(corners)
    if mark == SPLIT_BOTH:
        return children(corners, np.full(len(corners), 4, dtype=np.int64))
    return halves(corners, mark)
