"""Round parts that were coarsened before the solve: what the lost detail may change.

Moving a surface by delta along its normal changes, to first order, dC_ij = (1/eps) int sigma_i sigma_j delta dS
(Hadamard's variational formula, see :mod:`daraf.bem.facets`). How far the coarse surface lies from the drawing is
measured on each triangle; which way is not used, so the line is a bound to first order.
"""

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from .facets import Facets
from .panels import Panels
from .regions import Regions
from .surface import Surface

__all__ = ["coarsening_uncertainty", "region_deviation", "take_as_drawn"]

FloatArray = NDArray[np.float64]


def region_deviation(surface: Surface, regions: Regions) -> FloatArray | None:
    """Largest distance of each flat region from the drawing.

    Parameters
    ----------
    surface : Surface
    regions : Regions

    Returns
    -------
    (n_regions,) float, m, or None
        None if nothing was coarsened.
    """
    deviation = surface.triangle_deviation
    if deviation is None or not deviation.any():
        return None
    used = regions.triangle_region >= 0
    largest = np.zeros(len(regions))
    np.maximum.at(largest, regions.triangle_region[used], deviation[used])
    return largest


def take_as_drawn(facets: Facets, regions: Regions, deviation: FloatArray) -> Facets:
    """Round parts without those of coarsened bodies.

    Facets of a drawing lie in the round surface by their corners, so that the surface bulges over them. Merged
    facets lie in the middle of what they replace: moving them outward again would count it twice.

    Parameters
    ----------
    facets : Facets
    regions : Regions
    deviation : (n_regions,) float, m
        From :func:`region_deviation`.

    Returns
    -------
    Facets
    """
    coarse = np.isin(regions.body, regions.body[deviation > 0.0])
    kept = ~coarse[facets.edge_region]
    return replace(
        facets,
        offset=np.where(coarse, 0.0, facets.offset),
        edge_ends=facets.edge_ends[kept],
        edge_region=facets.edge_region[kept],
        edge_out=facets.edge_out[kept],
        edge_offset=facets.edge_offset[kept],
        edge_rim=facets.edge_rim[kept],
    )


def coarsening_uncertainty(
    deviation: FloatArray, panels: Panels, density: FloatArray, weights: FloatArray
) -> FloatArray:
    """Uncertainty that coarsening leaves, bare.

    Parameters
    ----------
    deviation : (n_regions,) float, m
        From :func:`region_deviation`.
    panels : Panels
    density : (n_panels, n_conductors) float
        Bare densities, as in :func:`daraf.bem.facets.facet_uncertainty`.
    weights : (n_conductors, m) float
        Combinations of conductors of which the second index is wanted.

    Returns
    -------
    (n_conductors, m) float, m
        Multiply by 4 pi eps for farads.
    """
    moved = 4.0 * np.pi * deviation[panels.region] * panels.areas
    return np.asarray(np.einsum("p,pi,pj->ij", moved, np.abs(density), np.abs(density @ weights)))
