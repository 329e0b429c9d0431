"""Solid harmonics in a real, orthonormalised basis, and the matrices that move expansions.

With ``rho_lm`` the regular solid harmonics normalised after Racah, ``1/|x - y| = sum_lm rho_lm(y) sigma_lm(x)`` for
``|y| < |x|``, where ``sigma_lm(x) = rho_lm(x) / |x|^(2l+1)``. Coefficient (l, m) stands at index ``l^2 + l + m``;
m > 0 goes with the cosine, m < 0 with the sine. A cell's expansions are in units of its edge, so that one set of
matrices serves all levels. The matrices come from the addition theorems of the complex harmonics
(Hobson, The theory of spherical and ellipsoidal harmonics, 1931, chapter 4; in this normalisation
van Gelderen, DEOS Progress Letters 98.1 (1998) 57) and a change to the real basis.
"""

import math

import numpy as np
from numpy.typing import NDArray

__all__ = ["n_coefficients", "shift_matrix", "solid_harmonics", "translation_matrices"]

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


def n_coefficients(degree: int) -> int:
    """Number of harmonics up to a degree."""
    return (degree + 1) ** 2


def _complex_regular(x: FloatArray, degree: int) -> ComplexArray:
    """R_l^m = r^l P_l^m e^(i m phi) / (l + m)!, (n, n_coefficients)."""
    plane, z, r2 = x[:, 0] + 1j * x[:, 1], x[:, 2], (x**2).sum(axis=1)
    regular = np.zeros((len(x), n_coefficients(degree)), dtype=np.complex128)
    diagonal = np.ones(len(x), dtype=np.complex128)
    for m in range(degree + 1):
        if m > 0:
            diagonal = -plane / (2 * m) * diagonal
        low, high = np.zeros_like(diagonal), diagonal
        for k in range(m, degree + 1):
            at = k * k + k
            regular[:, at + m] = high
            regular[:, at - m] = (-1) ** m * high.conj()
            if m == 0:
                regular[:, at] = high
            up = ((2 * k + 1) * z * high - r2 * low) / ((k + 1) ** 2 - m * m)
            low, high = high, up
    return regular


def _complex_irregular(x: FloatArray, degree: int) -> ComplexArray:
    """S_l^m = (l - m)! P_l^m e^(i m phi) / r^(l+1), (n, n_coefficients)."""
    r2 = (x**2).sum(axis=1)
    irregular: ComplexArray = _complex_regular(x / r2[:, None], degree) / np.sqrt(r2)[:, None]
    for k in range(degree + 1):
        for m in range(-k, k + 1):
            irregular[:, k * k + k + m] *= math.factorial(k - m) * math.factorial(k + m)
    return irregular


def _degrees(degree: int) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Degree and order at each index."""
    of = np.concatenate([np.full(2 * k + 1, k) for k in range(degree + 1)])
    order = np.concatenate([np.arange(-k, k + 1) for k in range(degree + 1)])
    return of, order


def _to_conjugate(degree: int) -> ComplexArray:
    """Matrix from the real basis to the complex conjugates of R."""
    change = np.zeros((n_coefficients(degree),) * 2, dtype=np.complex128)
    for k in range(degree + 1):
        at = k * k + k
        change[at, at] = 1.0 / math.factorial(k)
        for m in range(1, k + 1):
            norm = 1.0 / math.sqrt(2.0 * math.factorial(k - m) * math.factorial(k + m))
            change[at + m, at + m], change[at + m, at - m] = norm, -1j * norm
            change[at - m, at + m], change[at - m, at - m] = (-1) ** m * norm, (-1) ** m * 1j * norm
    return change


def solid_harmonics(x: FloatArray, degree: int) -> FloatArray:
    """Regular harmonics rho_lm at points.

    Parameters
    ----------
    x : (n, 3) float
    degree : int

    Returns
    -------
    (n, n_coefficients) float
    """
    inverse = np.linalg.inv(_to_conjugate(degree))
    return np.ascontiguousarray((_complex_regular(x, degree).conj() @ inverse.T).real)


def shift_matrix(shift: FloatArray, degree: int) -> FloatArray:
    """Matrix X with ``rho(x + shift) = X rho(x)``: moves moments; its transpose moves local expansions.

    Parameters
    ----------
    shift : (3,) float
    degree : int

    Returns
    -------
    (n_coefficients, n_coefficients) float
        Exact; nothing above the degree of the argument enters.
    """
    k, m = _degrees(degree)
    regular = _complex_regular(np.asarray(shift, dtype=np.float64)[None, :], degree)[0].conj()
    dk, dm = k[:, None] - k[None, :], m[:, None] - m[None, :]
    inside = (dk >= 0) & (np.abs(dm) <= dk)
    shifts = np.where(inside, regular[np.where(inside, dk * dk + dk + dm, 0)], 0.0)
    change = _to_conjugate(degree)
    return np.ascontiguousarray(np.linalg.solve(change, shifts @ change).real)


def translation_matrices(offsets: FloatArray, degree: int) -> FloatArray:
    """Matrices T with ``1/|offset + u - v| = rho(u) . T rho(v)``.

    Parameters
    ----------
    offsets : (n, 3) float
        From the source's centre to the target's.
    degree : int

    Returns
    -------
    (n, n_coefficients, n_coefficients) float
        [target, source].
    """
    k, m = _degrees(degree)
    irregular = _complex_irregular(offsets, 2 * degree)
    total = k[:, None] + k[None, :]
    index = total * total + total + m[:, None] + m[None, :]
    change = _to_conjugate(degree)
    # a column of change holds but its own order and the opposite one
    mirror = k * k + k - m
    own, other = np.diag(change), np.where(m == 0, 0.0, change[mirror, np.arange(len(k))])
    sign = ((-1.0) ** k)[:, None]
    result = np.empty((len(offsets), len(k), len(k)))
    for n in range(len(offsets)):
        A = sign * irregular[n][index]
        A = A * own + A[:, mirror] * other
        result[n] = (A * own[:, None] + A[mirror] * other[:, None]).real
    return result
