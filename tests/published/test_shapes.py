"""The mesh makers: closed where they should be, wound outwards, of the right area and volume."""

from math import pi, sin, sqrt

import numpy as np
import pytest

from published import shapes

CLOSED = {
    "icosphere": (shapes.icosphere(2.0, 3), 4 / 3 * pi * 8),
    "uv_sphere": (shapes.uv_sphere(1.0, 48, 24), 4 / 3 * pi),
    "spheroid": (shapes.spheroid(3.0, 1.0, 3), 4 / 3 * pi * 3),
    "ellipsoid": (shapes.ellipsoid((3.0, 2.0, 1.0), 3), 4 / 3 * pi * 6),
    "hemisphere": (shapes.hemisphere(1.0, 48, 12), 2 / 3 * pi),
    "cylinder": (shapes.cylinder(1.0, 3.0, 64), 3 * pi),
    "capsule": (shapes.capsule(1.0, 2.0, 48, 12), 2 * pi + 4 / 3 * pi),
    "torus": (shapes.torus(3.0, 1.0, 64, 48), 2 * pi**2 * 3),
    "cube": (shapes.cube(2.0), 8.0),
    "block": (shapes.block(1.0, 2.0, 3.0), 6.0),
    "drilled slab": (shapes.drilled_slab(1.0, 0.25, 0.1, 64), 0.1 * (1 - pi / 16)),
    # volumes of edge 1: Coxeter, Regular Polytopes (1973), table I; from memory
    "tetrahedron": (shapes.regular_solid("tetrahedron"), sqrt(2) / 12),
    "octahedron": (shapes.regular_solid("octahedron"), sqrt(2) / 3),
    "dodecahedron": (shapes.regular_solid("dodecahedron"), (15 + 7 * sqrt(5)) / 4),
    "icosahedron": (shapes.regular_solid("icosahedron"), 5 * (3 + sqrt(5)) / 12),
}

OPEN = {
    "disc": (shapes.disc(1.0, 64), pi),
    "disc by its centre": (shapes.disc(1.0, 64, fan="centre"), pi),
    "bowl": (shapes.bowl(1.0, pi / 3, 48, 12), pi),
    "tube": (shapes.tube(1.0, 2.0, 64), 4 * pi),
    "plate": (shapes.plate(2.0, 3.0), 6.0),
    "drilled plate": (shapes.drilled_plate(1.0, 0.25, 64), 1 - pi / 16),
    "l_plate": (shapes.l_plate(1.0, 0.5), 0.75),
}


@pytest.mark.parametrize("name", CLOSED)
def test_closed_bodies(name: str) -> None:
    mesh, volume = CLOSED[name]
    assert shapes.is_closed(mesh)
    assert shapes.volume(mesh) > 0  # the normals point outwards
    # A circle of 48 sides has 0.3 % less area than the true one, and a sphere cut both ways about three times
    # that; 2 % covers the 1280 triangles of the icosphere as well.
    assert shapes.volume(mesh) == pytest.approx(volume, rel=0.02)
    assert shapes.volume(shapes.flipped(mesh)) == pytest.approx(-shapes.volume(mesh), rel=1e-12)


@pytest.mark.parametrize("name", OPEN)
def test_open_sheets(name: str) -> None:
    mesh, area = OPEN[name]
    assert not shapes.is_closed(mesh)
    assert shapes.area(mesh) == pytest.approx(area, rel=0.01)  # 48 sides: 0.3 % and less
    corners = mesh[0][mesh[1]]
    normals = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])
    assert np.linalg.norm(normals, axis=1).min() > 0
    if name not in ("bowl", "tube"):
        assert (normals[:, 2] > 0).all()


@pytest.mark.parametrize("name", ["tetrahedron", "cube", "octahedron", "dodecahedron", "icosahedron"])
def test_regular_solids_have_edge_one_and_centre_at_the_origin(name: str) -> None:
    vertices, triangles = shapes.regular_solid(name)
    gaps = np.linalg.norm(vertices[:, None] - vertices, axis=2)
    assert gaps[gaps > 0].min() == pytest.approx(1.0, rel=1e-12)
    assert np.linalg.norm(vertices, axis=1) == pytest.approx(np.linalg.norm(vertices[0]), rel=1e-12)
    assert len(triangles) == {"tetrahedron": 4, "cube": 12, "octahedron": 8, "icosahedron": 20}.get(name, 36)


def test_drilled_slab_area() -> None:
    slab = shapes.drilled_slab(1.0, 0.25, 0.1, 16)
    hole = 16 * 2 * 0.25 * sin(pi / 16)
    assert shapes.area(slab) == pytest.approx(
        2 * shapes.area(shapes.drilled_plate(1.0, 0.25, 16)) + 0.1 * (4 + hole), rel=1e-12
    )


def test_disc_fans_differ_in_slivers_only() -> None:
    rim, centre = shapes.disc(1.0, 32), shapes.disc(1.0, 32, fan="centre")
    assert shapes.area(rim) == pytest.approx(shapes.area(centre), rel=1e-12)
    assert (len(rim[1]), len(centre[1])) == (30, 32)


def test_placing() -> None:
    body = shapes.block(1.0, 2.0, 3.0)
    turned = shapes.turned(body, pi / 2, (1.0, 0.0, 0.0))
    assert shapes.extent(turned) == pytest.approx([1.0, 3.0, 2.0])
    assert turned[0][0] == pytest.approx([-0.5, 1.5, -1.0])  # y goes to z, z to -y
    assert shapes.moved(body, z=5.0)[0].mean(axis=0) == pytest.approx([0.0, 0.0, 5.0])
    assert shapes.volume(shapes.scaled(body, 2.0)) == pytest.approx(48.0)


def test_surface_assembles_bodies_and_conductors() -> None:
    ball = shapes.icosphere(1.0, 0)
    pair = [ball, shapes.moved(ball, x=3.0)]
    found = shapes.surface([shapes.plate(), pair], ["plate", "pair"])
    assert found.n_bodies == 3
    assert found.n_conductors == 2
    assert found.conductor_names == ("plate", "pair")
    assert found.body_conductor.tolist() == [0, 1, 1]
    assert np.bincount(found.triangle_body).tolist() == [2, 20, 20]
    assert found.triangles.max() == len(found.vertices) - 1
