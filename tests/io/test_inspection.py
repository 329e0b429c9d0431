"""Inspection of bodies and files: numbers, faults, text and JSON."""

import json

import numpy as np
import pytest
import trimesh

from daraf.bem.errors import InputError
from daraf.io.bodies import Body
from daraf.io.changes import Mend
from daraf.io.inspection import inspect_bodies, inspect_files, inspection_to_dict, inspection_to_text

BOX = trimesh.creation.box((4.0, 2.0, 1.0))
BALL = trimesh.creation.icosphere(2)


def body_of(vertices, triangles, name="part", **fields):
    vertices, triangles = np.array(vertices, dtype=float), np.array(triangles, dtype=np.int64)
    return Body(name, vertices, triangles, "part.stl", **fields)


def mesh_body(mesh, name="part", shift=(0, 0, 0), **fields):
    return body_of(mesh.vertices + np.array(shift), mesh.faces, name, **fields)


def faults(*bodies):
    return {fault.code: fault for fault in inspect_bodies(bodies).bodies[0].faults}


def test_numbers_of_a_box():
    (report,) = inspect_bodies([mesh_body(BOX)]).bodies
    assert report.closed
    assert report.panels == 12
    assert report.box == pytest.approx(np.array([[-2, -1, -0.5], [2, 1, 0.5]]))
    assert report.area == pytest.approx(28.0)
    assert report.volume == pytest.approx(8.0)
    assert (report.edges.smallest, report.edges.largest) == pytest.approx((1.0, 20**0.5))
    assert report.aspect.largest == pytest.approx(17 / 4)  # 4 x 1 face: diagonal squared over the area
    assert report.faults == []


def test_gaps_with_places():
    reports = inspect_bodies(
        [mesh_body(BOX, "a"), mesh_body(BOX, "b", (4.5, 0, 0)), mesh_body(BOX, "c", (0, 0, 3.0))]
    ).bodies
    assert [gap.other for gap in reports[0].gaps] == ["b", "c"]
    assert [gap.distance for gap in reports[0].gaps] == pytest.approx([0.5, 2.0])
    assert reports[0].gaps[0].place[0] == pytest.approx(2.0)
    assert reports[0].gaps[0].place_other[0] == pytest.approx(2.5)
    assert reports[1].gaps[0].place[0] == pytest.approx(2.5)


def test_many_bodies_keep_the_nearest_gaps():
    row = [mesh_body(BOX, f"b{k}", (4.1 * k + 0.01 * k * k, 0, 0)) for k in range(30)]
    reports = inspect_bodies(row).bodies
    assert [gap.other for gap in reports[10].gaps] == ["b9", "b11", "b8"]
    assert reports[10].gaps[0].distance == pytest.approx(0.1 + 0.01 * (100 - 81))


def test_good_bodies_have_no_fault():
    for mesh in (BOX, BALL, trimesh.creation.torus(1.0, 0.3), trimesh.creation.cylinder(1.0, 0.1)):
        assert faults(mesh_body(mesh)) == {}


def test_duplicate_degenerate_and_flipped():
    doubled = np.vstack([BALL.faces, BALL.faces[:2], [[5, 5, 6]]])
    found = faults(body_of(BALL.vertices, doubled))
    assert found["duplicate-faces"].count == 2
    assert found["degenerate-faces"].count == 1
    assert set(found) == {"duplicate-faces", "degenerate-faces"}
    assert inspect_bodies([body_of(BALL.vertices, doubled)]).bodies[0].closed
    turned = BALL.faces.copy()
    turned[7] = turned[7, ::-1]
    found = faults(body_of(BALL.vertices, turned))
    assert list(found) == ["flipped-normals"]
    assert found["flipped-normals"].place == pytest.approx(BALL.triangles_center[7])


def test_inside_out_and_volume_is_positive():
    report = inspect_bodies([body_of(BALL.vertices, BALL.faces[:, ::-1])]).bodies[0]
    assert [fault.code for fault in report.faults] == ["inside-out"]
    assert report.volume == pytest.approx(BALL.volume)


def test_hole_is_a_fault_and_a_sheet_is_none():
    open_ball = body_of(BALL.vertices, BALL.faces[1:])
    report = inspect_bodies([open_ball]).bodies[0]
    assert not report.closed
    assert report.loops == 1
    assert faults(open_ball)["holes"].count == 1
    sheet = body_of([[0, 0, 0], [1, 0, 0], [1, 1, 0], [0, 1, 0]], [[0, 1, 2], [0, 2, 3]])
    assert faults(sheet) == {}
    assert "open sheet, 1 boundary loop; carries both sides" in inspection_to_text(inspect_bodies([sheet]))


def test_non_manifold_edge():
    fin = body_of([[0, 0, 0], [1, 0, 0], [0, 1, 0], [0, -1, 0], [0, 0, 1]], [[0, 1, 2], [1, 0, 3], [0, 1, 4]])
    found = faults(fin)["non-manifold-edges"]
    assert found.count == 1
    assert found.place == pytest.approx((0.5, 0, 0))


def test_self_crossing():
    pair = trimesh.util.concatenate([BALL, BALL.copy().apply_translation([1.0, 0.1, 0.2])])
    bridge = np.vstack([pair.faces, [[0, 1, len(BALL.vertices)]]])
    found = faults(body_of(pair.vertices, bridge))["self-crossing"]
    assert found.severity == "error"
    assert np.linalg.norm(found.place) == pytest.approx(1.0, abs=0.05)  # on facets of a ball of radius 1


TOUCHES_ITSELF = {
    # a sheet bent back so that its end rests on its own middle
    "vertex on face": (
        [[0, 0, 0], [4, 0, 0], [0, 4, 0], [4, 0, 2], [1, 1, 0]],
        [[0, 1, 2], [1, 3, 2], [1, 4, 3]],
    ),
    # a panel folded flat upon its neighbour
    "fold": ([[0, 0, 0], [1, 0, 0], [0.5, 1, 0], [0.4, 0.5, 0]], [[0, 1, 2], [1, 0, 3]]),
}


@pytest.mark.parametrize("case", TOUCHES_ITSELF)
@pytest.mark.parametrize("size", [1.0, 1e-9])
def test_self_touching(case, size):
    vertices, triangles = TOUCHES_ITSELF[case]
    assert "self-touching" in faults(body_of(np.array(vertices) * size, triangles))


def test_sharp_wedge_is_not_self_touching():
    wedge = [[0, 0, 0], [1, 0, 0], [0.5, 1, 0], [0.5, 1, 1e-3]]
    assert "self-touching" not in faults(body_of(wedge, [[0, 1, 2], [1, 0, 3]]))


def test_coarse_coordinates():
    found = faults(mesh_body(BALL, spacing=0.02))
    assert found["coarse-coordinates"].severity == "warning"


def test_bodies_that_meet_and_nest():
    reports = inspect_bodies(
        [mesh_body(BOX, "a"), mesh_body(BOX, "b", (4.0, 0.5, 0)), mesh_body(BOX, "c", (6.0, 1.0, 0.3))]
    ).bodies
    assert [(fault.code, fault.text) for fault in reports[1].faults] == [
        ("touches-other", "touches 'a'"),
        ("overlaps-other", "overlaps 'c'"),
    ]
    assert reports[0].gaps[0].distance == 0.0
    small = body_of(BALL.vertices * 0.1, BALL.faces, "core")
    outer, inner = inspect_bodies([mesh_body(BALL, "shell"), small]).bodies
    assert outer.faults == []
    assert (inner.faults[0].code, inner.faults[0].severity) == ("inside-other", "note")


def test_cavity_wall_is_a_note():
    inner = body_of(BALL.vertices * 0.5, BALL.faces[:, ::-1], "shell-2")
    report = inspect_bodies([mesh_body(BALL, "shell-1"), inner]).bodies[1]
    assert {fault.code: fault.severity for fault in report.faults} == {
        "cavity-wall": "note",
        "inside-other": "note",
    }


@pytest.fixture
def files(tmp_path):
    BOX.export(tmp_path / "plate.stl")
    BALL.copy().apply_translation([0, 0, 3]).export(tmp_path / "ball.obj")
    return [tmp_path / "plate.stl", tmp_path / "ball.obj"]


def test_text_in_a_stated_unit(files):
    text = inspection_to_text(inspect_files(files, "mm"), "mm")
    assert text.startswith("plate.stl, ball.obj: 2 bodies, 332 panels, lengths in mm\n")
    assert "box     4 x 2 x 1 mm, from (-2, -1, -0.5) to (2, 1, 0.5)" in text
    assert "area    28 mm2, volume 8 mm3" in text
    assert "gap     1.5 mm to ball, at" in text
    assert text.endswith("Fit to solve.\n")
    assert max(len(line) for line in text.splitlines()) <= 80


def test_text_without_a_unit_names_each_plausible_one(files):
    inspection = inspect_files(files)
    text = inspection_to_text(inspection)
    assert inspection.unit is None
    assert "if mm   4 x 2 x 4.5 mm" in text
    assert "if in   101.6 x 50.8 x 114.3 mm" in text
    assert f"area {28 + BALL.area:.5g} mm2" in text
    assert max(len(line) for line in text.splitlines()) <= 80


def test_text_shown_in_another_unit(files):
    assert "box     0.1575 x 0.07874 x 0.03937 in" in inspection_to_text(inspect_files(files, "mm"), "inch")


def test_long_names_and_many_faults_stay_within_80_columns():
    turned = BALL.faces.copy()
    turned[::9] = turned[::9, ::-1]
    bodies = [body_of(BALL.vertices + 1.9 * k, turned[1:], "electrode " * 6 + str(k)) for k in range(8)]
    text = inspection_to_text(inspect_bodies(bodies, "um"))
    assert max(len(line) for line in text.splitlines()) <= 80
    assert "and 1 wider one" in text


def test_dictionary_is_json(files):
    inspection = inspect_files(files, "mm")
    again = json.loads(json.dumps(inspection_to_dict(inspection), allow_nan=False))
    assert again["unit"] == "mm"
    assert again["length_unit"] == "m"
    plate, ball = again["bodies"]
    assert plate["box"]["high"] == pytest.approx([2e-3, 1e-3, 5e-4])
    assert plate["volume"] == pytest.approx(8e-9)
    assert ball["gaps"][0]["distance"] == pytest.approx(1.5e-3)
    assert inspection_to_dict(inspect_files(files))["length_unit"] == "file"


def test_a_unit_is_for_the_files_that_carry_none(files, tmp_path):
    BOX.export(tmp_path / "other.glb")
    with pytest.raises(InputError, match=r"plate\.stl: the file carries no unit, and none is stated"):
        inspect_files([files[0], tmp_path / "other.glb"])
    mixed = inspect_files([files[0], tmp_path / "other.glb"], "mm")
    assert mixed.bodies[1].box == pytest.approx(1e3 * mixed.bodies[0].box, rel=1e-6)  # single precision
    with pytest.raises(InputError, match=r"other\.glb: the file says m, the unit stated is mm"):
        inspect_files([tmp_path / "other.glb"], "mm")


@pytest.mark.parametrize(
    ("scale", "shift", "place"),
    [
        (1e-9, 0.0, "from (-2e-09, -1e-09, -5e-10) to (2e-09, 1e-09, 5e-10)"),
        (1.0, 1e7, "from (9999998, -1, -0.5) to (10000002, 1, 0.5)"),
    ],
)
def test_places_of_tiny_and_far_off_models(scale, shift, place):
    body = body_of(BOX.vertices * scale + [shift, 0.0, 0.0], BOX.faces)
    assert place in " ".join(inspection_to_text(inspect_bodies([body])).split())


def test_verdict_says_what_changing_nothing_and_meeting_mean():
    doubled = body_of(BALL.vertices, np.vstack([BALL.faces, BALL.faces[:2]]), "ball")
    assert inspection_to_text(inspect_bodies([doubled])).endswith("Fit to solve, with remarks on ball.\n")
    refused = " ".join(inspection_to_text(inspect_bodies([doubled], mend=Mend("list"))).split())
    assert refused.endswith("A solve that may change nothing refuses ball: mend in CAD, or allow safe mending.")
    meeting = " ".join(
        inspection_to_text(inspect_bodies([mesh_body(BOX, "a"), mesh_body(BOX, "b", (4, 0, 0))])).split()
    )
    assert meeting.endswith("remarks on a, b. Bodies that meet must be one conductor: a case file says so.")


def test_size_of_a_hole_is_told_where_bold_mending_leaves_it():
    opened = ~(BALL.faces == 20).any(axis=1)  # a hole about one vertex
    fault = faults(body_of(BALL.vertices, BALL.faces[opened]))["holes"]
    assert fault.text.startswith("closed but for 1 hole, the largest 0.")
    assert fault.remedy.endswith("unless bold mending closes it (state how large a hole it may close)")
