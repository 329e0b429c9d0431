"""Exact capacitance of pairs of conductors, as lengths c = C / (4 pi epsilon_0)."""

from math import acosh, asinh, exp, log, pi, sinh, sqrt

import numpy as np
from numpy.typing import NDArray
from scipy.special import ive, kve

__all__ = [
    "coax_can",
    "coaxial_per_length",
    "concentric_spheres",
    "eccentric_spheres",
    "pair_capacitance",
    "parallel_discs",
    "shell_matrix",
    "sphere_over_plane",
    "two_spheres",
]

FloatArray = NDArray[np.float64]

#: Terms of the sums whose exponents pass this value are below the rounding of the sum.
EXPONENT_LIMIT = 45.0


def concentric_spheres(a: float, b: float) -> float:
    """Capacitance between a sphere of radius a and a shell of inner radius b: a b / (b - a)."""
    return a * b / (b - a)


def shell_matrix(a: float, b: float, outer: float) -> FloatArray:
    """Maxwell matrix of a sphere of radius a in a closed shell of radii b and `outer`, in free space.

    The inner sphere sees the shell only, so its row sums to zero; the shell adds its outside, a sphere.

    Returns
    -------
    (2, 2) float
    """
    inner = concentric_spheres(a, b)
    return np.array([[inner, -inner], [-inner, inner + outer]])


def eccentric_spheres(a: float, b: float, offset: float) -> float:
    """Capacitance between a sphere of radius a and a shell of radius b, their centres `offset` > 0 apart.

    2 s sum 1/(exp((2n+1) t_a) - exp((2n+1) t_b)) in bispherical coordinates, s half the distance of the
    poles and t = asinh(s/radius).
    Source: Smythe (1968); Morse and Feshbach, Methods of Theoretical Physics (1953); derived again for
    these tests.
    """
    s = sqrt((b * b - a * a - offset * offset) ** 2 - 4.0 * (a * offset) ** 2) / (2.0 * offset)
    near, far = asinh(s / a), asinh(s / b)
    odd = range(1, int(EXPONENT_LIMIT / near) + 2, 2)
    return 2.0 * s * sum(1.0 / (exp(k * near) - exp(k * far)) for k in odd)


def two_spheres(a: float, b: float, distance: float) -> FloatArray:
    """Maxwell matrix of two separate spheres, centres `distance` > a + b apart.

    cosh U = (d^2 - a^2 - b^2)/(2ab); c11 = a b sinh U sum 1/(b sinh nU + a sinh (n-1)U),
    c12 = -(a b/d) sinh U sum 1/sinh nU, n = 1, 2, ...
    Source: Maxwell, Treatise (1873) art. 173; Smythe (1968); Lekner, Proc. R. Soc. A 468 (2012) 2829.

    Returns
    -------
    (2, 2) float
    """
    u = acosh((distance**2 - a * a - b * b) / (2.0 * a * b))
    n = np.arange(1, int(EXPONENT_LIMIT / u) + 2)
    here, before, scale = np.sinh(n * u), np.sinh((n - 1) * u), a * b * sinh(u)
    first = scale * np.sum(1.0 / (b * here + a * before))
    second = scale * np.sum(1.0 / (a * here + b * before))
    mutual = -scale / distance * np.sum(1.0 / here)
    return np.array([[first, mutual], [mutual, second]])


def pair_capacitance(matrix: FloatArray) -> float:
    """Capacitance between two conductors with charges Q and -Q: (c11 c22 - c12^2)/(c11 + 2 c12 + c22)."""
    (c11, c12), (_, c22) = matrix
    return float((c11 * c22 - c12 * c12) / (c11 + 2.0 * c12 + c22))


def sphere_over_plane(a: float, height: float) -> float:
    """Sphere of radius a, centre `height` > a above a grounded plane: a sinh U sum 1/sinh nU, cosh U = h/a.

    Source: c11 - c12 of a sphere and its image; Smythe (1968).
    """
    u = acosh(height / a)
    return a * sinh(u) * sum(1.0 / sinh(n * u) for n in range(1, int(EXPONENT_LIMIT / u) + 2))


def parallel_discs(a: float, distance: float, n_points: int = 0) -> FloatArray:
    """Maxwell matrix of two equal thin coaxial discs of radius a.

    Love's equation f(x) -+ (k/pi) Int_-1^1 f(t)/(k^2 + (x-t)^2) dt = 1, k = distance/a, with the upper sign
    for opposite potentials; c11 -+ c12 = (a/pi) Int f. Gauss-Legendre points, with enough of them for 12
    digits.
    Source: Love, Quart. J. Mech. Appl. Math. 2 (1949) 428; Carlson and Illman, Am. J. Phys. 62 (1994) 1099.

    Returns
    -------
    (2, 2) float
    """
    k = distance / a
    # The kernel has poles at the distance k from the real line: points fall off as exp(-2 k n).
    points, weights = np.polynomial.legendre.leggauss(n_points or int(40 + 20 / k))
    kernel = k / pi / (k * k + (points[:, None] - points) ** 2) * weights
    odd, even = (
        a / pi * (weights @ np.linalg.solve(np.eye(len(points)) + sign * kernel, np.ones(len(points))))
        for sign in (-1.0, 1.0)
    )
    own, mutual = 0.5 * (odd + even), 0.5 * (even - odd)
    return np.array([[own, mutual], [mutual, own]])


def coaxial_per_length(a: float, b: float) -> float:
    """Infinite coaxial cylinders, per length: 1/(2 ln(b/a)); a pure number."""
    return 1.0 / (2.0 * log(b / a))


def coax_can(a: float, b: float, length: float) -> float:
    """Mutual capacitance between the cylinder r = a and the cylinder r = b of a closed ring-shaped can.

    The flat ends are grounded and meet the cylinders at hair gaps. Sum over odd n of 4 l/(n^2 pi^2) divided
    by K0(ka) I0(kb) - I0(ka) K0(kb), k = n pi/l.
    Source: separation of variables, Smythe (1968) chapter 5.
    """
    total = 0.0
    for n in range(1, int(EXPONENT_LIMIT * length / (pi * (b - a))) + 2, 2):
        k = n * pi / length
        grow = exp(k * (b - a))  # taken out of the scaled functions, so that none overflows
        divisor = kve(0, k * a) * ive(0, k * b) * grow - ive(0, k * a) * kve(0, k * b) / grow
        total += 4.0 * length / (n * n * pi * pi) / float(divisor)
    return total
