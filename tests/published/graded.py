"""Capacitances of conductors made of rectangles by a scheme of its own, to compare with.

Nothing is shared with the product: centroid collocation (not Galerkin) on tensor meshes graded by hand toward the
edges, one formula for the potential of a rectangle, a dense solution by elimination, and Richardson extrapolation
over three meshes. Mirror symmetry is used where the case has it.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["Rectangle", "box", "graded", "maxwell_matrix", "richardson", "sheet"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Rectangle:
    """A rectangle with its own mesh lines.

    Attributes
    ----------
    origin : (3,) float
    along : (2, 3) float
        Unit vectors of the two sides, perpendicular.
    lines : tuple of two (k,) float
        Mesh lines along either side, from zero.
    conductor : int
    """

    origin: FloatArray
    along: FloatArray
    lines: tuple[FloatArray, FloatArray]
    conductor: int

    def cells(self) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Lower corners (n, 2), sizes (n, 2) in the plane and centres (n, 3) in space."""
        low = np.stack([g.ravel() for g in np.meshgrid(*(line[:-1] for line in self.lines), indexing="ij")], axis=1)
        size = np.stack(
            [g.ravel() for g in np.meshgrid(*(np.diff(line) for line in self.lines), indexing="ij")], axis=1
        )
        return low, size, self.origin + (low + 0.5 * size) @ self.along


def graded(n: int, *stops: float, power: float, ends: tuple[bool, bool] = (True, True)) -> FloatArray:
    """Mesh lines from the first stop to the last, `n` cells between neighbours, dense toward every stop.

    Parameters
    ----------
    n : int
        Even.
    stops : float
    power : float
        Distance from a stop grows as this power of the cell's number.
    ends : tuple of bool
        Whether the lines are dense at the first and at the last stop.
    """
    pieces = []
    for k, (a, b) in enumerate(pairwise(stops)):
        first, last = k > 0 or ends[0], k < len(stops) - 2 or ends[1]
        t = np.linspace(0.0, 1.0, n + 1)
        if first and last:
            s = np.where(t < 0.5, 0.5 * (2 * t) ** power, 1.0 - 0.5 * (2 * (1 - t)) ** power)
        elif first:
            s = t**power
        elif last:
            s = 1.0 - (1.0 - t) ** power
        else:
            s = t
        pieces.append(a + (b - a) * s)
    return np.concatenate([pieces[0], *(piece[1:] for piece in pieces[1:])])


def sheet(conductor: int, centre: ArrayLike, x: FloatArray, y: FloatArray, tilt: float = 0.0) -> Rectangle:
    """Thin sheet with mesh lines x and y about its centre, tilted by an angle in rad about the y axis."""
    along = np.array([[np.cos(tilt), 0.0, np.sin(tilt)], [0.0, 1.0, 0.0]])
    start = np.asarray(centre, dtype=np.float64) + x[0] * along[0] + y[0] * along[1]
    return Rectangle(start, along, (x - x[0], y - y[0]), conductor)


def box(conductor: int, centre: ArrayLike, *lines: FloatArray) -> list[Rectangle]:
    """Six faces of a box with mesh lines x, y, z about its centre."""
    middle = np.asarray(centre, dtype=np.float64)
    faces = []
    for axis in range(3):
        u, v = (axis + 1) % 3, (axis + 2) % 3
        for end in (0, -1):
            start = middle.copy()
            start[axis] += lines[axis][end]
            start[u] += lines[u][0]
            start[v] += lines[v][0]
            spans = (lines[u] - lines[u][0], lines[v] - lines[v][0])
            faces.append(Rectangle(start, np.eye(3)[[u, v]], spans, conductor))
    return faces


def _potential(points: FloatArray, rectangle: Rectangle) -> FloatArray:
    """Integral of 1/r over each cell, (points, cells).

    Source: Durand, Electrostatique, vol. 1 (1964), from memory; differences of u ln(v + R) + v ln(u + R)
    - w atan(u v / (w R)) over the corners.
    """
    low, size, _ = rectangle.cells()
    local = (points - rectangle.origin) @ rectangle.along.T
    w = np.abs((points - rectangle.origin) @ np.cross(*rectangle.along))[:, None]
    total = np.zeros((len(points), len(low)))
    for i, sign_u in ((0, -1.0), (1, 1.0)):
        u = low[:, 0] + i * size[:, 0] - local[:, :1]
        for j, sign_v in ((0, -1.0), (1, 1.0)):
            v = low[:, 1] + j * size[:, 1] - local[:, 1:]
            r = np.sqrt(u * u + v * v + w * w)
            # asinh keeps its digits where v + r would cancel; a point on a line through a side has no part in it
            flat_u, flat_v = np.sqrt(u * u + w * w), np.sqrt(v * v + w * w)
            with np.errstate(divide="ignore", invalid="ignore"):
                term = np.where(flat_u > 0, u * np.arcsinh(v / flat_u), 0.0)
                term += np.where(flat_v > 0, v * np.arcsinh(u / flat_v), 0.0)
                term -= np.where(w > 0, w * np.arctan(u * v / (w * r)), 0.0)
            total += sign_u * sign_v * term
    return total


def maxwell_matrix(rectangles: Sequence[Rectangle], mirrors: Sequence[int] = (), n_conductors: int = 0) -> FloatArray:
    """Maxwell matrix over 4 pi epsilon_0 by centroid collocation.

    Parameters
    ----------
    rectangles : sequence of Rectangle
        With `mirrors`, only what lies at positive coordinates.
    mirrors : sequence of int
        Axes whose planes through the origin mirror the conductors onto themselves.
    n_conductors : int
        Counted from the rectangles unless given.

    Returns
    -------
    (n, n) float
    """
    parts = [r.cells() for r in rectangles]
    centres = np.concatenate([c for _, _, c in parts])
    areas = np.concatenate([s.prod(axis=1) for _, s, _ in parts])
    conductor = np.concatenate([np.full(len(c), r.conductor) for r, (_, _, c) in zip(rectangles, parts, strict=True)])
    matrix = np.zeros((len(centres), len(centres)))
    for images in range(2 ** len(mirrors)):
        flip = np.ones(3)
        for bit, axis in enumerate(mirrors):
            flip[axis] = -1.0 if images >> bit & 1 else 1.0
        matrix += np.hstack([_potential(centres * flip, r) for r in rectangles])
    potentials = (conductor[:, None] == np.arange(n_conductors or conductor.max() + 1)).astype(np.float64)
    charge = np.linalg.solve(matrix, potentials) * areas[:, None] * 2 ** len(mirrors)
    return np.asarray(potentials.T @ charge)


def richardson(coarse: FloatArray, fine: FloatArray, ratio: float) -> FloatArray:
    """Value on endless fine meshes from two, the second finer by `ratio`: the error is of order 3 (observed 2.9)."""
    return np.asarray(fine + (fine - coarse) / (ratio**3 - 1.0))
