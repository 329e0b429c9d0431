"""What a solve returns."""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from .panels import Panels

__all__ = ["CapacitanceSolution", "Notice", "Pass"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Notice:
    """A warning that travels with the result.

    Attributes
    ----------
    code : str
        Stable name of the kind of warning.
    text : str
        One sentence for the user.
    """

    code: str
    text: str


@dataclass(frozen=True, eq=False)
class Pass:
    """One pass of refinement.

    Attributes
    ----------
    panels : int
    maxwell : (n, n) float, F
        Raw Galerkin value; its diagonal converges from below.
    estimate : (n, n) float, F
        Estimate of exact minus raw, signed: the mean of two opinions on what the panels are off.
    uncertainty : (n, n) float, F
        Expanded, k = 2, of raw plus estimate.
    seconds : float
    """

    panels: int
    maxwell: FloatArray
    estimate: FloatArray
    uncertainty: FloatArray
    seconds: float


@dataclass(frozen=True, eq=False)
class CapacitanceSolution:
    """Maxwell capacitance matrix with its uncertainty and the charge densities behind it.

    Attributes
    ----------
    conductor_names : tuple of str
    maxwell, maxwell_uncertainty : (n, n) float, F
        Expanded uncertainty, k = 2 (JCGM 100:2008).
    to_infinity, to_infinity_uncertainty : (n,) float, F
        Row sums of the Maxwell matrix.
    budget : dict of str to (n, n) float, F
        Expanded contribution of each cause.
    accuracy : float
        Relative expanded uncertainty asked.
    relative_permittivity : float
    reached : bool
        Whether the accuracy asked was met.
    panels : Panels
    densities : (n_conductors, n_panels) float, C/m2 per V
        Charge density with conductor i at 1 V and all others at 0 V.
    passes : list of Pass
    method : str
    iterations : int
    seconds : dict of str to float
    peak_memory_bytes : int
    warnings : list of Notice
    previous : tuple of Panels and (n_conductors, n_panels) float, C/m2 per V, or None
        Panels and densities of the pass before the last.
    interrupted : bool
        Whether the user stopped the refinement; the last finished pass is what is given.
    """

    conductor_names: tuple[str, ...]
    maxwell: FloatArray
    maxwell_uncertainty: FloatArray
    to_infinity: FloatArray
    to_infinity_uncertainty: FloatArray
    budget: dict[str, FloatArray]
    accuracy: float
    relative_permittivity: float
    reached: bool
    panels: Panels
    densities: FloatArray
    passes: list[Pass]
    method: str
    iterations: int
    seconds: dict[str, float]
    peak_memory_bytes: int
    warnings: list[Notice] = field(default_factory=list)
    previous: tuple[Panels, FloatArray] | None = None
    interrupted: bool = False
