"""Field at an edge that is rounded, from what the sharp edge tells.

Near a sharp edge of a conductor with the metal angle alpha the field is ``E = K r^(-p)``, ``p = 1 - 1 / lambda`` with
``lambda = 2 - alpha / pi``. Rounded by an arc of the radius rho that both faces touch, the field at the middle of the
arc is ``g K rho^(-p)`` as long as rho is small against the part.

The factor g is exact: the half plane is mapped onto the outside of the rounded wedge by f = u1 / u2, whose Schwarzian
derivative ``(1 - lambda^2) / (2 (z^2 - 1))`` makes straight lines of |z| > 1 and an arc of -1 < z < 1 that meet without
a corner (Z. Nehari, Conformal Mapping, 1952, section V.7, on circular polygons). The u solve
``(1 - z^2) u'' + nu (nu + 1) u = 0``, nu = (lambda - 1) / 2: u2 = (1 - z^2) Q_nu'(z), of the Legendre function of
the second kind (NIST DLMF 14.2.1, 14.5.1-4, 14.23.4).
"""

import math

import numpy as np
from scipy.special import gamma, rgamma

from .errors import InputError

__all__ = ["arc_factor", "arc_profile", "parabolic_factor"]


def _at_middle(nu: float) -> tuple[complex, complex]:
    """Legendre function Q_nu(x + i0) and its derivative at x = 0."""
    root = math.sqrt(math.pi)
    p = root * rgamma(nu / 2 + 1) * rgamma((1 - nu) / 2)
    dp = -2.0 * root * rgamma((nu + 1) / 2) * rgamma(-nu / 2)
    q = -0.5 * root * math.sin(0.5 * nu * math.pi) * gamma((nu + 1) / 2) * rgamma(nu / 2 + 1)
    dq = root * math.cos(0.5 * nu * math.pi) * gamma(nu / 2 + 1) * rgamma((nu + 1) / 2)
    return complex(q, -0.5 * math.pi * p), complex(dq, -0.5 * math.pi * dp)


def arc_factor(metal_angle: float) -> float:
    """Factor g of ``E = g K rho^(-p)`` at the middle of an arc of radius rho.

    Parameters
    ----------
    metal_angle : float, rad
        From 0 (a plate of the thickness 2 rho with a round edge) to pi.

    Returns
    -------
    float

    Raises
    ------
    InputError
        If the edge is re-entrant.

    Examples
    --------
    A flat face has the field it has:

    >>> round(arc_factor(np.pi), 12)
    1.0
    """
    if not 0.0 <= metal_angle <= math.pi:
        raise InputError(f"edge: a rounded edge must be convex; a metal angle of {metal_angle} rad is not")
    order = 2.0 - metal_angle / math.pi
    nu = 0.5 * (order - 1.0)
    if nu < 1e-9:
        return 1.0
    value, slope = _at_middle(nu)
    # u2 and its derivative in the middle; f' = 1 / u2^2 for unit Wronskian, so |E| = |u2|^2 for unit potential slope
    u, du = slope, -nu * (nu + 1.0) * value
    field = abs(u) ** 2
    radius = 1.0 / (abs(2.0 * (du / u).imag) * field)
    # u2 ~ B z^((1 - lambda)/2): Q_nu ~ c z^(-nu - 1), DLMF 14.8.15
    c = math.sqrt(math.pi) * gamma(nu + 1.0) * rgamma(nu + 1.5) / 2.0 ** (nu + 1.0)
    far = c * (nu + 1.0)
    stretch = 1.0 / (far * far * order)
    intensity = stretch ** (-1.0 / order) / order
    return float(field * radius ** (1.0 - 1.0 / order) / intensity)


def parabolic_factor() -> float:
    """Factor g of a parabolic half plane with the tip radius rho, ``E = K sqrt(2 / rho)``: the square root map."""
    return float(np.sqrt(2.0))


def arc_profile(metal_angle: float, radius: float, distance: float) -> float:
    """Field straight out from the middle of the arc over that at it.

    Parameters
    ----------
    metal_angle : float, rad
    radius, distance : float, m

    Returns
    -------
    float
        Joins the law of the sharp edge, ``((d + s) / s)^(-p)`` with the length s = radius g^(1/p) at which that law
        has the peak: exact at the arc and far away, within some per cent between.
    """
    exponent = 1.0 - 1.0 / (2.0 - metal_angle / math.pi)
    if exponent <= 0.0:
        return 1.0
    start = radius * arc_factor(metal_angle) ** (-1.0 / exponent)
    return float((1.0 + distance / start) ** -exponent)
