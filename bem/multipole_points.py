"""Potential and gradient at any points: multipoles of cells far enough away, closed forms of the panels near."""

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from .field import polygon_field
from .frames import AREA, CENTROID, RADIUS, panel_frames
from .jit import kernel
from .multipole import FarField
from .polygon import polygon_potential
from .threads import run_tiles
from .translations import n_coefficients, shift_matrix

if TYPE_CHECKING:
    from .operator import Expansion

__all__ = ["point_sums"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Points of one tile.
_POINTS_PER_TILE = 1000
#: Distance over the radius of a panel beyond which its charge acts as a point's, at the tolerance 1e-5.
_POINT = 60.0


@kernel
def _harmonics(x, y, z, degree, row):
    """Regular harmonics at one point: the recurrences of :func:`daraf.bem.multipole.panel_moments`."""
    r2 = x * x + y * y + z * z
    cosine, sine = 1.0, 0.0
    for m in range(degree + 1):
        if m > 0:
            factor = -1.0 if m == 1 else -np.sqrt((2.0 * m - 1.0) / (2.0 * m))
            cosine, sine = factor * (x * cosine - y * sine), factor * (x * sine + y * cosine)
        low, high = 0.0, 1.0
        for k in range(m, degree + 1):
            row[k * k + k + m] = high * cosine
            if m > 0:
                row[k * k + k - m] = high * sine
            over = 1.0 / np.sqrt((k + 1.0) ** 2 - m * m)
            low, high = high, ((2.0 * k + 1.0) * z * high - np.sqrt(float(k * k - m * m)) * r2 * low) * over


@kernel
def _at_points(points, cells, place, shape, coefficients, frames, charges, result):
    """Potential and gradient at points, in the tree's coordinates.

    Parameters
    ----------
    points : (m, 3) float
    cells : (n_cells, 4) int
        First child, number of children, first and last panel.
    place : (n_cells, 5) float
        Centre, radius, one over the edge.
    shape : (3,) float
        Degree, least distance over the radius of a cell for its multipole to serve, likewise of a panel as a point.
    coefficients : (n_cells, n_columns, 4, n) float
        Of the potential and of the three parts of the gradient.
    frames : (n, FRAME_SIZE) float
        In the tree's order.
    charges : (n, n_columns) float
    result : (m, n_columns, 4) float
        Written.
    """
    degree = int(shape[0])
    row = np.empty((degree + 1) ** 2)
    stack = np.empty(1024, np.int64)
    n_columns = charges.shape[1]
    for p in range(len(points)):
        px, py, pz = points[p, 0], points[p, 1], points[p, 2]
        stack[0], top = 0, 1
        while top > 0:
            top -= 1
            c = stack[top]
            x, y, z = px - place[c, 0], py - place[c, 1], pz - place[c, 2]
            r2 = x * x + y * y + z * z
            reach = shape[1] * place[c, 3]
            if r2 > reach * reach:
                edge = 1.0 / place[c, 4]
                over = edge / r2
                _harmonics(x * over, y * over, z * over, degree, row)
                over_r = 1.0 / np.sqrt(r2)
                for d in range(n_columns):
                    for k in range(4):
                        total = 0.0
                        for j in range(len(row)):
                            total += row[j] * coefficients[c, d, k, j]
                        result[p, d, k] += total * over_r * (1.0 if k == 0 else place[c, 4])
            elif cells[c, 1] > 0:
                for j in range(cells[c, 1]):
                    stack[top] = cells[c, 0] + j
                    top += 1
            else:
                for i in range(cells[c, 2], cells[c, 3]):
                    _one_panel(frames[i], px, py, pz, shape[2], charges[i], result[p])


@kernel
def _one_panel(frame, px, py, pz, point, charges, result):
    x, y, z = px - frame[CENTROID], py - frame[CENTROID + 1], pz - frame[CENTROID + 2]
    r2 = x * x + y * y + z * z
    if r2 > (point * frame[RADIUS]) ** 2:
        value = 1.0 / np.sqrt(r2)
        fx, fy, fz = x * value / r2, y * value / r2, z * value / r2
    else:
        over = 1.0 / frame[AREA]
        value = polygon_potential(frame, px, py, pz) * over
        fx, fy, fz = polygon_field(frame, px, py, pz)
        fx, fy, fz = fx * over, fy * over, fz * over
    for d in range(len(charges)):
        result[d, 0] += charges[d] * value
        result[d, 1] -= charges[d] * fx
        result[d, 2] -= charges[d] * fy
        result[d, 3] -= charges[d] * fz


def _gradient_matrices(degree: int) -> FloatArray:
    """Coefficients up to one more degree of the three parts of the gradient, (3, n_coefficients, more)."""
    more, n = n_coefficients(degree + 1), n_coefficients(degree)
    of = np.concatenate([np.full(2 * k + 1, k) for k in range(degree + 2)])
    next_degree = of[:, None] == of[None, :] + 1
    # moving the sources by d adds d . (this block) to their moments; moving the point does the opposite
    blocks = [np.where(next_degree, -shift_matrix(axis, degree + 1), 0.0)[:, :n].T for axis in np.eye(3)]
    return np.ascontiguousarray(blocks).reshape(3, n, more)


def point_sums(
    far: FarField, corners: FloatArray, points: FloatArray, field: "Expansion", tolerance: float
) -> tuple[FloatArray, FloatArray]:
    """Potential and gradient at points: see :meth:`daraf.bem.operator.FastOperator.at_points`."""
    tree, degree = far.tree, far.degree
    n_columns = field.density.shape[1]
    multipoles = field.multipoles.astype(np.float64)
    coefficients = np.zeros((len(tree.level), n_columns, 4, n_coefficients(degree + 1)))
    coefficients[:, :, 0, : n_coefficients(degree)] = multipoles
    for k, matrix in enumerate(_gradient_matrices(degree)):
        coefficients[:, :, k + 1] = multipoles @ matrix
    cells = np.column_stack([tree.child, tree.n_children, tree.first, tree.last])
    place = np.column_stack([tree.centre, tree.radius, 2.0**tree.level])
    # the first term left out is about (radius / distance)^(degree + 1) of the potential, on the average a tenth
    reach = max(1.3, (10.0 * tolerance) ** (-1.0 / (degree + 2)))
    shape = np.array([degree + 1.0, reach, _POINT * np.sqrt(1e-5 / tolerance)])
    unit = np.ascontiguousarray((corners[tree.order] - tree.origin) / tree.scale)
    frames = panel_frames(unit, largest_rule=0)
    charges = field.density[tree.order] * frames[:, AREA, None]
    where = np.ascontiguousarray((points - tree.origin) / tree.scale)
    result = np.zeros((len(points), n_columns, 4))
    cuts = np.arange(0, len(points) + _POINTS_PER_TILE, _POINTS_PER_TILE)
    to_unit = field.largest / tree.scale**2

    def task(tile: int) -> None:
        here = slice(cuts[tile], cuts[tile + 1])
        sums = np.zeros((len(where[here]), n_columns, 4))
        _at_points(where[here], cells, place, shape, coefficients, frames, charges, sums)
        result[here] = sums

    coefficients *= to_unit[None, :, None, None]
    run_tiles(task, len(cuts) - 1)
    return result[:, :, 0] * tree.scale, np.ascontiguousarray(result[:, :, 1:])
