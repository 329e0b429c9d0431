"""The panels to start from, and what is known of the charge on them beforehand."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from .bisection import SPLIT_BOTH, SPLIT_U, SPLIT_V, split_panels, split_sides
from .creases import Creases
from .extrapolation import SMOOTH_DECAY
from .panels import Panels
from .surface import Surface

__all__ = ["Start", "side_decays", "starting_panels"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

#: Starting panels are no longer than this share of their body's diagonal.
START_LENGTH = 0.35
#: Panels longer than this share may be as symmetric as the charge on them, which hides their error.
SYMMETRIC_LENGTH = 0.15


@dataclass(frozen=True, eq=False)
class Start:
    """Panels of the first pass.

    Attributes
    ----------
    panels : Panels
    symmetric : (n_panels, 2) bool
        Directions in which charge may crowd alike toward both ends, so that the halves of the panel stay
        equal and their difference hides the error: between two sharp sides, and long panels.
    sides : (n_panels, 4) float
        Decay of the gain of splits toward each side.
    """

    panels: Panels
    symmetric: BoolArray
    sides: FloatArray


def side_decays(surface: Surface, creases: Creases, panels: Panels) -> FloatArray:
    """Decay of the gain of splits toward each side of the panels.

    Across an edge where the metal fills the angle alpha, charge goes as r^(pi/(2 pi - alpha) - 1) (Meixner,
    IEEE Trans. Antennas Propag. 20 (1972) 442) and the energy error of a panel of width h at the edge as
    h^(2 pi/(2 pi - alpha)): each halving leaves the share 2^(-2 pi/(2 pi - alpha)).

    Parameters
    ----------
    surface : Surface
    creases : Creases
    panels : Panels
        As they cover the flat regions, not split yet.

    Returns
    -------
    (n_panels, 4) float
        Of side k, from corner k to corner k + 1; SMOOTH_DECAY for sides inside a region or on an edge meant
        smooth.
    """
    edges = creases.edges
    turn = np.where(creases.rim, np.pi, creases.angles)
    of_edge = np.where(creases.smooth, SMOOTH_DECAY, 2.0 ** (-2.0 * np.pi / (np.pi + turn)))
    found = cKDTree(surface.vertices).query(panels.corners.reshape(-1, 3))
    distance, vertex = (np.asarray(column).reshape(-1, 4) for column in found)
    size = np.linalg.norm(np.roll(panels.corners, -1, axis=1) - panels.corners, axis=2)
    at_vertex = (distance < 1e-4 * size.max(axis=1)[:, None]) & (size > 0)
    on_outline = at_vertex & np.roll(at_vertex, -1, axis=1)
    ends = np.stack([vertex, np.roll(vertex, -1, axis=1)], axis=2)
    base = np.int64(len(surface.vertices))
    key = edges.vertices.min(axis=1) * base + edges.vertices.max(axis=1)
    order = np.argsort(key)
    wanted = ends.min(axis=2) * base + ends.max(axis=2)
    place = order[np.minimum(np.searchsorted(key, wanted, sorter=order), len(key) - 1)]
    known = on_outline & (key[place] == wanted)
    return np.where(known, of_edge[place], SMOOTH_DECAY)


def starting_panels(panels: Panels, side_decay: FloatArray, most: int) -> Start:
    """Split long panels, and find those that are as symmetric as the charge on them may be.

    Parameters
    ----------
    panels : Panels
    side_decay : (n_panels, 4) float
        From :func:`side_decays`.
    most : int
        No more panels than this.

    Returns
    -------
    Start
    """
    quads = panels.n_corners == 4
    crowded = side_decay > SMOOTH_DECAY
    between = np.stack([crowded[:, 1] & crowded[:, 3], crowded[:, 0] & crowded[:, 2]], axis=1)
    symmetric = (between | (_lengths(panels) > SYMMETRIC_LENGTH)) & quads[:, None]
    sides = side_decay
    while True:
        long = _lengths(panels) > START_LENGTH
        split = SPLIT_U * long[:, 0] + SPLIT_V * long[:, 1]
        triangles = panels.n_corners == 3
        split[triangles] = np.where(long[triangles].any(axis=1), SPLIT_BOTH, 0)
        if not split.any() or len(panels) + 3 * np.count_nonzero(split) > most:
            return Start(panels, symmetric, sides)
        sides = split_sides(panels, split, sides, SMOOTH_DECAY)
        panels, parent = split_panels(panels, split)
        symmetric = (symmetric & ~long)[parent]


def _lengths(panels: Panels) -> FloatArray:
    """Lengths of the panels along u and v, (n_panels, 2), per diagonal of their body's box."""
    diagonal = np.array(
        [
            np.linalg.norm(np.ptp(panels.corners[panels.body == body].reshape(-1, 3), axis=0))
            for body in range(int(panels.body.max()) + 1)
        ]
    )
    sides = np.linalg.norm(np.roll(panels.corners, -1, axis=1) - panels.corners, axis=2)
    lengths = np.stack([np.maximum(sides[:, 0], sides[:, 2]), np.maximum(sides[:, 1], sides[:, 3])], axis=1)
    return np.asarray(lengths / diagonal[panels.body][:, None])
