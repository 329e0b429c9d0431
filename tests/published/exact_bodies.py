"""Exact capacitance of single conductors in free space, as lengths c = C / (4 pi epsilon_0)."""

from math import acos, atanh, pi, sin, sqrt

import mpmath
from scipy.special import digamma, ellipk, elliprf

__all__ = [
    "bowl",
    "disc",
    "ellipsoid",
    "elliptic_disc",
    "hemisphere",
    "oblate_spheroid",
    "orthogonal_spheres",
    "prolate_spheroid",
    "sphere",
    "torus",
    "touching_spheres",
    "two_cap_body",
]


def sphere(a: float) -> float:
    """Sphere of radius a."""
    return a


def prolate_spheroid(a: float, b: float) -> float:
    """Prolate spheroid with half axes a > b = b: sqrt(a^2 - b^2) / atanh(sqrt(1 - b^2/a^2)).

    Source: Maxwell, Treatise on Electricity and Magnetism (1873) art. 151; Smythe, Static and Dynamic
    Electricity (1968) chapter 5; from memory, checked against the form with Carlson's integral.
    """
    return sqrt(a * a - b * b) / atanh(sqrt(1.0 - (b / a) ** 2))


def oblate_spheroid(a: float, b: float) -> float:
    """Oblate spheroid with half axes a = a > b: sqrt(a^2 - b^2) / acos(b/a); source as for prolate."""
    return sqrt(a * a - b * b) / acos(b / a)


def ellipsoid(a: float, b: float, c: float) -> float:
    """Ellipsoid with half axes a, b, c: 1 / R_F(a^2, b^2, c^2).

    Source: NIST Digital Library of Mathematical Functions, section 19.33(ii); Landau and Lifshitz,
    Electrodynamics of Continuous Media, section 4.
    """
    return 1.0 / float(elliprf(a * a, b * b, c * c))


def disc(a: float) -> float:
    """Thin disc of radius a: 2 a / pi (Kelvin 1847)."""
    return 2.0 * a / pi


def elliptic_disc(a: float, b: float) -> float:
    """Thin ellipse with half axes a >= b: a / K(e), e^2 = 1 - b^2/a^2 (a limit of the ellipsoid)."""
    return a / float(ellipk(1.0 - (b / a) ** 2))


def bowl(a: float, half_angle: float) -> float:
    """Thin spherical bowl of radius a, half angle in rad seen from the centre: a (alpha + sin alpha) / pi.

    Source: Kelvin, Reprint of Papers on Electrostatics and Magnetism (1872) article XV.
    """
    return a * (half_angle + sin(half_angle)) / pi


def hemisphere(a: float) -> float:
    """Solid half ball of radius a: 2 a (1 - 1/sqrt 3); a case of `two_cap_body`."""
    return 2.0 * a * (1.0 - 1.0 / sqrt(3.0))


def orthogonal_spheres(a: float, b: float) -> float:
    """Union of two spheres that cut at a right angle: a + b - a b / sqrt(a^2 + b^2).

    Source: Kelvin; Maxwell, Treatise (1873) art. 165-166.
    """
    return a + b - a * b / sqrt(a * a + b * b)


def touching_spheres(a: float, b: float) -> float:
    """Two spheres that touch: -(a b/(a+b)) (2 gamma + psi(a/(a+b)) + psi(b/(a+b))).

    Source: Maxwell, Treatise (1873) art. 175; Smythe (1968).
    """
    total = a + b
    bracket = 2.0 * float(mpmath.euler) + float(digamma(a / total)) + float(digamma(b / total))
    return -a * b / total * bracket


def torus(ring_radius: float, wire_radius: float) -> float:
    """Solid torus: (2 s/pi) (Q_-1/2/P_-1/2 + 2 sum Q_n-1/2/P_n-1/2) at R/r, with s = sqrt(R^2 - r^2).

    P and Q are Legendre functions of an argument above one (toroidal functions).
    Source: Hicks, Phil. Trans. R. Soc. 172 (1881) 609; Snow, NBS Circular 544 (1954).
    """
    x = mpmath.mpf(ring_radius) / wire_radius
    total, n = mpmath.mpf(0), 0
    while True:
        degree = n - mpmath.mpf(1) / 2
        # Type 3 means x > 1: real values, but for rounding in the imaginary part.
        ratio = mpmath.re(mpmath.legenq(degree, 0, x, type=3) / mpmath.legenp(degree, 0, x, type=3))
        total += ratio if n == 0 else 2 * ratio
        if abs(ratio) < 1e-18 * abs(total):
            break
        n += 1
    return float(2 * wire_radius * mpmath.sqrt(x * x - 1) / mpmath.pi * total)


def two_cap_body(rim_radius: float, first_half_angle: float, second_half_angle: float) -> float:
    """Solid or sheet bounded by two spherical caps over one rim circle.

    A cap has the half angle alpha seen from the centre of its sphere, positive if it bulges away from the
    other cap, negative if it bulges the same way; 0 is the flat disc. Equal and opposite angles are one
    thin bowl. Inversion about a point of the rim turns the outside into a wedge of opening beta = 2 pi -
    alpha_1 - alpha_2; the point at infinity becomes a source at the angle pi - alpha_1 and at the distance
    1/(2 rho) from the wedge's edge, so that -c is the regular part of the wedge's Green's function at its
    own source.

    Source: Macdonald, Proc. London Math. Soc. 26 (1895) 156 (Green's function of the wedge); Snow, J. Res.
    NBS 43 (1949) 377 (the body); the form used here was derived for these tests.

    Parameters
    ----------
    rim_radius : float
    first_half_angle, second_half_angle : float, rad
        Their sum must lie in [0, 2 pi).

    Returns
    -------
    float
    """
    beta = 2 * mpmath.pi - first_half_angle - second_half_angle
    angle = 2 * mpmath.pi * (mpmath.pi - first_half_angle) / beta

    def integrand(zeta: mpmath.mpf) -> mpmath.mpf:
        x = mpmath.pi * zeta / beta
        image = mpmath.sinh(x) / (mpmath.cosh(x) - mpmath.cos(angle))
        free = mpmath.coth(zeta / 2) / mpmath.pi - mpmath.coth(x / 2) / beta
        return (free + image / beta) / mpmath.sinh(zeta / 2)

    # The bracket is a difference of two 1/zeta poles. Gauss's points keep away from 0, so that 30 digits
    # cover the cancellation (the points of the default rule do not). The tail beyond 90 is below exp(-45).
    with mpmath.workdps(30):
        pieces = [0, 1, 4, 12, 30, 90]
        return float(rim_radius * mpmath.quad(integrand, pieces, method="gauss-legendre", maxdegree=6))
