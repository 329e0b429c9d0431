"""Holes in bodies: the loops around them and the faces that close them."""

import numpy as np
import shapely
from numpy.typing import NDArray

from .topology import edges_of

__all__ = ["fill_loop", "hole_loops"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Loops of more vertices are closed only if their projection is a simple polygon (the search is cubic).
_MOST_SEARCHED = 120


def hole_loops(triangles: IntArray) -> list[IntArray]:
    """Boundary loops, each in the order in which new faces would have to run along it.

    Parameters
    ----------
    triangles : (nt, 3) int
        Consistently wound.

    Returns
    -------
    list of (n,) int
        Vertices. A chain that meets itself in a vertex is cut there; one that does not close is left out.
    """
    edges = edges_of(triangles)
    corner = np.flatnonzero(edges.count[edges.edge.ravel()] == 1)
    start, stop = triangles.ravel()[corner], np.roll(triangles, -1, axis=1).ravel()[corner]
    leaving: dict[int, list[int]] = {}
    for a, b in zip(stop.tolist(), start.tolist(), strict=True):  # against the triangles beside the hole
        leaving.setdefault(a, []).append(b)
    loops = []
    while leaving:
        first = next(iter(leaving))
        path, seen = [first], {first: 0}
        while path:
            here = path[-1]
            if here not in leaving:
                break  # does not close
            step = leaving[here].pop()
            if not leaving[here]:
                del leaving[here]
            if step not in seen:
                seen[step] = len(path)
                path.append(step)
                continue
            loop = path[seen[step] :]
            for v in loop[1:]:
                del seen[v]
            path = path[: seen[step] + 1]
            if len(loop) > 2:
                loops.append(np.array(loop, np.int64))
            if len(path) == 1 and path[0] not in leaving:
                break
    return loops


def fill_loop(points: FloatArray) -> IntArray | None:
    """Triangles over a loop, without new vertices.

    A loop whose projection along its vector area is a simple polygon gets its Delaunay triangles; else the
    triangles of least area are searched (Barequet and Sharir, Comput. Aided Geom. Des. 12 (1995) 207).

    Parameters
    ----------
    points : (n, 3) float

    Returns
    -------
    (n - 2, 3) int or None
        None if none were found.
    """
    n = len(points)
    if n == 3:
        return np.array([[0, 1, 2]], np.int64)
    centred = points - points.mean(axis=0)
    vector = np.cross(centred, np.roll(centred, -1, axis=0)).sum(axis=0)
    length = float(np.linalg.norm(vector))
    if length > 0.0:
        normal = vector / length
        along = centred[np.argmax((centred**2).sum(axis=1))]
        along = along - (along @ normal) * normal
        along /= np.linalg.norm(along)
        flat = np.column_stack([centred @ along, centred @ np.cross(normal, along)])
        polygon = shapely.Polygon(flat)
        if polygon.is_valid and len(np.unique(flat, axis=0)) == n:
            return _delaunay(flat, polygon)
    return _least_area(points) if n <= _MOST_SEARCHED else None


def _delaunay(flat: FloatArray, polygon: shapely.Polygon) -> IntArray:
    number = {(x, y): k for k, (x, y) in enumerate(flat.tolist())}
    rings = shapely.get_coordinates(shapely.get_parts(shapely.constrained_delaunay_triangles(polygon)))
    triangles = np.array([number[x, y] for x, y in rings.tolist()], np.int64).reshape(-1, 4)[:, :3]
    a, b, c = (flat[triangles[:, k]] for k in range(3))
    turned = (b - a)[:, 0] * (c - a)[:, 1] < (b - a)[:, 1] * (c - a)[:, 0]
    return np.where(turned[:, None], triangles[:, ::-1], triangles)


def _least_area(points: FloatArray) -> IntArray:
    n = len(points)
    cost = np.zeros((n, n))
    best = np.zeros((n, n), np.int64)
    for width in range(2, n):
        for i in range(n - width):
            k = i + width
            between = np.arange(i + 1, k)
            area = np.linalg.norm(np.cross(points[between] - points[i], points[k] - points[i]), axis=1)
            total = cost[i, between] + cost[between, k] + area
            chosen = int(total.argmin())
            cost[i, k], best[i, k] = total[chosen], between[chosen]
    triangles, stack = [], [(0, n - 1)]
    while stack:
        i, k = stack.pop()
        if k - i < 2:
            continue
        m = int(best[i, k])
        triangles.append([i, m, k])
        stack += [(i, m), (m, k)]
    return np.array(triangles, np.int64)
