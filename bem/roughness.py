"""How far the steps of a constant density per panel, and the corners between facets, are felt.

A panel carries the mean of its density on a flat piece of the surface. The true density slopes and the true surface
bends; both average out from panel to panel, so that what they change falls off like the harmonics of a grating,
exponentially with the distance in sizes of the panel. Close by it is of the order of the step from panel to panel.
"""

import math

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from .frames import AREA, CENTROID, CORNER, LENGTH, NORMAL, OUTWARD, RADIUS
from .jit import parallel_kernel, prange
from .panels import Panels

__all__ = ["OTHER_SIDE", "SMOOTH_COSINE", "near_steps", "roughness"]

FloatArray = NDArray[np.float64]

#: Panels with which each one is compared.
_NEIGHBOURS = 8
#: Radii of a panel beyond which nothing of its steps is felt: at least exp(-10), since no panel is wider than that.
_LAST = 8.0
#: Neighbours whose normals have a smaller cosine meet at a sharp edge.
SMOOTH_COSINE = 0.64
#: Panels near each other whose normals have a smaller cosine lie on both sides of a thin part.
OTHER_SIDE = -0.3


def roughness(panels: Panels, density: FloatArray) -> FloatArray:
    """Typical step of the surface field from each panel to its neighbours.

    Parameters
    ----------
    panels : Panels
    density : (n,) float, C/m2

    Returns
    -------
    (n,) float, C/m2
        Root mean square of the change of density times normal, over a distance of one panel.
    """
    field = density[:, None] * panels.normals
    radius = np.linalg.norm(panels.corners - panels.centroids[:, None, :], axis=2).max(axis=1)
    step = np.zeros(len(panels))
    for body in np.unique(panels.body):
        own = np.flatnonzero(panels.body == body)
        if len(own) < 2:
            step[own] = np.abs(density[own])
            continue
        count = min(_NEIGHBOURS, len(own) - 1)
        found = cKDTree(panels.centroids[own]).query(panels.centroids[own], k=count + 1)
        distance, near = np.asarray(found[0]), np.asarray(found[1])
        other = own[near[:, 1:]]
        change = np.linalg.norm(field[other] - field[own][:, None, :], axis=2)
        # across a sharp edge nothing is bent: only the sizes are compared
        cosine = np.einsum("nki,ni->nk", panels.normals[other], panels.normals[own])
        change = np.where(cosine < SMOOTH_COSINE, np.abs(density[other] - density[own][:, None]), change)
        share = np.minimum(1.0, 2.0 * radius[own, None] / np.maximum(distance[:, 1:], 1e-300))
        # the far side of a thin part is near, and no neighbour
        same = cosine > OTHER_SIDE
        squares = np.where(same, change * share, 0.0) ** 2
        step[own] = np.sqrt(squares.sum(axis=1) / np.maximum(same.sum(axis=1), 1))
    return step


@parallel_kernel
def near_steps(points, frames, step, potential, field):
    """Add up what the steps of all panels do at points, as if they were independent of each other.

    Parameters
    ----------
    points : (m, 3) float
    frames : (n, FRAME_SIZE) float
        Rows of :func:`daraf.bem.frames.panel_frames`.
    step : (n,) float
    potential, field : (m,) float
        Written, bare: root of the sum of squares of ``2 pi step w f`` and of ``2 pi step f``, with the width w of a
        panel (its area over its longest side) and ``f = exp(-1.5 d / w)`` at the distance d from it.
    """
    for p in prange(len(points)):
        volts, gradient = 0.0, 0.0
        for j in range(len(frames)):
            x = points[p, 0] - frames[j, CENTROID]
            y = points[p, 1] - frames[j, CENTROID + 1]
            z = points[p, 2] - frames[j, CENTROID + 2]
            if x * x + y * y + z * z > (_LAST * frames[j, RADIUS]) ** 2:
                continue
            width = frames[j, AREA] / max(
                frames[j, LENGTH], frames[j, LENGTH + 1], frames[j, LENGTH + 2], frames[j, LENGTH + 3]
            )
            outside = 0.0
            for k in range(4):
                c, o = CORNER + 3 * k, OUTWARD + 3 * k
                across = (
                    (points[p, 0] - frames[j, c]) * frames[j, o]
                    + (points[p, 1] - frames[j, c + 1]) * frames[j, o + 1]
                    + (points[p, 2] - frames[j, c + 2]) * frames[j, o + 2]
                )
                outside = max(outside, across)
            height = x * frames[j, NORMAL] + y * frames[j, NORMAL + 1] + z * frames[j, NORMAL + 2]
            part = step[j] * math.exp(-1.5 * math.sqrt(height * height + outside * outside) / width)
            gradient += part * part
            part *= width
            volts += part * part
        potential[p] = 2.0 * math.pi * math.sqrt(volts)
        field[p] = 2.0 * math.pi * math.sqrt(gradient)
