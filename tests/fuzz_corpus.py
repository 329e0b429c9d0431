"""Small valid files of every format and case, and ways to damage them."""

import base64
import gzip
import io
import json
import random
import struct
import zipfile

import numpy as np
import trimesh
from step_parts import rig_step

#: Words that break careless readers: counts, huge and tiny numbers, markup, control characters, paths.
TOKENS = [
    b"1e300", b"-1e300", b"1e-310", b"5e-324", b"nan", b"-inf", b"0", b"-1", b"4294967295", b"9223372036854775808",
    b"1e999", b"1" * 40, b"0x10", b"1,5", b"\xff\xff\xff\xff", b"\x00\x00\x00\x00", b"\x00\x00\xc0\x7f",
    b"\xff\xff\xff\x7f", b"<script>", b"[bold]", b"\x1b[2J", b"\xc3\x28", b"\xe2\x80\xae", b"&lol;",
    b"../../etc/passwd",
    b"..\\..\\a", b"C:/a.stl", b"/a.stl", b"\n", b"\r", b"\0", b" ", b"'", b'"', b"/*", b"[", b"{", b"]]", b"null",
    b"true",
]  # fmt: skip

CASE = """\
title = "rig"
unit = "mm"
accuracy = "2 %"
[medium]
relative_permittivity = 2.2
[[conductor]]
name = "plate"
surface = "two.stl"
body = 1
potential = "5 V"
shift = "0 0 1 mm"
rotation = {angle = "30 deg", axis = "z", about = [0, 0, 0]}
[[conductor]]
name = "stud"
charge = "0 nC"
[[conductor.part]]
surface = "two.stl"
unit = "mm"
body = [2]
"""

_MODEL = """<?xml version="1.0" encoding="UTF-8"?>
<model unit="{unit}" xmlns="http://schemas.microsoft.com/3dmanufacturing/core/2015/02"
 xmlns:p="http://schemas.microsoft.com/3dmanufacturing/production/2015/06">
<resources>{resources}</resources><build>{items}</build></model>"""
_RELATIONS = """<?xml version="1.0" encoding="UTF-8"?>
<Relationships xmlns="http://schemas.openxmlformats.org/package/2006/relationships"><Relationship
 Target="/3D/root.model"
 Id="r0" Type="http://schemas.microsoft.com/3dmanufacturing/2013/01/3dmodel"/></Relationships>"""


def box(size=(40.0, 20.0, 8.0), at=(0.0, 0.0, 0.0)):
    mesh = trimesh.creation.box(size)
    mesh.apply_translation(at)
    return mesh


def zipped(members):
    held = io.BytesIO()
    with zipfile.ZipFile(held, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, content in members.items():
            archive.writestr(name, content)
    return held.getvalue()


def object_xml(number, mesh, name=""):
    vertices = "".join('<vertex x="{:g}" y="{:g}" z="{:g}"/>'.format(*row) for row in mesh.vertices)
    triangles = "".join('<triangle v1="{}" v2="{}" v3="{}"/>'.format(*row) for row in mesh.faces)
    body = f"<mesh><vertices>{vertices}</vertices><triangles>{triangles}</triangles></mesh>"
    return f'<object id="{number}" name="{name}" type="model">{body}</object>'


def spread_3mf(unit="inch"):
    """A package whose objects lie in a file of their own (production extension), one placed twice by components."""
    child = _MODEL.format(
        unit=unit, resources=object_xml(1, box(), "plate") + object_xml(2, box((2, 2, 2)), "stud"), items=""
    )
    path = 'p:path="/3D/Objects/one.model"'
    group = (
        f'<object id="5" name="pair"><components><component {path} objectid="2" transform="1 0 0 0 1 0 0 0 1 60 0 0"/>'
        f'<component {path} objectid="2" transform="-1 0 0 0 1 0 0 0 1 80 0 0"/></components></object>'
    )
    items = f'<item {path} objectid="1"/><item objectid="5" transform="1 0 0 0 1 0 0 0 1 0 5 0"/>'
    root = _MODEL.format(unit=unit, resources=group, items=items)
    return zipped({"_rels/.rels": _RELATIONS, "3D/root.model": root, "3D/Objects/one.model": child})


def text_gltf(uri=None):
    """A .gltf of one box shown by two nodes, one of them mirrored; its buffer."""
    mesh = box()
    points = mesh.vertices.astype("<f4").tobytes()
    corners = mesh.faces.astype("<u2").tobytes()
    buffer = points + corners
    views = [
        {"buffer": 0, "byteLength": len(points)},
        {"buffer": 0, "byteOffset": len(points), "byteLength": len(corners)},
    ]
    document = {
        "asset": {"version": "2.0"},
        "scene": 0,
        "scenes": [{"nodes": [0]}],
        "nodes": [
            {"name": "rig", "children": [1, 2], "scale": [0.001, 0.001, 0.001]},
            {"name": "plate", "mesh": 0, "translation": [0, 0, 50]},
            {"mesh": 0, "rotation": [0, 0, 0.6, 0.8], "scale": [-1, 1, 1]},
        ],
        "meshes": [{"name": "block", "primitives": [{"attributes": {"POSITION": 0}, "indices": 1}]}],
        "accessors": [
            {"bufferView": 0, "componentType": 5126, "count": len(mesh.vertices), "type": "VEC3"},
            {"bufferView": 1, "componentType": 5123, "count": mesh.faces.size, "type": "SCALAR"},
        ],
        "bufferViews": views,
        "buffers": [
            {
                "byteLength": len(buffer),
                "uri": uri or "data:application/octet-stream;base64," + base64.b64encode(buffer).decode(),
            }
        ],
    }
    return json.dumps(document).encode(), buffer


def mixed_ply(form):
    """A box of five quadrilaterals and two triangles, colours beside; of any form."""
    corners = np.array([[x, y, z] for x in (0, 4) for y in (0, 2) for z in (0, 1)], dtype=float)
    polygons = [[0, 1, 3, 2], [4, 6, 7, 5], [0, 4, 5, 1], [2, 3, 7, 6], [0, 2, 6, 4], [1, 5, 7], [1, 7, 3]]
    header = (
        f"ply\nformat {form} 1.0\ncomment made by hand\nelement vertex 8\nproperty float x\nproperty float y\n"
        "property float z\nproperty uchar red\nelement face 7\nproperty uchar flag\n"
        "property list uchar int vertex_indices\nend_header\n"
    ).encode()
    if form == "ascii":
        rows = ["{:g} {:g} {:g} 7".format(*p) for p in corners]
        rows += [" ".join(map(str, [1, len(one), *one])) for one in polygons]
        return header + "\n".join(rows).encode() + b"\n"
    order = "<" if form == "binary_little_endian" else ">"
    body = b"".join(struct.pack(f"{order}3fB", *p, 7) for p in corners)
    return header + body + b"".join(struct.pack(f"{order}BB{len(one)}i", 1, len(one), *one) for one in polygons)


def corpus():
    """Valid files by name; those of the case lie beside it."""
    pair = trimesh.util.concatenate([box(), box((2, 2, 2), (60, 0, 0))])
    plate = trimesh.exchange.stl.export_stl_ascii(box()).replace("solid ", "solid plate", 1)
    stud = trimesh.exchange.stl.export_stl_ascii(box((2, 2, 2), (60, 0, 0))).replace("solid ", "solid stud", 1)
    two = f"{plate}\n{stud}\n".encode()
    scene = trimesh.Scene()
    scene.add_geometry(box(), node_name="plate", geom_name="plate")
    scene.add_geometry(
        box((2, 2, 2)), node_name="stud", transform=trimesh.transformations.translation_matrix([60, 0, 0])
    )
    binary = pair.export(file_type="stl")
    return {
        "binary.stl": binary,
        "two.stl": two,
        "pair.obj": pair.export(file_type="obj").encode(),
        "quads.obj": b"o lid\nv 0 0 0\nv 1 0 0\nv 1 1 0\nv 0 1 0\nv .5 .2 0\nf 1 2 3 5 4\ng g\nf -5/1 -4/2/3 -3//1\n",
        "pair.off": pair.export(file_type="off").encode(),
        "text.ply": mixed_ply("ascii"),
        "little.ply": mixed_ply("binary_little_endian"),
        "big.ply": mixed_ply("binary_big_endian"),
        "scene.glb": scene.export(file_type="glb"),
        "scene.gltf": text_gltf()[0],
        "scene.3mf": scene.export(file_type="3mf"),
        "spread.3mf": spread_3mf(),
        "packed.zip": zipped({"a/two.stl": two, "b/binary.stl": binary, "read.me": b"text"}),
        "binary.stl.gz": gzip.compress(binary, mtime=0),
        "rig.step": rig_step("in").encode(),
        "case.toml": CASE.encode(),
    }


def mutated(rng: random.Random, name, data, others):
    """The file damaged once or several times, sometimes inside of its wrapping."""
    if rng.random() < 0.6:
        inner = _inside(rng, name, data, others)
        if inner is not None:
            return inner
    return _damaged(rng, data, others)


def _inside(rng, name, data, others):
    """Damage what lies within a zip, a gzip or a GLB, and wrap it again; None for other files."""
    if name.endswith((".zip", ".3mf")):
        with zipfile.ZipFile(io.BytesIO(data)) as archive:
            members = {one: archive.read(one) for one in archive.namelist()}
        victim = rng.choice(sorted(members))
        if rng.random() < 0.1:
            members[rng.choice(["../a.stl", "/a.stl", "a\\b.stl", "a/../../b.stl", "\x1b.stl"])] = members[victim]
        else:
            members[victim] = _damaged(rng, members[victim], others)
        return zipped(members)
    if name.endswith(".gz"):
        return gzip.compress(_damaged(rng, gzip.decompress(data), others), mtime=0)
    if name.endswith(".glb"):
        size = struct.unpack("<I", data[12:16])[0]
        text = _damaged(rng, data[20 : 20 + size], others)
        text += b" " * (-len(text) % 4)
        rest = data[20 + size :]
        return b"glTF" + struct.pack("<III", 2, 20 + len(text) + len(rest), len(text)) + b"JSON" + text + rest
    return None


def _damaged(rng, data, others):
    held = bytearray(data)
    for _ in range(rng.choice((1, 1, 1, 2, 3, 8))):
        at = rng.randrange(len(held) + 1)
        span = min(rng.choice((1, 2, 4, 8, 50, 400)), len(held) - at)
        match rng.randrange(9):
            case 0:
                for k in range(at, at + min(span, 4)):
                    held[k] ^= 1 << rng.randrange(8)
            case 1:
                held[at : at + span] = rng.randbytes(span)
            case 2:
                del held[at : at + span]
            case 3:
                held[at:at] = held[at : at + span] * rng.choice((1, 2, 30))
            case 4:
                del held[at:]
            case 5:
                held[at:at] = rng.choice(TOKENS)
            case 6:
                _swap_word(rng, held, at)
            case 7:
                _swap_word(rng, held, at)
            case 8:
                other = rng.choice(others)
                start = rng.randrange(len(other))
                held[at : at + span] = other[start : start + rng.choice((8, 100, 2000))]
    return bytes(held)


def _swap_word(rng, held, at):
    """Put a token in the place of the next word or number."""
    parted = b" \t\n\r\"',:=()[]{}<>/"
    start = next((k for k in range(at, len(held)) if held[k] not in parted), len(held))
    stop = next((k for k in range(start, len(held)) if held[k] in parted), len(held))
    held[start : min(stop, start + 40)] = rng.choice(TOKENS)
