"""What a solve returns."""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from .panels import Panels

__all__ = ["BodyAccount", "CapacitanceSolution", "Notice", "Pass"]

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


@dataclass(frozen=True)
class BodyAccount:
    """What became of one body of the mesh before the first pass.

    Attributes
    ----------
    body : str
    triangles : int
        As they came.
    slivers : int
        Of these, triangles much longer than wide.
    faces : int
        Flat faces found.
    panels : int
        That cover them.
    area_change : float
        Relative, by covering the flat faces anew.
    volume_change : float or None
        Relative; None of an open body.
    round_faces : int
        Flat faces taken as facets of a round surface.
    turn : tuple of 2 float or None, rad
        Least and greatest turn of the edges between these.
    round_outline, round_holes : int
        Edges of faces that were taken as parts of round outlines and of round holes.
    rim_turn : tuple of 2 float or None, rad
        Least and greatest turn from one of these to the next.
    """

    body: str
    triangles: int
    slivers: int
    faces: int
    panels: int
    area_change: float
    volume_change: float | None
    round_faces: int = 0
    turn: tuple[float, float] | None = None
    round_outline: int = 0
    round_holes: int = 0
    rim_turn: tuple[float, float] | None = None


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
    spread : (n, n) float, F
        Expanded uncertainty (k = 2) of raw plus estimate.
    seconds : float
    uncertainty : float
        Largest relative expanded uncertainty of the entries asked, on the scale on which the accuracy is asked.
    entry : tuple of 2 int
        Where it is.
    cause : str
        The line of the budget that drives it.
    iterations : int
        Of the solution of the equations; 0 where they were factorised.
    """

    panels: int
    maxwell: FloatArray
    estimate: FloatArray
    spread: FloatArray
    seconds: float
    uncertainty: float = float("nan")
    entry: tuple[int, int] = (0, 0)
    cause: str = "discretisation"
    iterations: int = 0


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
    previous : (n_conductors, n_panels) float, C/m2 per V, or None
        Densities of the pass before the last, on the panels of the last.
    interrupted : bool
        Whether the user stopped the refinement; the last finished pass is what is given.
    facets : str
        What the facets were taken to mean.
    bodies : tuple of BodyAccount
        What became of each body before the first pass.
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
    previous: FloatArray | None = None
    interrupted: bool = False
    facets: str = "auto"
    bodies: tuple[BodyAccount, ...] = ()
