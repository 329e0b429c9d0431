"""Errors that a coarse panel hides from its own estimates, and what they may amount to.

The estimates compare parts of a panel. They see little where the parts are still wider than a gap to another
conductor: the fringe at an edge forms within a gap's width.
"""

import math

import numpy as np
from numpy.typing import NDArray

from .extrapolation import SMOOTH_DECAY
from .frames import CENTROID, RADIUS, panel_frames
from .jit import parallel_kernel, prange
from .panels import Panels
from .polygon import polygon_distance

__all__ = ["nearest_other", "unseen_fringe"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

#: Capacitance that the fringe along an edge may hide, per eps and length of the edge. Measured on close discs.
FRINGE_GAIN = 0.12


@parallel_kernel
def nearest_other(points, owner, reach, frames, conductor, distance, nearest):
    """Distance from points to the panels of other conductors.

    Parameters
    ----------
    points : (m, 3) float, m
    owner : (m,) int
        Conductor of each point.
    reach : (m,) float, m
        Panels farther than this from a point do not count.
    frames : (n, FRAME_SIZE) float
    conductor : (n,) int
    distance : (m,) float, m
        Written; infinite if there is no other conductor within reach.
    nearest : (m,) int
        Written: the nearest other conductor, or -1.
    """
    for p in prange(len(points)):
        distance[p] = math.inf
        nearest[p] = -1
        for j in range(len(frames)):
            if conductor[j] == owner[p]:
                continue
            # most panels are told to be too far by the balls about them
            limit = min(reach[p], distance[p]) + frames[j, RADIUS]
            x, y = points[p, 0] - frames[j, CENTROID], points[p, 1] - frames[j, CENTROID + 1]
            z = points[p, 2] - frames[j, CENTROID + 2]
            if x * x + y * y + z * z <= limit * limit:
                d = polygon_distance(frames[j], points[p, 0], points[p, 1], points[p, 2])
                if d < distance[p] and d <= reach[p]:
                    distance[p] = d
                    nearest[p] = conductor[j]


def unseen_fringe(panels: Panels, gains: FloatArray, sides: FloatArray) -> FloatArray:
    """What a panel at an edge may hide that is wider than the gap to another conductor.

    Parameters
    ----------
    panels : Panels
    gains : (n_panels, 2, n_conductors) float
        Of the two-level estimate or of its companion, whichever is more.
    sides : (n_panels, 4) float
        Decay of splits toward each side; more than SMOOTH_DECAY where the side lies on a sharp edge or a rim.

    Returns
    -------
    (n_panels, 2, n_conductors) float
        Gains; zero where the panel is narrower than the gap or gains more than that already.
    """
    fringe = np.zeros_like(gains)
    if panels.n_conductors == 1:
        return fringe
    lengths = np.linalg.norm(np.roll(panels.corners, -1, axis=1) - panels.corners, axis=2)
    widths = panels.lengths
    for direction, pair in ((0, (1, 3)), (1, (0, 2))):
        for side in pair:
            rows = np.flatnonzero((sides[:, side] > SMOOTH_DECAY) & (panels.n_corners == 4))
            if len(rows) == 0:
                continue
            gap, other = _gaps(panels, rows, side, widths[rows, direction])
            unseen = widths[rows, direction] > gap
            rows, other = rows[unseen], other[unseen]
            size = np.sqrt(FRINGE_GAIN / (4.0 * np.pi) * lengths[rows, side])
            rows, other, size = (a[size > np.abs(gains[rows, direction]).max(axis=1)] for a in (rows, other, size))
            fringe[rows, direction, panels.conductor[rows]] = size
            fringe[rows, direction, other] = -size
    return fringe


def _gaps(panels: Panels, rows: IntArray, side: int, reach: FloatArray) -> tuple[FloatArray, IntArray]:
    """Distance from the middle of a side to the nearest other conductor within reach, and which it is."""
    middle = 0.5 * (panels.corners[rows, side] + panels.corners[rows, (side + 1) % 4])
    centre = panels.corners.reshape(-1, 3).mean(axis=0)
    distance, nearest = np.empty(len(rows)), np.empty(len(rows), dtype=np.int64)
    frames = panel_frames(panels.corners - centre, largest_rule=0)
    nearest_other(middle - centre, panels.conductor[rows], reach, frames, panels.conductor, distance, nearest)
    return distance, nearest
