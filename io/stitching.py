"""Cracks along edges, as CAD writes them where faces are meshed one by one: rims are sewn together.

Along a crack each side has its own vertices (a T-junction if they only differ in number). Vertices of rims
that lie close together become one, and a vertex close to the middle of another rim divides that rim.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from .topology import Edges, edges_of, proper_rows

__all__ = ["Stitched", "stitch"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

#: Rounds of dividing rims; each halves the number of vertices that wait at one edge at least.
_ROUNDS = 40


@dataclass(frozen=True, eq=False)
class Stitched:
    """A mesh after sewing.

    Attributes
    ----------
    vertices : (nv, 3) float
    triangles : (nt, 3) int
    n_merged : int
        Vertices merged into another one.
    n_divided : int
        Vertices put into a rim that passed by.
    moved : float
        Largest distance by which anything was moved.
    place : (3,) float
        Where the first change is.
    n_open_before, n_open : int
        Edges of one triangle before and after.
    """

    vertices: FloatArray
    triangles: IntArray
    n_merged: int
    n_divided: int
    moved: float
    place: FloatArray
    n_open_before: int
    n_open: int

    @property
    def count(self) -> int:
        """Number of vertices concerned."""
        return self.n_merged + self.n_divided

    @property
    def changed(self) -> bool:
        """Whether anything was sewn."""
        return self.count > 0

    @property
    def text(self) -> str:
        """What the cracks look like."""
        beside = ((self.n_merged, "another one"), (self.n_divided, "an undivided edge"))
        many = [f"{n:,} {'vertex' if n == 1 else 'vertices'} beside {what}" for n, what in beside if n]
        return f"cracks between faces: {' and '.join(many)}"


def stitch(vertices: FloatArray, triangles: IntArray, tolerance: float) -> Stitched:
    """Sew rims together that are no farther apart than a tolerance.

    Vertices and edges with two triangles stay as they are. What would not join two rims is left alone: a
    sheet with a narrow end does not fold up.

    Parameters
    ----------
    vertices : (nv, 3) float
    triangles : (nt, 3) int
    tolerance : float
        In the unit of the vertices.

    Returns
    -------
    Stitched
    """
    edges = edges_of(triangles)
    rim = _rim(edges)
    if len(rim) == 0 or not _anything_near(vertices, rim, tolerance):
        return Stitched(vertices, triangles, 0, 0, 0.0, np.zeros(3), len(rim), len(rim))
    into, gap = _merges(vertices, triangles, rim, tolerance)
    merged = np.flatnonzero(into != np.arange(len(into)))
    sewn = into[triangles]
    sewn = sewn[proper_rows(sewn)]
    sewn, divided, off = _divide(vertices, sewn, tolerance)
    changed = np.concatenate([merged, divided])
    place = vertices[changed[0]] if len(changed) else np.zeros(3)
    left = len(_rim(edges_of(sewn))) if len(changed) else len(rim)
    return Stitched(vertices, sewn, len(merged), len(divided), max(gap, off), place, len(rim), left)


def _rim(edges: Edges) -> IntArray:
    """Edges of one triangle with two different ends, (n, 2) vertices."""
    ends = edges.ends[edges.count == 1]
    proper: IntArray = ends[ends[:, 0] != ends[:, 1]]
    return proper


def _anything_near(vertices: FloatArray, rim: IntArray, tolerance: float) -> bool:
    """Whether any vertex of a rim comes near another rim edge; cheap, so that open sheets cost nothing."""
    if len(_near_edges(vertices, rim, tolerance)[0]):
        return True
    used = np.unique(rim)
    return len(cKDTree(vertices[used]).query_pairs(tolerance)) > 0


def _merges(vertices: FloatArray, triangles: IntArray, rim: IntArray, tolerance: float) -> tuple[IntArray, float]:
    """Vertex that each vertex becomes, and the longest way; nearest pairs first, no group wider than allowed."""
    used = np.unique(rim)
    into = np.arange(len(vertices))
    pairs = used[cKDTree(vertices[used]).query_pairs(tolerance, output_type="ndarray")]
    if len(pairs) == 0:
        return into, 0.0
    pairs = pairs[~_neighbours(triangles, pairs)]
    distance = np.linalg.norm(vertices[pairs[:, 0]] - vertices[pairs[:, 1]], axis=1)
    groups = {int(v): [int(v)] for v in np.unique(pairs)}
    longest = 0.0
    linked = _links(triangles, set(groups))
    for k in np.argsort(distance, kind="stable").tolist():
        a, b = int(into[pairs[k, 0]]), int(into[pairs[k, 1]])
        if a == b:
            continue
        a, b = min(a, b), max(a, b)
        reach = float(np.linalg.norm(vertices[groups[b]] - vertices[a], axis=1).max())
        if reach > tolerance or any(linked[v] & set(groups[a]) for v in groups[b]):
            continue
        longest = max(longest, reach)
        groups[a] += groups.pop(b)
        into[groups[a]] = a
    return into, longest


def _neighbours(triangles: IntArray, pairs: IntArray) -> BoolArray:
    """Pairs that are the ends of one edge."""
    n = np.int64(triangles.max()) + 1
    ends = edges_of(triangles).ends
    low, high = pairs.min(axis=1), pairs.max(axis=1)
    return np.asarray(np.isin(low * n + high, ends[:, 0] * n + ends[:, 1]))


def _links(triangles: IntArray, wanted: set[int]) -> dict[int, set[int]]:
    """Vertices at the far end of the edges of each wanted vertex."""
    links: dict[int, set[int]] = {v: set() for v in wanted}
    some = np.fromiter(wanted, np.int64, len(wanted))
    for row in triangles[np.isin(triangles, some).any(axis=1)].tolist():
        for v in row:
            if v in links:
                links[v].update(row)
    return links


def _near_edges(vertices: FloatArray, rim: IntArray, tolerance: float) -> tuple[IntArray, IntArray]:
    """Rim edges and rim vertices that lie on them within a tolerance, away from their ends."""
    used = np.unique(rim)
    tree = cKDTree(vertices[used])
    start, stop = vertices[rim[:, 0]], vertices[rim[:, 1]]
    middle, radius = 0.5 * (start + stop), 0.5 * np.linalg.norm(stop - start, axis=1)
    # long edges are asked in pieces: a ball about a whole one would hold half of the rim
    step = 4.0 * max(float(np.median(radius)), tolerance)
    pieces = np.maximum(1, np.ceil(2.0 * radius / step)).astype(np.int64)
    edge = np.repeat(np.arange(len(rim)), pieces)
    share = (np.arange(len(edge)) - np.repeat(np.cumsum(pieces) - pieces, pieces) + 0.5) / pieces[edge]
    centre = start[edge] + share[:, None] * (stop - start)[edge]
    found = tree.query_ball_point(centre, radius[edge] / pieces[edge] + tolerance)
    count = np.fromiter(map(len, found), np.int64, len(found))
    if not count.any():
        return np.zeros(0, np.int64), np.zeros(0, np.int64)
    edge = np.repeat(edge, count)
    vertex = used[np.concatenate([np.asarray(one, np.int64) for one in found])]
    along = (stop - start)[edge]
    offset = vertices[vertex] - middle[edge]
    square = np.einsum("ij,ij->i", along, along)
    share = np.einsum("ij,ij->i", offset, along) / np.maximum(square, np.finfo(float).tiny) + 0.5
    far = np.linalg.norm(offset - (share - 0.5)[:, None] * along, axis=1)
    length = np.sqrt(square)
    inside = (share * length > tolerance) & ((1.0 - share) * length > tolerance)
    keep = inside & (far <= tolerance) & ~(rim[edge] == vertex[:, None]).any(axis=1)
    both = np.unique(np.column_stack([edge[keep], vertex[keep]]), axis=0)
    return both[:, 0], both[:, 1]


def _divide(vertices: FloatArray, triangles: IntArray, tolerance: float) -> tuple[IntArray, IntArray, float]:
    """Put vertices of rims into the rim edges that pass them by."""
    divided: list[int] = []
    farthest = 0.0
    for _ in range(_ROUNDS):
        rim = _rim(edges_of(triangles))
        edge, vertex = _near_edges(vertices, rim, tolerance) if len(rim) else (np.zeros(0, np.int64),) * 2
        triangles, done, off = _divide_once(vertices, triangles, rim[edge], vertex)
        divided += done
        farthest = max(farthest, off)
        if not done:
            break
    return triangles, np.array(divided, np.int64), farthest


def _divide_once(
    vertices: FloatArray, triangles: IntArray, ends: IntArray, vertex: IntArray
) -> tuple[IntArray, list[int], float]:
    """Divide each triangle at one rim edge, at the vertex nearest to the middle of that edge."""
    if len(vertex) == 0:
        return triangles, [], 0.0
    middle = 0.5 * (vertices[ends[:, 0]] + vertices[ends[:, 1]])
    order = np.argsort(np.linalg.norm(vertices[vertex] - middle, axis=1), kind="stable")
    start, stop = triangles, np.roll(triangles, -1, axis=1)
    n = np.int64(triangles.max()) + 1
    key = (np.minimum(start, stop) * n + np.maximum(start, stop)).ravel()
    ranked = np.argsort(key, kind="stable")
    at = ranked[np.searchsorted(key[ranked], ends.min(axis=1) * n + ends.max(axis=1))]
    busy: set[int] = set()
    done: list[int] = []
    fresh: list[list[int]] = []
    triangles = triangles.copy()
    farthest = 0.0
    for k in order.tolist():
        row, side = divmod(int(at[k]), 3)
        v = int(vertex[k])
        if row in busy or v in triangles[row]:
            continue
        a, b, c = (int(triangles[row, (side + j) % 3]) for j in range(3))
        busy.add(row)
        triangles[row] = a, v, c
        fresh.append([v, b, c])
        done.append(v)
        along = vertices[b] - vertices[a]
        off = np.linalg.norm(np.cross(vertices[v] - vertices[a], along)) / np.linalg.norm(along)
        farthest = max(farthest, float(off))
    return np.vstack([triangles, np.array(fresh, np.int64).reshape(-1, 3)]), done, farthest
