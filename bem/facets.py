"""Round parts: what their facets stand for, and what is not known about it.

A drawing's round part arrives as a polyhedron inscribed in the true surface. Where the edges say "meant smooth"
(:mod:`daraf.bem.creases`) the true surface lies a known small distance delta outside each facet. The panels are
moved onto its mean before the solve. Hadamard's variational formula gives, to first order, what that changes,

    dC_ij = (1/eps) int sigma_i sigma_j delta dS

(J. Hadamard, Mem. Acad. Sci. Paris 33 (1908) no. 4, from memory); a share of it is the uncertainty. At the rim of
a sheet, where sigma = K / sqrt(d) at the distance d, moving the rim outward by delta in the plane gives

    dC_ij = (pi / (2 eps)) oint K_i K_j delta ds,

which on the disc (K^2 = 8 eps^2 / (pi^2 a)) returns dC/da = 8 eps. This is added after the solve.
"""

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from .creases import Creases, corner_normals, facet_offsets
from .panels import Panels
from .regions import Regions
from .surface import Surface

__all__ = ["Facets", "facet_shift", "find_facets", "rim_factors"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

#: Expanded uncertainty (k = 2) as a share of the first-order change: of facets, where the relative change itself
#: is added for what is of second order, and of rims, whose coefficient is read off one panel. Measured with
#: ``scripts/coverage`` on the exact set.
FACET_SHARE, RIM_SHARE = 0.015, 0.15
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
    rim_ends : (n_rim, 2, 3) float, m
        Straight rim edges that stand for a round rim.
    rim_offset : (n_rim,) float, m
        Mean outward distance, in the plane of the sheet, of the round rim from each.
    rim_region : (n_rim,) int
    """

    offset: FloatArray
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
    return Facets(offset, ends, rim_offset, rim_region)


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


def move_facets(facets: Facets, panels: Panels) -> Panels:
    """Move every facet outward onto the mean of the smooth surface over it.

    Neighbouring facets then part by hairs, or cross by as much where the surface is hollow; constant charges do
    not mind.

    Parameters
    ----------
    facets : Facets
    panels : Panels

    Returns
    -------
    Panels
    """
    move = facets.offset[panels.region][:, None] * panels.normals
    return replace(panels, corners=panels.corners + move[:, None, :])


def facet_shift(
    facets: Facets, panels: Panels, density: FloatArray, weights: FloatArray, capacitance: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """What the rims of round sheets still add, and the uncertainty of all round parts, bare.

    Parameters
    ----------
    facets : Facets
    panels : Panels
        Moved by :func:`move_facets`.
    density : (n_panels, n_conductors) float
        Bare densities, the solution of ``A density = areas``: sigma = 4 pi eps density.
    weights : (n_conductors, m) float
        Combinations of conductors of which the second index is wanted.
    capacitance : (n_conductors,) float, m
        Self entries.

    Returns
    -------
    shift : (n_conductors, m) float, m
        Of the rims; multiply by 4 pi eps for farads.
    uncertainty : (n_conductors, m) float, m
        Expanded, k = 2: a share of the first-order change, without regard to sign; the share grows with the
        change, since what is left is of second order.
    """
    moved = 4.0 * np.pi * np.abs(facets.offset[panels.region]) * panels.areas
    rim = 2.0 * np.pi**2 * rim_factors(facets, panels)
    combined = density @ weights
    size, combined_size = np.abs(density), np.abs(combined)
    change = np.einsum("p,pi,pj->ij", moved, size, combined_size)
    relative = np.diag(np.einsum("p,pi,pj->ij", moved, size, size)) / capacitance
    share = FACET_SHARE + np.sqrt(relative[:, None] * np.max(relative * (weights.T != 0), axis=1)[None, :])
    rim_change = np.einsum("p,pi,pj->ij", np.abs(rim), size, combined_size)
    shift = np.einsum("p,pi,pj->ij", rim, density, combined)
    return shift, share * change + RIM_SHARE * rim_change
