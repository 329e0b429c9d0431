"""What the rounding of the coordinates leaves open.

A file rounds its coordinates, in steps that grow with the distance from the origin. All corners of a flat face may be
rounded the same way, which shifts the face. By Hadamard's variational formula (J. Hadamard, Mem. Acad. Sci. Paris 33
(1908) no. 4, from memory) shifting the surface outward by delta changes the capacitances by

    dC_ij = (1/eps) int sigma_i sigma_j delta dS.

With abs(delta) at most the rounding this is largest where gaps are narrow, as it should be. No share is taken off: the
bound without regard to sign is the uncertainty. A sheet is covered too, since there sigma is the sum of both sides and
its force per area the product of that sum and their difference.
"""

import numpy as np
from numpy.typing import NDArray

from .errors import InputError
from .panels import Panels

__all__ = ["checked_rounding", "rounding_uncertainty"]

FloatArray = NDArray[np.float64]


def checked_rounding(rounding: FloatArray, n_bodies: int) -> FloatArray:
    """Rounding of each body as a checked array, (n_bodies,) m.

    Raises
    ------
    InputError
        If it does not hold one finite length, not negative, for each body.
    """
    array = np.asarray(rounding, dtype=np.float64)
    if array.shape != (n_bodies,) or not np.isfinite(array).all() or (array < 0.0).any():
        raise InputError(f"rounding must hold one length for each of the {n_bodies} bodies, got {rounding!r}")
    return array


def rounding_uncertainty(rounding: FloatArray, panels: Panels, density: FloatArray, weights: FloatArray) -> FloatArray:
    """Uncertainty that the rounding of coordinates leaves, bare.

    Parameters
    ----------
    rounding : (n_bodies,) float, m
        Greatest error of a coordinate.
    panels : Panels
    density : (n_panels, n_conductors) float
        Bare densities, the solution of ``A density = areas``: sigma = 4 pi eps density.
    weights : (n_conductors, m) float
        Combinations of conductors of which the second index is wanted.

    Returns
    -------
    (n_conductors, m) float, m
        Multiply by 4 pi eps for farads.
    """
    moved = 4.0 * np.pi * rounding[panels.body] * panels.areas
    return np.asarray(np.einsum("p,pi,pj->ij", moved, np.abs(density), np.abs(density @ weights)))
