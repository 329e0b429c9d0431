"""Lines of the budget that the shape of the surface leaves, whatever the panels: round parts, rounding."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .coarse import coarsening_uncertainty
from .facets import Facets, facet_uncertainty
from .panels import Panels
from .rounding import rounding_uncertainty

__all__ = ["ShapeDoubts"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class ShapeDoubts:
    """What is not known of the shape.

    Attributes
    ----------
    round_parts : Facets or None
        None where the facets are the part.
    rounding : (n_bodies,) float, m, or None
        How far coordinates may be off.
    coarse : (n_regions,) float, m, or None
        How far each flat region may lie from a drawing that was coarsened.
    """

    round_parts: Facets | None = None
    rounding: FloatArray | None = None
    coarse: FloatArray | None = None

    def lines(self, panels: Panels, density: FloatArray, weights: FloatArray) -> dict[str, FloatArray]:
        """Uncertainty by cause, bare, k = 2; arguments as in :func:`daraf.bem.facets.facet_uncertainty`."""
        lines = {"facets": np.zeros((density.shape[1], weights.shape[1]))}
        if self.round_parts is not None and self.round_parts.any:
            lines["facets"] = facet_uncertainty(self.round_parts, panels, density, weights)
        if self.rounding is not None:
            lines["coordinates"] = rounding_uncertainty(self.rounding, panels, density, weights)
        if self.coarse is not None:
            lines["coarsening"] = coarsening_uncertainty(self.coarse, panels, density, weights)
        return lines
