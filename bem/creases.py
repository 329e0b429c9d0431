"""Which edges of a mesh are real creases, and which only approximate a smooth surface by facets.

A round part arrives as a polyhedron. An edge is taken as *meant smooth* if it turns gently and belongs to a
row of at least three edges with facets of similar width between them that turn the same way by similar
angles: strips of a cylinder, a sphere's triangles, a fillet. One chamfer between two flats is a pair of
edges and stays sharp. This is a judgement about intent; the limits below are common sense, not theory.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from .regions import MeshEdges, Regions, mesh_edges
from .surface import Surface

__all__ = [
    "GREATEST_TURN",
    "LEAST_TURN",
    "SIMILAR_TURN",
    "TANGENT_TURN",
    "TANGENT_WIDTH",
    "WIDE_TURN",
    "Creases",
    "corner_normals",
    "edge_angles",
    "facet_offsets",
    "find_creases",
    "offsets_with_ends",
    "smooth_edges",
]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

#: An edge that turns by more than this is sharp, rad.
GREATEST_TURN = np.radians(35.0)
#: The same where the user says that facets stand for round parts: down to eight facets a turn, rad.
WIDE_TURN = np.radians(50.0)
#: Edges that turn by less than this are flat, rad.
LEAST_TURN = 1e-3
#: Neighbouring turns of one smooth surface differ at most by this factor.
SIMILAR_TURN = 2.5
#: Neighbouring facets of one smooth surface differ in width at most by this factor.
SIMILAR_WIDTH = 3.0
#: A facet so many times wider than its smooth neighbour is a flat face that a fillet runs into.
FLAT_WIDTH = 6.0
#: Where two facets of a surface of even curvature meet, it turns by the mean of their arcs: at a narrow facet, by more
#: toward a wide one than toward another narrow one. Where a fillet or a dome runs into a flat face or a straight strip
#: it turns by half as much. Between half and 1.25, for facets at least so many times wider:
TANGENT_TURN, TANGENT_WIDTH = 0.8, 1.5
#: Two unit vectors are one direction if the smaller eigenvalue of their sum of squares is below this share of the
#: larger: at the corners of a polygon of 700 sides, far above the rounding of single precision.
SAME_DIRECTION = 1e-5
#: Cosine of the largest angle between the turning axes of consecutive edges.
SAME_AXIS = 0.3
#: Where the normal leaves a facet's by more than this many of its greatest turns, as at the tip of a cone,
#: there is no smooth surface and the facet's normal is taken.
TIP = 1.5
#: Share of what a facet's distance owes to the edges that run inward from a sharp edge, or from a rim, which is not
#: sure: the law of the charge is that of a straight edge with flat sides. Measured on lenses of 90 to 160 degrees,
#: hemispheres and bowls: 0.17 and 0.01 at most.
END_DOUBT, RIM_DOUBT = 0.2, 0.02
#: Regions with more edges than this are no strips.
MOST_SIDES = 64


@dataclass(frozen=True, eq=False)
class Creases:
    """Edges of a surface, how they turn and whether they are meant smooth.

    Attributes
    ----------
    edges : MeshEdges
    angles : (n_edges,) float, rad
        Turn of the outward normal across the edge, positive if convex; zero inside a region, on rims and
        where the mesh branches.
    between : (n_edges,) bool
        Two different regions meet consistently.
    rim : (n_edges,) bool
        Only one triangle: edge of an open sheet.
    branching : (n_edges,) bool
        More than two triangles, or two of opposite orientation.
    smooth : (n_edges,) bool
        Meant smooth (or flat); never true on rims and branching edges.
    flat_end : (n_edges, 2) bool
        The first or second facet of the edge is a flat face into which the smooth surface runs.
    greatest_turn : float, rad
        Edges that turn by more were taken as sharp.
    """

    edges: MeshEdges
    angles: FloatArray
    between: BoolArray
    rim: BoolArray
    branching: BoolArray
    smooth: BoolArray
    flat_end: BoolArray
    greatest_turn: float = GREATEST_TURN


def edge_angles(surface: Surface, regions: Regions, *, edges: MeshEdges | None = None) -> FloatArray:
    """Signed turn of the outward normal across every edge.

    Parameters
    ----------
    surface : Surface
    regions : Regions
    edges : MeshEdges, optional
        ``mesh_edges(surface.triangles)`` if known already.

    Returns
    -------
    (n_edges,) float, rad
        Positive if convex. Zero inside a region, on rims, where the mesh branches and beside degenerate
        triangles.
    """
    edges = mesh_edges(surface.triangles) if edges is None else edges
    sides = regions.triangle_region[edges.triangles]
    between = edges.consistent & (sides >= 0).all(axis=1) & (sides[:, 0] != sides[:, 1])
    one, two = regions.normals[sides[between, 0]], regions.normals[sides[between, 1]]
    ends = surface.vertices[edges.vertices[between]]
    along = ends[:, 1] - ends[:, 0]
    along /= np.linalg.norm(along, axis=1)[:, None]
    angles = np.zeros(len(sides))
    sine = np.einsum("ij,ij->i", np.cross(one, two), along)
    angles[between] = np.arctan2(sine, np.einsum("ij,ij->i", one, two))
    return angles


def _region_moments(surface: Surface, regions: Regions) -> FloatArray:
    """Second moments of area about the centroid per area, (n_regions, 3, 3) m2."""
    used = regions.triangle_region >= 0
    of = regions.triangle_region[used]
    points = surface.vertices[surface.triangles[used]] - regions.origins[of][:, None]
    areas = 0.5 * np.linalg.norm(np.cross(points[:, 1] - points[:, 0], points[:, 2] - points[:, 0]), axis=1)
    total = points.sum(axis=1)
    tensor = np.einsum("tki,tkj->tij", points, points) + total[:, :, None] * total[:, None, :]
    moments, weight = np.zeros((len(regions), 3, 3)), np.zeros(len(regions))
    np.add.at(moments, of, tensor * (areas / 12)[:, None, None])
    np.add.at(weight, of, areas)
    return np.asarray(moments / np.maximum(weight, 1e-300)[:, None, None])


def find_creases(
    surface: Surface,
    regions: Regions,
    *,
    edges: MeshEdges | None = None,
    greatest_turn: float = GREATEST_TURN,
    similar_turn: float = SIMILAR_TURN,
) -> Creases:
    """Classify all edges of a surface.

    Parameters
    ----------
    surface : Surface
    regions : Regions
    edges : MeshEdges, optional
        ``mesh_edges(surface.triangles)`` if known already.
    greatest_turn : float, rad
        Edges that turn by more are sharp.
    similar_turn : float
        Greatest ratio of neighbouring turns of one smooth surface.

    Returns
    -------
    Creases
    """
    edges = mesh_edges(surface.triangles) if edges is None else edges
    angles = edge_angles(surface, regions, edges=edges)
    sides = regions.triangle_region[edges.triangles]
    between = edges.consistent & (sides >= 0).all(axis=1) & (sides[:, 0] != sides[:, 1])
    gentle = np.flatnonzero(between & (np.abs(angles) < greatest_turn))
    smooth = np.zeros(len(angles), bool)
    flat_end = np.zeros((len(angles), 2), bool)
    if len(gentle):
        chosen, flats = _rows_of_edges(surface, regions, edges, gentle, angles[gentle], similar_turn)
        smooth[gentle] = chosen
        flat_end[gentle] = flats
    smooth |= edges.consistent & (np.abs(angles) <= LEAST_TURN) & (sides >= 0).all(axis=1)
    rim = edges.count == 1
    return Creases(edges, angles, between, rim, ~rim & ~edges.consistent, smooth, flat_end, greatest_turn)


def _rows_of_edges(
    surface: Surface, regions: Regions, edges: MeshEdges, gentle: IntArray, angles: FloatArray, similar_turn: float
) -> tuple[BoolArray, BoolArray]:
    """Find the edges that belong to a row of three; also which of their facets are flats at its end."""
    n = len(gentle)
    sides = regions.triangle_region[edges.triangles[gentle]]
    ends = surface.vertices[edges.vertices[gentle]]
    along = ends[:, 1] - ends[:, 0]
    along /= np.linalg.norm(along, axis=1)[:, None]
    inward = np.cross(regions.normals[sides], along[:, None, :])
    spread = np.einsum("nsi,nsij,nsj->ns", inward, _region_moments(surface, regions)[sides], inward)
    widths = np.sqrt(12 * np.maximum(spread, 0))  # exact for a rectangle
    # Side s = 2 e + (0 or 1); `along` seen from the second facet runs the other way.
    facet = _join_over_diagonals(sides, np.abs(angles), np.diff(regions.starts))
    home, beyond = facet[sides].reshape(-1), facet[sides[:, ::-1]].reshape(-1)
    axis = np.stack([along, -along], axis=1).reshape(-1, 3)
    turn = np.repeat(np.where(np.abs(angles) > 1e-12, angles, 1e-12), 2)
    one, two = _pairs_within(home)
    different = (beyond[one] != beyond[two]) & (home[one] != beyond[one]) & (home[two] != beyond[two])
    one, two = one[different], two[different]
    ratio = np.abs(turn[one] / turn[two])
    cosine = np.einsum("ij,ij->i", axis[one], axis[two])
    fits = (turn[one] * turn[two] > 0) & (ratio < similar_turn) & (ratio > 1 / similar_turn)
    fits &= cosine < -SAME_AXIS
    continues = np.zeros(2 * n, bool)
    continues[one[fits]] = True
    proportion = widths[:, 0] / np.maximum(widths[:, 1], 1e-300)
    even = (proportion < SIMILAR_WIDTH) & (proportion > 1 / SIMILAR_WIDTH)
    core = continues.reshape(n, 2).all(axis=1) & even
    smooth = core.copy()
    smooth[two[fits & core[one // 2]] // 2] = True
    follows = _follow(sides, axis, turn, smooth)
    wider = np.stack([proportion, 1 / np.maximum(proportion, 1e-300)], axis=1)
    limit = np.where(continues.reshape(n, 2), FLAT_WIDTH, SIMILAR_WIDTH)
    straight = wider > limit
    straight |= _tangent(one[fits], two[fits], turn, wider)
    return smooth | follows, smooth[:, None] & straight


def _tangent(one: IntArray, two: IntArray, turn: FloatArray, wider: FloatArray) -> BoolArray:
    """Sides of edges on which a wide facet is straight across, (n_edges, 2): the round one runs into it at a tangent.

    `one` and `two` are sides, 2 e + (0 or 1), at opposite ends of the same facet between which the surface turns on.
    """
    onward = np.zeros(len(turn))
    np.maximum.at(onward, one, np.abs(turn[two]))
    beyond = onward.reshape(-1, 2)[:, ::-1]
    halves = np.abs(turn).reshape(-1, 2) < TANGENT_TURN * beyond
    found = (halves & (wider > TANGENT_WIDTH)).reshape(-1)
    # a facet in a row that turns less and less is straight at neither end
    doubted = np.zeros(len(turn), bool)
    doubted[one[~found[two]]] = True
    return np.asarray((found & ~doubted).reshape(-1, 2))


def _join_over_diagonals(sides: IntArray, turns: FloatArray, sizes: IntArray) -> IntArray:
    """Join triangular facets in pairs across an edge much flatter than the other edges of both.

    A doubly curved surface comes as a grid of nearly flat quadrilaterals, each cut by a diagonal.
    `sizes` counts the triangles of each region; returns the number of the joined facet per region.
    """
    edge = np.repeat(np.arange(len(sides)), 2)
    home = sides.reshape(-1)
    n_regions = len(sizes)
    steepest = np.zeros(n_regions)
    np.maximum.at(steepest, home, turns[edge])
    order = np.lexsort((turns[edge], home))
    first = np.flatnonzero(np.r_[True, np.diff(home[order]) != 0])
    flattest = np.full(n_regions, -1, np.int64)
    flattest[home[order[first]]] = edge[order[first]]
    number = np.arange(len(sides))
    mutual = (flattest[sides] == number[:, None]).all(axis=1)
    mutual &= (sizes[sides] == 1).all(axis=1)
    mutual &= turns * SIMILAR_TURN < steepest[sides].min(axis=1)
    facet = np.arange(n_regions)
    facet[sides[mutual, 1]] = sides[mutual, 0]
    return facet


def _follow(sides: IntArray, axis: FloatArray, turn: FloatArray, smooth: BoolArray) -> BoolArray:
    """Edges that turn no more than the smooth ones of similar direction beside them, on both facets.

    Triangles of one smooth surface turn unevenly, down to nothing across the diagonal of a flat pair.
    """
    one, two = _pairs_within(sides.reshape(-1))
    cosine = np.einsum("ij,ij->i", axis[one], axis[two])
    beside = smooth[two // 2] & (np.abs(cosine) > SAME_AXIS)
    greatest = np.zeros(len(turn))
    np.maximum.at(greatest, one[beside], np.abs(turn[two[beside]]))
    return np.asarray(np.abs(turn[::2]) <= SIMILAR_TURN * greatest.reshape(-1, 2).min(axis=1))


def _pairs_within(group: IntArray) -> tuple[IntArray, IntArray]:
    """All ordered pairs of different members of the same group; groups with too many members are skipped."""
    order = np.argsort(group, kind="stable")
    _, first, size = np.unique(group[order], return_index=True, return_counts=True)
    ones, twos = [], []
    for k in np.unique(size):
        if k < 2 or k > MOST_SIDES:
            continue
        members = order[first[size == k][:, None] + np.arange(k)]
        for shift in range(1, int(k)):
            ones.append(members.reshape(-1))
            twos.append(np.roll(members, -shift, axis=1).reshape(-1))
    if not ones:
        return np.zeros(0, np.int64), np.zeros(0, np.int64)
    return np.concatenate(ones), np.concatenate(twos)


def smooth_edges(surface: Surface, regions: Regions) -> BoolArray:
    """Whether each edge of ``mesh_edges(surface.triangles)`` is meant smooth, (n_edges,) bool."""
    return find_creases(surface, regions).smooth


def corner_normals(surface: Surface, regions: Regions, creases: Creases) -> FloatArray:
    """Estimate normals of the smooth surface at the corners of the triangles.

    The facets around a vertex are grouped across edges that are not sharp. The normal of a group is the sum
    of region normals weighted by sin(angle) / (product of the two sides), which is exact on a sphere:
    N. Max, "Weights for computing vertex normals from facet normals", J. Graphics Tools 4 (2) (1999) 1.
    Where a fillet or a dome runs into a flat face or a straight strip the normal is made perpendicular to the direction
    in which that is straight: to the generator of a cylinder, to both sides of a flat face's corner.

    Parameters
    ----------
    surface : Surface
    regions : Regions
    creases : Creases

    Returns
    -------
    (n_triangles, 3, 3) float
        Unit normal at corner k of each triangle; the region's normal where no smooth surface meets and at
        tips of cones.
    """
    triangles, edges = surface.triangles, creases.edges
    n = len(triangles)
    usable = regions.triangle_region >= 0
    facet = np.where(usable[:, None], regions.normals[regions.triangle_region], 0.0)
    linked = np.flatnonzero(creases.smooth & edges.consistent)
    one, two = _facing_corners(triangles, edges, linked)
    graph = coo_array((np.ones(len(one)), (one, two)), shape=(3 * n, 3 * n))
    n_groups, group = connected_components(graph, directed=False)
    points = surface.vertices[triangles]
    to_next, to_last = np.roll(points, -1, axis=1) - points, np.roll(points, 1, axis=1) - points
    product = (to_next**2).sum(axis=2) * (to_last**2).sum(axis=2)
    weight = np.linalg.norm(np.cross(to_next, to_last), axis=2) / np.maximum(product, 1e-300)
    weight[~usable] = 0.0
    sums = np.zeros((n_groups, 3))
    np.add.at(sums, group, (weight[:, :, None] * facet[:, None, :]).reshape(-1, 3))
    _straighten(sums, group, surface, regions, creases)
    length = np.linalg.norm(sums, axis=1)
    result = (sums / np.where(length > 0, length, 1.0)[:, None])[group].reshape(n, 3, 3)
    steepest = np.zeros(len(regions))
    both = regions.triangle_region[edges.triangles[linked]]
    np.maximum.at(steepest, both.reshape(-1), np.repeat(np.abs(creases.angles[linked]), 2))
    away = 2 * np.arcsin(np.minimum(0.5 * np.linalg.norm(result - facet[:, None, :], axis=2), 1.0))
    lost = (length[group] <= 0).reshape(n, 3)
    lost |= away > TIP * steepest[regions.triangle_region][:, None] + LEAST_TURN
    return np.where(lost[:, :, None], facet[:, None, :], result)


def _facing_corners(triangles: IntArray, edges: MeshEdges, linked: IntArray) -> tuple[IntArray, IntArray]:
    """Corner numbers (3 t + k) on the two sides of the given edges, at both ends of each."""
    pairs = []
    for end in (0, 1):
        vertex = edges.vertices[linked, end]
        sides = edges.triangles[linked].T
        pairs.append([3 * t + np.argmax(triangles[t] == vertex[:, None], axis=1) for t in sides])
    return np.concatenate([p[0] for p in pairs]), np.concatenate([p[1] for p in pairs])


def _straighten(sums: FloatArray, group: IntArray, surface: Surface, regions: Regions, creases: Creases) -> None:
    """Take from the sums of normals, (n_groups, 3), what is not perpendicular to straight directions at their vertex.

    `group` numbers the groups of corners 3 t + k.
    """
    edge, side = np.nonzero(creases.flat_end)
    if len(edge) == 0:
        return
    triangle, ends = creases.edges.triangles[edge, side], creases.edges.vertices[edge]
    along = surface.vertices[ends[:, 1]] - surface.vertices[ends[:, 0]]
    across = np.cross(regions.normals[regions.triangle_region[triangle]], along)
    across /= np.linalg.norm(across, axis=1)[:, None]
    straight = np.zeros((len(sums), 3, 3))
    for end in (0, 1):
        corner = np.argmax(surface.triangles[triangle] == ends[:, end, None], axis=1)
        np.add.at(straight, group[3 * triangle + corner], across[:, :, None] * across[:, None, :])
    bound = np.flatnonzero(straight.any(axis=(1, 2)))
    strength, axes = np.linalg.eigh(straight[bound])
    # one direction is left free whatever the mesh says
    free = strength <= np.maximum(strength[:, :1], SAME_DIRECTION * strength[:, 2:])
    sums[bound] = np.einsum("gik,gk,gjk,gj->gi", axes, free, axes, sums[bound])


def facet_offsets(surface: Surface, normals: FloatArray) -> FloatArray:
    """Mean outward distance of the smooth surface from each flat triangle.

    A quadratic over the triangle that vanishes at the corners has the mean of its three mid-edge values; at
    the middle of an edge e from corner i to j the smooth surface lies e.(n_j - n_i) / 8 outside (circular
    arc of small angle).

    Parameters
    ----------
    surface : Surface
    normals : (n_triangles, 3, 3) float
        From `corner_normals`.

    Returns
    -------
    (n_triangles,) float, m
        Negative where the surface is concave.
    """
    first, second = _half_turns(surface, normals)
    return np.asarray((first + second).sum(axis=1) / 24)


def offsets_with_ends(surface: Surface, creases: Creases, normals: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Distance of the smooth surface from each flat triangle as far as the charge feels it.

    As `facet_offsets`, but where the smooth surface ends, at a sharp edge or a rim, the normal at the end knows one
    side only: along an edge that runs inward from there the other half of the turn is taken twice. Charge crowds at
    the end, where the surface does not lie outside the facet. Its square goes as x^p with the distance x, with
    p = -2 turn/(pi + turn) at a sharp edge; at a rim the difference of the squares on both sides goes as x^(-1/2).
    The mean of x (1 - x) with that weight is 6 (1 + p)/((2 + p)(3 + p)) of the plain one.

    Returns
    -------
    offset : (n_triangles,) float, m
    doubt : (n_triangles,) float, m
        What is not sure of it, for the edges that run inward from an end: `END_DOUBT` or `RIM_DOUBT` of their part.
    """
    turn = np.maximum(creases.angles, 0.0)
    power = np.where(creases.rim, -0.5, -2.0 * turn / (np.pi + turn))
    weight = 6.0 * (1.0 + power) / ((2.0 + power) * (3.0 + power))
    sharp = creases.rim | (creases.between & ~creases.smooth)
    of_vertex = np.full(len(surface.vertices), np.inf)
    np.minimum.at(of_vertex, creases.edges.vertices[sharp].reshape(-1), np.repeat(weight[sharp], 2))
    doubt = np.full(len(surface.vertices), END_DOUBT)
    doubt[creases.edges.vertices[creases.rim]] = RIM_DOUBT
    here = of_vertex[surface.triangles]
    there = np.roll(here, -1, axis=1)
    first, second = _half_turns(surface, normals)
    leaves, arrives = np.isfinite(here) & ~np.isfinite(there), np.isfinite(there) & ~np.isfinite(here)
    # the normal at the end turns with the surface along the end, not inward: that half is all that the other half has
    # in excess of it
    known, inward = np.where(arrives, second, first), np.where(arrives, first - second, second - first)
    inward = 2.0 * np.where(leaves | arrives, inward * np.where(leaves, here, np.where(arrives, there, 0.0)), 0.0)
    total = np.where(leaves | arrives, 2.0 * known + inward, first + second)
    sure = doubt[surface.triangles]
    unsure = np.abs(inward) * np.where(leaves, sure, np.roll(sure, -1, axis=1))
    return total.sum(axis=1) / 24, unsure.sum(axis=1) / 24


def _half_turns(surface: Surface, normals: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Edge times the turn of the normal from its first corner to the facet, and on to its second, (n_triangles, 3)."""
    points = surface.vertices[surface.triangles]
    along = np.roll(points, -1, axis=1) - points
    own = np.cross(along[:, 0], along[:, 1])
    length = np.linalg.norm(own, axis=1)
    own = (own / np.where(length > 0, length, 1.0)[:, None])[:, None, :]
    first = np.einsum("tki,tki->tk", along, own - normals)
    second = np.einsum("tki,tki->tk", along, np.roll(normals, -1, axis=1) - own)
    return first, second
