"""Parts as a designer makes them, and exports that general-purpose packages carry.

The parts are made with manifold3d and trimesh. The exports are read where they are installed, and the tests are
skipped where they are not: *gymnasium-robotics* (MIT; robot parts exported from CAD as binary STL) and *pyvista* (MIT;
a nut as PLY).
"""

import importlib.util
from pathlib import Path

import manifold3d
import numpy as np
import pytest
import trimesh

from daraf.bem.creases import find_creases
from daraf.bem.flats import panel_regions
from daraf.bem.regions import find_regions
from daraf.bem.surface import Surface
from daraf.io.bodies import Body, read_bodies
from daraf.io.changes import Mend
from daraf.io.gaps import Shape
from daraf.io.joining import bodies_to_surface
from daraf.io.mending import fit_bodies
from daraf.io.topology import edges_of
from daraf.io.uniting import unite

Manifold = manifold3d.Manifold


def body_of(solid, name="part"):
    mesh = solid.to_mesh64()
    vertices = np.asarray(mesh.vert_properties)[:, :3]
    return Body(name, np.ascontiguousarray(vertices), np.asarray(mesh.tri_verts).astype(np.int64), "part.stl")


def rounded_block(size, radius, facets):
    x, y, z = (0.5 * s - radius for s in size)
    ball = Manifold.sphere(radius, facets)
    return Manifold.batch_hull([ball.translate((a, b, c)) for a in (-x, x) for b in (-y, y) for c in (-z, z)])


def drilled_plate():
    plate = Manifold.cube((20, 12, 1))
    for x in np.arange(2, 20, 4.0):
        for y in (3.0, 9.0):
            plate -= Manifold.cylinder(3, 1, 1, 32).translate((x, y, -1))
    return plate


def boss_on_thin_wall():
    wall = Manifold.cube((20, 0.2, 10))
    return wall + Manifold.cylinder(2, 2, 1.5, 48).rotate((-90, 0, 0)).translate((10, 0, 5))


def engraved():
    """A plate with grooves like the strokes of letters, some of them slanting."""
    plate = Manifold.cube((20, 6, 2))
    for k, turn in enumerate((0, 35, -50, 90, 12)):
        stroke = Manifold.cube((3, 0.3, 0.4)).translate((-1.5, -0.15, 0)).rotate((0, 0, turn))
        plate -= stroke.translate((2.5 + 3.6 * k, 3, 1.7))
    return plate


PARTS = {
    "fillets": rounded_block((10, 6, 4), 0.5, 24),
    "drilled plate": drilled_plate(),
    "boss on thin wall": boss_on_thin_wall(),
    "engraving": engraved(),
}


def panels_of(bodies):
    surface = bodies_to_surface(bodies, [0] * len(bodies))
    regions, notices = find_regions(surface)
    panels, more = panel_regions(surface, regions, creases=find_creases(surface, regions))
    return panels, notices + more


def area_of(body):
    a, b, c = np.moveaxis(body.vertices[body.triangles], 1, 0)
    return 0.5 * np.linalg.norm(np.cross(b - a, c - a), axis=1).sum()


@pytest.mark.parametrize("name", PARTS)
def test_made_parts_need_no_mending_and_panels_cover_them(name):
    body = body_of(PARTS[name])
    (fit,) = fit_bodies([body], Mend("bold"))
    assert not [note for note in fit.notes if note.code not in ("exchanged", "merged-vertices", "dropped", "checked")]
    panels, notices = panels_of([fit])
    assert panels.areas.sum() == pytest.approx(area_of(body), rel=1e-6)
    assert not notices
    # slivers of the cuts become few panels, but grooves at all angles need some of their own
    assert len(panels) < 2.0 * len(body.triangles)
    shape = np.linalg.norm(np.roll(panels.corners, -1, axis=1) - panels.corners, axis=2).max(axis=1) ** 2 / panels.areas
    sides = np.diff(body.vertices[body.triangles], axis=1, append=body.vertices[body.triangles][:, :1])
    raw = np.linalg.norm(sides, axis=2).max(axis=1) ** 2 / (
        0.5 * np.linalg.norm(np.cross(sides[:, 0], sides[:, 1]), axis=1)
    )
    assert np.median(shape) < np.median(raw)


@pytest.mark.parametrize("name", PARTS)
def test_single_precision_soup_comes_back_closed(name, tmp_path):
    body = body_of(PARTS[name])
    trimesh.Trimesh(body.vertices, body.triangles, process=False).export(tmp_path / "part.stl")
    (read,) = fit_bodies(read_bodies(tmp_path / "part.stl", "mm"))
    assert (edges_of(read.triangles).count == 2).all()
    assert Shape(read).volume == pytest.approx(PARTS[name].volume() * 1e-9, rel=1e-5)


def test_an_assembly_of_one_conductor_becomes_what_cad_would_have_made():
    """Plate, bosses and a bar, touching or overlapping, against the union made in one step."""
    plate = drilled_plate()
    bosses = [Manifold.cylinder(3, 0.8, 0.8, 24).translate((x, 6, 1)) for x in (4.0, 16.0)]
    bar = Manifold.cube((12, 1, 1)).translate((4, 5.5, 3.5))
    whole = plate + bosses[0] + bosses[1] + bar
    united = unite([body_of(one, f"b{k}") for k, one in enumerate((plate, *bosses, bar))], [0] * 4)
    (body,) = united.bodies
    assert Shape(body).volume == pytest.approx(whole.volume(), rel=1e-7)
    assert area_of(body) == pytest.approx(whole.surface_area(), rel=1e-6)
    panels, notices = panels_of([body])
    assert not notices
    assert panels.areas.sum() == pytest.approx(whole.surface_area(), rel=1e-6)


def exports(package, pattern):
    found = importlib.util.find_spec(package)
    if found is None or not found.submodule_search_locations:
        return []
    return sorted(Path(found.submodule_search_locations[0]).glob(pattern))


#: Real exports of up to this many bytes: the others take minutes in all.
_LARGEST = 800_000
ROBOTS = [f for f in exports("gymnasium_robotics", "envs/assets/**/*.stl") if 20_000 < f.stat().st_size < _LARGEST]
NUTS = exports("pyvista", "examples/nut.ply")


@pytest.mark.slow
@pytest.mark.skipif(not ROBOTS and not NUTS, reason="neither gymnasium-robotics nor pyvista is installed")
@pytest.mark.parametrize("file", [*NUTS, *ROBOTS], ids=lambda file: file.name)
@pytest.mark.parametrize("mode", ["safe", "bold"])
def test_real_exports(file, mode):
    """Mended, united and panelled without an error; what was closed stays closed; nothing far moves."""
    mend = Mend(mode)
    as_read = read_bodies(file, "mm", mend=mend)
    bodies = fit_bodies(as_read, mend)
    for before, after in zip(as_read, bodies, strict=True):
        if Shape(before).volume is not None:
            assert Shape(after).volume is not None
        for note in after.notes:
            assert note.moved is None or note.moved <= 1e-4 * sum(body.diagonal for body in bodies) * (1 + 1e-6)
    united = unite(bodies, [0] * len(bodies), mend)
    assert sum(abs(Shape(body).volume or 0.0) for body in united.bodies) <= sum(
        abs(Shape(body).volume or 0.0) for body in bodies
    ) * (1 + 1e-3)
    panels, _ = panels_of(united.bodies)
    # what lies upon itself within the rounding is left out
    assert panels.areas.sum() == pytest.approx(sum(area_of(body) for body in united.bodies), rel=1e-3)


def test_general_faces_of_many_cuts():
    """Cuts at any angle: every face is covered once, none by its raw triangles."""
    rng = np.random.default_rng(7)
    solid = Manifold.cube((10, 10, 10), True)
    for k in range(40):
        cutter = Manifold.cube(tuple(rng.uniform(0.5, 2.5, 3)), True).rotate(tuple(rng.uniform(0, 360, 3)))
        cutter = cutter.translate(tuple(rng.uniform(-6, 6, 3)))
        solid = solid - cutter if k % 2 else solid + cutter
    body = body_of(solid)
    n = len(body.triangles)
    regions, _ = find_regions(Surface(body.vertices, body.triangles, np.zeros(n), np.zeros(1)))
    panels, notices = panels_of([body])
    assert not notices
    assert (panels.n_corners == 4).mean() > 0.8
    areas = np.bincount(panels.region, panels.areas, len(regions))
    assert areas == pytest.approx(regions.areas, rel=1e-6)
