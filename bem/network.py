"""Conductors as a network: floating conductors, mutual capacitances, charges, potentials, energy.

Everything here follows from the Maxwell capacitance matrix, Q = C V. The uncertainties are first-order
worst cases, the sum of abs(derivative) times uncertainty over the independent entries: the errors of the
entries of one solve are correlated, so that they must not be added in quadrature.
"""

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .errors import InputError, NumericalError

__all__ = [
    "Excitation",
    "MutualCapacitance",
    "eliminate_floating",
    "excite",
    "mutual_capacitance",
    "worst_case",
]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class Excitation:
    """State of the network for given potentials and charges.

    Attributes
    ----------
    potential, potential_uncertainty : (n,) float, V
        The uncertainty is 0 where the potential was given.
    charge, charge_uncertainty : (n,) float, C
        The uncertainty is 0 where the charge was given.
    energy, energy_uncertainty : float, J
        Half the sum of charge times potential.
    """

    potential: FloatArray
    potential_uncertainty: FloatArray
    charge: FloatArray
    charge_uncertainty: FloatArray
    energy: float
    energy_uncertainty: float


@dataclass(frozen=True, eq=False)
class MutualCapacitance:
    """Two-terminal capacitances.

    Attributes
    ----------
    value, uncertainty : (n, n) float, F
        Between two conductors off the diagonal, to infinity on the diagonal.
    """

    value: FloatArray
    uncertainty: FloatArray


def mutual_capacitance(
    maxwell: ArrayLike,
    uncertainty: ArrayLike,
    *,
    to_infinity: ArrayLike | None = None,
    to_infinity_uncertainty: ArrayLike | None = None,
) -> MutualCapacitance:
    """Two-terminal capacitances of a Maxwell matrix.

    Parameters
    ----------
    maxwell, uncertainty : (n, n) float, F
    to_infinity, to_infinity_uncertainty : (n,) float, F, optional
        Row sums known better than from adding the entries. Without them the entries are added, and their
        uncertainties too.

    Returns
    -------
    MutualCapacitance

    Raises
    ------
    InputError
        If shapes do not fit or values are not finite.
    """
    C, limits = _checked(maxwell, uncertainty)
    value, spread = -C, limits.copy()
    sums = C.sum(axis=1) if to_infinity is None else np.asarray(to_infinity, dtype=np.float64)
    sums_spread = (
        limits.sum(axis=1) if to_infinity_uncertainty is None else np.asarray(to_infinity_uncertainty, dtype=np.float64)
    )
    if sums.shape != (len(C),) or sums_spread.shape != (len(C),):
        raise InputError("network: to_infinity must hold one value per conductor")
    np.fill_diagonal(value, sums)
    np.fill_diagonal(spread, sums_spread)
    return MutualCapacitance(value, spread)


def eliminate_floating(
    maxwell: ArrayLike, uncertainty: ArrayLike, floating: ArrayLike
) -> tuple[FloatArray, FloatArray]:
    """Maxwell matrix of the other conductors while the floating ones keep zero charge.

    The Schur complement C_aa - C_af inv(C_ff) C_fa.

    Parameters
    ----------
    maxwell, uncertainty : (n, n) float, F
    floating : (n,) bool

    Returns
    -------
    reduced, reduced_uncertainty : (m, m) float, F
        For the m conductors that do not float, in their order.

    Raises
    ------
    InputError
        If shapes do not fit or values are not finite.
    NumericalError
        If the floating block is not positive definite.
    """
    C, limits = _checked(maxwell, uncertainty)
    free = _flags(floating, len(C))
    kept = np.flatnonzero(~free)
    # One column per kept conductor: potentials of all with that one at 1 V and the floating ones uncharged.
    states = np.eye(len(C))[:, kept]
    states[free] = -_floating_inverse(C, free)[np.ix_(free, free)] @ C[np.ix_(free, ~free)]
    reduced = states.T @ C @ states
    spread = [[worst_case(one, other, limits) for other in states.T] for one in states.T]
    return 0.5 * (reduced + reduced.T), np.array(spread).reshape(len(kept), len(kept))


def excite(
    maxwell: ArrayLike,
    uncertainty: ArrayLike,
    held: ArrayLike,
    values: ArrayLike,
    *,
    to_infinity_uncertainty: ArrayLike | None = None,
) -> Excitation:
    """Potentials, charges and energy of conductors at given potentials or with given charges.

    Parameters
    ----------
    maxwell, uncertainty : (n, n) float, F
    held : (n,) bool
        True where the potential is given, False where the charge is given (a floating conductor).
    values : (n,) float, V or C
        Potential where held, else charge.
    to_infinity_uncertainty : (n,) float, F, optional
        Uncertainty of the row sums. Conductors at nearly the same potential exchange no charge, which
        this tells; each uncertainty is the smaller of the two worst cases.

    Returns
    -------
    Excitation

    Raises
    ------
    InputError
        If shapes do not fit or values are not finite.
    NumericalError
        If the block of the floating conductors is not positive definite.
    """
    C, limits = _checked(maxwell, uncertainty)
    is_held = _flags(held, len(C))
    given = np.asarray(values, dtype=np.float64)
    if given.shape != (len(C),) or not np.isfinite(given).all():
        raise InputError(f"network: values must hold one finite number per conductor, got {given}")
    row_sums = None if to_infinity_uncertainty is None else np.asarray(to_infinity_uncertainty, dtype=np.float64)

    P = _floating_inverse(C, ~is_held)
    V = np.where(is_held, given, 0.0)
    V = V + P @ (np.where(is_held, 0.0, given) - np.where(is_held, 0.0, C @ V))
    Q = np.where(is_held, C @ V, given)

    def spread(left: FloatArray) -> float:
        return worst_case(left, V, limits, row_sums)

    # With dC a small symmetric change: dV = -P dC V, dQ = (1 - C P) dC V, dW = (V/2 - P Q) . dC V.
    response = np.eye(len(C)) - C @ P
    return Excitation(
        potential=V,
        potential_uncertainty=np.array([0.0 if h else spread(-P[i]) for i, h in enumerate(is_held)]),
        charge=Q,
        charge_uncertainty=np.array([spread(response[i]) if h else 0.0 for i, h in enumerate(is_held)]),
        energy=0.5 * float(Q @ V),
        energy_uncertainty=spread(0.5 * V - P @ np.where(is_held, 0.0, given)),
    )


def _checked(maxwell: ArrayLike, uncertainty: ArrayLike) -> tuple[FloatArray, FloatArray]:
    """Return square, finite copies of matrix and uncertainty; the matrix made exactly symmetric."""
    C = np.array(maxwell, dtype=np.float64)
    limits = np.array(uncertainty, dtype=np.float64)
    if C.ndim != 2 or C.shape[0] != C.shape[1] or C.shape != limits.shape or len(C) == 0:
        raise InputError(f"network: need two square matrices of one size, got {C.shape} and {limits.shape}")
    if not (np.isfinite(C).all() and np.isfinite(limits).all() and (limits >= 0).all()):
        raise InputError("network: matrix and uncertainty must be finite, the uncertainty not negative")
    return 0.5 * (C + C.T), np.maximum(limits, limits.T)


def _flags(flags: ArrayLike, n: int) -> BoolArray:
    array = np.asarray(flags)
    if array.shape != (n,) or array.dtype != np.bool_:
        raise InputError(f"network: need {n} flags true or false, one per conductor, got {array}")
    return array


def _floating_inverse(C: FloatArray, floating: BoolArray) -> FloatArray:
    """Inverse of the floating block, set into an (n, n) matrix of zeros."""
    P = np.zeros_like(C)
    where = np.ix_(floating, floating)
    if floating.any():
        try:
            lower = np.linalg.cholesky(C[where])
        except np.linalg.LinAlgError:
            raise NumericalError(
                "network: the capacitance matrix of the floating conductors is not positive definite; "
                "ask for a better accuracy"
            ) from None
        half = np.linalg.inv(lower)
        P[where] = half.T @ half
    return P


def worst_case(left: FloatArray, right: FloatArray, limits: FloatArray, row_sums: FloatArray | None = None) -> float:
    """Largest first-order change of ``left . dC . right`` for symmetric dC with abs(dC) <= limits.

    With ``row_sums`` the same is bounded once more with mutual capacitances and row sums as the
    independent entries, and the smaller bound is returned.
    """
    return min(_bounds(left, right, limits, row_sums))


def _bounds(left: FloatArray, right: FloatArray, limits: FloatArray, row_sums: FloatArray | None) -> Iterator[float]:
    gradient = np.outer(left, right)
    pair = np.abs(gradient + gradient.T)
    # Each pair i < j is one entry; halving the full sum counts it once, and the diagonal once as well.
    yield 0.5 * float(np.sum(pair * limits))
    if row_sums is not None:
        step = np.abs(np.subtract.outer(left, left) * np.subtract.outer(right, right))
        off_diagonal = limits - np.diag(np.diag(limits))
        yield 0.5 * float(np.sum(step * off_diagonal)) + float(np.abs(left * right) @ row_sums)
