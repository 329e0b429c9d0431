"""Stress intensity of sharp convex edges: the K of ``E = K r^(-p)``, which converges where the field itself does not.

Next to an edge ``E = K d^(-p) (1 + b d^q)``, d the distance from it, averaged over both faces, whose opposite terms
cancel; q = 2 (1 - p) then is the next exponent of the wedge (Meixner 1972; Jackson, section 2.11). K and b are fitted
to the means over the panels within a reach, over which the powers are averaged exactly.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from .panels import Panels

__all__ = ["EdgeIntensity", "SharpEdges", "edge_intensity", "mean_power"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Reach of the fit, as shares of the length of straight edge or round rim that runs on from the place, and the
#: fewest panels in it. Two reaches tell how much hangs on it.
REACHES, FEWEST = (0.12, 0.25), 6
#: Relative uncertainty below which a fit is not believed: on discs of known intensity it is off by a few per cent.
FLOOR = 0.04
#: Share of ``2 p (w / size)^q`` that counts as uncertain, w the width of the panels beside the edge: wide ones hide
#: where the law of the edge begins, up to 20 % on a disc with panels a quarter of its radius wide.
COARSE_SHARE = 1.0
#: Panels count that lie along the edge within so many reaches of the place.
ALONG = 1.0


@dataclass(frozen=True, eq=False)
class SharpEdges:
    """Sharp convex edges of one conductor, where its panels have them.

    Attributes
    ----------
    ends : (n, 2, 3) float, m
    exponent : (n,) float
        p; not a number where unknown.
    size : (n,) float, m
        Length over which an edge runs on: its own where it is straight, the radius of a round one.
    """

    ends: FloatArray
    exponent: FloatArray
    size: FloatArray


@dataclass(frozen=True)
class EdgeIntensity:
    """Stress intensity at a place.

    Attributes
    ----------
    intensity, uncertainty : float, V/m m^p
        K, and its expanded uncertainty (k = 2).
    exponent : float
        p.
    at : tuple of 3 float, m
    """

    intensity: float
    uncertainty: float
    exponent: float
    at: tuple[float, float, float]


def mean_power(distance: FloatArray, power: float) -> FloatArray:
    """Mean of ``d^power`` over triangles on which d is linear, from d at their corners.

    Parameters
    ----------
    distance : (..., 3) float
        Not negative.
    power : float
        Above -1.

    Returns
    -------
    (...) float
        Twice the second divided difference of ``d^(power + 2) / ((power + 1)(power + 2))`` (Hermite and Genocchi).
    """
    d = np.sort(np.asarray(distance, dtype=np.float64), axis=-1)
    # equal corners are parted by hairs: the powers are cancelled twice, and keep five digits
    size = np.maximum(d[..., 2], 1e-300)
    a = d[..., 0]
    b = np.maximum(d[..., 1], a + 1e-8 * size)
    c = np.maximum(d[..., 2], b + 1e-3 * size)
    scale = (power + 1.0) * (power + 2.0)
    f, g, h = (x ** (power + 2.0) / scale for x in (a, b, c))
    return np.asarray(2.0 * ((h - g) / (c - b) - (g - f) / (b - a)) / (c - a))


def edge_intensity(
    panels: Panels, field: FloatArray, tree: cKDTree, edges: SharpEdges, chosen: int, share: float = 0.5
) -> EdgeIntensity | None:
    """Stress intensity at a place along an edge.

    Parameters
    ----------
    panels : Panels
        Of the conductor of these edges.
    field : (n,) float, V/m
        Without sign; the mean of both sides of sheets.
    tree : cKDTree
        Of the centroids.
    edges : SharpEdges
    chosen : int
        Which edge.
    share : float
        Where along it.

    Returns
    -------
    EdgeIntensity or None
        None where too few panels lie near.
    """
    place = edges.ends[chosen, 0] + share * (edges.ends[chosen, 1] - edges.ends[chosen, 0])
    found = []
    for reach in REACHES:
        one = _fit(panels, field, tree, edges, chosen, place, reach * edges.size[chosen])
        if one is not None:
            found.append(one)
    if not found:
        return None
    value, scatter = found[0]
    spread = np.hypot(scatter, max((abs(other[0] - value) for other in found[1:]), default=0.5 * value))
    x, y, z = (float(v) for v in place)
    return EdgeIntensity(value, float(np.hypot(spread, FLOOR * value)), float(edges.exponent[chosen]), (x, y, z))


def _fit(
    panels: Panels, field: FloatArray, tree: cKDTree, edges: SharpEdges, chosen: int, place: FloatArray, reach: float
) -> tuple[float, float] | None:
    """K and its spread by what the fit leaves over."""
    p = float(edges.exponent[chosen])
    near = np.array(tree.query_ball_point(place, 1.5 * reach * max(1.0, ALONG)), dtype=np.int64)
    if len(near) < FEWEST:
        near = np.atleast_1d(tree.query(place, k=min(2 * FEWEST, len(panels)))[1]).astype(np.int64)
    along = edges.ends[chosen, 1] - edges.ends[chosen, 0]
    along = along / np.linalg.norm(along)
    corners = panels.corners[near]
    middle, half = edges.ends.mean(axis=1), 0.5 * np.linalg.norm(edges.ends[:, 1] - edges.ends[:, 0], axis=1)
    wide = 2.0 * float(np.linalg.norm(corners - place, axis=2).max())
    beside_it = np.linalg.norm(middle - place, axis=1) - half <= wide
    distance = _from_edges(corners.reshape(-1, 3), edges.ends[beside_it]).reshape(-1, 4)
    beside = np.abs((panels.centroids[near] - place) @ along)
    inside = (distance.min(axis=1) < reach) & (beside <= max(ALONG * reach, float(np.min(beside)) * 1.001))
    # a panel all of whose corners lie on edges says nothing of the way from one
    telling = distance.max(axis=1) > 0.1 * np.sqrt(panels.areas[near])
    if np.count_nonzero(inside & telling) < FEWEST:
        inside = np.ones(len(near), bool)
    inside &= telling
    if np.count_nonzero(inside) < 2:
        return None
    rows, distance = near[inside], distance[inside]
    first = 0.5 * np.linalg.norm(
        np.cross(*(panels.corners[rows][:, [1, 2]] - panels.corners[rows][:, :1]).swapaxes(0, 1)), axis=1
    )
    weight = np.clip(first / panels.areas[rows], 0.0, 1.0)

    def mean(power: float) -> FloatArray:
        one, two = mean_power(distance[:, [0, 1, 2]], power), mean_power(distance[:, [0, 2, 3]], power)
        return np.asarray(weight * one + (1.0 - weight) * two)

    columns = np.stack([mean(-p), mean(2.0 * (1.0 - p) - p)], axis=1)
    # the charge of a panel is what is known well: its mean times its area
    strength = np.sqrt(panels.areas[rows]) / columns[:, 0]
    c, *_ = np.linalg.lstsq(columns * strength[:, None], field[rows] * strength, rcond=None)
    rest = (field[rows] - columns @ c) / columns[:, 0]
    scatter = float(np.sqrt(np.average(rest**2, weights=panels.areas[rows])))
    if c[0] <= 0.0:
        return None
    touching = distance.min(axis=1) < 0.05 * distance.max(axis=1)
    width = float(np.median(distance[touching].max(axis=1))) if touching.any() else float(distance.min())
    hidden = 2.0 * p * (width / edges.size[chosen]) ** (2.0 * (1.0 - p))
    return float(c[0]), float(np.hypot(scatter, COARSE_SHARE * c[0] * hidden))


def _from_edges(points: FloatArray, ends: FloatArray) -> FloatArray:
    """Distance of points from the nearest of some edges."""
    start, way = ends[:, 0], ends[:, 1] - ends[:, 0]
    length2 = np.maximum(np.einsum("ij,ij->i", way, way), 1e-300)
    from_start = points[:, None, :] - start
    share = np.clip(np.einsum("pij,ij->pi", from_start, way) / length2, 0.0, 1.0)
    return np.asarray(np.linalg.norm(from_start - share[:, :, None] * way, axis=2).min(axis=1))
