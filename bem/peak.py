"""Highest field on the surface of every conductor, and whether there is a highest one at all.

Outside a closed conductor the field is sigma / eps. A sheet, or a closed surface with another body inside, has two
sides: the field there is the mean of both (:func:`daraf.bem.field.normal_field`) plus or minus sigma / (2 eps).

At a sharp convex edge with the metal angle alpha the field grows without bound, E ~ r^(-p) with
p = 1 - pi / (2 pi - alpha): 1/2 at the rim of a sheet, 1/3 at a right angle (J. Meixner, IEEE Trans. Antennas
Propag. 20 (1972) 442; J. D. Jackson, Classical Electrodynamics, section 2.11). The highest mean over a panel then
says nothing but how small the panels are, and no uncertainty is given.

On a smooth surface the densities of the panels around the highest one are fitted by a quadratic, in which the small
panels that refinement leaves at the edges of facets weigh little, and the top of it is the peak.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from .charges import StatedCharges
from .creases import GREATEST_TURN, LEAST_TURN, SIMILAR_TURN, corner_normals
from .field import normal_field
from .frames import POINTS, panel_frames
from .panels import Panels
from .sides import two_sided_bodies

__all__ = ["PeakField", "Sharp", "peak_fields", "sharp_edges", "surface_sides", "wedge_exponent"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

#: A side whose field is, root mean square, below this share of the other side's is shielded; its edges do not count.
#: The field at the centroids of coarse panels tells the sides apart to about 5 % (measured on a cube round a sphere).
SHIELDED = 0.1
#: Corners whose facets turn away from their mean normal by more than this are tips, rad.
TIP_TURN = np.radians(45.0)
#: Fewest panels in the fit of a smooth peak, candidates for it, radius of the fit in sizes of the facet.
FITTED, CANDIDATES, PATCH = 16, 40, 2.5
#: Panels on the same side of a thin part have normals with at least this cosine.
SAME_SIDE = 0.3
#: The top of the quadratic must lie within this share of the radius of the fit.
TOP_WITHIN = 0.5
#: Shares (expanded, k = 2) of what changes the peak that count as uncertain.
FACETS_SHARE, FIT_SHARE = 0.5, 0.5
#: Relative spread of a fit over which the field falls to nothing; it grows with the square of the fall.
UNRESOLVED = 0.4
#: Relative spread where both sides carry charge and are told apart by the field at one point of each panel.
TWO_SIDED = 0.03


@dataclass(frozen=True, eq=False)
class PeakField:
    """Highest field on a conductor.

    Attributes
    ----------
    conductor : int
    peak : float, V/m
        Without sign. Where it is not bounded: the highest mean over a panel.
    uncertainty : float or None, V/m
        Expanded (k = 2); None where there is no bound.
    at : (3,) float, m
    bounded : bool
        Whether the conductor is free of sharp convex edges, rims and tips.
    exponent : float or None
        p of E ~ r^(-p) at the sharp edge nearest to the peak.
    edge_at : (3,) float, m, or None
        Nearest point of that edge.
    """

    conductor: int
    peak: float
    uncertainty: float | None
    at: FloatArray
    bounded: bool
    exponent: float | None
    edge_at: FloatArray | None


def wedge_exponent(metal_angle: float) -> float:
    """Exponent p of the field E ~ r^(-p) at an edge of a conductor.

    Parameters
    ----------
    metal_angle : float, rad
        0 at the rim of a sheet, pi on a flat face.

    Returns
    -------
    float
        ``1 - pi / (2 pi - metal_angle)``; negative at re-entrant edges, where the field vanishes.
    """
    return float(1.0 - np.pi / (2.0 * np.pi - metal_angle))


def peak_fields(charges: StatedCharges) -> list[PeakField]:
    """Peak field of every conductor.

    Parameters
    ----------
    charges : StatedCharges
        From :func:`daraf.bem.charges.stated_charges`.

    Returns
    -------
    list of PeakField
    """
    panels = charges.panels
    stretch, sizes = _facet_shapes(charges)
    two_sided = two_sided_bodies(charges.surface, charges.creases)
    outer, inner = surface_sides(charges, two_sided)
    sharp = sharp_edges(charges, outer, inner)
    field = np.maximum(outer, inner) / stretch
    result = []
    for conductor in range(panels.n_conductors):
        own = np.flatnonzero(panels.conductor == conductor)
        top = int(own[np.argmax(field[own])])
        place = panels.centroids[top]
        edges = np.flatnonzero(sharp.conductor == conductor)
        if len(edges):
            exponent, edge_at = _nearest_edge(sharp, edges, place)
            result.append(PeakField(conductor, float(field[top]), None, place, False, exponent, edge_at))
            continue
        peak, spread, top, place = _smooth_peak(panels, field, sizes, own)
        spread = float(np.hypot(spread, peak * _relative_spread(charges, top)))
        if min(outer[top], inner[top]) > 0.0 and two_sided[panels.body[top]]:
            spread = float(np.hypot(spread, TWO_SIDED * peak))
        result.append(PeakField(conductor, peak, spread, place, True, None, None))
    return result


def surface_sides(charges: StatedCharges, two_sided: BoolArray) -> tuple[FloatArray, FloatArray]:
    """Size of the field on the side of the normals and on the other one, (n,) V/m each.

    Parameters
    ----------
    charges : StatedCharges
    two_sided : (n_bodies,) bool

    Returns
    -------
    outer, inner : (n,) float, V/m
    """
    panels, density = charges.panels, charges.density
    half = 2.0 * np.pi * density / charges.four_pi_epsilon
    mean = half.copy()
    rows = np.flatnonzero(two_sided[panels.body])
    if len(rows):
        centre = panels.corners.reshape(-1, 3).mean(axis=0)
        found = np.empty((len(rows), 1))
        frames = panel_frames(panels.corners - centre)
        normal_field(panels.centroids[rows] - centre, panels.normals[rows], frames, density[:, None].copy(), found)
        mean[rows] = found[:, 0] / charges.four_pi_epsilon
    outer, inner = np.abs(mean + half), np.abs(mean - half)
    # nothing lies on a shielded side: the other one holds all of the charge
    for one, other in ((outer, inner), (inner, outer)):
        dead = _typical_by_body(charges, one) < SHIELDED * _typical_by_body(charges, other)
        rows = np.flatnonzero(dead[panels.body])
        one[rows], other[rows] = 0.0, 2.0 * np.abs(half[rows])
    return outer, inner


def _typical_by_body(charges: StatedCharges, field: FloatArray) -> FloatArray:
    """Root mean square over each body: single panels at edges are coarse."""
    panels, n_bodies = charges.panels, charges.surface.n_bodies
    squares = np.bincount(panels.body, panels.areas * field**2, n_bodies)
    return np.asarray(np.sqrt(squares / np.bincount(panels.body, panels.areas, n_bodies)))


def _facet_shapes(charges: StatedCharges) -> tuple[FloatArray, FloatArray]:
    """Area of the smooth surface over each panel's facet per area of the facet, and the facet's size in m.

    A facet at the mean distance delta below a surface of mean curvature H whose normals lean by theta from its own
    stands for ``1 + 2 H delta - <theta^2> / 2`` times its area.
    """
    surface, regions, panels = charges.surface, charges.regions, charges.panels
    used = np.flatnonzero(regions.triangle_region >= 0)
    region = regions.triangle_region[used]
    corners = surface.vertices[surface.triangles[used]]
    normals = corner_normals(surface, regions, charges.creases)[used]
    facet = regions.normals[region]
    area = 0.5 * np.linalg.norm(np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]), axis=1)
    opposite = np.roll(corners, -2, axis=1) - np.roll(corners, -1, axis=1)
    slopes = np.cross(facet[:, None, :], opposite) / np.maximum(2.0 * area, 1e-300)[:, None, None]
    divergence = np.einsum("tki,tki->t", normals, slopes)
    lean = normals - np.einsum("tki,ti->tk", normals, facet)[:, :, None] * facet[:, None, :]
    theta2 = (np.einsum("tki,tki->t", lean, lean) + np.einsum("ti,ti->t", lean.sum(axis=1), lean.sum(axis=1))) / 12.0
    total = np.maximum(np.bincount(region, area, len(regions)), 1e-300)
    curvature = np.bincount(region, area * divergence, len(regions)) / total
    theta2 = np.bincount(region, area * theta2, len(regions)) / total
    edges = charges.creases.edges
    ends = surface.vertices[edges.vertices]
    length = np.linalg.norm(ends[:, 1] - ends[:, 0], axis=1)
    perimeter = np.zeros(len(regions))
    border = charges.creases.between | charges.creases.rim
    for side in (0, 1):
        triangle = edges.triangles[border, side]
        of = np.where(triangle >= 0, regions.triangle_region[triangle], -1)
        np.add.at(perimeter, of[of >= 0], length[border][of >= 0])
    stretch = np.ones(len(regions))
    if np.any(charges.offset):
        stretch += curvature * charges.facets.offset - 0.5 * theta2
    size = 4.0 * total / np.maximum(perimeter, 1e-300)
    return stretch[panels.region], np.minimum(size, 2.0 * np.sqrt(total))[panels.region]


@dataclass(frozen=True, eq=False)
class Sharp:
    """Sharp edges and tips: conductor (n,), ends (n, 2, 3) m, exponent (n,), not a number where unknown."""

    conductor: IntArray
    ends: FloatArray
    exponent: FloatArray


def sharp_edges(charges: StatedCharges, outer: FloatArray, inner: FloatArray) -> Sharp:
    """Sharp convex edges, rims and tips that carry charge.

    Parameters
    ----------
    charges : StatedCharges
    outer, inner : (n,) float, V/m
        From :func:`surface_sides`.

    Returns
    -------
    Sharp
    """
    surface, creases = charges.surface, charges.creases
    body = surface.triangle_body[creases.edges.triangles.max(axis=1).clip(0)]
    out, into = _typical_by_body(charges, outer) > 0.0, _typical_by_body(charges, inner) > 0.0
    turn = creases.angles
    smooth = np.abs(turn) <= LEAST_TURN if charges.facets_meant else creases.smooth | _between_smooth(charges)
    sharp = creases.between & ~smooth & (((turn > 0) & out[body]) | ((turn < 0) & into[body]))
    sharp |= creases.rim | creases.branching
    exponent = 1.0 - np.pi / (np.pi + np.abs(turn))
    exponent[creases.rim] = wedge_exponent(0.0)
    exponent[creases.branching] = np.nan
    ends = surface.vertices[creases.edges.vertices[sharp]]
    tips = _tips(charges) if not charges.facets_meant else np.zeros(0, np.int64)
    owner = np.zeros(len(surface.vertices), np.int64)
    owner[surface.triangles.reshape(-1)] = np.repeat(surface.triangle_body, 3)
    points = surface.vertices[tips]
    return Sharp(
        surface.body_conductor[np.concatenate([body[sharp], owner[tips]])],
        np.concatenate([ends, np.stack([points, points], axis=1)]),
        np.concatenate([exponent[sharp], np.full(len(tips), np.nan)]),
    )


def _between_smooth(charges: StatedCharges) -> BoolArray:
    """Gentle edges between two facets that have smooth edges which turn about as much.

    Stretched and uneven triangles do not lie in rows, which is how smooth edges are told for the capacitances.
    """
    creases, region = charges.creases, charges.regions.triangle_region
    sides = region[creases.edges.triangles]
    turn = np.abs(creases.angles)
    chosen = creases.between & creases.smooth
    steepest = np.zeros(len(charges.regions))
    np.maximum.at(steepest, sides[chosen].reshape(-1), np.repeat(turn[chosen], 2))
    allowed = SIMILAR_TURN * steepest[sides].min(axis=1)
    return np.asarray(creases.between & (turn < GREATEST_TURN) & (turn <= allowed))


def _tips(charges: StatedCharges) -> IntArray:
    """Vertices where a smooth surface runs into a point, such as that of a cone."""
    surface, regions, creases = charges.surface, charges.regions, charges.creases
    used = regions.triangle_region >= 0
    corner = surface.triangles[used].reshape(-1)
    normal = np.repeat(regions.normals[regions.triangle_region[used]], 3, axis=0)
    total = np.zeros_like(surface.vertices)
    np.add.at(total, corner, normal)
    length = np.linalg.norm(total, axis=1)
    cosine = np.ones(len(total))
    np.minimum.at(cosine, corner, np.einsum("ij,ij->i", normal, total[corner]) / np.maximum(length[corner], 1e-300))
    bend, count = np.zeros(len(total)), np.zeros(len(total))
    for end in (0, 1):
        np.add.at(bend, creases.edges.vertices[:, end], creases.angles)
        np.add.at(count, creases.edges.vertices[:, end], creases.smooth & creases.between)
    return np.flatnonzero((cosine < np.cos(TIP_TURN)) & (bend > 0) & (count >= 3))


def _nearest_edge(sharp: Sharp, edges: IntArray, place: FloatArray) -> tuple[float | None, FloatArray]:
    """Exponent of the sharp edge nearest to a place, and its nearest point."""
    start = sharp.ends[edges, 0]
    along = sharp.ends[edges, 1] - start
    length2 = np.maximum(np.einsum("ij,ij->i", along, along), 1e-300)
    share = np.clip(np.einsum("ij,ij->i", place - start, along) / length2, 0.0, 1.0)
    points = start + share[:, None] * along
    nearest = int(np.argmin(np.linalg.norm(points - place, axis=1)))
    exponent = float(sharp.exponent[edges[nearest]])
    return (None if np.isnan(exponent) else exponent), points[nearest]


def _smooth_peak(
    panels: Panels, field: FloatArray, sizes: FloatArray, own: IntArray
) -> tuple[float, float, int, FloatArray]:
    """Peak, its spread by the fit, the panel and the place, on a conductor without sharp edges."""
    tree = cKDTree(panels.centroids[own])
    frames = panel_frames(panels.corners[own])
    count = 4
    shape = frames[:, POINTS[2] : POINTS[2] + 4 * count].reshape(-1, 4, count)
    best = (-np.inf, 0.0, int(own[0]), panels.centroids[own[0]])
    for panel in own[np.argsort(-field[own], kind="stable")[:CANDIDATES]]:
        radius = PATCH * sizes[panel]
        near = np.array(tree.query_ball_point(panels.centroids[panel], radius), dtype=np.int64)
        if len(near) < FITTED:
            distances, nearest = tree.query(panels.centroids[panel], k=[*range(1, min(FITTED, len(own)) + 1)])
            near, radius = np.asarray(nearest, dtype=np.int64), float(np.max(distances))
        near = near[panels.normals[own[near]] @ panels.normals[panel] > SAME_SIDE]
        found = _fit(panels, field, shape[near], own[near], int(panel), radius)
        if found[0] > best[0]:
            best = found
    return best


def _fit(
    panels: Panels, field: FloatArray, shape: FloatArray, rows: IntArray, panel: int, radius: float
) -> tuple[float, float, int, FloatArray]:
    """Quadratic through the means over the panels around one; its value and spread there."""
    centre, normal = panels.centroids[panel], panels.normals[panel]
    one = panels.corners[panel, 1] - panels.corners[panel, 0]
    one = one / np.linalg.norm(one)
    two = np.cross(normal, one)
    points = (shape[:, :3].transpose(0, 2, 1) - centre) / radius
    weight = shape[:, 3] / shape[:, 3].sum(axis=1)[:, None]
    u, v = points @ one, points @ two
    columns = np.stack([np.ones_like(u), u, v, u * u, u * v, v * v], axis=2)
    means = np.einsum("pq,pqc->pc", weight, columns)
    strength = np.sqrt(panels.areas[rows])
    if len(rows) < 8:
        highest = int(rows[np.argmax(field[rows])])
        return float(field[highest]), float(np.ptp(field[rows])), highest, panels.centroids[highest]
    c, *_ = np.linalg.lstsq(means * strength[:, None], field[rows] * strength, rcond=None)
    rest = field[rows] - means @ c
    scatter = float(np.sqrt(np.average(rest**2, weights=panels.areas[rows])))
    curve = np.array([[2.0 * c[3], c[4]], [c[4], 2.0 * c[5]]])
    top = np.zeros(2)
    if np.all(np.linalg.eigvalsh(curve) < 0.0):
        top = np.linalg.solve(curve, -c[1:3])
        if np.linalg.norm(top) > TOP_WITHIN:
            return float(c[0]), scatter, panel, centre
    value = float(c[0] + c[1:3] @ top + 0.5 * top @ curve @ top)
    drop = 1.0 - float(field[rows].min()) / max(value, 1e-300)
    spread = float(np.linalg.norm([scatter, FIT_SHARE * (value - field[panel]), UNRESOLVED * value * drop**2]))
    return value, spread, panel, centre + radius * (top[0] * one + top[1] * two)


def _relative_spread(charges: StatedCharges, top: int) -> float:
    """Relative spread of the density at a panel by the uncertain charge and by the facets."""
    density = float(charges.density[top])
    parts = [
        charges.margin[top] - density,
        charges.galerkin[top] - density,
        FACETS_SHARE * (charges.faceted[top] - density),
    ]
    return float(np.linalg.norm(parts)) / max(abs(density), 1e-300)
