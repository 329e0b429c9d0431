"""Derivative of the discrete energy when a body's surface is offset with the charges of its panels held.

At its solution the energy is stationary in the charges, so that only the distances between them count:
``dC_ij = - d/dt q_i^T P(t) q_j`` with P the mean potential of panel on panel, taken as a central difference of two
evaluations. Hadamard's surface integral of sigma_i sigma_j is the same in the limit, but panels hold the mean of a
density that grows without bound at edges: 15 % were missing on a cube.
"""

import numpy as np
from numpy.typing import NDArray

from .field_lines import nearest_on_panels
from .frames import panel_frames
from .jit import parallel_kernel, prange
from .near import self_integral
from .pairs import pair_integral
from .panels import Panels, polygon_geometry

__all__ = ["lower_products", "offset_forms", "offset_step"]

FloatArray = NDArray[np.float64]

#: Step of the difference per mean thickness (3 volumes over the area: the radius of a sphere) of the body and per
#: gap to the next one: the square of it is the relative error of the difference, 1e-6 over it that of the integrals.
_STEP_OF_THICKNESS, _STEP_OF_GAP = 3e-3, 1e-2
#: Panels of a body whose distance to the other bodies is looked at.
_NEAREST = 40
#: Pairs of panels per call of the kernel.
_PAIRS = 200_000


@parallel_kernel
def lower_products(frames, moved, charges, first, result, diagonal):
    """Products of the strict lower triangle of the Galerkin matrix, of pairs with a moved panel alone.

    Parameters
    ----------
    frames : (n, FRAME_SIZE) float
    moved : (n,) bool
    charges : (n, k) float
        Densities.
    first : int
        Row that the first row of `result` stands for.
    result : (m, k) float
        Written: ``sum_j A_ij x_j`` over j < i.
    diagonal : (m,) float
        Written: ``A_ii``, zero where i does not move.
    """
    n_columns = charges.shape[1]
    for row in prange(len(result)):
        i = first + row
        result[row] = 0.0
        diagonal[row] = self_integral(frames[i]) if moved[i] else 0.0
        for j in range(i):
            if moved[i] or moved[j]:
                value = pair_integral(frames[i], frames[j])
                for k in range(n_columns):
                    result[row, k] += value * charges[j, k]


def offset_step(panels: Panels, body: int) -> float:
    """Step of the central difference for a body, m."""
    own = np.flatnonzero(panels.body == body)
    corners = panels.corners[own] - panels.centroids[own].mean(axis=0)
    volume = np.einsum("ij,ij->", polygon_geometry(corners)[1] * panels.areas[own, None], panels.normals[own]) / 3.0
    step = _STEP_OF_THICKNESS * 3.0 * abs(float(volume)) / float(panels.areas[own].sum())
    others = np.flatnonzero(panels.body != body)
    if len(others):
        rest = Panels(
            *(getattr(panels, name)[others] for name in ("corners", "n_corners", "body", "conductor", "region"))
        )
        low, high = rest.corners.reshape(-1, 3).min(axis=0), rest.corners.reshape(-1, 3).max(axis=0)
        outside = np.maximum(np.maximum(low - panels.centroids[own], panels.centroids[own] - high), 0.0)
        nearest = own[np.argsort(np.linalg.norm(outside, axis=1), kind="stable")[:_NEAREST]]
        points = np.concatenate([panels.centroids[nearest], panels.corners[nearest].reshape(-1, 3)])
        step = min(step, _STEP_OF_GAP * min(nearest_on_panels(rest, point)[2] for point in points))
    return step


def offset_forms(panels: Panels, motion: FloatArray, left: FloatArray, right: FloatArray, body: int) -> FloatArray:
    """Derivative of ``- left^T A right`` per outward offset of a body, panel charges held.

    Parameters
    ----------
    panels : Panels
    motion : (n_panels, 4, 3) float
        Of :meth:`daraf.bem.growth.Growth.of`.
    left : (n, n_panels) float, C/m2 per V
    right : (m, n_panels) float, C/m2 per V
    body : int

    Returns
    -------
    (n, m) float, C2/m2 per V2
        Over 4 pi eps it is farads per metre.
    """
    moved = panels.body == body
    step = offset_step(panels, body)
    forms = []
    for sign in (1.0, -1.0):
        corners = panels.corners + sign * step * np.where(moved[:, None, None], motion, 0.0)
        areas = polygon_geometry(corners)[0]
        stretch = panels.areas / np.where(areas > 0.0, areas, np.inf)
        forms.append(_form(corners, moved, left * stretch, right * stretch))
    return np.asarray((forms[1] - forms[0]) / (2.0 * step))


def _form(corners: FloatArray, moved: NDArray[np.bool_], left: FloatArray, right: FloatArray) -> FloatArray:
    """``left^T A right`` over pairs with a moved panel."""
    frames = panel_frames(corners - corners.reshape(-1, 3).mean(axis=0))
    columns = np.ascontiguousarray(np.concatenate([left, right]).T)
    n, n_panels = len(left), len(corners)
    total = np.zeros((n, len(right)))
    first = 0
    while first < n_panels:
        rows = min(n_panels - first, max(8, _PAIRS // (first + 1)))
        product, diagonal = np.empty((rows, columns.shape[1])), np.empty(rows)
        lower_products(frames, moved, columns, first, product, diagonal)
        here = slice(first, first + rows)
        total += left[:, here] @ product[:, n:] + product[:, :n].T @ right[:, here].T
        total += (left[:, here] * diagonal) @ right[:, here].T
        first += rows
    return total
