"""Smallest gaps between bodies, and where bodies touch, cross or enclose one another."""

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from .bodies import Body
from .topology import coincident_groups, edges_of, proper_rows, signed_volume
from .triangle_boxes import BoxTree, near_pairs
from .triangle_distance import (
    doubled_area_vectors,
    edge_crossings,
    pair_distances,
    sides_and_areas,
    slab_gaps,
    winding_numbers,
)

__all__ = [
    "Approach",
    "Shape",
    "box_gap",
    "closest_approach",
    "crosses",
    "encloses",
    "first_contact",
    "touch_tolerance",
]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

#: Meshes with fewer triangles are sampled at corners and edges too.
_SAMPLES = 10_000

#: Samples of the other body that are asked for their nearest neighbour.
_ASKED = 1000

#: Exact pairs computed at once.
_EXACT = 1024

#: A pair of triangles this little nearer than the best one found is not looked at.
_RELATIVE = 1e-9


class Shape:
    """A body prepared for questions about distances: corners about its own middle, box tree, samples.

    Parameters
    ----------
    body : Body
    """

    def __init__(self, body: Body) -> None:
        self.body = body
        self.box = body.box
        self.corners = np.ascontiguousarray(body.vertices[body.triangles])

    @cached_property
    def tree(self) -> BoxTree:
        """Boxes of the triangles."""
        return BoxTree(self.corners)

    @cached_property
    def normals(self) -> FloatArray:
        """Unit normals, (nt, 3); zero for triangles without area."""
        normal = doubled_area_vectors(self.corners)
        length = np.sqrt((normal * normal).sum(axis=0))
        normal /= np.where(length > 0.0, length, 1.0)
        return np.ascontiguousarray(normal.T)

    @cached_property
    def measures(self) -> tuple[FloatArray, FloatArray]:
        """Lengths of the sides, (nt, 3) m, and twice the areas, (nt,) m2."""
        return sides_and_areas(self.corners)

    @cached_property
    def single_rows(self) -> IntArray:
        """Triangles with three different vertices, one of each that coincide."""
        triangles = self.body.triangles
        proper = proper_rows(triangles)
        group, size = coincident_groups(triangles)
        if len(size) == len(group):
            return np.flatnonzero(proper)
        first = np.zeros(len(triangles), dtype=np.bool_)
        first[np.unique(group, return_index=True)[1]] = True
        return np.flatnonzero(first & proper)

    @cached_property
    def single(self) -> IntArray:
        """The triangles in these rows, (n, 3) int."""
        rows, triangles = self.single_rows, self.body.triangles
        return triangles if len(rows) == len(triangles) else triangles[rows]

    @cached_property
    def samples(self) -> FloatArray:
        """Points of the triangles, (m, 3) m: centroids, and corners and middles of edges of small meshes."""
        points = [self.corners.mean(axis=1)]
        if len(self.corners) < _SAMPLES:
            middles = 0.5 * (self.corners + np.roll(self.corners, -1, axis=1))
            points += [x[:, k] for x in (self.corners, middles) for k in range(3)]
        return np.concatenate(points)

    @cached_property
    def sample_tree(self) -> cKDTree:
        """Search tree over the samples; sample k lies on triangle k modulo their number."""
        return cKDTree(self.samples, balanced_tree=False, compact_nodes=False)

    @cached_property
    def volume(self) -> float | None:
        """Signed volume, m3; None if the body is open."""
        body = self.body
        rows = proper_rows(body.triangles)
        proper = body.triangles if rows.all() else body.triangles[rows]
        if len(proper) == 0 or not edges_of(proper).closed:
            return None
        return signed_volume(body.vertices, proper)


@dataclass(frozen=True)
class Approach:
    """Where two bodies come closest: distance (m), a point on each (m), a triangle of each."""

    distance: float
    point_a: tuple[float, float, float]
    point_b: tuple[float, float, float]
    triangle_a: int
    triangle_b: int


def touch_tolerance(a: Body, b: Body) -> float:
    """Gap below which two bodies touch: the rounding of both files, or 1e-9 of their size.

    Parameters
    ----------
    a, b : Body

    Returns
    -------
    float, m
    """
    return max(4.0 * a.spacing, 4.0 * b.spacing, 1e-9 * a.diagonal, 1e-9 * b.diagonal)


def box_gap(a: Shape, b: Shape) -> float:
    """Distance of the bounding boxes, m: a lower bound of the gap."""
    apart = np.maximum(a.box[0] - b.box[1], b.box[0] - a.box[1])
    return float(np.linalg.norm(np.maximum(apart, 0.0)))


def closest_approach(a: Shape, b: Shape) -> Approach:
    """Smallest distance between two bodies as triangles, exact to 1e-9 of itself.

    Samples give a first guess; the walk over both box trees leaves only the pairs of triangles that could
    be nearer, and these are computed in closed form, near boxes first.

    Parameters
    ----------
    a, b : Shape

    Returns
    -------
    Approach
    """
    swapped = len(a.corners) > len(b.corners)
    if swapped:
        a, b = b, a
    best = _first_guess(a, b)
    limit = [best.distance * (1.0 - _RELATIVE)]
    for i, j, gap in near_pairs(a.tree, b.tree, limit):
        bound = np.maximum(gap, slab_gaps(a.corners[i], a.normals[i], b.corners[j], b.normals[j]))
        order = np.argsort(bound, kind="stable")
        order = order[bound[order] <= limit[0]]
        for start in range(0, len(order), _EXACT):
            part = order[start : start + _EXACT]
            part = part[bound[part] <= limit[0]]
            if best.distance == 0.0 or len(part) == 0:
                break
            best = min(best, _best_pair(a, b, i[part], j[part]), key=lambda x: x.distance)
            limit[0] = best.distance * (1.0 - _RELATIVE)
        if best.distance == 0.0:
            break
    if swapped:
        best = Approach(best.distance, best.point_b, best.point_a, best.triangle_b, best.triangle_a)
    return best


def _first_guess(a: Shape, b: Shape) -> Approach:
    apart = np.maximum(b.box[0] - a.samples, a.samples - b.box[1])
    to_box = np.linalg.norm(np.maximum(apart, 0.0), axis=1)
    chosen = np.arange(len(to_box))
    if len(chosen) > _ASKED:  # those nearest to the box of the other body, and some of all for nested bodies
        chosen = np.concatenate([np.argpartition(to_box, _ASKED)[:_ASKED], chosen[:: -(-len(chosen) // _ASKED)]])
    distance, found = b.sample_tree.query(a.samples[chosen])
    nearest = np.asarray(found, dtype=np.int64)
    near = np.argsort(np.asarray(distance), kind="stable")[:64]
    return _best_pair(a, b, chosen[near] % len(a.corners), nearest[near] % len(b.corners))


def _best_pair(a: Shape, b: Shape, i: IntArray, j: IntArray) -> Approach:
    distance, point_a, point_b = pair_distances(a.corners[i], b.corners[j])
    k = int(distance.argmin())
    x, y = (tuple(float(value) for value in point[k]) for point in (point_a, point_b))
    return Approach(float(distance[k]), x, y, int(i[k]), int(j[k]))  # type: ignore[arg-type]


def first_contact(a: Shape, b: Shape, tolerance: float) -> tuple[float, float, float] | None:
    """A place where two bodies are no farther apart than the tolerance, or None.

    Parameters
    ----------
    a, b : Shape
    tolerance : float, m

    Returns
    -------
    tuple of 3 float or None, m
    """
    for i, j, _ in near_pairs(a.tree, b.tree, [tolerance]):
        near = slab_gaps(a.corners[i], a.normals[i], b.corners[j], b.normals[j]) <= tolerance
        i, j = i[near], j[near]
        for start in range(0, len(i), _EXACT):
            best = _best_pair(a, b, i[start : start + _EXACT], j[start : start + _EXACT])
            if best.distance <= tolerance:
                return best.point_a
    return None


def crosses(a: Shape, b: Shape, tolerance: float) -> tuple[float, float, float] | None:
    """First place where an edge of one body passes through a face of the other, or None.

    Parameters
    ----------
    a, b : Shape
    tolerance : float, m
        How far both ends of the edge must stand off the face.

    Returns
    -------
    tuple of 3 float or None, m
    """
    for i, j, _ in near_pairs(a.tree, b.tree, [0.0]):
        for start in range(0, len(i), _EXACT):
            first, second = a.corners[i[start : start + _EXACT]], b.corners[j[start : start + _EXACT]]
            for one, other in ((first, second), (second, first)):
                segments = np.stack([one, np.roll(one, -1, axis=1)], axis=2)
                hit, place = edge_crossings(segments, other[:, None], tolerance, strict=True)
                if hit.any():
                    x, y, z = place[hit][0]
                    return float(x), float(y), float(z)
    return None


def encloses(outer: Shape, inner: Shape, tolerance: float = 0.0) -> bool:
    """Whether some point of one body lies inside the other, which must be closed.

    Of two bodies that do not meet, one vertex decides. Where they meet, up to 64 centroids that lie farther
    than the tolerance from the surface are asked.

    Parameters
    ----------
    outer, inner : Shape
    tolerance : float, m
        Positive if the bodies meet.

    Returns
    -------
    bool
    """
    if outer.volume is None:
        return False
    if tolerance == 0.0:
        if (inner.box[0] < outer.box[0]).any() or (inner.box[1] > outer.box[1]).any():
            return False
        points = inner.corners[:1, 0]
    else:
        centroids = inner.corners.mean(axis=1)
        within = ((centroids > outer.box[0] + tolerance) & (centroids < outer.box[1] - tolerance)).all(axis=1)
        points = centroids[within]
        points = points[:: -(-len(points) // 64) or 1]
    if len(points) == 0:
        return False
    within = np.abs(winding_numbers(points, outer.corners)) > 0.5
    if tolerance > 0.0 and within.any():  # a point on the surface is inside or outside by rounding alone
        within &= ~_on_surface(outer, points, tolerance)
    return bool(within.any())


def _on_surface(shape: Shape, points: FloatArray, tolerance: float) -> BoolArray:
    """Which points lie within the tolerance of the surface of a body, (m,) bool."""
    result = np.zeros(len(points), dtype=np.bool_)
    as_triangles = np.repeat(points[:, None], 3, axis=1)
    for i, j, _ in near_pairs(BoxTree(as_triangles), shape.tree, [tolerance]):
        for start in range(0, len(i), _EXACT):
            part = slice(start, start + _EXACT)
            distance, _, _ = pair_distances(as_triangles[i[part]], shape.corners[j[part]])
            result[i[part][distance <= tolerance]] = True
    return result
