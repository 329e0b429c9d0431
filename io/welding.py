"""Merging of equal vertices, with a tolerance relative to the size of the part."""

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree

__all__ = ["RELATIVE_WELD", "weld"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Vertices closer than this share of the diagonal of the part are one vertex.
RELATIVE_WELD = 1e-9

#: Direction of a line on which the points of no usual drawing fall together, unit length.
_SKEW = np.array([0.5257311, 0.8090169, 0.2628655]) / np.linalg.norm([0.5257311, 0.8090169, 0.2628655])
_MOST_STEPS = 30

_MIX = np.array([0x9E3779B97F4A7C15, 0xC2B2AE3D27D4EB4F, 0x165667B19E3779F9], dtype=np.uint64)


def weld(vertices: FloatArray, triangles: IntArray) -> tuple[FloatArray, IntArray, int, float]:
    """Merge vertices that are equal or closer than the tolerance, and drop unused ones.

    Parameters
    ----------
    vertices : (nv, 3) float
    triangles : (nt, 3) int

    Returns
    -------
    vertices : (mv, 3) float
        In the order of their first use.
    triangles : (nt, 3) int
    n_moved : int
        Vertices that were not bitwise equal to the one they were merged into.
    tolerance : float
        `RELATIVE_WELD` times the diagonal of the bounding box, in the unit of the vertices.
    """
    corners = vertices[triangles.ravel()] + 0.0  # + 0.0 makes -0.0 and 0.0 the same bits
    first, inverse = _equal_rows(corners)
    distinct = corners[first]
    tolerance = RELATIVE_WELD * float(np.linalg.norm(np.ptp(distinct, axis=0)))
    n_moved = 0
    if tolerance > 0.0:
        pairs = _close_pairs(distinct, tolerance)
        if len(pairs):
            n = len(distinct)
            graph = coo_matrix((np.ones(len(pairs)), (pairs[:, 0], pairs[:, 1])), shape=(n, n))
            label = connected_components(graph, directed=False)[1]
            _, keep, group = np.unique(label, return_index=True, return_inverse=True)
            n_moved = n - len(keep)
            distinct, inverse = distinct[keep], group[inverse]
    start = np.full(len(distinct), len(inverse), dtype=np.int64)
    start[inverse[::-1]] = np.arange(len(inverse))[::-1]  # of several entries the last one stands: the first use
    order = np.argsort(start)
    rank = np.empty(len(distinct), dtype=np.int64)
    rank[order] = np.arange(len(distinct))
    return np.ascontiguousarray(distinct[order]), rank[inverse].reshape(-1, 3), n_moved, tolerance


def _close_pairs(points: FloatArray, tolerance: float) -> IntArray:
    """Pairs of points no farther apart than a tolerance, (m, 2): those whose shadows on a skew line are.

    Where many shadows fall together by chance or by intent, a search tree finds the pairs.
    """
    shadow = points @ _SKEW
    order = np.argsort(shadow)
    shadow, reach = shadow[order], tolerance + 1e-15 * float(np.abs(shadow).max(initial=0.0))
    found = [np.zeros((0, 2), dtype=np.int64)]
    for step in range(1, len(points)):
        near = np.flatnonzero(shadow[step:] - shadow[:-step] <= reach)
        if len(near) == 0:
            break
        if step > _MOST_STEPS:
            return np.asarray(cKDTree(points).query_pairs(tolerance, output_type="ndarray"), dtype=np.int64)
        a, b = order[near], order[near + step]
        close = np.linalg.norm(points[a] - points[b], axis=1) <= tolerance
        found.append(np.column_stack([a[close], b[close]]))
    return np.concatenate(found)


def _equal_rows(rows: FloatArray) -> tuple[IntArray, IntArray]:
    """First occurrence of each distinct row, and the number of the distinct row that each row equals."""
    bits = np.ascontiguousarray(rows).view(np.uint64)
    bits = (bits ^ (bits >> np.uint64(29))) * _MIX
    key = bits[:, 0] ^ (bits[:, 1] >> np.uint64(7)) ^ (bits[:, 2] << np.uint64(13)) ^ (bits[:, 2] >> np.uint64(31))
    _, first, inverse = np.unique(key, return_index=True, return_inverse=True)
    if np.array_equal(rows[first[inverse]], rows):
        return first, inverse
    _, first, inverse = np.unique(rows, axis=0, return_index=True, return_inverse=True)  # a key was shared
    return first, inverse.ravel()
