"""Reading each format: shapes, names, units, and what is done with vertices."""

import numpy as np
import pytest
import trimesh
from hypothesis import given
from hypothesis import strategies as st

from daraf.bem.errors import InputError
from daraf.io.bodies import pick_bodies, read_bodies
from daraf.io.mesh_units import METRES_PER_UNIT, length_unit
from daraf.io.readers.polygons import polygons_to_triangles


def box(size=(40.0, 20.0, 8.0), at=(0.0, 0.0, 0.0)):
    mesh = trimesh.creation.box(size)
    mesh.apply_translation(at)
    return mesh


def ascii_stl(**solids):
    text = ""
    for name, mesh in solids.items():
        text += f"solid {name}\n"
        for normal, triangle in zip(mesh.face_normals, mesh.triangles, strict=True):
            text += "facet normal {:.9g} {:.9g} {:.9g}\n outer loop\n".format(*normal)
            text += "".join("  vertex {:.9g} {:.9g} {:.9g}\n".format(*corner) for corner in triangle)
            text += " endloop\nendfacet\n"
        text += f"endsolid {name}\n"
    return text


def write(path, content):
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return path


def scene():
    held = trimesh.Scene()
    held.add_geometry(box(), node_name="plate", geom_name="plate")
    held.add_geometry(box((2, 2, 2)), node_name="stud", geom_name="stud", transform=_shift(60.0))
    return held


def _shift(x):
    return trimesh.transformations.translation_matrix([x, 0.0, 0.0])


@pytest.mark.parametrize("extension", ["stl", "obj", "ply", "off"])
def test_formats_without_unit_agree(tmp_path, extension):
    path = tmp_path / f"plate.{extension}"
    box().export(path)
    (body,) = read_bodies(path, "mm")
    assert body.name == "plate"
    assert body.vertices.shape == (8, 3)
    assert body.triangles.shape == (12, 3)
    assert body.diagonal == pytest.approx(np.linalg.norm([0.04, 0.02, 0.008]), rel=1e-7)  # single precision


@pytest.mark.parametrize("extension", ["glb", "3mf"])
def test_formats_with_unit_names_and_placements(tmp_path, extension):
    path = tmp_path / f"rig.{extension}"
    held = scene()
    held.units = "mm"
    held.export(path)
    scale = 1.0 if extension == "glb" else 1e-3
    bodies = {body.name: body for body in read_bodies(path, None)}
    assert sorted(bodies) == ["plate", "stud"]
    assert bodies["stud"].box[0] == pytest.approx(np.array([59.0, -1.0, -1.0]) * scale, rel=1e-7)
    assert read_bodies(path, "m" if extension == "glb" else "millimetre")
    with pytest.raises(InputError, match=r"rig\.\w+: the file says m"):
        read_bodies(path, "in")


def test_binary_ply_in_single_precision(tmp_path):
    header = (
        "ply\nformat binary_little_endian 1.0\nelement vertex 4\nproperty float x\nproperty float y\n"
        "property float z\nelement face 1\nproperty list uchar int vertex_indices\nend_header\n"
    )
    vertices = np.array([[0, 0, 0], [1, 0, 0], [1, 1, 0], [0, 1, 0]], dtype="<f4").tobytes()
    face = bytes([4]) + np.arange(4, dtype="<i4").tobytes()
    (body,) = read_bodies(write(tmp_path / "sheet.ply", header.encode() + vertices + face), "m")
    assert len(body.triangles) == 2


def test_named_solids_of_ascii_stl(tmp_path):
    text = ascii_stl(drive=box(), sense=box(at=(0, 0, 50)))
    bodies = read_bodies(write(tmp_path / "head.stl", text), "mm")
    assert [body.name for body in bodies] == ["drive", "sense"]
    assert [body.index_in_file for body in bodies] == [1, 2]
    assert [body.solid for body in bodies] == [1, 2]


def test_pieces_of_one_solid_are_numbered_in_file_order(tmp_path):
    pair = trimesh.util.concatenate([box(at=(0, 0, 90)), box()])
    bodies = read_bodies(write(tmp_path / "head.stl", ascii_stl(guard=pair)), "mm")
    assert [body.name for body in bodies] == ["guard-1", "guard-2"]
    assert bodies[0].box[0, 2] > bodies[1].box[0, 2]


def test_unnamed_pieces_take_the_file_name(tmp_path):
    pair = trimesh.util.concatenate([box(), box(at=(0, 0, 90))])
    pair.export(tmp_path / "rig.stl")
    assert [body.name for body in read_bodies(tmp_path / "rig.stl", "mm")] == ["rig-1", "rig-2"]


def test_names_are_unique_and_printable(tmp_path):
    one = write(tmp_path / "a.stl", ascii_stl(part=box()))
    two = write(tmp_path / "b.stl", ascii_stl(part=box()).replace("solid part", "solid p\x1b[2Jart\x07"))
    assert [body.name for body in read_bodies(two, "mm")] == ["p[2Jart"]
    two = write(tmp_path / "b.stl", ascii_stl(part=box(), next=box()).replace("solid next", "solid part\u200b "))
    assert [body.name for body in read_bodies([one, two], "mm")] == ["part", "part-2", "part-3"]


def test_objects_and_groups_of_obj(tmp_path):
    text = "v 0 0 0\nv 1 0 0\nv 1 1 0\nv 0 1 0\nv 0 0 1\nv 1 0 1\nv 1 1 1\n"
    by_group = write(tmp_path / "g.obj", text + "g low\nf 1 2 3 4\ng high\nf 5/1 6/2/3 -1//3\n")
    low, high = read_bodies(by_group, "mm")
    assert (low.name, high.name) == ("low", "high")
    assert (len(low.triangles), len(high.triangles)) == (2, 1)
    by_object = write(tmp_path / "o.obj", text + "o lid\ng low\nf 1 2 3\ng low2\nf 1 3 4\no top\nf 5 6 7 # end\n")
    assert [body.name for body in read_bodies(by_object, "mm")] == ["lid", "top"]


def test_off_with_comment_polygon_and_split_header(tmp_path):
    text = "OFF # made by hand, 1,234 times\n# a sheet\n4 1 0\n0 0 0\n1 0 0\n1 1 0\n0 1 0\n4 0 1 2 3 255 0 0\n"
    (body,) = read_bodies(write(tmp_path / "sheet.off", text), "in")
    assert len(body.triangles) == 2
    assert body.diagonal == pytest.approx(0.0254 * 2**0.5)


def test_binary_stl_whose_header_says_solid(tmp_path):
    data = bytearray(box().export(file_type="stl"))
    data[:80] = b"solid made by a CAD program".ljust(80)
    (body,) = read_bodies(write(tmp_path / "plate.stl", bytes(data)), "mm")
    assert len(body.triangles) == 12


def test_ascii_stl_in_capitals_with_unset_normals_and_windows_lines(tmp_path):
    text = ascii_stl(plate=box()).upper().replace("FACET NORMAL 1 0 0", "FACET NORMAL -NAN(IND) NAN NAN")
    (body,) = read_bodies(write(tmp_path / "plate.stl", text.replace("\n", "\r\n")), "mm")
    assert (body.name, len(body.triangles)) == ("PLATE", 12)


@given(exponent=st.integers(-9, 6), extension=st.sampled_from(["stl", "ply"]))
def test_scale_does_not_change_the_mesh(tmp_path_factory, exponent, extension):
    path = tmp_path_factory.mktemp("scale") / f"ball.{extension}"
    ball = trimesh.creation.icosphere(1, radius=10.0**exponent)
    ball.export(path)
    (body,) = read_bodies(path, "m")
    assert body.vertices.shape == ball.vertices.shape
    assert body.notes == []


def test_nanometre_model_in_metres_does_not_collapse(tmp_path):
    path = write(tmp_path / "tip.stl", ascii_stl(tip=box((4e-9, 2e-9, 8e-10))))
    (body,) = read_bodies(path, "m")
    assert body.vertices.shape == (8, 3)


def test_vertices_within_the_tolerance_are_merged_and_told(tmp_path):
    sheet = "OFF\n6 2 0\n0 0 0\n1 0 0\n1 1 0\n0 0 1e-12\n1 1 1e-12\n0 1 0\n3 0 1 2\n3 3 4 5\n"
    (body,) = read_bodies(write(tmp_path / "sheet.off", sheet), "mm")
    assert len(body.vertices) == 4
    assert "merged 2 vertices" in str(body.notes[0])


def test_pick_by_name_number_and_all(tmp_path):
    path = write(tmp_path / "head.stl", ascii_stl(drive=box(), sense=box(at=(0, 0, 50))))
    assert [body.name for body in read_bodies(path, "mm", pick="sense")] == ["sense"]
    assert [body.name for body in read_bodies(path, "mm", pick=[2, "drive", 1])] == ["sense", "drive"]
    bodies = read_bodies(path, "mm")
    assert pick_bodies(bodies, "all") == bodies
    with pytest.raises(InputError, match=r"no body number 3; they are numbered 1 to 2"):
        pick_bodies(bodies, 3)
    with pytest.raises(InputError, match=r"did you mean 'sense'"):
        pick_bodies(bodies, "sens")


@pytest.mark.parametrize(
    ("word", "unit"),
    [("MM", "mm"), ("micron", "um"), ("µm", "um"), ("μm", "um"), ("Inches", "in"), ("feet", "ft")],
)
def test_words_for_units(word, unit):
    assert length_unit(word) == unit


@pytest.mark.parametrize("unit", METRES_PER_UNIT)
def test_units_scale(tmp_path, unit):
    path = tmp_path / "plate.stl"
    box().export(path)
    (body,) = read_bodies(path, unit)
    assert np.ptp(body.box[:, 0]) == pytest.approx(40 * METRES_PER_UNIT[unit])


def test_input_files_are_left_alone(tmp_path):
    path = tmp_path / "plate.stl"
    box().export(path)
    before = path.read_bytes()
    read_bodies(path, "mm")
    assert path.read_bytes() == before


DENT = np.array([[0, 0, 0], [1, 0, 0], [1, 1, 0], [0.5, 0.2, 0], [0, 1, 0]], dtype=float)  # area 0.6; a fan covers 0.9


def area_of(body):
    a, b, c = (body.vertices[body.triangles[:, k]] for k in range(3))
    return 0.5 * np.linalg.norm(np.cross(b - a, c - a), axis=1).sum()


def dented(kind):
    """One concave pentagon as a file."""
    lines = "".join("{:g} {:g} {:g}\n".format(*corner) for corner in DENT)
    header = (
        "ply\nformat {} 1.0\nelement vertex 5\nproperty float x\nproperty float y\nproperty float z\n"
        "element face 1\nproperty list uchar int vertex_indices\nend_header\n"
    )
    binary = DENT.astype("<f4").tobytes() + bytes([5]) + np.arange(5, dtype="<i4").tobytes()
    return {
        "obj": ("".join(f"v {line}\n" for line in lines.splitlines()) + "f 1 2 3 4 5\n").encode(),
        "off": f"OFF\n5 1 0\n{lines}5 0 1 2 3 4\n".encode(),
        "text.ply": f"{header.format('ascii')}{lines}5 0 1 2 3 4\n".encode(),
        "binary.ply": header.format("binary_little_endian").encode() + binary,
    }[kind]


@pytest.mark.parametrize("kind", ["obj", "off", "text.ply", "binary.ply"])
def test_concave_polygons_keep_their_area(tmp_path, kind):
    (body,) = read_bodies(write(tmp_path / f"dent.{kind}", dented(kind)), "m")
    assert body.triangles.shape == (3, 3)
    assert area_of(body) == pytest.approx(0.6, rel=1e-6)


@given(st.integers(3, 12), st.integers(0, 10_000))
def test_star_shaped_polygons_are_cut_without_overlap(n, seed):
    rng = np.random.default_rng(seed)
    angle = (np.arange(n) + 0.8 * rng.random(n)) * 2 * np.pi / n
    radius = 0.2 + rng.random(n)
    flat = np.column_stack([radius * np.cos(angle), radius * np.sin(angle), 0 * angle])
    turn = trimesh.transformations.random_rotation_matrix(rng.random(3))[:3, :3]
    start = int(rng.integers(n))
    triangles = polygons_to_triangles(
        flat @ turn.T, np.concatenate([np.roll(np.arange(n), start), [0, 1, 2]]), np.array([n, 3])
    )
    assert triangles.shape == (n - 1, 3)
    assert triangles[-1].tolist() == [0, 1, 2]  # the order of the faces stays
    a, b, c = (flat[triangles[:-1, k]] for k in range(3))
    doubled = np.cross(b - a, c - a)[:, 2]
    x, y = flat[:, 0], flat[:, 1]
    assert (doubled > -1e-12).all()
    assert doubled.sum() == pytest.approx(np.dot(x, np.roll(y, -1)) - np.dot(y, np.roll(x, -1)))
