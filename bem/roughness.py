"""How far the steps of a constant density per panel, and the corners between facets, are felt.

A panel carries the mean of its density on a flat piece of the surface. The true density slopes and the true surface
bends; both average out from panel to panel, so that what they change falls off like the harmonics of a grating,
exponentially with the distance in sizes of the panel. Close by it is of the order of the step from panel to panel.
"""

import math

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from .frames import CENTROID, RADIUS
from .jit import parallel_kernel, prange
from .panels import Panels

__all__ = ["near_steps", "roughness"]

FloatArray = NDArray[np.float64]

#: Panels with which each one is compared.
_NEIGHBOURS = 6
#: Radii of a panel beyond which nothing of its steps is felt: exp(2 - 16) is 1e-6.
_LAST = 8.0


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
        distance, near = cKDTree(panels.centroids[own]).query(panels.centroids[own], k=count + 1)
        change = np.linalg.norm(field[own[near[:, 1:]]] - field[own][:, None, :], axis=2)
        share = np.minimum(1.0, 2.0 * radius[own, None] / np.maximum(distance[:, 1:], 1e-300))
        step[own] = np.sqrt(np.mean((change * share) ** 2, axis=1))
    return step


@parallel_kernel
def near_steps(points, frames, step, potential, field):
    """Add up what the steps of all panels do at points, as if they were independent of each other.

    Parameters
    ----------
    points : (m, 3) float
    frames : (n, FRAME_SIZE) float
        Only centroid and radius are used.
    step : (n,) float
    potential, field : (m,) float
        Written, bare: root of the sum of squares of ``2 pi step R f`` and of ``2 pi step f``, where f is 1 up to the
        distance of a radius R from the centroid and ``exp(2 - 2 r / R)`` beyond.
    """
    for p in prange(len(points)):
        volts, gradient = 0.0, 0.0
        for j in range(len(frames)):
            x = points[p, 0] - frames[j, CENTROID]
            y = points[p, 1] - frames[j, CENTROID + 1]
            z = points[p, 2] - frames[j, CENTROID + 2]
            radius = frames[j, RADIUS]
            r2 = x * x + y * y + z * z
            if r2 > _LAST * _LAST * radius * radius:
                continue
            part = step[j] * math.exp(min(0.0, 2.0 - 2.0 * math.sqrt(r2) / radius))
            gradient += part * part
            part *= radius
            volts += part * part
        potential[p] = 2.0 * math.pi * math.sqrt(volts)
        field[p] = 2.0 * math.pi * math.sqrt(gradient)
