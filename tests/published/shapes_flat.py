"""Bodies with flat faces, cut into as few triangles as a CAD exporter would; lengths in m."""

from itertools import combinations
from math import pi, sqrt

import numpy as np
from numpy.typing import NDArray

from published.shapes_placing import Mesh, flipped, joined, moved

__all__ = ["block", "cube", "drilled_plate", "drilled_slab", "l_plate", "plate", "regular_solid"]


def block(x: float, y: float, z: float) -> Mesh:
    """Rectangular block about the origin: 12 triangles."""
    corners = np.array([(i, j, k) for k in (-0.5, 0.5) for j in (-0.5, 0.5) for i in (-0.5, 0.5)])
    faces = [(0, 2, 3, 1), (4, 5, 7, 6), (0, 1, 5, 4), (2, 6, 7, 3), (0, 4, 6, 2), (1, 3, 7, 5)]
    triangles = [t for a, b, c, d in faces for t in ((a, b, c), (a, c, d))]
    return corners * np.array([x, y, z]), np.array(triangles, dtype=np.int64)


def cube(edge: float = 1.0) -> Mesh:
    """Cube about the origin: 12 triangles."""
    return block(edge, edge, edge)


def plate(x: float = 1.0, y: float = 1.0) -> Mesh:
    """Thin rectangle in z = 0 about the origin, normal +z: 2 triangles."""
    corners = 0.5 * np.array([(-x, -y, 0.0), (x, -y, 0.0), (x, y, 0.0), (-x, y, 0.0)])
    return corners, np.array([(0, 1, 2), (0, 2, 3)], dtype=np.int64)


def l_plate(long: float = 1.0, short: float = 0.5) -> Mesh:
    """Thin L in z = 0: the square of side `long` without a square of side long - short at one corner.

    Four triangles of uneven size round one re-entrant corner.
    """
    a, b = long, short
    corners = [(0.0, 0.0), (a, 0.0), (a, b), (b, b), (b, a), (0.0, a)]
    triangles = [(0, 1, 2), (0, 2, 3), (0, 3, 4), (0, 4, 5)]
    points = np.column_stack([np.array(corners), np.zeros(6)])
    return points, np.array(triangles, dtype=np.int64)


def _square_with_hole(edge: float, radius: float, sides: int) -> NDArray[np.float64]:
    """Corners of the square, then of the hole, from -45 and from -90 deg counter-clockwise."""
    corner = 0.5 * edge * np.array([(1.0, -1.0), (1.0, 1.0), (-1.0, 1.0), (-1.0, -1.0)])
    angle = -0.5 * pi + 2.0 * pi * np.arange(sides) / sides
    return np.concatenate([corner, radius * np.column_stack([np.cos(angle), np.sin(angle)])])


def drilled_plate(edge: float = 1.0, radius: float = 0.25, sides: int = 16) -> Mesh:
    """Thin square in z = 0 with a hole at its centre; long fans from the corners of the square.

    Parameters
    ----------
    edge, radius : float, m
    sides : int
        Sides of the hole, a multiple of 4.

    Returns
    -------
    Mesh
        sides + 4 triangles, normal +z.
    """
    if sides % 4 or sides < 4:
        raise ValueError("the hole needs a multiple of 4 sides")
    quarter = sides // 4
    triangles = []
    for corner in range(4):
        # The fan of one corner spans the quarter of the hole that it faces.
        rim = [4 + (corner * quarter + k) % sides for k in range(quarter + 1)]
        triangles += [(corner, rim[k + 1], rim[k]) for k in range(quarter)]
        triangles.append((corner, (corner + 1) % 4, rim[-1]))
    flat = _square_with_hole(edge, radius, sides)
    return np.column_stack([flat, np.zeros(len(flat))]), np.array(triangles, dtype=np.int64)


def drilled_slab(edge: float = 1.0, radius: float = 0.25, thickness: float = 0.1, sides: int = 16) -> Mesh:
    """Solid `drilled_plate` about z = 0 with straight walls."""
    sheet = drilled_plate(edge, radius, sides)
    top, bottom = moved(sheet, z=0.5 * thickness), flipped(moved(sheet, z=-0.5 * thickness))
    vertices, triangles = joined(top, bottom)
    n = 4 + sides
    loops = [(k, (k + 1) % 4) for k in range(4)]
    loops += [(4 + (k + 1) % sides, 4 + k) for k in range(sides)]
    walls = [t for a, b in loops for t in ((n + a, n + b, b), (n + a, b, a))]
    return vertices, np.concatenate([triangles, np.array(walls, dtype=np.int64)])


def regular_solid(name: str, edge: float = 1.0) -> Mesh:
    """Platonic solid about the origin, by its usual name."""
    golden = 0.5 * (1.0 + sqrt(5.0))
    signs = (-1.0, 1.0)
    cyclic = [(0, 1, 2), (1, 2, 0), (2, 0, 1)]
    box = [(i, j, k) for i in signs for j in signs for k in signs]
    points = {
        "tetrahedron": [p for p in box if p[0] * p[1] * p[2] > 0],
        "cube": box,
        "octahedron": [tuple(np.roll((s, 0.0, 0.0), k)) for s in signs for k in range(3)],
        "icosahedron": [_shuffled((0.0, i, j * golden), c) for i in signs for j in signs for c in cyclic],
        "dodecahedron": box
        + [_shuffled((0.0, i / golden, j * golden), c) for i in signs for j in signs for c in cyclic],
    }[name]
    vertices = np.array(points, dtype=np.float64)
    gaps = np.linalg.norm(vertices[:, None] - vertices, axis=2)
    shortest = gaps[gaps > 1e-9].min()
    return vertices * (edge / shortest), _hull_triangles(vertices)


def _shuffled(point: tuple[float, float, float], order: tuple[int, int, int]) -> tuple[float, float, float]:
    return (point[order[0]], point[order[1]], point[order[2]])


def _hull_triangles(vertices: NDArray[np.float64]) -> NDArray[np.int64]:
    """Faces of a convex body about the origin, each a fan from its vertex of lowest number."""
    faces: dict[tuple[int, ...], NDArray[np.float64]] = {}
    for three in combinations(range(len(vertices)), 3):
        a, b, c = vertices[list(three)]
        normal = np.cross(b - a, c - a)
        if np.linalg.norm(normal) < 1e-9:
            continue
        normal *= np.sign(normal @ a) or 1.0
        heights = vertices @ normal
        if heights.max() <= a @ normal + 1e-9 and a @ normal > 1e-9:
            faces[tuple(np.flatnonzero(heights > a @ normal - 1e-9).tolist())] = normal
    triangles = []
    for members, normal in faces.items():
        ring = vertices[list(members)]
        centre, axis = ring.mean(axis=0), ring[0] - ring.mean(axis=0)
        turn = np.arctan2((ring - centre) @ np.cross(normal / np.linalg.norm(normal), axis), (ring - centre) @ axis)
        order = np.array(members)[np.argsort(turn % (2 * pi - 1e-9))]
        triangles += [(order[0], order[k], order[k + 1]) for k in range(1, len(order) - 1)]
    return np.array(sorted(tuple(int(i) for i in t) for t in triangles), dtype=np.int64)
