"""Merging of equal vertices, with a tolerance relative to the size of the part; parts that lost their shape."""

from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree

from daraf.bem.errors import InputError

from .triangle_distance import sides_and_areas

__all__ = ["RELATIVE_WELD", "check_shape", "weld"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Vertices closer than this share of the diagonal of the part are one vertex.
RELATIVE_WELD = 1e-9

#: Coordinates rounded to more than this share of the median edge have lost the shape.
_LOST_SHAPE = 0.1

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
    corners = vertices[triangles.ravel()]
    corners += 0.0  # makes -0.0 and 0.0 the same bits
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
    """One occurrence of each distinct row, and the number of the distinct row that each row equals."""
    key = np.zeros(len(rows), dtype=np.uint64)
    for column, mix in zip(rows.T, _MIX, strict=True):
        bits = np.ascontiguousarray(column).view(np.uint64)
        key ^= (bits ^ (bits >> np.uint64(29))) * mix
        key = (key << np.uint64(13)) | (key >> np.uint64(51))
    order = np.argsort(key)  # which of equal rows comes first does not matter, and the stable kinds are slower
    ordered = key[order]
    fresh = np.concatenate([[True], ordered[1:] != ordered[:-1]])[: len(ordered)]
    first = order[fresh]
    inverse = np.empty(len(rows), dtype=np.int64)
    inverse[order] = np.cumsum(fresh) - 1
    if all(np.array_equal(column[first][inverse], column) for column in rows.T):
        return first, inverse
    _, first, inverse = np.unique(rows, axis=0, return_index=True, return_inverse=True)  # a key was shared
    return first, inverse.ravel()


def check_shape(path: Path, name: str, vertices: FloatArray, triangles: IntArray, spacing: float) -> None:
    """Refuse a part that is a point or a line, or whose coordinates are too coarse to hold its shape.

    Parameters
    ----------
    path : Path
    name : str
        Of the part, for messages.
    vertices : (nv, 3) float
    triangles : (nt, 3) int
    spacing : float
        Rounding of the coordinates, half a step, in the unit of the vertices.

    Raises
    ------
    InputError
    """
    label = f"solid {name!r}" if name else "the mesh"
    sides, doubled = sides_and_areas(vertices[triangles])
    edge = float(np.median(sides[sides > 0.0])) if (sides > 0.0).any() else 0.0
    flat = not (doubled > 1e-12 * sides.max(axis=1) ** 2).any()
    # a true edge rounds to nothing or to whole steps: a lost shape shows as edges of a few steps
    largest = float(np.abs(vertices).max())
    if edge > 0.0 and spacing > _LOST_SHAPE * edge:
        raise InputError(
            f"{path}: {label}: coordinates near {largest:.3g} in single precision are rounded to steps of "
            f"{2 * spacing:.2g}, its edges are {edge:.2g} long: the shape is lost; move the part to the "
            "origin in CAD and export it again"
        )
    if flat:
        raise InputError(
            f"{path}: {label}: all {len(triangles)} faces have no area, at a rounding of {2 * spacing:.2g} "
            f"for coordinates near {largest:.3g}; export it as a surface mesh, near the origin"
        )
