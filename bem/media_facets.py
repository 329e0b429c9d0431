"""What round parts leave open with media: Hadamard's formula for conductors and for interfaces.

Moving an interface by delta toward its outside changes the energy, and with it every entry, by

    dC_ij = int (e- - e+) [E_t,i . E_t,j + D_n,i D_n,j / (e- e+)] delta dS,

(both parts are continuous across it; first-order perturbation of the energy integral, for example Landau and
Lifshitz, Electrodynamics of Continuous Media, section 14, from memory), a conductor's surface by int D_n,i D_n,j / e+.
"""

from typing import Any

import numpy as np
from numpy.typing import NDArray

from .facets import RIM_SHARE, Facets
from .facets import _rim_factors as rim_factors
from .field import panel_field
from .frames import panel_frames
from .images import PlacedImages
from .jit import parallel_kernel, prange
from .media import PanelMedia
from .panels import Panels

__all__ = ["mean_field", "media_facet_uncertainty"]

FloatArray = NDArray[np.float64]
Array = NDArray[Any]

#: Moved facets that are put together at their corners miss the smooth surface by this much more than free ones, whose
#: areas do not change: measured on half spheres and coated spheres of 80 to 1,280 facets.
CLOSED_SHARE = 1.5


@parallel_kernel
def mean_field(points, frames, density, result):
    """Field of all panels at points on panels: the mean of the two sides.

    Parameters
    ----------
    points : (m, 3) float, m
    frames : (n, FRAME_SIZE) float
    density : (n, n_columns) float
    result : (m, 3, n_columns) float
        Written: ``sum_j density_j int_j (x - y)/r^3 dS``.
    """
    for p in prange(len(points)):
        result[p] = 0.0
        for j in range(len(frames)):
            fx, fy, fz = panel_field(frames[j], points[p, 0], points[p, 1], points[p, 2])
            for k in range(density.shape[1]):
                result[p, 0, k] += fx * density[j, k]
                result[p, 1, k] += fy * density[j, k]
                result[p, 2, k] += fz * density[j, k]


def media_facet_uncertainty(
    facets: Facets,
    panels: Panels,
    media: PanelMedia,
    solved: tuple[Array, Array],
    placed: PlacedImages,
    sums: FloatArray,
) -> FloatArray:
    """Uncertainty that round parts leave, bare.

    Parameters
    ----------
    facets : Facets
    panels : Panels
        Moved by :func:`daraf.bem.facets.move_facets`.
    media : PanelMedia
    solved : two (n_panels, n) float or complex
        Total charge density of each conductor at 1 V, and its free charge density on conductors.
    placed : PlacedImages
    sums : (n, m) float
        Combinations of conductors of which the second index is wanted.

    Returns
    -------
    (n, m) float, m
        Expanded, k = 2: a share of the first-order change, without regard to sign.
    """
    state, adjoint = solved
    moved = CLOSED_SHARE * facets.doubt[panels.region] * panels.areas
    metal = ~media.interface
    size = np.abs(adjoint[metal])
    combined = np.abs(adjoint[metal] @ sums)
    first_order = 4.0 * np.pi * moved + RIM_SHARE * rim_factors(facets, panels)
    weight = (placed.direct * first_order)[metal] / np.abs(media.outside[metal])
    change = np.einsum("p,pi,pj->ij", weight, size, combined)
    rows = np.flatnonzero(media.interface & (moved > 0.0))
    if len(rows) == 0:
        return np.asarray(change)
    field = _field_at(panels, rows, state, placed)
    normals = panels.normals[rows]
    normal = np.einsum("pa,pak->pk", normals, field)
    along = field - normals[:, :, None] * normal[:, None, :]
    front, back = media.outside[rows], media.inside[rows]
    displaced = front[:, None] * (normal + 2.0 * np.pi * state[rows])
    weight = np.abs(back - front) * moved[rows] / (4.0 * np.pi)
    for part, factor in ((along, weight), (displaced[:, None, :], weight / np.abs(back * front))):
        first = np.linalg.norm(np.abs(part), axis=1)
        second = np.linalg.norm(np.abs(part @ sums), axis=1)
        change += np.einsum("p,pi,pj->ij", factor, first, second)
    return np.asarray(change)


def _field_at(panels: Panels, rows: NDArray[np.int64], state: Array, placed: PlacedImages) -> Array:
    """Mean field at the centroids of some panels, (m, 3, n)."""
    centre = panels.corners.reshape(-1, 3).mean(axis=0)
    frames = panel_frames(placed.corners - centre, largest_rule=0)
    state = placed.of_source(0)[:, None] * np.tile(state, (len(placed.factors), 1))
    parts = [state.real, state.imag] if np.iscomplexobj(state) else [state]
    found = []
    for part in parts:
        result = np.empty((len(rows), 3, state.shape[1]))
        mean_field(panels.centroids[rows] - centre, frames, np.ascontiguousarray(part), result)
        found.append(result)
    return np.asarray(found[0] if len(found) == 1 else found[0] + 1j * found[1])
