"""Remake the demo surfaces in meshes/ bit for bit.

The part is the head of a capacitive fill-level probe as a small workshop would draw it, in millimetres, axis
along z, wetted side up: a sense electrode with a solder stud, a guard ring round it and a guard plate
behind it, a drive plate opposite, an insulated screw and a folded sheet of the housing. No drawing of
anybody else's part was used.

Beside it a terminal for 30 kV on a post, with a small or a large grading ring, over an earthed floor plate.

The files look like the export of a CAD program on purpose: round parts are polygons within a chord tolerance,
drilled faces fall into long thin triangles, and solids meet at odd angles.

Usage: ``python scripts/make_meshes.py [FOLDER]`` (default: meshes/ beside the folder of this script).
"""

import struct
import sys
from math import acos, cos, pi, sin
from pathlib import Path

import numpy as np
from manifold3d import CrossSection, JoinType, Manifold, triangulate
from numpy.typing import NDArray

__all__ = ["bodies", "high_voltage", "solids", "write_all"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
Mesh = tuple[FloatArray, IntArray]

#: Largest distance between an arc and its chord, mm: a coarse but common export setting.
CHORD_TOLERANCE = 0.2


def facets(radius: float) -> int:
    """Sides of the polygon that stands for a circle, a multiple of four.

    Parameters
    ----------
    radius : float, mm

    Returns
    -------
    int
    """
    sides = pi / acos(1.0 - CHORD_TOLERANCE / radius)
    return max(12, 4 * int(np.ceil(sides / 4.0)))


def drum(radius: float, low: float, high: float, at: tuple[float, float] = (0.0, 0.0)) -> Manifold:
    """Solid cylinder along z between two heights, mm."""
    solid = Manifold.cylinder(high - low, radius, circular_segments=facets(radius))
    return solid.translate((at[0], at[1], low))


def turned(profile: list[tuple[float, float]], radius: float) -> Manifold:
    """Lathe part: the (r, z) profile in mm turned round z, with the sides of a circle of the given radius."""
    return CrossSection([profile]).revolve(circular_segments=facets(radius))


def fillet(centre: tuple[float, float], radius: float, start: float, sides: int) -> list[tuple[float, float]]:
    """Quarter of a circle in the (r, z) plane, from the angle `start`, rad, counter-clockwise."""
    angles = [start + 0.5 * pi * k / sides for k in range(sides + 1)]
    return [(centre[0] + radius * cos(a), centre[1] + radius * sin(a)) for a in angles]


def sense() -> Manifold:
    """Disc with a rounded front rim and a solder stud behind it."""
    rim = fillet((7.5, 1.0), 0.5, 0.0, 2)
    disc = turned([(0.0, 0.0), (8.0, 0.0), *rim, (0.0, 1.5)], 8.0)
    stud = turned([(0.0, -4.5), (1.25, -4.5), (1.25, 0.5), (0.0, 0.5)], 1.25)
    return disc + stud


def guard_ring() -> Manifold:
    """Ring round the sense disc, chamfered outside."""
    return turned([(8.8, 0.0), (11.5, 0.0), (11.5, 1.5), (8.8, 1.5)], 11.5)


def guard_plate() -> Manifold:
    """Plate behind the sense disc: clearance for the stud and an ear for the wire."""
    plate = drum(11.0, -2.2, -1.2)
    ear = Manifold.cube((5.0, 4.0, 0.6)).translate((-14.0, -2.0, -2.2)) + drum(2.0, -2.2, -1.6, (-14.0, 0.0))
    return plate + ear - drum(2.25, -3.0, 0.0)


def drive() -> Manifold:
    """Plate with round corners opposite the sense disc: a boss and a clearance for the screw."""
    outline = CrossSection.square((18.0, 14.0), center=True).offset(4.0, JoinType.Round, 2.0, facets(4.0))
    plate = outline.extrude(1.2).translate((0.0, 0.0, 7.0))
    boss = drum(3.0, 7.5, 10.2, (-6.5, -3.0))
    return plate + boss - drum(2.4, 6.0, 9.0, (9.0, 6.0))


def screw() -> Manifold:
    """Hexagon screw through one clearance hole of the drive plate; insulated, hence floating."""
    across_corners = 2.2
    head = Manifold.cylinder(1.4, across_corners, circular_segments=6).translate((0.0, 0.0, 9.0))
    shank = turned([(0.0, 3.0), (1.0, 3.0), (1.0, 9.5), (0.0, 9.5)], 1.0)
    return (head + shank).translate((9.0, 6.0, 0.0))


def flat_mesh(section: CrossSection) -> tuple[FloatArray, IntArray]:
    """Triangles of a flat outline with holes, (n, 2) mm and (m, 3)."""
    polygons = [np.asarray(p, dtype=np.float64) for p in section.to_polygons()]
    return np.concatenate(polygons), np.asarray(triangulate(polygons), dtype=np.int64)


def housing() -> Mesh:
    """Folded sheet without thickness: a floor with the cable's hole, a bend and a wall with a slot."""
    half, edge, radius, floor, top = 16.0, 16.0, 2.0, -7.0, 13.0
    sides = 4
    base = CrossSection.square((edge + 16.0, 2 * half)).translate((-16.0, -half))
    corner = CrossSection([[(-17.0, -17.0), (-11.0, -17.0), (-17.0, -11.0)]])
    cable = CrossSection.circle(3.0, facets(3.0)).translate((1.0, 0.0))
    flat, triangles = flat_mesh(base - corner - corner.mirror((0.0, 1.0)) - cable)
    parts = [(np.column_stack([flat, np.full(len(flat), floor)]), triangles)]

    # The arc starts on the floor's edge and ends on the wall's lower edge: both lines are shared exactly.
    angles = [-0.5 * pi + 0.5 * pi * k / sides for k in range(sides + 1)]
    arc = np.array([(edge + radius * cos(a), floor + radius + radius * sin(a)) for a in angles])
    arc[0], arc[-1] = (edge, floor), (edge + radius, floor + radius)
    left = np.column_stack([arc[:, 0], np.full(sides + 1, -half), arc[:, 1]])
    right = np.column_stack([arc[:, 0], np.full(sides + 1, half), arc[:, 1]])
    strip = [(k, k + 1, k + sides + 2) for k in range(sides)]
    strip += [(k, k + sides + 2, k + sides + 1) for k in range(sides)]
    parts.append((np.concatenate([left, right]), np.array(strip, dtype=np.int64)))

    wall = CrossSection.square((2 * half, top - floor - radius)).translate((-half, floor + radius))
    end = CrossSection.circle(1.5, facets(1.5))
    slot = CrossSection.batch_hull([end.translate((-8.0, 5.0)), end.translate((0.0, 5.0))])
    flat, triangles = flat_mesh(wall - slot)
    upright = np.column_stack([np.full(len(flat), edge + radius), flat])
    parts.append((upright, triangles[:, ::-1]))  # the floor's upper side becomes the wall's inner side
    offsets = np.cumsum([0] + [len(v) for v, _ in parts[:-1]])
    joined = np.concatenate([t + o for (_, t), o in zip(parts, offsets, strict=True)])
    return np.concatenate([v for v, _ in parts]), joined


def solid_mesh(solid: Manifold) -> Mesh:
    """Vertices in mm and triangles of a closed solid."""
    mesh = solid.simplify(1e-6).to_mesh64()
    # Copies: views would keep the library's mesh alive until the interpreter ends.
    return np.array(mesh.vert_properties[:, :3], dtype=np.float64), np.array(mesh.tri_verts, dtype=np.int64)


def solids() -> dict[str, Manifold]:
    """Return the closed bodies of the probe head, in mm, by name."""
    return {
        "sense": sense(),
        "guard-ring": guard_ring(),
        "guard-plate": guard_plate(),
        "drive": drive(),
        "screw": screw(),
    }


def bodies() -> dict[str, Mesh]:
    """All bodies of the probe head.

    Returns
    -------
    dict of str to ((n, 3) float, (m, 3) int)
        Vertices in mm; triangles counter-clockwise seen from outside.
    """
    found = {name: solid_mesh(solid) for name, solid in solids().items()}
    found["housing"] = housing()
    return found


def grading_ring(radius: float, wire: float, height: float) -> Manifold:
    """Ring of round bar, axis along z, mm."""
    bar = CrossSection.circle(wire, facets(wire)).translate((radius, height))
    return bar.revolve(circular_segments=facets(radius))


def high_voltage() -> dict[str, Mesh]:
    """Terminal with a domed head, two grading rings to choose from, and the floor plate, mm."""
    dome, foot = fillet((0.0, 240.0), 18.0, 0.0, 5), fillet((8.0, 184.0), 10.0, 1.5 * pi, 3)
    terminal = turned([(0.0, 174.0), *foot, *dome], 18.0)
    floor = Manifold.cube((500.0, 500.0, 4.0), center=True).translate((0.0, 0.0, -2.0))
    parts = {
        "terminal": terminal,
        "ring": grading_ring(50.0, 6.0, 215.0),
        "ring_large": grading_ring(80.0, 15.0, 215.0),
        "floor": floor,
    }
    return {name: solid_mesh(solid) for name, solid in parts.items()}


def corners(mesh: Mesh) -> FloatArray:
    """Triangle corners in mm, rounded to 1 nm and in an order of their own.

    Rounding hides the last bits in which two machines may differ; the sorted order makes the files
    independent of the order in which the boolean operations hand out their triangles.

    Parameters
    ----------
    mesh : ((n, 3) float, (m, 3) int)

    Returns
    -------
    (m, 3, 3) float, mm
    """
    vertices, triangles = mesh
    points = np.round(vertices, 6) + 0.0  # the sum turns -0.0 into 0.0
    found = []
    for triangle in points[triangles].tolist():
        first = triangle.index(min(triangle))
        found.append(triangle[first:] + triangle[:first])
    return np.array(sorted(found), dtype=np.float64)


def normals(triangles: FloatArray) -> FloatArray:
    """Return the unit normals of triangles, (m, 3), rounded like the corners."""
    vectors = np.cross(triangles[:, 1] - triangles[:, 0], triangles[:, 2] - triangles[:, 0])
    unit = vectors / np.linalg.norm(vectors, axis=1)[:, None]
    return np.asarray(np.round(unit, 6) + 0.0, dtype=np.float64)


def ascii_stl(named: dict[str, Mesh]) -> bytes:
    """Several named solids as one ASCII STL text."""
    lines = []
    for name, mesh in named.items():
        triangles = corners(mesh)
        lines.append(f"solid {name}")
        for normal, triangle in zip(normals(triangles), triangles, strict=True):
            lines.append("  facet normal " + " ".join(f"{x:.6e}" for x in normal))
            lines.append("    outer loop")
            lines += ["      vertex " + " ".join(f"{x:.6e}" for x in corner) for corner in triangle]
            lines += ["    endloop", "  endfacet"]
        lines.append(f"endsolid {name}")
    return ("\n".join(lines) + "\n").encode("ascii")


def binary_stl(title: str, mesh: Mesh) -> bytes:
    """One solid as a binary STL; the format keeps single precision and no name."""
    triangles = corners(mesh)
    layout = [("normal", "<f4", 3), ("corners", "<f4", (3, 3)), ("colour", "<u2")]
    record = np.zeros(len(triangles), dtype=layout)
    record["normal"], record["corners"] = normals(triangles), triangles
    return title.encode("ascii").ljust(80)[:80] + struct.pack("<I", len(triangles)) + record.tobytes()


def write_all(folder: Path) -> list[Path]:
    """Write every demo surface.

    Parameters
    ----------
    folder : Path
        Made if missing.

    Returns
    -------
    list of Path
    """
    named = bodies()
    drive_plate, sheet = named.pop("drive"), named.pop("housing")
    files = {
        "probe_head.stl": ascii_stl(named),
        "drive.stl": binary_stl("drive plate, mm", drive_plate),
        "housing.stl": binary_stl("housing sheet, mm", sheet),
    }
    for name, mesh in high_voltage().items():
        files[f"{name}.stl"] = binary_stl(f"{name.replace('_', ' ')}, mm", mesh)
    folder.mkdir(parents=True, exist_ok=True)
    for name, data in files.items():
        (folder / name).write_bytes(data)
    return [folder / name for name in files]


if __name__ == "__main__":
    target = Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).resolve().parent.parent / "meshes"
    for path in write_all(target):
        sys.stdout.write(f"{path}: {path.stat().st_size} bytes\n")
