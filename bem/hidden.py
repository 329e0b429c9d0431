"""Errors that a coarse panel hides from its own two-level estimate, and what they may amount to.

The estimate compares a panel with its halves. It sees nothing where the halves are equal by symmetry, and little
where both are still wider than a gap to another conductor: the fringe at an edge forms within a gap's width.
"""

import math

import numpy as np
from numpy.typing import NDArray

from .extrapolation import SMOOTH_DECAY
from .frames import panel_frames
from .jit import parallel_kernel, prange
from .panels import Panels
from .polygon import polygon_distance

__all__ = ["feared_gains", "nearest_other"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

#: Share of its self energy that a panel may hide by symmetry. Charge that crowds toward both edges of a strip lowers
#: the energy against uniform charge, in two dimensions, by 3/2 - ln 4 = 0.11 of about ln(2 l / w) + 1/2 for the
#: length l and width w of the strip.
SYMMETRIC_GAIN = 0.05
#: Share of its self energy that a panel at an edge gains at least by a split across: its halves may be equal by chance,
#: where the charge crowds at the edge and under another conductor's as well.
EDGE_GAIN = 0.005
#: Capacitance that the fringe along an edge may hide, per eps and length of the edge. Measured on close discs.
FRINGE_GAIN = 0.12


@parallel_kernel
def nearest_other(points, owner, frames, conductor, distance, nearest):
    """Distance from points to the panels of other conductors.

    Parameters
    ----------
    points : (m, 3) float, m
    owner : (m,) int
        Conductor of each point.
    frames : (n, FRAME_SIZE) float
    conductor : (n,) int
    distance : (m,) float, m
        Written; infinite if there is no other conductor.
    nearest : (m,) int
        Written: the nearest other conductor, or -1.
    """
    for p in prange(len(points)):
        distance[p] = math.inf
        nearest[p] = -1
        for j in range(len(frames)):
            if conductor[j] != owner[p]:
                d = polygon_distance(frames[j], points[p, 0], points[p, 1], points[p, 2])
                if d < distance[p]:
                    distance[p] = d
                    nearest[p] = conductor[j]


def feared_gains(
    panels: Panels,
    gains: FloatArray,
    density: FloatArray,
    self_terms: FloatArray,
    symmetric: BoolArray,
    sides: FloatArray,
) -> FloatArray:
    """Two-level gains, or what a panel may hide where that is more.

    Parameters
    ----------
    panels : Panels
    gains : (n_panels, 2, n_conductors) float
    density : (n_panels, n_conductors) float
    self_terms : (n_panels,) float, m3
    symmetric : (n_panels, 2) bool
        Directions in which halves may be equal by symmetry.
    sides : (n_panels, 4) float
        Decay of splits toward each side; more than SMOOTH_DECAY where the side lies on a sharp edge or a rim.

    Returns
    -------
    (n_panels, 2, n_conductors) float
    """
    at_edge = np.stack([sides[:, [1, 3]].max(axis=1), sides[:, [0, 2]].max(axis=1)], axis=1) > SMOOTH_DECAY
    share = np.where(symmetric, SYMMETRIC_GAIN, np.where(at_edge, EDGE_GAIN, 0.0))
    hidden = np.sqrt(share * self_terms[:, None])[:, :, None] * density[:, None, :]
    feared = np.where(np.abs(hidden) > np.abs(gains), hidden, gains)
    if panels.n_conductors == 1:
        return feared
    lengths = np.linalg.norm(np.roll(panels.corners, -1, axis=1) - panels.corners, axis=2)
    widths = np.stack([0.5 * (lengths[:, 0] + lengths[:, 2]), 0.5 * (lengths[:, 1] + lengths[:, 3])], axis=1)
    for direction, pair in ((0, (1, 3)), (1, (0, 2))):
        for side in pair:
            rows = np.flatnonzero((sides[:, side] > SMOOTH_DECAY) & (panels.n_corners == 4))
            gap, other = _gaps(panels, rows, side)
            unseen = widths[rows, direction] > gap
            fringe = np.zeros((int(np.count_nonzero(unseen)), gains.shape[2]))
            size = np.sqrt(FRINGE_GAIN / (4.0 * np.pi) * lengths[rows[unseen], side])
            here = np.arange(len(fringe))
            fringe[here, panels.conductor[rows[unseen]]] = size
            fringe[here, other[unseen]] = -size
            current = feared[rows[unseen], direction]
            stronger = np.abs(fringe).max(axis=1) > np.abs(current).max(axis=1)
            feared[rows[unseen], direction] = np.where(stronger[:, None], fringe, current)
    return feared


def _gaps(panels: Panels, rows: IntArray, side: int) -> tuple[FloatArray, IntArray]:
    """Distance from the middle of a side to the nearest other conductor, and which it is."""
    middle = 0.5 * (panels.corners[rows, side] + panels.corners[rows, (side + 1) % 4])
    centre = panels.corners.reshape(-1, 3).mean(axis=0)
    distance, nearest = np.empty(len(rows)), np.empty(len(rows), dtype=np.int64)
    frames = panel_frames(panels.corners - centre, largest_rule=0)
    nearest_other(middle - centre, panels.conductor[rows], frames, panels.conductor, distance, nearest)
    return distance, nearest
