"""Round bodies as inscribed polyhedra; lengths in m, angles in rad."""

from collections.abc import Sequence
from itertools import pairwise
from math import pi

import numpy as np
from numpy.typing import ArrayLike, NDArray

from published.shapes_flat import regular_solid
from published.shapes_placing import Mesh, scaled

__all__ = [
    "bowl",
    "capsule",
    "cylinder",
    "disc",
    "ellipsoid",
    "hemisphere",
    "icosphere",
    "lathe",
    "spheroid",
    "torus",
    "tube",
    "uv_sphere",
]


def icosphere(radius: float = 1.0, levels: int = 2) -> Mesh:
    """Sphere from an icosahedron whose triangles are cut in four `levels` times: 20 * 4**levels triangles."""
    vertices, triangles = regular_solid("icosahedron")
    points = [p / np.linalg.norm(p) for p in vertices]
    for _ in range(levels):
        middle: dict[tuple[int, int], int] = {}
        finer = []
        for a, b, c in triangles.tolist():
            ab, bc, ca = (_midpoint(points, middle, i, j) for i, j in ((a, b), (b, c), (c, a)))
            finer += [(a, ab, ca), (ab, b, bc), (ca, bc, c), (ab, bc, ca)]
        triangles = np.array(finer, dtype=np.int64)
    return radius * np.array(points), triangles


def _midpoint(points: list[NDArray[np.float64]], known: dict[tuple[int, int], int], i: int, j: int) -> int:
    key = (min(i, j), max(i, j))
    if key not in known:
        point = points[i] + points[j]
        points.append(point / np.linalg.norm(point))
        known[key] = len(points) - 1
    return known[key]


def ellipsoid(half_axes: ArrayLike, levels: int = 2) -> Mesh:
    """Ellipsoid as a stretched `icosphere`."""
    return scaled(icosphere(1.0, levels), half_axes)


def spheroid(axial: float, equatorial: float, levels: int = 2) -> Mesh:
    """Spheroid about z as a stretched `icosphere`."""
    return ellipsoid((equatorial, equatorial, axial), levels)


def lathe(profile: Sequence[tuple[float, float]], sides: int, *, loop: bool = False) -> Mesh:
    """Surface of revolution about z from a profile of (r, z) points, bottom to top on the outside.

    Rings become strips of two triangles a side, points on the axis become poles with one triangle a side.
    With `loop` the last point joins the first, as for a torus.
    """
    angle = 2.0 * pi * np.arange(sides) / sides
    circle = np.column_stack([np.cos(angle), np.sin(angle)])
    points: list[NDArray[np.float64]] = []
    rings: list[NDArray[np.int64]] = []
    count = 0
    for r, z in profile:
        ring = np.zeros((1, 2)) if r == 0.0 else r * circle
        points.append(np.column_stack([ring, np.full(len(ring), z)]))
        # A pole stands for all corners of its ring; the triangles that collapse are left out below.
        rings.append(count + (np.zeros(sides, dtype=np.int64) if r == 0.0 else np.arange(sides)))
        count += len(ring)
    pairs = list(pairwise(rings))
    if loop:
        pairs.append((rings[-1], rings[0]))
    strips = []
    for low, high in pairs:
        next_low, next_high = np.roll(low, -1), np.roll(high, -1)
        if low[0] != low[1]:
            strips.append(np.column_stack([low, next_low, next_high]))
        if high[0] != high[1]:
            strips.append(np.column_stack([low, next_high, high]))
    return np.concatenate(points), np.concatenate(strips)


def _arc(radius: float, z: float, start: float, end: float, steps: int) -> list[tuple[float, float]]:
    """Points (r, z) on a circle about (0, z); angle 0 is the lower pole, pi the upper."""
    found = []
    for angle in np.linspace(start, end, steps + 1).tolist():
        on_axis = min(abs(angle), abs(angle - pi)) < 1e-12
        found.append((0.0 if on_axis else radius * float(np.sin(angle)), z - radius * float(np.cos(angle))))
    return found


def uv_sphere(radius: float = 1.0, sides: int = 24, rings: int = 12) -> Mesh:
    """Sphere by longitude and latitude, with slivers round the poles: 2 sides (rings - 1) triangles."""
    return lathe(_arc(radius, 0.0, 0.0, pi, rings), sides)


def bowl(radius: float, half_angle: float, sides: int = 24, rings: int = 8) -> Mesh:
    """Thin open spherical cap of radius `radius` round the upper pole, centre of the sphere at the origin."""
    return lathe(_arc(radius, 0.0, pi - half_angle, pi, rings), sides)


def _capped(mesh: Mesh, rim: NDArray[np.int64], *, up: bool) -> Mesh:
    """Close a convex rim by a fan from one of its vertices, as exporters do: slivers and no new vertex."""
    first, second, third = np.full(len(rim) - 2, rim[0]), rim[1:-1], rim[2:]
    fan = np.column_stack([first, second, third] if up else [first, third, second])
    return mesh[0], np.concatenate([mesh[1], fan])


def hemisphere(radius: float = 1.0, sides: int = 24, rings: int = 6) -> Mesh:
    """Solid half ball over z = 0, its flat face a fan from one rim vertex."""
    return _capped(bowl(radius, 0.5 * pi, sides, rings), np.arange(sides), up=False)


def tube(radius: float, length: float, sides: int = 24, rows: int = 1) -> Mesh:
    """Thin open tube about the origin: long strips of two triangles."""
    heights = np.linspace(-0.5 * length, 0.5 * length, rows + 1).tolist()
    return lathe([(radius, z) for z in heights], sides)


def cylinder(radius: float, length: float, sides: int = 24, rows: int = 1) -> Mesh:
    """Solid cylinder about the origin: a `tube` with a rim fan on either end."""
    mesh = _capped(tube(radius, length, sides, rows), np.arange(sides), up=False)
    return _capped(mesh, rows * sides + np.arange(sides), up=True)


def capsule(radius: float, half_length: float, sides: int = 24, rings: int = 6) -> Mesh:
    """Cylinder with half balls as ends, overall length twice `half_length`, about the origin."""
    shift = half_length - radius
    low = _arc(radius, -shift, 0.0, 0.5 * pi, rings)
    return lathe(low + _arc(radius, shift, 0.5 * pi, pi, rings), sides)


def torus(ring_radius: float, wire_radius: float, sides: int = 32, wire_sides: int = 12) -> Mesh:
    """Solid torus about z."""
    angle = (2.0 * pi * np.arange(wire_sides) / wire_sides).tolist()
    profile = [(ring_radius + wire_radius * float(np.cos(a)), wire_radius * float(np.sin(a))) for a in angle]
    return lathe(profile, sides, loop=True)


def disc(radius: float = 1.0, sides: int = 24, *, fan: str = "rim") -> Mesh:
    """Thin disc in z = 0, normal +z.

    Parameters
    ----------
    radius : float, m
    sides : int
    fan : {"rim", "centre"}
        Triangles from one rim vertex (as a CAD exporter does, slivers) or from the centre.

    Returns
    -------
    Mesh
    """
    if fan == "centre":
        return lathe([(radius, 0.0), (0.0, 0.0)], sides)
    angle = 2.0 * pi * np.arange(sides) / sides
    rim = np.column_stack([radius * np.cos(angle), radius * np.sin(angle), np.zeros(sides)])
    return _capped((rim, np.zeros((0, 3), dtype=np.int64)), np.arange(sides), up=True)
