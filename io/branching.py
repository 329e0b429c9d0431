"""Edges with more than two triangles, taken apart where a body only touches itself along them."""

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components

from .topology import Edges, edges_of

__all__ = ["split_branching"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


def split_branching(vertices: FloatArray, triangles: IntArray) -> tuple[FloatArray, IntArray, IntArray]:
    """Give every sheet of triangles vertices of its own where several meet along an edge or in a vertex.

    Around an edge the triangles are paired across the metal between them, so that two solids which touch along
    an edge come apart. An edge with an odd number of triangles, or with windings that do not alternate, stays.

    Parameters
    ----------
    vertices : (nv, 3) float, m
    triangles : (nt, 3) int
        Wound outwards.

    Returns
    -------
    vertices : (mv, 3) float, m
        Old ones first; copies follow.
    triangles : (nt, 3) int
    split : (ns, 2) int
        Ends of the edges that were taken apart.
    """
    edges = edges_of(triangles)
    busy = np.flatnonzero(edges.count > 2)
    if len(busy) == 0:
        return vertices, triangles, np.zeros((0, 2), np.int64)
    half = np.argsort(edges.edge.ravel(), kind="stable")
    starts = np.concatenate([[0], np.cumsum(edges.count)])
    links = [half[starts[k] : starts[k + 1]] for k in np.flatnonzero(edges.count == 2).tolist()]
    split = []
    for k in busy.tolist():
        around = half[starts[k] : starts[k + 1]]
        pairs = _pairs_across_metal(vertices, triangles, edges, k, around)
        if pairs is None:
            links += [np.array([around[0], other]) for other in around[1:]]
        else:
            links += pairs
            split.append(k)
    corner, count = _corner_groups(triangles, np.array(links).reshape(-1, 2))
    if not split or count == len(np.unique(triangles)):
        return vertices, triangles, np.zeros((0, 2), np.int64)
    return _apart(vertices, triangles, corner, edges.ends[split])


def _pairs_across_metal(
    vertices: FloatArray, triangles: IntArray, edges: Edges, edge: int, around: IntArray
) -> list[IntArray] | None:
    """Pair the triangles around an edge with their neighbours on the inner side; None if they do not alternate."""
    if len(around) % 2:
        return None
    a, b = vertices[edges.ends[edge]]
    axis = (b - a) / np.linalg.norm(b - a)
    tips = vertices[triangles[around // 3, (around % 3 + 2) % 3]] - a
    tips = tips - (tips @ axis)[:, None] * axis
    first = tips[0] / np.linalg.norm(tips[0])
    angle = np.arctan2(tips @ np.cross(axis, first), tips @ first) % (2.0 * np.pi)
    order = np.argsort(angle, kind="stable")
    if (np.diff(angle[order]) < 1e-9).any():
        return None
    # behind a triangle that runs along the axis the metal lies at smaller angles: it ends there
    forward = edges.forward.ravel()[around[order]]
    if (forward == np.roll(forward, 1)).any():
        return None
    order = order if not forward[0] else np.roll(order, 1)
    return [around[order[k : k + 2]] for k in range(0, len(order), 2)]


def _corner_groups(triangles: IntArray, links: IntArray) -> tuple[IntArray, int]:
    """Groups of corners (3 t + k) at one vertex that hang together across linked half-edges."""
    n = triangles.size
    a, b = links[:, 0], links[:, 1]
    next_a, next_b = a // 3 * 3 + (a % 3 + 1) % 3, b // 3 * 3 + (b % 3 + 1) % 3
    flat = triangles.ravel()
    same = flat[a] == flat[b]
    rows = np.concatenate([a, next_a])
    cols = np.concatenate([np.where(same, b, next_b), np.where(same, next_b, b)])
    graph = coo_matrix((np.ones(len(rows)), (rows, cols)), shape=(n, n))
    count, label = connected_components(graph, directed=False)
    return label.astype(np.int64), int(count)


def _apart(
    vertices: FloatArray, triangles: IntArray, group: IntArray, split: IntArray
) -> tuple[FloatArray, IntArray, IntArray]:
    flat = triangles.ravel()
    _, first = np.unique(group, return_index=True)
    vertex = flat[first]
    order = np.argsort(first, kind="stable")
    number = np.empty(len(first), np.int64)
    seen: set[int] = set()
    extra: list[int] = []
    for k in order.tolist():
        v = int(vertex[k])
        if v in seen:
            number[k] = len(vertices) + len(extra)
            extra.append(v)
        else:
            seen.add(v)
            number[k] = v
    return np.vstack([vertices, vertices[extra]]), number[group].reshape(-1, 3), split
