"""How triangles hang together: edges, connected pieces, winding, boundary loops."""

from collections import deque
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components

__all__ = [
    "Edges",
    "boundary_loops",
    "compacted",
    "connected_pieces",
    "edges_of",
    "proper_rows",
    "signed_volume",
    "winding_flips",
]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class Edges:
    """Edges of a triangle mesh.

    Attributes
    ----------
    ends : (ne, 2) int
        Vertices of each edge, the smaller index first.
    count : (ne,) int
        Number of triangles at each edge.
    edge : (nt, 3) int
        Edge from corner k to corner k + 1 of each triangle.
    forward : (nt, 3) bool
        Whether the triangle runs along the edge from its smaller to its larger vertex.
    """

    ends: IntArray
    count: IntArray
    edge: IntArray
    forward: BoolArray

    @property
    def closed(self) -> bool:
        """Whether every edge has an even number of triangles, so that there is no boundary."""
        return bool((self.count % 2 == 0).all())


#: Edges of the last large meshes, beside copies of their triangles: one mesh is asked many times in a row.
_LARGE, _REMEMBERED = 10_000, 3
_known_edges: "deque[tuple[IntArray, Edges]]" = deque(maxlen=_REMEMBERED)


def edges_of(triangles: IntArray) -> Edges:
    """Edges of triangles; a repeated vertex within a triangle gives an edge of no length.

    Parameters
    ----------
    triangles : (nt, 3) int
    """
    if len(triangles) < _LARGE:
        return _edges_of(triangles)
    for known, edges in _known_edges:
        if np.array_equal(known, triangles):
            return edges
    edges = _edges_of(triangles)
    _known_edges.append((triangles.copy(), edges))
    return edges


def _edges_of(triangles: IntArray) -> Edges:
    start, stop = triangles.ravel(), np.roll(triangles, -1, axis=1).ravel()
    low, high = np.minimum(start, stop), np.maximum(start, stop)
    n_vertices = int(triangles.max(initial=0)) + 1
    key = low * n_vertices + high
    order = np.argsort(key, kind="stable")  # faster than the other kinds on meshes, whose edges lie nearly in order
    ordered = key[order]
    first = np.flatnonzero(np.concatenate([[True], ordered[1:] != ordered[:-1]])[: len(ordered)])
    count = np.diff(np.append(first, len(ordered)))
    edge = np.empty(len(key), dtype=np.int64)
    edge[order] = np.repeat(np.arange(len(first)), count)
    ends = np.column_stack([low[order[first]], high[order[first]]])
    return Edges(ends, count, edge.reshape(-1, 3), (start <= stop).reshape(-1, 3))


def proper_rows(triangles: IntArray) -> BoolArray:
    """Which triangles have three different vertices, (nt,) bool."""
    proper: BoolArray = (triangles != np.roll(triangles, -1, axis=1)).all(axis=1)
    return proper


def compacted(triangles: IntArray, n_vertices: int) -> tuple[IntArray, IntArray]:
    """Vertices that triangles use, in rising order, and the same triangles over these alone.

    Parameters
    ----------
    triangles : (nt, 3) int
    n_vertices : int

    Returns
    -------
    used : (nv,) int
    triangles : (nt, 3) int
    """
    flag = np.zeros(n_vertices, dtype=np.bool_)
    flag[triangles.ravel()] = True
    used = np.flatnonzero(flag)
    number = np.cumsum(flag) - 1
    return used, np.ascontiguousarray(number[triangles], dtype=np.int64)


def connected_pieces(triangles: IntArray) -> tuple[int, IntArray]:
    """Pieces connected through shared edges, numbered in the order of their first triangle.

    Parameters
    ----------
    triangles : (nt, 3) int

    Returns
    -------
    n_pieces : int
    piece : (nt,) int
    """
    n = len(triangles)
    edges = edges_of(triangles)
    face = np.repeat(np.arange(n), 3)
    graph = coo_matrix((np.ones(3 * n), (face, n + edges.edge.ravel())), shape=(n + len(edges.ends),) * 2)
    # components are numbered in the order of their first node, and triangles come first
    n_pieces, labels = connected_components(graph, directed=False)
    return int(n_pieces) if n else 0, labels[:n].astype(np.int64)


def winding_flips(triangles: IntArray) -> tuple[BoolArray, IntArray, bool]:
    """Triangles to turn over so that neighbours agree, and whether that is possible at all.

    Neighbours are the two triangles of an edge that has just two. In each patch of neighbours the winding
    that more triangles have stays as it is. Two copies of each triangle, one per winding, are linked where
    they agree: a patch whose two copies end in one component has a single side (a Moebius strip).

    Parameters
    ----------
    triangles : (nt, 3) int

    Returns
    -------
    flip : (nt,) bool
    patch : (nt,) int
        From 0.
    orientable : bool
        Whether every patch has two sides; one that has not is left as it is.
    """
    n = len(triangles)
    edges = edges_of(triangles)
    order = np.argsort(edges.edge.ravel(), kind="stable")
    pair = order[edges.count[edges.edge.ravel()[order]] == 2].reshape(-1, 2)
    face, forward = pair // 3, edges.forward.ravel()[pair]
    agree = forward[:, 0] != forward[:, 1]
    a, b = face[:, 0], face[:, 1]
    if agree.all():  # the usual mesh: nothing to turn, one copy will do
        graph = coo_matrix((np.ones(len(a), dtype=np.int8), (a, b)), shape=(n, n))
        return np.zeros(n, dtype=np.bool_), connected_components(graph, directed=False)[1].astype(np.int64), True
    rows = np.concatenate([a, a + n])
    cols = np.concatenate([np.where(agree, b, b + n), np.where(agree, b + n, b)])
    graph = coo_matrix((np.ones(len(rows)), (rows, cols)), shape=(2 * n, 2 * n))
    labels = connected_components(graph, directed=False)[1]
    kept, turned = labels[:n], labels[n:]
    # a label is one side of a patch; the patch is known by the smaller of its two labels
    sizes = np.bincount(kept, minlength=int(labels.max()) + 1)
    flip = (sizes[kept] < sizes[turned]) | ((sizes[kept] == sizes[turned]) & (kept > turned))
    patch = np.unique(np.minimum(kept, turned), return_inverse=True)[1]
    return flip, patch, not bool((kept == turned).any())


def signed_volume(vertices: FloatArray, triangles: IntArray) -> float:
    """Volume inside a closed surface by the divergence theorem; positive for outward winding.

    Parameters
    ----------
    vertices : (nv, 3) float, m
    triangles : (nt, 3) int

    Returns
    -------
    float, m3
    """
    a, b, c = np.moveaxis(vertices[triangles] - vertices[triangles[0, 0]], 1, 0)
    return float(np.einsum("ij,ij->", a, np.cross(b, c))) / 6.0


def boundary_loops(vertices: FloatArray, triangles: IntArray, edges: Edges) -> tuple[IntArray, FloatArray]:
    """Connected chains of edges that belong to one triangle only.

    Parameters
    ----------
    vertices : (nv, 3) float, m
    triangles : (nt, 3) int
    edges : Edges

    Returns
    -------
    vertex : (n_loops,) int
        One vertex of each loop.
    areas : (n_loops,) float, m2
        Norm of the vector area: what a flat cap over the loop would have.
    """
    corner = np.flatnonzero(edges.count[edges.edge.ravel()] == 1)
    start = triangles.ravel()[corner]
    stop = np.roll(triangles, -1, axis=1).ravel()[corner]
    if len(corner) == 0:
        return np.zeros(0, dtype=np.int64), np.zeros(0)
    used, ids = np.unique(np.concatenate([start, stop]), return_inverse=True)
    a, b = ids[: len(start)], ids[len(start) :]
    graph = coo_matrix((np.ones(len(a)), (a, b)), shape=(len(used),) * 2)
    n_loops, label = connected_components(graph, directed=False)
    p, q = vertices[start] - vertices[start[0]], vertices[stop] - vertices[start[0]]
    loop = label[a]
    half = 0.5 * np.cross(p, q)
    areas = np.linalg.norm([np.bincount(loop, half[:, k], n_loops) for k in range(3)], axis=0)
    vertex = used[np.unique(label, return_index=True)[1]]
    return vertex, areas
