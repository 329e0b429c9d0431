"""Flat regions of a triangle mesh: connected coplanar triangles, however badly shaped they are.

A triangle mesh from a drawing covers each flat face with arbitrary triangles, many of them slivers whose
own normal is rounding noise. Regions therefore grow from the best shaped triangle, and a sliver joins by
the distance of its corners from the plane, not by its normal. Distances are measured from the plane of the
seed, so a region cannot creep around a gently curved surface.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .errors import InputError
from .solution import Notice
from .surface import Surface

__all__ = ["MeshEdges", "Regions", "find_regions", "mesh_edges"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

#: Rounding of a coordinate stored in single precision (binary STL), per unit of the largest coordinate.
SINGLE_PRECISION = 1.2e-7
#: The rounding is taken to be no larger than this share of a body's extent.
LARGEST_NOISE = 2e-5
#: Two well shaped triangles are coplanar only if their normals agree to this angle, rad.
SAME_NORMAL = 1e-3
#: A triangle whose normal is uncertain by more than this angle (rad) is a sliver: its normal is ignored.
MEANINGLESS_NORMAL = 0.1
#: How often a region that is not flat enough after fitting is grown anew.
REGROW_LIMIT = 4


@dataclass(frozen=True, eq=False)
class MeshEdges:
    """Edges of a triangle mesh.

    Attributes
    ----------
    vertices : (n_edges, 2) int
        Vertex indices; where a first triangle exists it runs along the edge in this direction.
    triangles : (n_edges, 2) int
        The two triangles of the edge, -1 where there is none (or more than two: see `count`).
    count : (n_edges,) int
        Number of triangles at the edge: 1 on the rim of a sheet, 2 inside, more where it branches.
    consistent : (n_edges,) bool
        Exactly two triangles run along the edge, in opposite directions.
    of_triangle : (n_triangles, 3) int
        Edge from corner k to corner k + 1; -1 for triangles that name a vertex twice.
    across : (n_triangles, 3) int
        Triangle across that edge, -1 unless the edge is consistent.
    """

    vertices: IntArray
    triangles: IntArray
    count: IntArray
    consistent: BoolArray
    of_triangle: IntArray
    across: IntArray


def mesh_edges(triangles: IntArray) -> MeshEdges:
    """Find the edges of a mesh and the triangles on either side.

    Parameters
    ----------
    triangles : (n, 3) int

    Returns
    -------
    MeshEdges
    """
    n = len(triangles)
    start = triangles.reshape(-1)
    end = np.roll(triangles, -1, axis=1).reshape(-1)
    owner = np.repeat(np.arange(n), 3)
    repeated = (triangles == np.roll(triangles, -1, axis=1)).any(axis=1)
    used = np.flatnonzero(~repeated[owner])
    base = np.int64(triangles.max()) + 1
    low, high = np.minimum(start, end), np.maximum(start, end)
    key = (low * base + high)[used]
    order = np.argsort(key, kind="stable")
    half = used[order]
    first = np.flatnonzero(np.r_[True, np.diff(key[order]) != 0]) if len(used) else np.zeros(0, np.int64)
    count = np.diff(np.r_[first, len(half)])
    number = np.repeat(np.arange(len(first)), count)
    of_half = np.full(3 * n, -1, np.int64)
    of_half[half] = number
    one = half[first] if len(first) else first
    two = np.full(len(first), -1, np.int64)
    pair = count == 2
    two[pair] = half[first[pair] + 1]
    consistent = pair.copy()
    consistent[pair] = start[one[pair]] == end[two[pair]]
    sides = np.full((len(first), 2), -1, np.int64)
    sides[:, 0] = owner[one]
    sides[pair, 1] = owner[two[pair]]
    across = np.full(3 * n, -1, np.int64)
    across[one[consistent]] = owner[two[consistent]]
    across[two[consistent]] = owner[one[consistent]]
    ends = np.stack([start[one], end[one]], axis=1)
    return MeshEdges(ends, sides, count, consistent, of_half.reshape(n, 3), across.reshape(n, 3))


@dataclass(frozen=True, eq=False)
class Regions:
    """Flat regions of a surface.

    Attributes
    ----------
    triangle_region : (n_triangles,) int
        Region of each triangle; -1 for degenerate triangles that no region absorbed.
    normals : (n_regions, 3) float
        Unit normal, out of the conductor.
    origins : (n_regions, 3) float, m
        A point of the fitted plane (centroid of the region).
    areas : (n_regions,) float, m2
        Sum of the projected triangle areas.
    body : (n_regions,) int
    order, starts : int arrays
        ``order[starts[r]:starts[r + 1]]`` are the triangles of region r.
    """

    triangle_region: IntArray
    normals: FloatArray
    origins: FloatArray
    areas: FloatArray
    body: IntArray
    order: IntArray
    starts: IntArray

    def __len__(self) -> int:
        return len(self.normals)

    def triangles_of(self, region: int) -> IntArray:
        """Triangles that make up a region, (n,) int."""
        return self.order[self.starts[region] : self.starts[region + 1]]


@dataclass(frozen=True, eq=False)
class _Shapes:
    """Per-triangle geometry that region growing needs."""

    vectors: FloatArray  # area vectors, (n, 3)
    normals: FloatArray  # unit, zero where the area is zero
    centroids: FloatArray
    heights: FloatArray  # smallest height, m
    noise: FloatArray  # rounding of a coordinate, m
    tolerance: FloatArray  # allowed distance from the plane, m
    uncertain: FloatArray  # angle by which rounding may turn the normal, rad


def position_noise(surface: Surface) -> tuple[FloatArray, FloatArray]:
    """Find the rounding of the coordinates and the overall size of each body.

    Parameters
    ----------
    surface : Surface

    Returns
    -------
    noise : (n_bodies,) float, m
        Single-precision rounding of the largest coordinate, but no more than a small share of the extent: a body
        so far off that its rounding is larger did not come from a single-precision file.
    extent : (n_bodies,) float, m
        Diagonal of the bounding box.
    """
    points = surface.vertices[surface.triangles]
    low = np.full((surface.n_bodies, 3), np.inf)
    high = -low
    np.minimum.at(low, surface.triangle_body, points.min(axis=1))
    np.maximum.at(high, surface.triangle_body, points.max(axis=1))
    extent = np.linalg.norm(high - low, axis=1)
    noise = SINGLE_PRECISION * np.maximum(np.abs(low), np.abs(high)).max(axis=1)
    return np.minimum(noise, LARGEST_NOISE * extent), extent


def _shapes(surface: Surface, flat_tolerance: float) -> _Shapes:
    points = surface.vertices[surface.triangles]
    vectors = 0.5 * np.cross(points[:, 1] - points[:, 0], points[:, 2] - points[:, 0])
    areas = np.linalg.norm(vectors, axis=1)
    normals = vectors / np.where(areas > 0, areas, 1.0)[:, None]
    longest = np.linalg.norm(np.roll(points, -1, axis=1) - points, axis=2).max(axis=1)
    heights = 2 * areas / np.where(longest > 0, longest, 1.0)
    noise, extent = position_noise(surface)
    tolerance = flat_tolerance * extent + 2 * noise
    of = surface.triangle_body
    uncertain = 4 * noise[of] / np.maximum(heights, 1e-300)
    return _Shapes(vectors, normals, points.mean(axis=1), heights, noise[of], tolerance[of], uncertain)


def find_regions(
    surface: Surface, *, flat_tolerance: float = 2e-6, edges: MeshEdges | None = None
) -> tuple[Regions, list[Notice]]:
    """Join coplanar neighbouring triangles to flat regions.

    Parameters
    ----------
    surface : Surface
    flat_tolerance : float
        Largest distance of a corner from the plane of its region, per diagonal of the body's bounding
        box; the single-precision rounding of the coordinates is allowed on top.
    edges : MeshEdges, optional
        Edges of ``surface.triangles``, if they are known already.

    Returns
    -------
    regions : Regions
    notices : list of Notice

    Raises
    ------
    InputError
        If no triangle is left.
    """
    edges = mesh_edges(surface.triangles) if edges is None else edges
    shapes = _shapes(surface, flat_tolerance)
    degenerate = (shapes.heights < 2 * shapes.noise) | (edges.of_triangle < 0).any(axis=1)
    if degenerate.all():
        raise InputError("surface: no triangle has an area that stands out of the rounding of its coordinates")
    joined = _joinable(surface, edges, shapes)
    region = np.full(len(surface.triangles), -1, np.int64)
    for attempt in range(REGROW_LIMIT):
        last = attempt == REGROW_LIMIT - 1
        _grow(surface, shapes, joined, degenerate, region, exact=attempt > 0, alone=last)
        outside = _outside(surface, shapes, region)
        if not outside.any():
            break
        region[outside] = -1  # these grow anew among themselves
    region = _connected(joined, region)
    notices = _degenerate_notices(surface, region)
    return _collect(surface, shapes, region), notices


def _joinable(surface: Surface, edges: MeshEdges, shapes: _Shapes) -> IntArray:
    """Neighbours that may lie in one plane: `across` with -1 where normals plainly differ."""
    near = edges.across.copy()
    owner = np.repeat(np.arange(len(near)), 3).reshape(near.shape)
    angle = np.linalg.norm(shapes.normals[owner] - shapes.normals[near], axis=2)
    unsure = shapes.uncertain[owner] + shapes.uncertain[near]
    limit = np.where(unsure > MEANINGLESS_NORMAL, np.inf, np.maximum(2 * SAME_NORMAL, unsure))
    foreign = surface.triangle_body[owner] != surface.triangle_body[near]
    near[(near < 0) | (angle > limit) | foreign] = -1
    return near


def _grow(
    surface: Surface,
    shapes: _Shapes,
    joined: IntArray,
    degenerate: BoolArray,
    region: IntArray,
    *,
    exact: bool,
    alone: bool,
) -> None:
    """Grow regions over all triangles that have none yet (in place).

    Parameters
    ----------
    exact : bool
        Take the seed's plane at its word. Otherwise the distance allowed grows with the distance from
        the seed as the rounding of the seed's corners tilts its plane.
    alone : bool
        Give up joining: every triangle left becomes a region of its own.
    """
    free = (region < 0) & ~degenerate
    number = int(region.max(initial=-1)) + 1
    seeds = free & ((joined >= 0).any(axis=1)) & (not alone)
    single = np.flatnonzero(free & ~seeds)
    region[single] = number + np.arange(len(single))
    number += len(single)
    candidates = np.flatnonzero(seeds)
    sure = shapes.uncertain[candidates] <= MEANINGLESS_NORMAL
    rank = np.lexsort((-shapes.heights[candidates], ~sure))
    points = surface.vertices[surface.triangles].reshape(-1, 9).tolist()
    normals, centroids = shapes.normals.tolist(), shapes.centroids.tolist()
    uncertain, tolerance = shapes.uncertain.tolist(), shapes.tolerance.tolist()
    tilt = (0.0 if exact else 2.0) * shapes.noise / np.maximum(shapes.heights, 1e-300)
    tilt_list, near, label = np.minimum(tilt, 0.01).tolist(), joined.tolist(), region.tolist()
    for seed in candidates[rank].tolist():
        if label[seed] >= 0:
            continue
        label[seed] = number
        plane = _Plane(normals[seed], centroids[seed], tolerance[seed], tilt_list[seed], uncertain[seed])
        stack = [seed]
        while stack:
            for t in near[stack.pop()]:
                if t >= 0 and label[t] < 0 and plane.holds(points[t], normals[t], uncertain[t]):
                    label[t] = number
                    stack.append(t)
        number += 1
    region[:] = label


@dataclass(slots=True)
class _Plane:
    """Plane of a seed triangle and the test whether another triangle lies in it."""

    normal: Sequence[float]
    origin: Sequence[float]
    tolerance: float
    tilt: float
    uncertain: float

    def holds(self, corners: Sequence[float], normal: Sequence[float], uncertain: float) -> bool:
        """Whether a triangle lies in the plane (scalar code: called once per triangle and neighbour)."""
        nx, ny, nz = self.normal
        unsure = uncertain + self.uncertain
        if uncertain <= MEANINGLESS_NORMAL:
            dx, dy, dz = normal[0] - nx, normal[1] - ny, normal[2] - nz
            if dx * dx + dy * dy + dz * dz > max(SAME_NORMAL, unsure) ** 2:
                return False
        ox, oy, oz = self.origin
        for k in (0, 3, 6):
            x, y, z = corners[k] - ox, corners[k + 1] - oy, corners[k + 2] - oz
            limit = self.tolerance
            if self.tilt:
                limit += self.tilt * (abs(x) + abs(y) + abs(z))
            if abs(nx * x + ny * y + nz * z) > limit:
                return False
        return True


def _fit(shapes: _Shapes, region: IntArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Fit unit normals, centroids and areas; the area vector is insensitive to slivers."""
    used = region >= 0
    n = int(region.max(initial=-1)) + 1
    vectors, moments, weight = np.zeros((n, 3)), np.zeros((n, 3)), np.zeros(n)
    absolute = np.linalg.norm(shapes.vectors, axis=1) + 1e-300
    np.add.at(vectors, region[used], shapes.vectors[used])
    np.add.at(moments, region[used], shapes.centroids[used] * absolute[used, None])
    np.add.at(weight, region[used], absolute[used])
    areas = np.linalg.norm(vectors, axis=1)
    normals = vectors / np.where(areas > 0, areas, 1.0)[:, None]
    return normals, moments / np.where(weight > 0, weight, 1.0)[:, None], areas


def _outside(surface: Surface, shapes: _Shapes, region: IntArray) -> BoolArray:
    """Triangles with a corner off the fitted plane of their region."""
    normals, origins, _ = _fit(shapes, region)
    offset = surface.vertices[surface.triangles] - origins[region][:, None, :]
    distance = np.abs(np.einsum("tki,ti->tk", offset, normals[region])).max(axis=1)
    size = np.bincount(region[region >= 0], minlength=len(normals))
    outside = (distance > 2 * shapes.tolerance) & (region >= 0)
    outside[region >= 0] &= size[region[region >= 0]] > 1
    return np.asarray(outside)


def _connected(joined: IntArray, region: IntArray) -> IntArray:
    """Split regions that fell apart and number them 0, 1, ... in the order of their first triangle."""
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    owner = np.repeat(np.arange(len(joined)), 3)
    near = joined.reshape(-1)
    keep = (near >= 0) & (region[owner] == region[near]) & (region[owner] >= 0)
    links = coo_array((np.ones(keep.sum()), (owner[keep], near[keep])), shape=(len(joined), len(joined)))
    label = connected_components(links, directed=False)[1].astype(np.int64)
    used = region >= 0
    _, first, number = np.unique(label[used], return_index=True, return_inverse=True)
    rank = np.empty(len(first), np.int64)
    rank[np.argsort(first)] = np.arange(len(first))
    result = np.full(len(region), -1, np.int64)
    result[used] = rank[number]
    return result


def _collect(surface: Surface, shapes: _Shapes, region: IntArray) -> Regions:
    normals, origins, areas = _fit(shapes, region)
    n = len(normals)
    order = np.argsort(region, kind="stable")
    order = order[region[order] >= 0]
    starts = np.searchsorted(region[order], np.arange(n + 1))
    body = surface.triangle_body[order[starts[:-1]]]
    return Regions(region, normals, origins, areas, body, order, starts)


def _degenerate_notices(surface: Surface, region: IntArray) -> list[Notice]:
    dropped = np.flatnonzero(region < 0)
    if not len(dropped):
        return []
    bodies = np.unique(surface.triangle_body[dropped])
    names = ", ".join(surface.body_names[b] for b in bodies[:4]) + (", ..." if len(bodies) > 4 else "")
    many = "1 triangle without area was" if len(dropped) == 1 else f"{len(dropped)} triangles without area were"
    text = f"{many} left out (first: {dropped[0]}; in {names})"
    return [Notice("degenerate-triangles", text)]
