"""The charges of a stated excitation: what forces and peak fields start from.

The capacitances say how much charge each conductor holds, extrapolated; the densities of the last pass say how it
lies. What is missing of each conductor's charge is added where the field is strong, in proportion to the square of
the density: the charge that a mesh misses sits at edges and in narrow gaps. That is exact in total charge and
heuristic in where it lies; what it changes enters the uncertainty.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .constants import FOUR_PI_EPSILON_0
from .creases import Creases, find_creases
from .facets import Facets, facet_meaning, find_facets, greatest_turn
from .network import Excitation
from .panels import Panels
from .regions import Regions, find_regions
from .solution import CapacitanceSolution
from .surface import Surface

__all__ = ["StatedCharges", "filled_density", "stated_charges"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class StatedCharges:
    """Charges of one excitation.

    Attributes
    ----------
    surface : Surface
    regions : Regions
    creases : Creases
    facets : Facets
    facets_meant : bool
        The facets are the part: nothing is round.
    panels : Panels
        As solved: on the surface meant, unless the facets are.
    density : (n,) float, C/m2
        Its total on each conductor is the charge of the network.
    galerkin : (n,) float, C/m2
        As solved.
    margin : (n,) float, C/m2
        With every conductor's charge larger by its expanded uncertainty.
    faceted : (n,) float, C/m2
        With every conductor's charge changed as much as the facets change it, to first order.
    previous : (n,) float, C/m2, or None
        As solved in the pass before the last, whose panels hold these.
    four_pi_epsilon : float, F/m
        4 pi times the permittivity of the medium.
    """

    surface: Surface
    regions: Regions
    creases: Creases
    facets: Facets
    facets_meant: bool
    panels: Panels
    density: FloatArray
    galerkin: FloatArray
    margin: FloatArray
    faceted: FloatArray
    previous: FloatArray | None
    four_pi_epsilon: float

    @property
    def offset(self) -> FloatArray:
        """Distance by which each panel was moved onto the surface meant, (n,) m."""
        if self.facets_meant:
            return np.zeros(len(self.panels))
        return np.asarray(self.facets.offset[self.panels.region])


def stated_charges(
    surface: Surface, solution: CapacitanceSolution, state: Excitation, *, facets: str = "auto"
) -> StatedCharges:
    """Charges of an excitation.

    Parameters
    ----------
    surface : Surface
        That was solved.
    solution : CapacitanceSolution
    state : Excitation
        From :func:`daraf.bem.network.excite` with the matrix of `solution`.
    facets : {"auto", "round", "as drawn"}
        As in :func:`daraf.bem.solve_capacitance`.

    Returns
    -------
    StatedCharges
    """
    meaning = facet_meaning(facets)
    regions, _ = find_regions(surface)
    creases = find_creases(surface, regions, greatest_turn=greatest_turn(meaning))
    round_parts = find_facets(surface, regions, creases)
    panels = solution.panels
    galerkin = np.asarray(state.potential @ solution.densities)
    density = filled_density(panels, galerkin, state.charge)
    sign = np.sign(np.bincount(panels.conductor, density * panels.areas, len(state.charge)))
    # Hadamard's formula: dQ_i = (1/eps) int sigma_i sigma delta dS, sigma_i with conductor i alone at 1 V
    four_pi_epsilon = FOUR_PI_EPSILON_0 * solution.relative_permittivity
    shift = round_parts.offset[panels.region] * panels.areas * galerkin
    change = 4.0 * np.pi / four_pi_epsilon * (solution.densities @ shift)
    return StatedCharges(
        surface=surface,
        regions=regions,
        creases=creases,
        facets=round_parts,
        facets_meant=meaning == "as drawn",
        panels=panels,
        density=density,
        galerkin=galerkin,
        margin=filled_density(panels, density, state.charge + sign * state.charge_uncertainty),
        faceted=density if meaning == "as drawn" else filled_density(panels, density, state.charge - change),
        previous=None if solution.previous is None else np.asarray(state.potential @ solution.previous),
        four_pi_epsilon=four_pi_epsilon,
    )


def filled_density(panels: Panels, density: FloatArray, charge: FloatArray) -> FloatArray:
    """Add what is missing of each conductor's charge in proportion to the square of the density.

    Parameters
    ----------
    panels : Panels
    density : (n_panels,) float, C/m2
    charge : (n_conductors,) float, C

    Returns
    -------
    (n_panels,) float, C/m2
    """
    weight = density**2
    total = np.bincount(panels.conductor, weight * panels.areas, len(charge))
    held = np.bincount(panels.conductor, density * panels.areas, len(charge))
    factor = (charge - held) / np.where(total > 0, total, np.inf)
    return np.asarray(density + factor[panels.conductor] * weight)
