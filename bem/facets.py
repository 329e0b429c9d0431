"""Round parts: what their facets stand for, and what is not known about it.

A drawing's round part arrives as a polyhedron inscribed in the true surface. Where the edges say "meant smooth"
(:mod:`daraf.bem.creases`) the true surface lies a known small distance delta outside each facet. The panels are
moved onto its mean before the solve. Hadamard's variational formula gives, to first order, what that changes,

    dC_ij = (1/eps) int sigma_i sigma_j delta dS

(J. Hadamard, Mem. Acad. Sci. Paris 33 (1908) no. 4, from memory); a share of it is the uncertainty. Rims and sharp
edges that stand for round ones are moved likewise, in the planes of their facets. At the rim of a sheet, where
sigma = K / sqrt(d) at the distance d, moving it outward by delta gives

    dC_ij = (pi / (2 eps)) oint K_i K_j delta ds,

which on the disc (K^2 = 8 eps^2 / (pi^2 a)) returns dC/da = 8 eps.
"""

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from .creases import (
    GREATEST_TURN,
    LEAST_TURN,
    SIMILAR_TURN,
    TANGENT_TURN,
    TANGENT_WIDTH,
    WIDE_TURN,
    Creases,
    corner_normals,
    find_creases,
    offsets_with_ends,
)
from .errors import InputError
from .frames import panel_frames
from .hidden import nearest_other
from .panels import Panels
from .regions import Regions
from .surface import Surface

__all__ = ["FACETS", "Facets", "facet_meaning", "facet_uncertainty", "find_facets", "greatest_turn", "move_facets"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

#: What facets may be said to mean.
FACETS = ("auto", "round", "as drawn")
#: Expanded uncertainty (k = 2) as a share of the first-order change by a facet.
FACET_SHARE = 0.004
#: To it is added this multiple of the square of the facet's depth per width, for what is of second order: of flat pairs
#: of triangles, where 2.0 was seen on tori of 8 to 16 sides and 1.5 on spheres of 6 rings, and of single triangles,
#: where it was 0.6 on spheres and spheroids.
DEPTH_SHARE, SINGLE_DEPTH_SHARE = 2.0, 0.8
#: Rims: likewise a share; their coefficient is read off one panel.
RIM_SHARE = 0.08
#: Near another conductor the facet's hollow counts once more, in second order: this multiple of its depth per gap. The
#: square of the depth varies over a triangle of a sphere by a tenth about its mean; both sides of the gap may be round.
GAP_SHARE = 0.2
#: Gaps beyond this multiple of the depth are wide: nothing is added.
WIDE_GAP = 30.0
#: Edges between single triangles of partly round bodies may stand for round ones if they turn by less than this, rad.
DOUBTFUL_TURN = np.radians(75.0)
#: So may those that turn more than the row they end, up to this ratio; the tip of a spheroid of 5 to 1 has 2.8.
DOUBTFUL_RATIO = 2.0 * SIMILAR_TURN
#: What rounding them would change counts this often: to first order it falls short where edges are steep. Measured on
#: spheroids of 4 to 1 and 5 to 1, an ellipsoid and tori of 6 to 10 sides: true over first order 0.6 to 1.4.
ROUNDER_SHARE = 1.5
#: Neighbouring turns of one round edge differ at most by this factor.
_RIM_SIMILAR = 2.5


@dataclass(frozen=True, eq=False)
class Facets:
    """Distances from the facets to the surface they stand for.

    Attributes
    ----------
    offset : (n_regions,) float, m
        Mean outward distance of the smooth surface from each flat region; zero where nothing is round.
    doubt : (n_regions,) float, m
        Distance that is not known: a share of the offset, and all of it where it is not sure that anything is round.
    edge_ends : (n_edges, 2, 3) float, m
        Straight edges, at rims or sharp, that stand for round ones; once for each region at the edge.
    edge_region : (n_edges,) int
    edge_out : (n_edges, 3) float
        Unit vector in the plane of the region, across the edge, out of the region.
    edge_offset : (n_edges,) float, m
        Mean distance of the round edge along that vector.
    edge_rim : (n_edges,) bool
        Whether the edge is the rim of a sheet.
    """

    offset: FloatArray
    doubt: FloatArray
    edge_ends: FloatArray
    edge_region: IntArray
    edge_out: FloatArray
    edge_offset: FloatArray
    edge_rim: BoolArray

    @property
    def any(self) -> bool:
        """Whether anything is round."""
        return bool(np.any(self.offset) or np.any(self.doubt)) or len(self.edge_offset) > 0


def facet_meaning(word: str) -> str:
    """Check what facets are said to mean.

    Parameters
    ----------
    word : str
        "auto": edges that turn gently in rows, by up to 35 degrees, stand for a smooth surface; "round": the same by
        up to 50 degrees; "as drawn" (or "true"): the facets are the part.

    Returns
    -------
    str
        One of `FACETS`.

    Raises
    ------
    InputError
        If it is none of these.
    """
    if word == "true":
        return "as drawn"
    if word not in FACETS:
        known = ", ".join(map(repr, FACETS))
        raise InputError(f"{word!r} does not say what facets are; write one of {known}")
    return word


def greatest_turn(meaning: str) -> float:
    """Edges that turn by more than this are sharp, rad; see `facet_meaning`."""
    return float(WIDE_TURN if meaning == "round" else GREATEST_TURN)


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
    offset, ending, total = _mean_offsets(surface, regions, creases)
    # rounding of the normals is no roundness
    size = np.sqrt(total)
    offset[np.abs(offset) < 1e-9 * size] = 0.0
    used = regions.triangle_region >= 0
    points = surface.vertices[surface.triangles]
    low, high = np.full((len(regions), 3), np.inf), np.full((len(regions), 3), -np.inf)
    of, corners = regions.triangle_region[used], points[used]
    np.minimum.at(low, of, corners.min(axis=1))
    np.maximum.at(high, of, corners.max(axis=1))
    # how deep the true surface lies over the narrow way across the facet
    depth = offset * np.linalg.norm(high - low, axis=1) / np.where(total > 0, total, 1.0)
    unsure = ending / np.maximum(np.abs(offset), 1e-300)
    second_order = np.where(np.diff(regions.starts) == 1, SINGLE_DEPTH_SHARE, DEPTH_SHARE)
    share = FACET_SHARE + second_order * depth**2 + np.minimum(unsure, 1.0)
    share += GAP_SHARE * np.abs(offset) / _gaps(surface, regions, np.abs(offset))
    doubt = share * np.abs(offset) + _if_rounder(surface, regions, creases, offset)
    return Facets(offset, doubt, *_round_edges(surface, regions, creases))


def _mean_offsets(surface: Surface, regions: Regions, creases: Creases) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Mean distance of the smooth surface from each region, what is not sure of it where it ends, and the area."""
    found = offsets_with_ends(surface, creases, corner_normals(surface, regions, creases))
    points = surface.vertices[surface.triangles]
    areas = 0.5 * np.linalg.norm(np.cross(points[:, 1] - points[:, 0], points[:, 2] - points[:, 0]), axis=1)
    used = regions.triangle_region >= 0
    sums = np.zeros((3, len(regions)))
    for row, values in zip(sums, (*found, np.ones(len(points))), strict=True):
        np.add.at(row, regions.triangle_region[used], (areas * values)[used])
    area = np.where(sums[2] > 0, sums[2], 1.0)
    return sums[0] / area, sums[1] / area, sums[2]


def _if_rounder(surface: Surface, regions: Regions, creases: Creases, offset: FloatArray) -> FloatArray:
    """How far each region would move if steeper edges of the same bodies stood for round ones too, (n_regions,) m.

    A body whose facets turn gently here and steeply there, as round the rim of a flat ellipsoid, may be round all
    over; one without any smooth edge is taken as it is.
    """
    bent = creases.smooth & (np.abs(creases.angles) > LEAST_TURN)
    owner = surface.triangle_body[creases.edges.triangles[bent, 0]]
    partly = np.isin(regions.body, np.unique(owner))
    steep = creases.between & ~creases.smooth & (np.abs(creases.angles) < DOUBTFUL_TURN)
    if not steep.any() or not partly.any():
        return np.zeros(len(regions))
    # flat faces in a row that turn by more than "round" takes are a polygon: a hexagonal head is no cylinder
    rounder = find_creases(surface, regions, edges=creases.edges, greatest_turn=WIDE_TURN, similar_turn=DOUBTFUL_RATIO)
    # triangles that lie singly, not in flat pairs, come from a doubly curved surface however unevenly they turn
    single = (np.diff(regions.starts) == 1)[regions.triangle_region[creases.edges.triangles]].all(axis=1)
    rounder = replace(rounder, smooth=rounder.smooth | (steep & single))
    moved, _, _ = _mean_offsets(surface, regions, rounder)
    return np.where(partly, ROUNDER_SHARE * np.abs(moved - offset), 0.0)


def _gaps(surface: Surface, regions: Regions, depth: FloatArray) -> FloatArray:
    """Distance of each region's middle from the nearest other conductor, infinite where it is wide, (n_regions,) m."""
    gap = np.full(len(regions), np.inf)
    points = surface.vertices[surface.triangles]
    centres, conductor = points.mean(axis=1), surface.body_conductor[surface.triangle_body]
    reach = np.linalg.norm(points - centres[:, None], axis=2).max()
    hollow, of_region = np.flatnonzero(depth > 0), surface.body_conductor[regions.body]
    for number in range(surface.n_conductors if surface.n_conductors > 1 else 0):
        rows = hollow[of_region[hollow] == number]
        others = np.flatnonzero(conductor != number)
        if len(rows) == 0:
            continue
        # bounded, so that panels far from all others are told so at once
        furthest = reach + WIDE_GAP * float(depth[rows].max())
        nearest = cKDTree(centres[others]).query(regions.origins[rows], distance_upper_bound=furthest)[0]
        rows = rows[nearest - reach < WIDE_GAP * depth[rows]]
        if len(rows) == 0:
            continue
        frames = panel_frames(points[others][:, [0, 1, 2, 2]], largest_rule=0)
        distance, whose = np.empty(len(rows)), np.empty(len(rows), dtype=np.int64)
        owner = np.full(len(rows), number)
        middles, limits = np.ascontiguousarray(regions.origins[rows]), WIDE_GAP * depth[rows]
        nearest_other(middles, owner, limits, frames, conductor[others], distance, whose)
        gap[rows] = np.where(distance < limits, np.maximum(distance, depth[rows]), np.inf)
    return gap


def _round_edges(
    surface: Surface, regions: Regions, creases: Creases
) -> tuple[FloatArray, IntArray, FloatArray, FloatArray, BoolArray]:
    """Edges not meant smooth in chains that turn gently, steadily and alike, with the bulge of the round one."""
    edges = creases.edges
    sharp = np.flatnonzero(creases.rim | (creases.between & ~creases.smooth))
    ends = edges.vertices[sharp]
    (before, after), (previous, following) = _neighbours(ends)
    points = surface.vertices
    chord = points[ends[:, 1]] - points[ends[:, 0]]
    length = np.linalg.norm(chord, axis=1)
    into = _unit(points[ends[:, 0]] - points[before])
    along = _unit(chord)
    onward = _unit(points[after] - points[ends[:, 1]])
    first, second = along - into, onward - along
    share = _shares(ends, length, (previous, following), first, second)
    first, second = share[0][:, None] * first, share[1][:, None] * second
    size = np.linalg.norm(first, axis=1), np.linalg.norm(second, axis=1)
    # corners that turn by more are corners of the drawing
    gentle = 2.0 * np.sin(0.5 * creases.greatest_turn)
    alike = np.einsum("ij,ij->i", first, second) > 0.7 * size[0] * size[1]
    alike &= (size[0] < gentle) & (size[1] < gentle) & (size[0] > 1e-6) & (before >= 0) & (after >= 0)
    alike &= (size[0] < _RIM_SIMILAR * size[1]) & (size[1] < _RIM_SIMILAR * size[0])
    # an arc of curvature k over a chord c bulges by 2/3 of its sagitta k c^2 / 8 on average
    turn = np.arcsin(np.minimum(0.5 * size[0], 1.0)) + np.arcsin(np.minimum(0.5 * size[1], 1.0))
    bulge = -0.5 * (first + second) * (length / 12.0 / np.sinc(turn / np.pi))[:, None]
    found = []
    for slot, sign in ((0, 1.0), (1, -1.0)):
        triangle = edges.triangles[sharp, slot]
        region = np.where(triangle >= 0, regions.triangle_region[triangle], -1)
        rows = np.flatnonzero(alike & (region >= 0))
        out = sign * np.cross(along[rows], regions.normals[region[rows]])
        distance = np.einsum("ij,ij->i", out, bulge[rows])
        found.append((points[ends[rows]], region[rows], out, distance, creases.rim[sharp[rows]]))
    return tuple(np.concatenate(column) for column in zip(*found, strict=True))  # type: ignore[return-value]


def _neighbours(ends: IntArray) -> tuple[tuple[IntArray, IntArray], tuple[IntArray, IntArray]]:
    """The one other edge at the start and at the end of each edge; -1 unless there is just one.

    Returns its far vertex at both, and its number at both.
    """
    n = len(ends)
    vertex = ends.T.reshape(-1)
    far = ends[:, ::-1].T.reshape(-1)
    order = np.argsort(vertex, kind="stable")
    count = np.bincount(vertex)[vertex[order]] if n else np.zeros(0, np.int64)
    paired = order[count == 2]
    other, number = np.full(2 * n, -1, dtype=np.int64), np.full(2 * n, -1, dtype=np.int64)
    for one, two in ((paired[0::2], paired[1::2]), (paired[1::2], paired[0::2])):
        other[one], number[one] = far[two], two % n
    return (other[:n], other[n:]), (number[:n], number[n:])


def _shares(
    ends: IntArray,
    length: FloatArray,
    neighbours: tuple[IntArray, IntArray],
    first: FloatArray,
    second: FloatArray,
) -> tuple[FloatArray, FloatArray]:
    """How much of the turn at its start and end belongs to each edge: 1, half to either of two that are round.

    A straight side that an arc runs into at a tangent has none of it, and the arc's last chord has all, 2.
    """
    size = np.stack([np.linalg.norm(first, axis=1), np.linalg.norm(second, axis=1)])
    n = len(ends)
    straight = np.zeros((2, n), dtype=np.bool_)
    at = []
    for slot in (0, 1):
        other = neighbours[slot]
        here = np.where(ends[other, 0] == ends[:, slot], 0, 1)
        straight[slot] = (other >= 0) & (length > TANGENT_WIDTH * length[other])
        straight[slot] &= size[slot] < TANGENT_TURN * size[1 - here, other]
        at.append((here, other))
    # a chord of a curve that turns less and less is straight at neither end
    ongoing = np.einsum("ij,ij->i", first, second) > 0
    straight &= straight[::-1] | ~ongoing
    shares = [
        np.where(straight[slot], 0.0, np.where((other >= 0) & straight[here, other], 2.0, 1.0))
        for slot, (here, other) in enumerate(at)
    ]
    return shares[0], shares[1]


def _unit(vectors: FloatArray) -> FloatArray:
    length = np.linalg.norm(vectors, axis=1)
    return np.asarray(vectors / np.where(length > 0, length, 1.0)[:, None])


def _sides_on_edges(
    facets: Facets, panels: Panels, ends: FloatArray, chosen: BoolArray | None = None
) -> tuple[IntArray, IntArray, IntArray]:
    """Edges (of those chosen), panels and sides of panels that lie on them: three arrays of one length."""
    found: list[tuple[IntArray, IntArray, IntArray]] = []
    wanted = np.ones(len(ends), dtype=np.bool_) if chosen is None else chosen
    for region in np.unique(facets.edge_region[wanted]):
        rows = np.flatnonzero(panels.region == region)
        corners = panels.corners[rows]
        sides = np.roll(corners, -1, axis=1) - corners
        middles = corners + 0.5 * sides
        exists = np.linalg.norm(sides, axis=2) > 0
        for k in np.flatnonzero(wanted & (facets.edge_region == region)):
            a, chord = ends[k, 0], ends[k, 1] - ends[k, 0]
            along = np.clip((middles - a) @ chord / (chord @ chord), 0.0, 1.0)
            gap = np.linalg.norm(middles - (a + along[..., None] * chord), axis=2)
            row, side = np.nonzero((gap < 1e-5 * np.linalg.norm(chord)) & exists)
            found.append((np.full(len(row), k), rows[row], side))
    if not found:
        return (np.zeros(0, np.int64),) * 3
    edge, panel, side = (np.concatenate(column) for column in zip(*found, strict=True))
    return edge, panel, side


def move_facets(facets: Facets, panels: Panels) -> Panels:
    """Move every facet outward onto the mean of the smooth surface over it, and its round edges likewise.

    Neighbouring facets then part by hairs, or cross by as much where the surface is hollow; constant charges do
    not mind.

    Parameters
    ----------
    facets : Facets
    panels : Panels
        As they cover the flat regions.

    Returns
    -------
    Panels
    """
    corners = panels.corners.copy()
    edge, panel, side = _sides_on_edges(facets, panels, facets.edge_ends)
    step = facets.edge_offset[edge, None] * facets.edge_out[edge]
    end = (side + 1) % 4
    # a side between the two copies of a triangle's third corner has no length and is never met: move both copies
    for corner in (side, end):
        np.add.at(corners, (panel, corner), step)
    triangles = panels.n_corners == 3
    last = np.isin(np.arange(len(panels)), panel) & triangles
    moved_2 = corners[last, 2] - panels.corners[last, 2]
    moved_3 = corners[last, 3] - panels.corners[last, 3]
    corners[last, 2] = corners[last, 3] = panels.corners[last, 2] + moved_2 + moved_3
    corners += (facets.offset[panels.region][:, None] * panels.normals)[:, None, :]
    return replace(panels, corners=corners)


def facet_uncertainty(facets: Facets, panels: Panels, density: FloatArray, weights: FloatArray) -> FloatArray:
    """Uncertainty that the round parts leave, bare.

    Parameters
    ----------
    facets : Facets
    panels : Panels
        Moved by :func:`move_facets`, refined or not.
    density : (n_panels, n_conductors) float
        Bare densities, the solution of ``A density = areas``: sigma = 4 pi eps density.
    weights : (n_conductors, m) float
        Combinations of conductors of which the second index is wanted.

    Returns
    -------
    (n_conductors, m) float, m
        Expanded, k = 2: a share of the first-order change, without regard to sign; the share grows with the depth
        of the facets, since what is left is of second order. Multiply by 4 pi eps for farads.
    """
    moved = 4.0 * np.pi * facets.doubt[panels.region] * panels.areas
    combined = density @ weights
    size, combined_size = np.abs(density), np.abs(combined)
    change = np.einsum("p,pi,pj->ij", moved, size, combined_size)
    rim_change = np.einsum("p,pi,pj->ij", _rim_factors(facets, panels), size, combined_size)
    return np.asarray(change + RIM_SHARE * rim_change)


def _rim_factors(facets: Facets, panels: Panels) -> FloatArray:
    """Factor by which ``density_i density_j`` of each panel enters the first-order change by the rims, m3.

    A panel of width w along the rim with the mean density of K / sqrt(d) has K = sigma sqrt(w) / 2.
    """
    shift = facets.edge_offset[:, None] * facets.edge_out
    # the facets have moved along their normals as well
    normals = np.zeros((len(facets.offset), 3))
    normals[panels.region] = panels.normals
    shift += (facets.offset[:, None] * normals)[facets.edge_region]
    edge, panel, side = _sides_on_edges(facets, panels, facets.edge_ends + shift[:, None, :], facets.edge_rim)
    factor = np.zeros(len(panels))
    length = np.linalg.norm(panels.corners[panel, (side + 1) % 4] - panels.corners[panel, side], axis=1)
    width = panels.areas[panel] / length
    np.add.at(factor, panel, 0.5 * np.pi**2 * width * length * np.abs(facets.edge_offset[edge]))
    return factor
