"""Electric strength of gas gaps: corona onset and streamer inception from a known field. Screening, no design rule.

Everything holds for a clean, dry, smooth geometry in air and scales with the relative density of the air.
Sources: F. W. Peek, Dielectric Phenomena in High-Voltage Engineering, 3rd ed., McGraw-Hill 1929 (constants of the
coaxial and spherical forms from memory); K. Petcharaks, thesis 11192, ETH Zuerich 1995 (effective ionisation
coefficient, from memory); A. Schwaiger, Elektrische Festigkeitslehre, 1925 (utilisation factor).
"""

import math

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.optimize import brentq

from .errors import InputError

__all__ = [
    "CRITICAL_FIELD",
    "STREAMER_CONSTANT",
    "effective_ionisation",
    "inception_factor",
    "ionisation_integral",
    "peek_field",
    "relative_air_density",
    "uniform_gap_voltage",
    "utilisation",
]

FloatArray = NDArray[np.float64]

#: Natural logarithm of the avalanche size at which it becomes a streamer, for the coefficient below (Petcharaks 1995).
STREAMER_CONSTANT = 9.15
#: Field over which air at 20 C and 1.01325 bar ionises more than it attaches, V/m: the root of the coefficient below.
CRITICAL_FIELD = (2.165 + math.sqrt(0.2873 / 1.6053)) * 1.01325e6
#: Density 1: 20 C and 101.3 kPa, as in IEC 60052.
_NORMAL_TEMPERATURE, _NORMAL_PRESSURE = 293.15, 101.325e3
#: Peek's density is 1 at 25 C and 76 cm of mercury.
_PEEK_TEMPERATURE = 298.15
#: Surface gradient (V/m) and sqrt(m) of Peek's law.
_PEEK = {
    "parallel wires": (30.0e5, 0.301e-1),
    "coaxial wire": (31.0e5, 0.308e-1),
    "sphere": (27.2e5, 0.54e-1),
}
#: Field over pressure where the coefficient changes form and where its data end, kV/(mm bar).
_LINEAR_FROM, _LINEAR_TO = 7.943, 14.0


def relative_air_density(pressure: float, temperature: float) -> float:
    """Density of air over that at 20 C and 101.325 kPa.

    Parameters
    ----------
    pressure : float, Pa
    temperature : float, K

    Returns
    -------
    float

    Raises
    ------
    InputError
        If one is not positive and finite.
    """
    for name, value in (("pressure", pressure), ("temperature", temperature)):
        if not (math.isfinite(value) and value > 0.0):
            raise InputError(f"strength: the {name} of the air must be positive, not {value}")
    return pressure / _NORMAL_PRESSURE * _NORMAL_TEMPERATURE / temperature


def peek_field(radius: float, density: float = 1.0, *, shape: str = "parallel wires") -> float:
    """Surface field of visual corona by Peek's law, peak value.

    Parameters
    ----------
    radius : float, m
        Of the wire or sphere.
    density : float
        Relative, as of :func:`relative_air_density`.
    shape : {"parallel wires", "coaxial wire", "sphere"}

    Returns
    -------
    float, V/m

    Raises
    ------
    InputError
        If an argument is out of range.
    """
    if shape not in _PEEK:
        raise InputError(f"strength: Peek's law knows {', '.join(_PEEK)}, not {shape!r}")
    if not (math.isfinite(radius) and radius > 0.0 and math.isfinite(density) and density > 0.0):
        raise InputError(f"strength: radius and density must be positive, not {radius} and {density}")
    gradient, length = _PEEK[shape]
    # Peek's density is 1 at 25 C, where the air is thinner by this much
    peeks = density * _PEEK_TEMPERATURE / _NORMAL_TEMPERATURE
    return gradient * peeks * (1.0 + length / math.sqrt(peeks * radius))


def effective_ionisation(field: ArrayLike, density: float = 1.0) -> FloatArray:
    """Ionisation less attachment coefficient of air.

    Parameters
    ----------
    field : (...) float, V/m
    density : float
        Relative, as of :func:`relative_air_density`.

    Returns
    -------
    (...) float, 1/m
        Zero below the critical field; the last measured slope is continued beyond 14 kV/(mm bar).
    """
    # per bar at 20 C; V/m are 1e-6 kV/mm
    bar = 1.01325 * density
    ratio = np.asarray(field, dtype=np.float64) * 1e-6 / bar
    curved = 1.6053 * (ratio - 2.165) ** 2 - 0.2873
    linear = 16.7766 * ratio - 80.006
    value = np.where(ratio < _LINEAR_FROM, curved, linear)
    return np.asarray(np.where(ratio < CRITICAL_FIELD / 1.01325e6, 0.0, value) * bar * 1e3)


def ionisation_integral(distance: ArrayLike, field: ArrayLike, density: float = 1.0) -> float:
    """Integral of the effective ionisation coefficient along a field line.

    Parameters
    ----------
    distance : (n,) float, m
        Along the line, ascending.
    field : (n,) float, V/m
        Magnitude. Between the points its logarithm is taken as linear in distance.
    density : float

    Returns
    -------
    float
        Natural logarithm of the size of an avalanche. Every stretch over the critical field counts, at both ends
        of a gap; what attaches in between is not subtracted, which is the safe side.

    Raises
    ------
    InputError
        If shapes do not fit or the line does not ascend.
    """
    s, e = _line(distance, field)
    step = np.diff(s)
    high = np.log(np.maximum(e / (CRITICAL_FIELD * density), 1e-300))
    first, last = high[:-1], high[1:]
    # the part of each piece over the critical field, as fractions of the piece
    rise = np.where(first == last, 1.0, last - first)
    crossing = np.clip(-first / rise, 0.0, 1.0)
    start = np.where(first > 0.0, 0.0, np.where(last > 0.0, crossing, 1.0))
    end = np.where(last > 0.0, 1.0, np.where(first > 0.0, crossing, start))
    node, weight = np.polynomial.legendre.leggauss(6)
    at = start[:, None] + 0.5 * (node + 1.0) * (end - start)[:, None]
    along = CRITICAL_FIELD * density * np.exp(first[:, None] + at * (last - first)[:, None])
    return float(0.5 * np.sum(step * (end - start) * (effective_ionisation(along, density) @ weight)))


def inception_factor(
    distance: ArrayLike, field: ArrayLike, density: float = 1.0, *, constant: float = STREAMER_CONSTANT
) -> float:
    """How many times all potentials may be raised before a streamer starts along a field line.

    Parameters
    ----------
    distance, field : (n,) float, m and V/m
        As in :func:`ionisation_integral`; the field at the potentials as they are.
    density : float
    constant : float
        Ionisation integral of the onset.

    Returns
    -------
    float
        Below 1 if streamers start already. Infinite for a field of zero.

    Raises
    ------
    InputError
        If shapes do not fit, the line does not ascend, or is too short for an avalanche at any sensible field.
    """
    s, e = _line(distance, field)
    peak = float(e.max())
    if peak == 0.0:
        return math.inf
    low = CRITICAL_FIELD * density / peak

    def excess(logarithm: float) -> float:
        return ionisation_integral(s, math.exp(logarithm) * e, density) - constant

    first, last = math.log(low), math.log(low) + 1.0
    while excess(last) < 0.0:
        last += 1.0
        if last > first + 12.0:
            raise InputError("strength: the field line is too short for an avalanche; follow it across the gap")
    return math.exp(float(brentq(excess, first, last, xtol=1e-12, rtol=1e-12)))


def uniform_gap_voltage(gap: float, density: float = 1.0) -> float:
    """Breakdown voltage of a uniform field in air, peak value.

    ``24.22 d + 6.08 sqrt(d)`` kV with d the density times the gap in cm (Kuffel, Zaengl and Kuffel, High Voltage
    Engineering, 2nd ed., Newnes 2000, from memory).

    Parameters
    ----------
    gap : float, m
    density : float

    Returns
    -------
    float, V

    Raises
    ------
    InputError
        If an argument is not positive.
    """
    if not (gap > 0.0 and density > 0.0):
        raise InputError(f"strength: gap and density must be positive, not {gap} and {density}")
    d = 100.0 * gap * density
    return 1e3 * (24.22 * d + 6.08 * math.sqrt(d))


def utilisation(voltage: float, gap: float, peak: float) -> float:
    """Schwaiger's factor: mean over highest field, 1 for a uniform field.

    Parameters
    ----------
    voltage : float, V
        Between the two conductors.
    gap : float, m
        Shortest distance between them.
    peak : float, V/m
        Highest field.

    Returns
    -------
    float

    Raises
    ------
    InputError
        If gap or peak are not positive.
    """
    if not (gap > 0.0 and peak > 0.0):
        raise InputError(f"strength: gap and peak field must be positive, not {gap} and {peak}")
    return abs(voltage) / (gap * peak)


def _line(distance: ArrayLike, field: ArrayLike) -> tuple[FloatArray, FloatArray]:
    s, e = np.asarray(distance, dtype=np.float64), np.asarray(field, dtype=np.float64)
    if s.ndim != 1 or s.shape != e.shape or len(s) < 2:
        raise InputError(f"strength: a field line needs as many distances as fields, got {s.shape} and {e.shape}")
    if not (np.isfinite(s).all() and np.isfinite(e).all() and (np.diff(s) > 0).all() and (e >= 0).all()):
        raise InputError("strength: along a field line the distance must ascend and the field be finite, not negative")
    return s, e
