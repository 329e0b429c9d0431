"""Archives, glTF in text, packages of several files: what is followed, what is refused."""

import gzip
import io
import json
import stat
import zipfile
import zlib

import numpy as np
import pytest
import trimesh
from fuzz_corpus import box, corpus, mixed_ply, object_xml, spread_3mf, text_gltf, zipped

from daraf.bem.errors import InputError
from daraf.io.bodies import read_bodies
from daraf.io.case import make_case
from daraf.io.gaps import Shape
from daraf.io.problem import build_problem
from daraf.io.readers import archive, threemf

FILES = corpus()


def write(path, content):
    path.parent.mkdir(parents=True, exist_ok=True)
    path.write_bytes(content if isinstance(content, bytes) else content.encode())
    return path


def refused(path, unit="mm"):
    with pytest.raises(InputError) as caught:
        read_bodies(path, unit)
    line = str(caught.value)
    assert line.startswith(str(path))
    assert line.isprintable()
    return line


def test_zip_with_several_meshes(tmp_path):
    bodies = read_bodies(write(tmp_path / "rig.zip", FILES["packed.zip"]), "mm")
    assert [body.name for body in bodies] == ["plate", "stud", "binary-1", "binary-2"]
    assert [body.index_in_file for body in bodies] == [1, 2, 3, 4]
    assert {body.file for body in bodies} == {str(tmp_path / "rig.zip")}


@pytest.mark.parametrize("name", ["two.stl", "quads.obj", "little.ply", "pair.off", "scene.3mf"])
def test_gzip_of_each_format(tmp_path, name):
    unit = None if name.endswith("3mf") else "mm"
    plain = read_bodies(write(tmp_path / name, FILES[name]), unit)
    packed = read_bodies(write(tmp_path / f"{name}.gz", gzip.compress(FILES[name])), unit)
    assert [body.name for body in packed] == [body.name for body in plain]
    assert all(np.array_equal(a.vertices, b.vertices) for a, b in zip(plain, packed, strict=True))


def test_units_within_one_archive_must_be_the_same(tmp_path):
    mixed = zipped({"a.stl": FILES["two.stl"], "b.glb": FILES["scene.glb"]})
    assert "carry no unit and m; unpack it" in refused(write(tmp_path / "mixed.zip", mixed))
    assert "holds no mesh file" in refused(write(tmp_path / "none.zip", zipped({"a.txt": b"text"})))


@pytest.mark.parametrize("name", ["../a.stl", "/a.stl", "a/../../b.stl", "C:/a.stl", "a\\..\\b.stl", "a\x1b.stl"])
def test_paths_that_leave_an_archive_are_refused(tmp_path, name):
    line = refused(write(tmp_path / "rig.zip", zipped({"good.stl": FILES["two.stl"], name: FILES["two.stl"]})))
    assert "no file in its own folder" in line


def test_links_passwords_and_twins_in_an_archive_are_refused(tmp_path):
    held = io.BytesIO()
    with zipfile.ZipFile(held, "w") as target:
        link = zipfile.ZipInfo("a.stl")
        link.external_attr = (stat.S_IFLNK | 0o777) << 16
        target.writestr(link, "/etc/passwd")
    assert "is a link" in refused(write(tmp_path / "link.zip", held.getvalue()))
    locked = bytearray(zipped({"a.stl": FILES["two.stl"]}))
    locked[locked.index(b"PK\x01\x02") + 8] |= 1
    assert "encrypted" in refused(write(tmp_path / "locked.zip", bytes(locked)))
    twins = zipped({"a.stl": FILES["two.stl"], "b.stl": FILES["two.stl"]}).replace(b"b.stl", b"a.stl")
    assert "twice" in refused(write(tmp_path / "twins.zip", twins))
    many = zipped({f"{k}.txt": b"" for k in range(1001)})
    assert "holds 1001 files, more than 1000" in refused(write(tmp_path / "many.zip", many))


@pytest.mark.parametrize("name", ["bomb.zip", "bomb.stl.gz", "bomb.3mf"])
def test_bombs_are_stopped_by_what_comes_out_not_by_what_they_say(tmp_path, name, monkeypatch):
    monkeypatch.setattr(archive, "_HARMLESS", 2**20)
    zeros = bytes(2**24)
    if name.endswith("gz"):
        data = gzip.compress(zeros)
    else:
        data = bytearray(zipped({"a.stl" if name.endswith("zip") else "3D/a.model": zeros}))
        # the table of contents claims a small file
        at = data.index(b"PK\x01\x02") + 24
        data[at : at + 4] = (100).to_bytes(4, "little")
    line = refused(write(tmp_path / name, bytes(data)), None if name.endswith("3mf") else "mm")
    assert "come out of it" in line or "is damaged" in line


def test_a_bomb_within_a_bomb_and_a_cut_stream(tmp_path):
    nested = zipped({"a.zip": zipped({"a.stl": FILES["two.stl"]})})
    assert "holds no mesh file" in refused(write(tmp_path / "nested.zip", nested))
    assert "must stand before .gz" in refused(write(tmp_path / "a.zip.gz", gzip.compress(nested)))
    assert "truncated" in refused(write(tmp_path / "cut.stl.gz", gzip.compress(FILES["two.stl"])[:-9]))
    assert "behind its end" in refused(write(tmp_path / "tail.stl.gz", gzip.compress(FILES["two.stl"]) + b"more"))
    assert "no gzip file" in refused(write(tmp_path / "no.stl.gz", zlib.compress(FILES["two.stl"])))


def test_text_gltf_with_its_buffer_inside_beside_and_in_an_archive(tmp_path):
    inside = read_bodies(write(tmp_path / "in.gltf", text_gltf()[0]), None)
    document, buffer = text_gltf("data%20of%20it.bin")
    write(tmp_path / "data of it.bin", buffer)
    beside = read_bodies(write(tmp_path / "out.gltf", document), None)
    assert {body.side_files for body in beside} == {(str(tmp_path / "data of it.bin"),)}
    case = make_case({"conductor": [{"name": "all", "surface": "out.gltf"}]}, folder=tmp_path)
    assert [one.file for one in build_problem(case).inputs] == ["out.gltf", "data of it.bin"]
    packed = read_bodies(
        write(tmp_path / "rig.zip", zipped({"a/out.gltf": document, "a/data of it.bin": buffer})), None
    )
    for bodies in (inside, beside, packed):
        assert [body.name for body in bodies] == ["plate", "block"]
        assert bodies[0].box == pytest.approx(np.array([[-0.02, -0.01, 0.046], [0.02, 0.01, 0.054]]), rel=1e-6)
        # the second is mirrored and turned: still wound outwards
        assert [Shape(body).volume for body in bodies] == pytest.approx([6.4e-6, 6.4e-6])


@pytest.mark.parametrize("uri", ["../out.bin", "/etc/passwd", "file:///etc/passwd", "%2e%2e/out.bin", "a\\b.bin", ""])
def test_buffers_outside_of_the_folder_are_refused(tmp_path, uri):
    document, buffer = text_gltf("x")
    write(tmp_path / "out.bin", buffer)
    path = write(tmp_path / "in" / "rig.gltf", document.replace(b'"x"', json.dumps(uri).encode()))
    assert "no file in its own folder" in refused(path, None)


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (lambda d: d["nodes"][1].update(children=[0]), "tree of nodes is not consistent"),
        (lambda d: d["nodes"][0].update(children=[1, 1]), "tree of nodes is not consistent"),
        (lambda d: d["nodes"][1].update(mesh=7), "shows mesh 7"),
        (lambda d: d["accessors"][0].update(count=10**12), "reaches beyond its data"),
        (lambda d: d["accessors"][0].update(count=-1), "no usable number"),
        (lambda d: d["accessors"][1].update(componentType=5126), "damaged|beyond its data|no vertex numbers"),
        (lambda d: d["bufferViews"][0].update(byteStride=1), "reaches beyond its data"),
        (lambda d: d["buffers"][0].update(byteLength=10**9), "is shorter than promised"),
        (lambda d: d["nodes"][1].update(matrix=[0.0] * 16), "no motion or scaling"),
        (lambda d: d["nodes"][1].update(scale=[0, 1, 1]), "placement of object 'plate' is not usable"),
        (lambda d: d["nodes"][1].update(translation=[0, 0, 1e300]), "has a coordinate of 1e\\+297"),
        (lambda d: d.update(extensionsRequired=["KHR_draco_mesh_compression"]), "compressed"),
        (lambda d: d["asset"].update(version="1.0"), "not of version 2"),
        (lambda d: d["meshes"][0]["primitives"][0].update(mode=1), "holds no surface mesh"),
    ],
)
def test_inconsistent_gltf(tmp_path, change, words):
    document = json.loads(text_gltf()[0])
    change(document)
    line = refused(write(tmp_path / "rig.gltf", json.dumps(document)), None)
    assert any(word.replace("\\", "") in line for word in words.split("|"))


@pytest.mark.parametrize("mode", [5, 6])
def test_strips_and_fans(tmp_path, mode):
    document = json.loads(text_gltf()[0])
    document["meshes"][0]["primitives"][0]["mode"] = mode
    del document["meshes"][0]["primitives"][0]["indices"]
    bodies = read_bodies(write(tmp_path / "rig.gltf", json.dumps(document)), None)
    assert sum(len(body.triangles) for body in bodies if body.solid == 1) == 6


def test_many_copies_of_one_mesh_are_refused_before_they_are_made(tmp_path, monkeypatch):
    monkeypatch.setattr("daraf.io.readers.gltf.MOST_COPIED_TRIANGLES", 100)
    document = json.loads(text_gltf()[0])
    document["nodes"] = [{"mesh": 0} for _ in range(20)]
    document["scenes"] = [{"nodes": list(range(20))}]
    assert "so often" in refused(write(tmp_path / "rig.gltf", json.dumps(document)), None)


def test_3mf_spread_over_files_with_components_and_mirrored_copies(tmp_path):
    bodies = read_bodies(write(tmp_path / "rig.3mf", spread_3mf()), None)
    assert [body.name for body in bodies] == ["plate", "stud", "stud-2"]
    assert [body.unit for body in bodies] == ["in"] * 3
    assert bodies[1].box / 0.0254 == pytest.approx(np.array([[59, 4, -1], [61, 6, 1]]))
    assert bodies[2].box / 0.0254 == pytest.approx(np.array([[79, 4, -1], [81, 6, 1]]))
    assert all(Shape(body).volume > 0.0 for body in bodies)


def model_3mf(tmp_path, body, head=""):
    core = "http://schemas.microsoft.com/3dmanufacturing/core/2015/02"
    text = f'<?xml version="1.0"?>{head}<model unit="millimeter" xmlns="{core}">{body}</model>'
    return write(tmp_path / "rig.3mf", zipped({"3D/3dmodel.model": text}))


_BOMB = (
    '<!DOCTYPE lolz [<!ENTITY a "ha">'
    + "".join(f'<!ENTITY {c} "{f"&{p};" * 10}">' for p, c in zip("abcdefgh", "bcdefghi", strict=True))
    + "]>"
)


@pytest.mark.parametrize(
    ("head", "name", "words"),
    [
        (_BOMB, "&i;", "document type or entities"),
        ('<!DOCTYPE a SYSTEM "file:///etc/passwd">', "x", "document type or entities"),
        ('<!DOCTYPE a [<!ENTITY x SYSTEM "file:///etc/passwd">]>', "&x;", "document type or entities"),
    ],
)
def test_entities_in_3mf_are_refused(tmp_path, head, name, words):
    body = f'<resources>{object_xml(1, box(), name)}</resources><build><item objectid="1"/></build>'
    assert words in refused(model_3mf(tmp_path, body, head), None)


@pytest.mark.parametrize(
    ("body", "words"),
    [
        ('<resources/><build><item objectid="9"/></build>', "names object '9', which it does not hold"),
        ("<resources/><build/>", "builds no object"),
        (
            '<resources><object id="1"><components><component objectid="1"/></components></object></resources>'
            '<build><item objectid="1"/></build>',
            "within each other",
        ),
        ('<resources><object id="1"><mesh><vertices><vertex x="1"/></vertices></mesh></object></resources>', "lacks"),
        ('<build><item objectid="1" transform="1 2"/></build>', "twelve numbers"),
        ("<build>", "no valid XML"),
    ],
)
def test_inconsistent_3mf(tmp_path, body, words):
    assert words in refused(model_3mf(tmp_path, body), None)


def test_components_that_multiply_are_refused(tmp_path, monkeypatch):
    monkeypatch.setattr(threemf, "_MOST_COPIES", 1000)
    objects = '<object id="0"><components/></object>'
    for k in range(1, 12):
        twice = f'<component objectid="{k - 1}"/>' * 2
        objects += f'<object id="{k}"><components>{twice}</components></object>'
    body = f'<resources>{objects}</resources><build><item objectid="11"/></build>'
    assert "too often" in refused(model_3mf(tmp_path, body), None)


@pytest.mark.parametrize("form", ["ascii", "binary_little_endian", "binary_big_endian"])
def test_ply_with_polygons_of_several_sizes(tmp_path, form):
    (body,) = read_bodies(write(tmp_path / "box.ply", mixed_ply(form)), "m")
    assert Shape(body).volume == pytest.approx(8.0)
    assert body.triangles.shape == (12, 3)


def test_ply_with_lists_beside_the_corners(tmp_path):
    text = mixed_ply("ascii").decode().replace("property uchar flag", "property list uchar float more")
    (body,) = read_bodies(write(tmp_path / "box.ply", text.replace("\n1 ", "\n2 .5 .5 ")), "m")
    assert Shape(body).volume == pytest.approx(8.0)


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ("element vertex 8", "element vertex 9999999999999999999", "its header has a line"),
        ("element vertex 8", "element vertex 999999999999", "promises 999999999999 times 'vertex'"),
        ("element face 7", "element face 8", "truncated|no valid length|cut off"),
        ("property float y", "property float q", "have no x, y, z"),
        ("property list uchar int vertex_indices", "property list uchar int other", "no list of vertices"),
        ("\n1 4 0 1 3 2", "\n1 2 0 1", "face 1 has 2 corners"),
        ("\n1 4 0 1 3 2", "\n1 4 0 1 3 99", "names a vertex that does not exist"),
        ("\n1 4 0 1 3 2", "\n1 4 0 1 3 2.5", "by no whole number"),
        ("\n1 4 0 1 3 2", "\n1 4e9 0 1 3 2", "no valid length"),
        ("format ascii", "format utf8", "its header has a line"),
    ],
)
def test_ply_that_contradicts_itself(tmp_path, old, new, words):
    text = mixed_ply("ascii").decode().replace(old, new)
    line = refused(write(tmp_path / "box.ply", text))
    assert any(word in line for word in words.split("|"))


def test_a_polygon_of_a_thousand_corners_is_cut_at_once(tmp_path):
    angle = np.arange(1000) * 2 * np.pi / 1000
    radius = 1.0 + 0.5 * (np.arange(1000) % 2)
    star = np.column_stack([radius * np.cos(angle), radius * np.sin(angle), 0.1 * radius * np.cos(angle)])
    text = "".join("v {:.17g} {:.17g} {:.17g}\n".format(*p) for p in star)
    text += "f " + " ".join(str(k + 1) for k in range(1000)) + "\n"
    (body,) = read_bodies(write(tmp_path / "star.obj", text), "m")
    assert len(body.triangles) == 998
    a, b, c = (body.vertices[body.triangles[:, k]] for k in range(3))
    normals = np.cross(b - a, c - a)
    assert (normals[:, 2] > 0.0).all()
    assert 0.5 * normals[:, 2].sum() == pytest.approx(500 * 1.5 * np.sin(angle[1]))


def test_names_of_files_that_cannot_be_shown_are_refused(tmp_path):
    for name in ("a\x1b[2J.stl", "a\n.stl", "a\udcff.stl"):
        path = tmp_path / name
        path.write_bytes(trimesh.creation.box().export(file_type="stl"))
        with pytest.raises(InputError, match="no usable file name") as caught:
            read_bodies(path, "mm")
        assert str(caught.value).isprintable()
