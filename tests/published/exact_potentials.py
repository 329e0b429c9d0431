"""Exact potentials and fields round charged conductors, for points outside them.

Lengths in any unit, potentials in volts: fields come out in volts per that unit.
"""

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import elliprf

__all__ = ["ellipsoid_field", "two_spheres_field"]

FloatArray = NDArray[np.float64]


def ellipsoid_field(points: ArrayLike, half_axes: ArrayLike) -> tuple[FloatArray, FloatArray]:
    """Potential and field of an ellipsoid at 1 V; a half axis of zero makes an elliptic disc.

    ``V = R_F(a^2 + l, b^2 + l, c^2 + l) / R_F(a^2, b^2, c^2)`` with l of the confocal ellipsoid through the point:
    NIST DLMF 19.33(ii); Landau and Lifshitz, Electrodynamics of Continuous Media, section 4.
    """
    x, a2 = np.asarray(points, float), np.asarray(half_axes, float) ** 2
    found = np.empty(len(x))
    for k, point in enumerate(x):
        # (c - l)(...)...: the largest root of the cubic in l
        p = point**2
        cubic = -np.poly(-a2)
        for i in range(3):
            cubic = cubic + np.concatenate([[0.0], p[i] * np.poly(-np.delete(a2, i))])
        found[k] = max(root.real for root in np.roots(cubic))
    s = a2 + found[:, None]
    own = elliprf(*a2)
    slope = -0.5 / np.sqrt(s.prod(axis=1)) / own
    gradient = 2.0 * x / s / ((x / s) ** 2).sum(axis=1)[:, None]
    return elliprf(s[:, 0], s[:, 1], s[:, 2]) / own, -slope[:, None] * gradient


def two_spheres_field(
    points: ArrayLike, radii: tuple[float, float], distance: float, potentials: tuple[float, float]
) -> tuple[FloatArray, FloatArray]:
    """Potential and field of two spheres, the first at the origin and the other on the z axis, by image charges.

    Maxwell, A Treatise on Electricity and Magnetism (1873), article 172.
    """
    charges, places = [], []
    for first in (0, 1):
        charge, at, on = potentials[first] * radii[first], (0.0, distance)[first], first
        for _ in range(20000):
            charges.append(charge)
            places.append(at)
            other = 1 - on
            reach = (0.0, distance)[other] - at
            charge, at = -charge * radii[other] / abs(reach), (0.0, distance)[other] - radii[other] ** 2 / reach
            on = other
            if abs(charge) < 1e-17:
                break
    x = np.asarray(points, float)
    r = x[:, None, :] - np.array(places)[None, :, None] * np.array([0.0, 0.0, 1.0])
    length = np.linalg.norm(r, axis=2)
    q = np.array(charges)
    return (q / length).sum(axis=1), (q[None, :, None] * r / length[:, :, None] ** 3).sum(axis=1)
