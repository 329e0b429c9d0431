"""What the facets of round parts cost: the shift of the capacitances from flat to smooth surface.

A drawing's round part arrives as a polyhedron inscribed in the true surface. Where the edges say "meant smooth"
(:mod:`daraf.bem.creases`) the true surface lies a known small distance delta outside each facet, and Hadamard's
variational formula gives, to first order,

    dC_ij = (1/eps) int (sigma_i+ sigma_j+ - sigma_i- sigma_j-) delta dS

with the densities on the outer and the inner side; inside a solid conductor the latter vanish. On sheets, and on
closed surfaces that hold other bodies or are turned inside out, the two sides follow from the total density and
the normal field (J. Hadamard, Mem. Acad. Sci. Paris 33 (1908) no. 4, from memory). At the rim of a sheet, where
sigma = K / sqrt(d) at the distance d, moving the rim outward by delta in the plane gives

    dC_ij = (pi / (2 eps)) oint K_i K_j delta ds,

which on the disc (K^2 = 8 eps^2 / (pi^2 a)) returns dC/da = 8 eps.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .creases import Creases, corner_normals, facet_offsets
from .field import normal_field
from .frames import panel_frames
from .panels import Panels
from .regions import Regions
from .surface import Surface

__all__ = ["Facets", "facet_shift", "find_facets", "rim_factors"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

#: Expanded uncertainty (k = 2) of the shift as a share of it: solid bodies, sheets and enclosures (whose sides
#: are told apart by the field at the centroids only), rims (whose coefficient is read off one panel).
#: Measured with ``scripts/coverage`` on the exact set.
SOLID_SHARE, SHEET_SHARE, RIM_SHARE = 0.1, 0.3, 0.3
#: Rim corners that turn by more than this are corners of the drawing, rad.
_RIM_TURN = np.radians(35.0)
#: Neighbouring turns of one round rim differ at most by this factor.
_RIM_SIMILAR = 2.5


@dataclass(frozen=True, eq=False)
class Facets:
    """Distances from the facets to the surface they stand for.

    Attributes
    ----------
    offset : (n_regions,) float, m
        Mean outward distance of the smooth surface from each flat region; zero where nothing is round.
    two_sided : (n_bodies,) bool
        Whether both sides of the surface of a body may carry charge: sheets, enclosures, cavities.
    rim_ends : (n_rim, 2, 3) float, m
        Straight rim edges that stand for a round rim.
    rim_offset : (n_rim,) float, m
        Mean outward distance, in the plane of the sheet, of the round rim from each.
    rim_region : (n_rim,) int
    """

    offset: FloatArray
    two_sided: BoolArray
    rim_ends: FloatArray
    rim_offset: FloatArray
    rim_region: IntArray

    @property
    def any(self) -> bool:
        """Whether anything is round."""
        return bool(np.any(self.offset)) or len(self.rim_offset) > 0


def find_facets(surface: Surface, regions: Regions, creases: Creases) -> Facets:
    """Find the round parts of a surface and how far their facets lie from them.

    Parameters
    ----------
    surface : Surface
    regions : Regions
        From :func:`daraf.bem.regions.find_regions`.
    creases : Creases
        From :func:`daraf.bem.creases.find_creases`.

    Returns
    -------
    Facets
    """
    offsets = facet_offsets(surface, corner_normals(surface, regions, creases))
    points = surface.vertices[surface.triangles]
    areas = 0.5 * np.linalg.norm(np.cross(points[:, 1] - points[:, 0], points[:, 2] - points[:, 0]), axis=1)
    used = regions.triangle_region >= 0
    total, weighted = np.zeros(len(regions)), np.zeros(len(regions))
    np.add.at(total, regions.triangle_region[used], areas[used])
    np.add.at(weighted, regions.triangle_region[used], (areas * offsets)[used])
    offset = weighted / np.where(total > 0, total, 1.0)
    # rounding of the normals is no roundness
    size = np.sqrt(total)
    offset[np.abs(offset) < 1e-9 * size] = 0.0
    rims = np.flatnonzero(creases.rim)
    ends, rim_offset, rim_region = _round_rims(surface, regions, creases, rims)
    return Facets(offset, _two_sided(surface, creases, rims), ends, rim_offset, rim_region)


def _two_sided(surface: Surface, creases: Creases, rims: IntArray) -> BoolArray:
    """Bodies with a rim, turned inside out, or with another body inside."""
    two_sided = np.zeros(surface.n_bodies, bool)
    two_sided[surface.triangle_body[creases.edges.triangles[rims].max(axis=1)]] = True
    corners = surface.vertices[surface.triangles]
    first = np.array(
        [surface.vertices[surface.triangles[surface.triangle_body == b][0, 0]] for b in range(surface.n_bodies)]
    )
    for body in np.flatnonzero(~two_sided):
        own = corners[surface.triangle_body == body]
        own = own - own.reshape(-1, 3).mean(axis=0)
        volume = np.einsum("ij,ij->", own[:, 0], np.cross(own[:, 1], own[:, 2]))
        others = np.flatnonzero(np.arange(surface.n_bodies) != body)
        low, high = (
            corners[surface.triangle_body == body].min(axis=(0, 1)),
            corners[surface.triangle_body == body].max(axis=(0, 1)),
        )
        near = others[((first[others] > low) & (first[others] < high)).all(axis=1)]
        two_sided[body] = volume < 0 or any(
            abs(_turns(corners[surface.triangle_body == body] - first[other])) > 0.5 for other in near
        )
    return two_sided


def _turns(corners: FloatArray) -> float:
    """How often a closed mesh wraps around the origin (van Oosterom and Strackee 1983, summed over 4 pi)."""
    a, b, c = corners[:, 0], corners[:, 1], corners[:, 2]
    ra, rb, rc = (np.linalg.norm(v, axis=1) for v in (a, b, c))
    numerator = np.einsum("ij,ij->i", a, np.cross(b, c))
    dot = (np.einsum("ij,ij->i", p, q) for p, q in ((a, b), (b, c), (c, a)))
    ab, bc, ca = dot
    return float(np.sum(2.0 * np.arctan2(numerator, ra * rb * rc + ab * rc + bc * ra + ca * rb)) / (4.0 * np.pi))


def _round_rims(
    surface: Surface, regions: Regions, creases: Creases, rims: IntArray
) -> tuple[FloatArray, FloatArray, IntArray]:
    """Rim edges between two corners that turn gently, the same way and alike, within one flat region."""
    triangle = creases.edges.triangles[rims].max(axis=1)
    region = regions.triangle_region[triangle]
    keep = region >= 0
    rims, region = rims[keep], region[keep]
    start, end = creases.edges.vertices[rims].T
    leaving = {(int(r), int(v)): k for k, (r, v) in enumerate(zip(region, start, strict=True))}
    after = np.array([leaving.get((int(r), int(v)), -1) for r, v in zip(region, end, strict=True)], dtype=np.int64)
    direction = surface.vertices[end] - surface.vertices[start]
    length = np.linalg.norm(direction, axis=1)
    direction /= np.where(length > 0, length, 1.0)[:, None]
    normals = regions.normals[region]
    # turn at the end corner of each rim edge, positive where the outline is convex
    turn = np.zeros(len(rims))
    linked = after >= 0
    nxt = after[linked]
    cross = np.cross(direction[linked], direction[nxt])
    turn[linked] = np.arctan2(
        np.einsum("ij,ij->i", cross, normals[linked]),
        np.einsum("ij,ij->i", direction[linked], direction[nxt]),
    )
    before_turn = np.zeros(len(rims))
    before_turn[nxt] = turn[linked]
    similar = (turn * before_turn > 0) & (np.abs(turn) < _RIM_TURN) & (np.abs(before_turn) < _RIM_TURN)
    ratio = np.abs(turn) / np.where(before_turn != 0, np.abs(before_turn), 1.0)
    similar &= (ratio < _RIM_SIMILAR) & (ratio > 1.0 / _RIM_SIMILAR)
    # an arc that turns by t over its chord bulges by 2/3 of the sagitta, chord x t / 8, on average
    bulge = length * 0.5 * (turn + before_turn) / 12.0
    ends = np.stack([surface.vertices[start], surface.vertices[end]], axis=1)
    return ends[similar], bulge[similar], region[similar]


def rim_factors(facets: Facets, panels: Panels) -> FloatArray:
    """Factor by which ``sigma_i sigma_j`` of each panel enters the rim term: ``w/4 x length x offset``.

    A panel of width w along the rim with the mean density of K / sqrt(d) has K = sigma sqrt(w) / 2.

    Returns
    -------
    (n_panels,) float, m3
    """
    factor = np.zeros(len(panels))
    for region in np.unique(facets.rim_region):
        rows = np.flatnonzero(panels.region == region)
        corners = panels.corners[rows]
        sides = np.roll(corners, -1, axis=1) - corners
        lengths = np.linalg.norm(sides, axis=2)
        middles = corners + 0.5 * sides
        for k in np.flatnonzero(facets.rim_region == region):
            a, b = facets.rim_ends[k]
            chord = b - a
            along = np.clip((middles - a) @ chord / (chord @ chord), 0.0, 1.0)
            gap = np.linalg.norm(middles - (a + along[..., None] * chord), axis=2)
            on_rim = (gap < 1e-6 * np.linalg.norm(chord)) & (lengths > 0)
            row, side = np.nonzero(on_rim)
            length = lengths[row, side]
            width = panels.areas[rows[row]] / length
            np.add.at(factor, rows[row], 0.25 * width * length * facets.rim_offset[k])
    return factor


def facet_shift(
    facets: Facets, panels: Panels, density: FloatArray, weights: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """First-order shift of the capacitance matrix from the facets to the smooth surface, bare.

    Parameters
    ----------
    facets : Facets
    panels : Panels
    density : (n_panels, n_conductors) float
        Bare densities, the solution of ``A density = areas``: sigma = 4 pi eps density.
    weights : (n_conductors, m) float
        Combinations of conductors of which the second index is wanted.

    Returns
    -------
    shift : (n_conductors, m) float, m
        Multiply by 4 pi eps for farads.
    uncertainty : (n_conductors, m) float, m
        Expanded, k = 2: a share of each panel's part without regard to its sign.
    """
    each = 4.0 * np.pi * facets.offset[panels.region] * panels.areas
    # sigma_i+ sigma_j+ - sigma_i- sigma_j- = sigma_i mean_j + mean_i sigma_j; a solid body has mean = sigma / 2
    mean = 0.5 * density
    rows = np.flatnonzero((each != 0) & facets.two_sided[panels.body])
    if len(rows):
        centre = panels.corners.reshape(-1, 3).mean(axis=0)
        found = np.empty((len(rows), density.shape[1]))
        frames = panel_frames(panels.corners - centre)
        normal_field(panels.centroids[rows] - centre, panels.normals[rows], frames, density, found)
        mean[rows] = found / (4.0 * np.pi)
    rim = 2.0 * np.pi**2 * rim_factors(facets, panels)
    shift = np.zeros((density.shape[1], weights.shape[1]))
    uncertainty = np.zeros_like(shift)
    solid = ~facets.two_sided[panels.body]
    for factor, share, one, two in (
        (np.where(solid, each, 0.0), SOLID_SHARE, density, mean),
        (np.where(solid, 0.0, each), SHEET_SHARE, density, mean),
        (rim, RIM_SHARE, density, 0.5 * density),
    ):
        for left, right in ((one, two), (two, one)):
            shift += np.einsum("p,pi,pj->ij", factor, left, right @ weights)
            uncertainty += share * np.einsum("p,pi,pj->ij", np.abs(factor), np.abs(left), np.abs(right @ weights))
    return shift, uncertainty
