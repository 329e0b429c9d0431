"""Exact capacitance of several spheres in a row, and of confocal ellipsoids, as lengths c = C / (4 pi epsilon_0)."""

from collections.abc import Sequence

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import comb, elliprf

__all__ = ["confocal_ellipsoids", "nested_shells", "sphere_chain"]

FloatArray = NDArray[np.float64]


def sphere_chain(radii: Sequence[float], positions: Sequence[float], degree: int = 60) -> FloatArray:
    """Maxwell matrix of separate spheres with their centres on one line.

    The potential about each centre is a series of P_l(cos theta)/r^(l+1), whose terms are expanded again about
    the other centres; terms fall off as (radius/distance)^l.
    Source: Hobson, The Theory of Spherical and Ellipsoidal Harmonics (1931) art. 89, from memory; checked against
    Maxwell's sums for two spheres.

    Parameters
    ----------
    radii, positions : sequence of n float
        Positions along the line.
    degree : int
        Highest term.

    Returns
    -------
    (n, n) float
    """
    n, terms = len(radii), degree + 1
    order = np.arange(terms)
    binomial = comb(order[:, None] + order, order[:, None])
    system = np.eye(n * terms)
    for i in range(n):
        for j in range(n):
            if i == j:
                continue
            distance = positions[i] - positions[j]
            # The sign is that of the regular term from below, of the irregular one from above.
            sign = (-1.0) ** (order[:, None] if distance > 0 else order)
            far, near = radii[j] / abs(distance), radii[i] / abs(distance)
            block = sign * binomial * near ** order[:, None] * far ** (order + 1.0)
            system[i * terms : (i + 1) * terms, j * terms : (j + 1) * terms] = block
    potentials = np.zeros((n * terms, n))
    potentials[np.arange(n) * terms, np.arange(n)] = 1.0
    # Unknowns are coefficients over radius^(l+1): the charge is the one of degree 0 times the radius.
    charges = np.asarray(radii)[:, None] * np.linalg.solve(system, potentials)[np.arange(n) * terms]
    return np.asarray(0.5 * (charges + charges.T))


def nested_shells(radii: Sequence[float]) -> FloatArray:
    """Maxwell matrix of concentric thin spherical shells, radii rising: each sees its neighbours only.

    Returns
    -------
    (n, n) float
    """
    n = len(radii)
    matrix = np.zeros((n, n))
    matrix[-1, -1] = radii[-1]
    for i in range(n - 1):
        between = radii[i] * radii[i + 1] / (radii[i + 1] - radii[i])
        matrix[i : i + 2, i : i + 2] += between * np.array([[1.0, -1.0], [-1.0, 1.0]])
    return matrix


def confocal_ellipsoids(half_axes: ArrayLike, growth: float) -> FloatArray:
    """Maxwell matrix of an ellipsoid in a thin confocal one, whose squared half axes are larger by `growth`.

    The potential depends on the confocal coordinate alone; each R_F is an ellipsoid's 1/c.
    Source: NIST Digital Library of Mathematical Functions, section 19.33(ii); Landau and Lifshitz,
    Electrodynamics of Continuous Media, section 4.

    Returns
    -------
    (2, 2) float
    """
    squares = np.asarray(half_axes, dtype=np.float64) ** 2
    inner, outer = float(elliprf(*squares)), float(elliprf(*(squares + growth)))
    between = 1.0 / (inner - outer)
    return np.array([[between, -between], [-between, between + 1.0 / outer]])
