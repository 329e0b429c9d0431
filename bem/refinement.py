"""Which panels to split, and the panels to start from."""

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from .bisection import SPLIT_BOTH, SPLIT_U, SPLIT_V, split_panels
from .creases import Creases
from .panels import Panels
from .surface import Surface

__all__ = ["accuracy_targets", "choose_splits", "gain_worth", "sharp_sides", "starting_panels"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

#: Starting panels are no longer than this share of their body's diagonal.
START_LENGTH = 0.35
#: Panels longer than this share are split once even so: a start as symmetric as the answer hides its error.
SYMMETRIC_LENGTH = 0.15
#: Share of the weighted estimate that the panels split in one pass must hold (Doerfler's marking).
MARKED_SHARE = 0.6
#: A quadrilateral is split in its weaker direction too if that holds this share of the stronger one.
SECOND_DIRECTION = 0.3
#: Couplings below this share of sqrt(C_ii C_jj) must meet the accuracy of this share only.
COUPLING_FLOOR = 1e-3


def sharp_sides(surface: Surface, creases: Creases, panels: Panels) -> BoolArray:
    """Sides of panels that span from corner to corner of the drawing along an edge not meant smooth.

    Parameters
    ----------
    surface : Surface
    creases : Creases
    panels : Panels
        As they cover the flat regions, not split yet.

    Returns
    -------
    (n_panels, 4) bool
        Side k runs from corner k to corner k + 1.
    """
    edges = creases.edges
    distance, vertex = cKDTree(surface.vertices).query(panels.corners.reshape(-1, 3))
    size = np.linalg.norm(np.roll(panels.corners, -1, axis=1) - panels.corners, axis=2)
    at_vertex = (distance.reshape(-1, 4) < 1e-4 * size.max(axis=1)[:, None]) & (size > 0)
    start = vertex.reshape(-1, 4)
    end = np.roll(start, -1, axis=1)
    base = np.int64(len(surface.vertices))
    key = np.minimum(start, end) * base + np.maximum(start, end)
    smooth = edges.vertices[creases.smooth]
    smooth_key = smooth.min(axis=1) * base + smooth.max(axis=1)
    return np.asarray(at_vertex & np.roll(at_vertex, -1, axis=1) & ~np.isin(key, smooth_key))


def starting_panels(panels: Panels, sharp: BoolArray, most: int) -> Panels:
    """Split panels that are long, or as symmetric as the charge on them, as far as `most` panels allow.

    Parameters
    ----------
    panels : Panels
    sharp : (n_panels, 4) bool
        From :func:`sharp_sides`. A quadrilateral between two such sides is split, since charge that crowds
        alike toward both would leave its halves equal and hide the error.
    most : int
    """
    diagonal = np.array(
        [
            np.linalg.norm(np.ptp(panels.corners[panels.body == body].reshape(-1, 3), axis=0))
            for body in range(int(panels.body.max()) + 1)
        ]
    )
    quads = panels.n_corners == 4
    across_u, across_v = sharp[:, 1] & sharp[:, 3] & quads, sharp[:, 0] & sharp[:, 2] & quads
    share = SYMMETRIC_LENGTH
    while True:
        corners = panels.corners
        sides = np.linalg.norm(np.roll(corners, -1, axis=1) - corners, axis=2)
        longest = share * diagonal[panels.body]
        split = np.where((np.maximum(sides[:, 0], sides[:, 2]) > longest) | across_u, SPLIT_U, 0)
        split += np.where((np.maximum(sides[:, 1], sides[:, 3]) > longest) | across_v, SPLIT_V, 0)
        split[panels.n_corners == 3] = np.where(sides.max(axis=1) > longest, SPLIT_BOTH, 0)[panels.n_corners == 3]
        if not split.any() or len(panels) + 3 * np.count_nonzero(split) > most:
            return panels
        panels, _ = split_panels(panels, split)
        across_u = across_v = np.zeros(len(panels), bool)
        share = START_LENGTH


def accuracy_targets(capacitance: FloatArray, accuracy: float) -> FloatArray:
    """Largest uncertainty allowed of every entry: relative, with a floor for weak couplings.

    Parameters
    ----------
    capacitance : (n, n) float
    accuracy : float
        Relative expanded uncertainty asked.
    """
    diagonal = np.sqrt(np.outer(np.diag(capacitance), np.diag(capacitance)))
    return accuracy * np.maximum(np.abs(capacitance), COUPLING_FLOOR * diagonal)


def gain_worth(gains: FloatArray, weights: FloatArray) -> FloatArray:
    """Worth of each gain, (n_panels, 2): its products over all pairs of conductors, weighted.

    Parameters
    ----------
    gains : (n_panels, 2, n_conductors) float
        From :func:`daraf.bem.indicator.two_level_indicator`.
    weights : (n_conductors, n_conductors) float
        How much each entry of the capacitance matrix matters, not negative.
    """
    size = np.abs(gains)
    return np.asarray(np.einsum("pdi,pdi->pd", size @ weights, size))


def choose_splits(worth: FloatArray) -> IntArray:
    """Mark the panels that hold most of the worth.

    Parameters
    ----------
    worth : (n_panels, 2) float

    Returns
    -------
    split : (n_panels,) int
        Marks for :func:`daraf.bem.bisection.split_panels`.
    """
    total = worth.sum(axis=1)
    order = np.argsort(-total, kind="stable")
    needed = int(np.searchsorted(np.cumsum(total[order]), MARKED_SHARE * total.sum())) + 1
    chosen = order[:needed]
    split = np.zeros(len(worth), dtype=np.int64)
    least = SECOND_DIRECTION * worth[chosen].max(axis=1)
    split[chosen] = SPLIT_U * (worth[chosen, 0] >= least) + SPLIT_V * (worth[chosen, 1] >= least)
    return split
