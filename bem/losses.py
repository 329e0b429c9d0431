"""Losses: complex permittivities from loss tangents and conductivities, conductances from complex capacitances.

With the time factor exp(j omega t) a medium has the relative permittivity e (1 - j tan delta) - j kappa / (omega
epsilon_0) and conductors the admittance matrix j omega C = G + j omega Re(C).
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .constants import EPSILON_0
from .errors import InputError
from .media_solve import MediaSolution

__all__ = ["Admittance", "admittance", "complex_permittivity", "conductance_by_duality"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Admittance:
    """Capacitance and conductance matrices at stated frequencies.

    Attributes
    ----------
    frequency : (S,) float, Hz
    capacitance, capacitance_uncertainty : (S, n, n) float, F
    conductance, conductance_uncertainty : (S, n, n) float, S
        Expanded, k = 2.
    loss_tangent : (S, n, n) float
        ``G / (omega C)`` of each coupling; nan where the capacitance is zero.
    """

    frequency: FloatArray
    capacitance: FloatArray
    capacitance_uncertainty: FloatArray
    conductance: FloatArray
    conductance_uncertainty: FloatArray
    loss_tangent: FloatArray


def complex_permittivity(
    relative: ArrayLike, loss_tangent: ArrayLike, conductivity: ArrayLike, frequency: ArrayLike
) -> NDArray[np.complex128]:
    """Complex relative permittivities of media at stated frequencies.

    Parameters
    ----------
    relative : (m,) float
    loss_tangent : (m,) float
    conductivity : (m,) float, S/m
    frequency : (S,) float, Hz
        Above zero; conduction alone is the duality of :func:`conductance_by_duality`.

    Returns
    -------
    (m, S) complex
        For :class:`daraf.bem.media.Media`.

    Raises
    ------
    InputError
        If a value is out of range.
    """
    e, tan, kappa, f = (
        np.atleast_1d(np.asarray(v, dtype=np.float64)) for v in (relative, loss_tangent, conductivity, frequency)
    )
    for name, value, least in (("loss tangent", tan, 0.0), ("conductivity", kappa, 0.0), ("permittivity", e, 1.0)):
        if not (np.isfinite(value) & (value >= least)).all():
            raise InputError(f"{name} must be finite and at least {least:g}")
    if not (np.isfinite(f) & (f > 0.0)).all():
        raise InputError("frequency must be finite and above zero")
    omega = 2.0 * np.pi * f
    return np.asarray((e * (1.0 - 1j * tan))[:, None] - 1j * kappa[:, None] / (omega * EPSILON_0)[None, :])


def admittance(solution: MediaSolution, frequency: ArrayLike) -> Admittance:
    """Capacitance and conductance matrices of a solution.

    Parameters
    ----------
    solution : MediaSolution
        One state for each frequency.
    frequency : (S,) float, Hz

    Returns
    -------
    Admittance
    """
    f = np.atleast_1d(np.asarray(frequency, dtype=np.float64))
    if f.shape != (len(solution.maxwell),):
        raise InputError(f"one frequency is needed for each of {len(solution.maxwell)} states, got {f.shape}")
    omega = 2.0 * np.pi * f[:, None, None]
    value, spread = solution.maxwell, solution.maxwell_uncertainty
    capacitance, conductance = np.real(value), -omega * np.imag(value)
    with np.errstate(divide="ignore", invalid="ignore"):
        tangent = np.where(capacitance == 0.0, np.nan, conductance / (omega * capacitance))
    return Admittance(f, capacitance, np.real(spread), conductance, omega * np.imag(spread), tangent)


def conductance_by_duality(
    maxwell: ArrayLike, uncertainty: ArrayLike, conductivity: float, relative_permittivity: float = 1.0
) -> tuple[FloatArray, FloatArray]:
    """Conductance matrix of electrodes in a conducting medium: G = (kappa / eps) C.

    Parameters
    ----------
    maxwell, uncertainty : (n, n) float, F
        Of the same electrodes in a medium of `relative_permittivity`.
    conductivity : float, S/m
    relative_permittivity : float
        Of the medium that `maxwell` was solved in.

    Returns
    -------
    conductance, uncertainty : (n, n) float, S
        Its inverse is the resistance matrix.
    """
    if not 0.0 < conductivity < np.inf:
        raise InputError(f"conductivity must be finite and above zero, got {conductivity:g} S/m")
    factor = conductivity / (EPSILON_0 * relative_permittivity)
    return factor * np.asarray(maxwell, dtype=np.float64), factor * np.asarray(uncertainty, dtype=np.float64)
