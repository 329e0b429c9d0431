"""Bad files: each gives one line that names the file and what to do."""

import struct

import numpy as np
import pytest
import trimesh
from hypothesis import given, settings
from hypothesis import strategies as st

from daraf.bem.errors import InputError
from daraf.io.bodies import read_bodies
from daraf.io.readers import READERS, read_file

BOX = trimesh.creation.box((40.0, 20.0, 8.0))
BINARY = BOX.export(file_type="stl")
ASCII = trimesh.exchange.stl.export_stl_ascii(BOX)
TWO = ASCII.replace("solid ", "solid one", 1) + "\n" + ASCII.replace("solid ", "solid two", 1)


def corrupted(facet, value):
    data = bytearray(BINARY)
    data[84 + 50 * facet + 12 : 84 + 50 * facet + 16] = struct.pack("<f", value)
    return bytes(data)


BAD = {
    "empty.stl": (b"", "is empty"),
    "page.stl": (b"<!DOCTYPE html>\n<html><body>not found</body></html>", "web page"),
    "note.stl": (b"the mesh is on the other disk\n", "is text"),
    "garbage.stl": (bytes(range(256)) * 8, "promises"),
    "short.stl": (b"\0" * 40, "40 bytes"),
    "cut.stl": (BINARY[:-70], "promises 12 triangles, which take 684 bytes, but the file has 614"),
    "long.stl": (BINARY + b"\0" * 10, "promises 12 triangles"),
    "vast.stl": (BINARY[:80] + b"\xff\xff\xff\xff" + BINARY[84:], "promises 4294967295 triangles"),
    "none.stl": (b"\0" * 84, "holds no triangle"),
    "nan.stl": (corrupted(3, float("nan")), "face 4: 1 vertex is not finite"),
    "inf.stl": (corrupted(0, float("inf")), "not finite"),
    "cut-ascii.stl": (ASCII[: len(ASCII) // 2], "truncated"),
    "cut-second.stl": (TWO[: len(TWO) * 3 // 4], "the file ends inside solid"),
    "lost-second.stl": (ASCII + "\nsolid two\nendsolid two\n", "solid 'two' holds no triangle"),
    "lost-line.stl": (ASCII.replace("endfacet\n", "", 1), "line 8: expected 'endfacet'"),
    "lost-vertex.stl": (ASCII.replace("endloop", "endlop", 1), "line 7: expected 'endloop'"),
    "nan-ascii.stl": (ASCII.replace("-20.0", "nan", 1) if "-20.0" in ASCII else ASCII, "not finite"),
    "comma.stl": (ASCII.replace("-20.0", "-20,0"), "decimal comma"),
    "tail.stl": (ASCII + "\nmore\n", "outside"),
    "comma.obj": ("v 0,5 0 0\nv 1 0 0\nv 0 1 0\nf 1 2 3\n", "line 1 has a decimal comma"),
    "index.obj": ("v 0 0 0\nv 1 0 0\nv 0 1 0\nf 1 2 4\n", "names vertex 4, there are 3"),
    "zero.obj": ("v 0 0 0\nv 1 0 0\nv 0 1 0\nf 0 1 2\n", "line 4: a face names a vertex that does not exist"),
    "back.obj": ("v 0 0 0\nv 1 0 0\nv 0 1 0\nf 1 2 -4\n", "line 4"),
    "nan.obj": ("v nan 0 0\nv 1 0 0\nv 0 1 0\nf 1 2 3\n", "not finite"),
    "points.obj": ("v 0 0 0\nv 1 0 0\n", "holds no face"),
    "word.obj": ("v 0 0 0\nf a b c\n", "line 2: 'a' is no vertex number"),
    "cut.off": ("OFF\n4 2 0\n0 0 0\n1 0 0\n1 1 0\n0 1 0\n3 0 1 2\n", "truncated"),
    "cutface.off": ("OFF\n3 1 0\n0 0 0\n1 0 0\n1 1 0\n3 0 1\n", "face 1 is incomplete"),
    "index.off": ("OFF\n3 1 0\n0 0 0\n1 0 0\n1 1 0\n3 0 1 3\n", "face 1 names a vertex that does not exist"),
    "comma.off": ("OFF\n3 1 0\n0,5 0 0\n1 0 0\n1 1 0\n3 0 1 2\n", "line 3 has a decimal comma"),
    "nan.off": ("OFF\n3 1 0\nnan 0 0\n1 0 0\n1 1 0\n3 0 1 2\n", "not finite"),
    "faceless.off": ("OFF\n3 0 0\n0 0 0\n1 0 0\n1 1 0\n", "holds no faces"),
    "page.off": ("<html></html>", "does not start with 'OFF'"),
    "cut.ply": (BOX.export(file_type="ply")[:-30], "truncated"),
    "cut-ascii.ply": (BOX.export(file_type="ply", encoding="ascii")[:-60], "truncated"),
    "page.ply": ("<html></html>", "has no PLY header"),
    "cut.glb": (BOX.export(file_type="glb")[:-30], "truncated"),
    "page.glb": ("<html></html>", "does not start with 'glTF'"),
    "garbage.glb": (b"glTF" + struct.pack("<II", 2, 40) + b"\xff" * 28, "damaged"),
    "cut.3mf": (BOX.export(file_type="3mf")[:-30], "no zip archive"),
    "flat.off": ("OFF\n3 2 0\n0 0 0\n1 0 0\n2 0 0\n3 0 1 2\n3 0 2 1\n", "all 2 faces have no area"),
    "point.off": ("OFF\n3 1 0\n1 0 0\n1 0 0\n1 0 0\n3 0 1 2\n", "all 1 faces have no area"),
    "part.xyz": ("1 2 3\n", "format '.xyz' is unknown"),
}


@pytest.mark.parametrize("name", BAD)
def test_one_line_names_the_file(tmp_path, name):
    content, words = BAD[name]
    path = tmp_path / name
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    with pytest.raises(InputError) as caught:
        read_bodies(path, None if path.suffix in (".glb", ".3mf") else "mm")
    line = str(caught.value)
    assert line.startswith(str(path))
    assert words in line
    assert "\n" not in line


def test_missing_file_folder_and_odd_name(tmp_path):
    with pytest.raises(InputError, match=r"gone\.stl: there is no such file"):
        read_bodies(tmp_path / "gone.stl", "mm")
    with pytest.raises(InputError, match=r"gone\.xyz: there is no such file"):
        read_bodies(tmp_path / "gone.xyz", "mm")
    (tmp_path / "folder.stl").mkdir()
    with pytest.raises(InputError, match="is a folder"):
        read_bodies(tmp_path / "folder.stl", "mm")
    with pytest.raises(InputError, match="no usable file name"):
        read_bodies("a\0b.stl", "mm")
    with pytest.raises(InputError, match="no mesh file is named"):
        read_bodies([], "mm")


def test_missing_unit_names_the_box_in_each_plausible_unit(tmp_path):
    BOX.export(tmp_path / "plate.stl")
    with pytest.raises(InputError) as caught:
        read_bodies(tmp_path / "plate.stl", None)
    line = str(caught.value)
    assert "40 x 20 x 8 would be" in line
    assert "mm: 40 x 20 x 8 mm" in line
    assert "in: 1.016 x 0.508 x 0.2032 m" in line
    with pytest.raises(InputError, match="unit 'furlong' is unknown"):
        read_bodies(tmp_path / "plate.stl", "furlong")
    with pytest.raises(InputError, match="did you mean 'inches'"):
        read_bodies(tmp_path / "plate.stl", "inchs")


@pytest.mark.parametrize("value", [np.nan, np.inf])
@pytest.mark.parametrize("extension", ["ply", "glb"])
def test_vertices_that_are_not_finite_are_not_dropped(tmp_path, value, extension):
    vertices = BOX.vertices.copy()
    vertices[2, 1] = value
    path = tmp_path / f"plate.{extension}"
    path.write_bytes(trimesh.Trimesh(vertices, BOX.faces, process=False).export(file_type=extension))
    with pytest.raises(InputError, match="not finite"):
        read_bodies(path, None if extension == "glb" else "mm")


@pytest.mark.parametrize("offset", [1e7, 1e8, 1e12])
def test_far_off_model_in_single_precision_is_refused(tmp_path, offset):
    far = trimesh.creation.icosphere(2, radius=10.0)
    far.apply_translation([offset, offset, offset])
    far.export(tmp_path / "far.stl")
    with pytest.raises(
        InputError, match=r"the shape is lost; move the part to the origin|have no area.*near the origin"
    ):
        read_bodies(tmp_path / "far.stl", "mm")


def test_far_off_model_with_enough_digits_is_read(tmp_path):
    far = trimesh.creation.icosphere(2, radius=10.0)
    far.apply_translation([1e7, 0.0, 0.0])
    far.export(tmp_path / "far.off", digits=17)
    (body,) = read_bodies(tmp_path / "far.off", "mm")
    assert body.vertices.shape == far.vertices.shape


def test_whatever_a_library_raises_becomes_one_line(tmp_path, monkeypatch):
    def fail(*_args, **_options):
        raise IndexError("index 7\nis out of bounds")

    BOX.export(tmp_path / "plate.ply")
    monkeypatch.setitem(READERS, ".ply", fail)
    with pytest.raises(InputError, match=r"plate\.ply: is damaged or no valid \.ply file \(index 7 is out"):
        read_file(tmp_path / "plate.ply")


GOOD = {
    "plate.stl": BINARY,
    "text.stl": TWO.encode(),
    **{f"plate.{kind}": BOX.export(file_type=kind) for kind in ("obj", "off", "ply", "glb", "3mf")},
    "text.ply": BOX.export(file_type="ply", encoding="ascii"),
}


@settings(max_examples=150)
@given(
    name=st.sampled_from(sorted(GOOD)),
    cut=st.floats(0.0, 1.0),
    shots=st.lists(st.tuples(st.floats(0.0, 1.0), st.integers(0, 255)), max_size=4),
)
def test_damaged_files_give_an_input_error_or_finite_bodies(tmp_path_factory, name, cut, shots):
    data = GOOD[name]
    data = bytearray(data if isinstance(data, bytes) else data.encode())
    for where, value in shots:
        data[int(where * (len(data) - 1))] = value
    path = tmp_path_factory.mktemp("damaged") / name
    path.write_bytes(bytes(data[: len(data) if cut > 0.5 else int(2 * cut * len(data))]))
    line, bodies = "", []
    try:
        bodies = read_bodies(path, None if path.suffix in (".glb", ".3mf") else "mm")
    except InputError as error:
        line = str(error)
    assert bool(line) != bool(bodies)
    assert "\n" not in line
    assert all(np.isfinite(body.vertices).all() and len(body.triangles) for body in bodies)
