"""Splitting panels: quadrilaterals across either or both directions, triangles into three quadrilaterals.

Panels need not conform to their neighbours (piecewise constant charge), so each is split alone. A quadrilateral
split through the midpoints of opposite sides stays flat and convex; a triangle split through its centroid and
the midpoints of its sides gives three convex quadrilaterals, each with two sides on the triangle's edges, which
can then follow an edge in one direction only.
"""

import numpy as np
from numpy.typing import NDArray

from .panels import Panels

__all__ = ["SPLIT_BOTH", "SPLIT_NONE", "SPLIT_U", "SPLIT_V", "children", "halves", "split_panels"]

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
    quads = panels.n_corners == 4
    stay = np.flatnonzero(split == SPLIT_NONE)
    corners, n_corners, parents = [panels.corners[stay]], [panels.n_corners[stay]], [stay]
    for mark in (SPLIT_U, SPLIT_V, SPLIT_BOTH):
        chosen = np.flatnonzero(quads & (split == mark))
        if mark == SPLIT_BOTH:
            parts = children(panels.corners[chosen], panels.n_corners[chosen])
        else:
            parts = halves(panels.corners[chosen], mark)
        _collect(parts, chosen, corners, n_corners, parents)
    chosen = np.flatnonzero(~quads & (split != SPLIT_NONE))
    _collect(_thirds(panels.corners[chosen]), chosen, corners, n_corners, parents)
    parent = np.concatenate(parents)
    new = Panels(
        np.concatenate(corners),
        np.concatenate(n_corners),
        panels.body[parent],
        panels.conductor[parent],
        panels.region[parent],
    )
    return new, parent


def _collect(
    parts: FloatArray,
    chosen: IntArray,
    corners: list[FloatArray],
    n_corners: list[IntArray],
    parents: list[IntArray],
) -> None:
    corners.append(parts.reshape(-1, 4, 3))
    n_corners.append(np.full(parts.shape[0] * parts.shape[1], 4, dtype=np.int64))
    parents.append(np.repeat(chosen, parts.shape[1]))
