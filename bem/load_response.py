"""What given charge and external fields make of a network of conductors: charges, potentials, energy, polarisability.

The extended matrix of :func:`daraf.bem.media_solve.solve_media` treats a load as one more conductor held at 1: its
column is the charge it induces, its row minus the energy it has in the field of the others. Earthed, held and
floating conductors then follow from the same algebra as without loads (:mod:`daraf.bem.network`).
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .errors import InputError
from .media_solve import MediaSolution
from .network import eliminate_floating, excite

__all__ = ["LoadedExcitation", "excite_with_loads", "polarisability"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class LoadedExcitation:
    """State of the conductors with all loads present.

    Attributes
    ----------
    potential, potential_uncertainty : (n,) float, V
    charge, charge_uncertainty : (n,) float, C
    energy, energy_uncertainty : float, J
        Half the sum of charge times potential over conductors and loads, the loads' potentials being those that the
        charge on conductors and interfaces makes: without the energy of the loads among themselves.
    """

    potential: FloatArray
    potential_uncertainty: FloatArray
    charge: FloatArray
    charge_uncertainty: FloatArray
    energy: float
    energy_uncertainty: float


def _real_state(solution: MediaSolution, state: int) -> tuple[FloatArray, FloatArray]:
    if np.iscomplexobj(solution.maxwell):
        raise InputError("given charge needs real permittivities: charge that stays put has no frequency")
    return solution.maxwell[state], solution.maxwell_uncertainty[state]


def excite_with_loads(
    solution: MediaSolution, held: ArrayLike, values: ArrayLike, *, state: int = 0
) -> LoadedExcitation:
    """Charges and potentials of held and floating conductors with all loads present.

    Parameters
    ----------
    solution : MediaSolution
    held : (n_conductors,) bool
        True where the potential is given, False where the charge is (a floating conductor).
    values : (n_conductors,) float, V or C
    state : int

    Returns
    -------
    LoadedExcitation
        Uncertainties are first-order worst cases.
    """
    matrix, spread = _real_state(solution, state)
    n, n_loads = solution.media.n_conductors, len(matrix) - solution.media.n_conductors
    is_held, given = np.asarray(held, dtype=bool), np.asarray(values, dtype=np.float64)
    if is_held.shape != (n,) or given.shape != (n,):
        raise InputError(f"held and values must hold one entry for each of {n} conductors")
    found = excite(matrix, spread, np.append(is_held, np.ones(n_loads, bool)), np.append(given, np.ones(n_loads)))
    charge, potential = found.charge[:n], found.potential[:n]
    charge_spread, potential_spread = found.charge_uncertainty[:n], found.potential_uncertainty[:n]
    energy = 0.5 * float(charge @ potential - found.charge[n:].sum())
    energy_spread = np.abs(potential) @ charge_spread + np.abs(charge) @ potential_spread
    energy_spread += found.charge_uncertainty[n:].sum()
    return LoadedExcitation(potential, potential_spread, charge, charge_spread, energy, 0.5 * float(energy_spread))


def polarisability(
    solution: MediaSolution, *, earthed: ArrayLike = (), state: int = 0
) -> tuple[FloatArray, FloatArray]:
    """Polarisability tensor: induced dipole moment per unit of uniform field, with its uncertainty.

    Parameters
    ----------
    solution : MediaSolution
        With uniform fields of 1 V/m as its only loads, for example along x, y and z.
    earthed : sequence of int
        Conductors held at 0 V; the others float without charge.
    state : int

    Returns
    -------
    tensor, uncertainty : (L, L) float, C m2/V
        In a medium, times its relative permittivity.
    """
    matrix, spread = _real_state(solution, state)
    n = solution.media.n_conductors
    if len(matrix) == n:
        raise InputError("polarisability: the solution holds no external field")
    floating = (np.arange(len(matrix)) < n) & ~np.isin(np.arange(len(matrix)), np.asarray(earthed, dtype=np.int64))
    reduced, reduced_spread = eliminate_floating(matrix, spread, floating)
    first = len(reduced) - (len(matrix) - n)
    return reduced[first:, first:], reduced_spread[first:, first:]
