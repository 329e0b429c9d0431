"""Bodies of one conductor that meet: united, clipped, left out; different conductors: refused with the place."""

import json

import numpy as np
import pytest
import shapely
import trimesh
from hypothesis import given
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

from daraf.bem import solve_capacitance
from daraf.bem.errors import InputError
from daraf.io.bodies import Body
from daraf.io.case import make_case
from daraf.io.case_inspection import inspect_case
from daraf.io.changes import Mend
from daraf.io.cli.main import main
from daraf.io.gaps import Shape
from daraf.io.inspection_text import inspection_to_text
from daraf.io.joining import bodies_to_surface
from daraf.io.markers import MeetingError
from daraf.io.problem import build_problem
from daraf.io.self_contact import self_contacts
from daraf.io.uniting import unite


def body_of(mesh, name="part", turn=None, **fields):
    vertices = np.array(mesh.vertices, dtype=float)
    vertices = vertices if turn is None else vertices @ turn.T
    return Body(name, vertices, np.array(mesh.faces, dtype=np.int64), "part.stl", **fields)


def box(low, high, name="part", turn=None, **fields):
    return body_of(trimesh.creation.box(bounds=[low, high]), name, turn, **fields)


def sheet(*corners, name="sheet"):
    return Body(name, np.array(corners, dtype=float), np.array([[0, 1, 2], [0, 2, 3]]), "sheet.stl")


def area(body):
    a, b, c = np.moveaxis(body.vertices[body.triangles], 1, 0)
    return 0.5 * np.linalg.norm(np.cross(b - a, c - a), axis=1).sum()


def codes(body):
    return [note.code for note in body.notes]


@pytest.mark.parametrize("gap", [0.0, 1e-9, 1e-6, -1e-6])
@pytest.mark.parametrize("seed", [None, 1, 2])
@pytest.mark.parametrize("single", [False, True])
def test_two_boxes_become_one(gap, seed, single):
    """Touching, a hair apart, a hair overlapping; along the axes and turned; in single precision."""
    turn = None if seed is None else Rotation.random(random_state=seed).as_matrix()
    pair = [box((0, 0, 0), (1, 1, 1), "a", turn), box((1 + gap, 0.2, gap), (2 + gap, 0.9, 0.8), "b", turn)]
    if single:  # rounding of a binary STL
        step = {"spacing": 6e-8}
        pair = [Body(b.name, b.vertices.astype(np.float32).astype(float), b.triangles, **step) for b in pair]
    united = unite(pair, [0, 0])
    (body,) = united.bodies
    assert body.name == "a+b"
    assert codes(body) == ["united"]
    # 5e-6: faces moved by up to 1e-6 each, or the rounding of the file
    assert Shape(body).volume == pytest.approx(1.0 + 0.7 * 0.8, abs=5e-6)
    # no wall inside: six faces of the cube, four sides and one end of the other
    assert area(body) == pytest.approx(6.0 + 2 * (0.7 + 0.8), abs=2e-5)
    assert (body.notes[0].moved or 0.0) <= 4e-6


def test_united_boxes_have_the_capacitance_of_the_long_one():
    long = box((0, 0, 0), (3, 1, 1))
    (joined,) = unite([box((0, 0, 0), (1, 1, 1), "a"), box((1 + 1e-6, 0, 0), (3, 1, 1), "b")], [0, 0]).bodies
    answers = [solve_capacitance(bodies_to_surface([body]), accuracy=0.005) for body in (long, joined)]
    values = [answer.maxwell[0, 0] for answer in answers]
    spreads = [answer.maxwell_uncertainty[0, 0] for answer in answers]
    assert abs(values[0] - values[1]) <= np.hypot(*spreads)


def test_other_conductors_are_not_united():
    united = unite([box((0, 0, 0), (1, 1, 1)), box((1, 0, 0), (2, 1, 1))], [0, 1])
    assert len(united.bodies) == 2
    assert not any(body.notes for body in united.bodies)


def test_list_unites_nothing():
    pair = [box((0, 0, 0), (1, 1, 1)), box((1, 0, 0), (2, 1, 1))]
    assert unite(pair, [0, 0], Mend("list")).bodies == pair


def test_a_stated_distance_closes_a_wider_gap():
    pair = [box((0, 0, 0), (1, 1, 1)), box((1.001, 0, 0), (2, 1, 1))]
    assert len(unite(pair, [0, 0]).bodies) == 2
    (body,) = unite(pair, [0, 0], Mend("safe", within=2e-3)).bodies
    assert Shape(body).volume == pytest.approx(2.0, abs=1e-6)
    assert body.notes[0].moved == pytest.approx(1e-3, rel=1e-4)


def test_a_drum_in_a_socket():
    """A round plug touches the wall of its hole all around: facets on facets."""
    plug = trimesh.creation.cylinder(1.0, 4.0, sections=24)
    socket = trimesh.creation.annulus(1.0, 2.0, 1.0, sections=24)
    (body,) = unite([body_of(plug, "plug"), body_of(socket, "socket")], [0, 0]).bodies
    assert Shape(body).volume == pytest.approx(plug.volume + socket.volume, rel=1e-5)
    expected = plug.area + socket.area - 2 * 24 * 2 * np.sin(np.pi / 24)  # the wall of the hole, twice
    assert area(body) == pytest.approx(expected, rel=1e-4)


@given(seed=st.integers(0, 2**32 - 1))
def test_any_boxes_have_the_volume_of_their_union(seed):
    """Against counting points, and whatever is united does not cross itself."""
    rng = np.random.default_rng(seed)
    low = rng.uniform(0, 1, (4, 3))
    high = low + rng.uniform(0.3, 1, (4, 3))
    united = unite([box(a, b) for a, b in zip(low, high, strict=True)], [0] * 4)
    points = rng.uniform(0, 2, (20_000, 3))
    inside = ((points[:, None] > low) & (points[:, None] < high)).all(axis=2).any(axis=1)
    # 5 sigma of the count
    volume = sum(Shape(body).volume for body in united.bodies)
    assert volume == pytest.approx(8 * inside.mean(), abs=8 * 5 * 0.5 / np.sqrt(20_000))
    assert not any(self_contacts(Shape(body), 1e-9)[2].any() for body in united.bodies)


BALL, CORE = trimesh.creation.icosphere(2, radius=2.0), trimesh.creation.icosphere(1)


def lining():
    wall = CORE.copy()
    wall.invert()
    return body_of(wall, "wall")


def test_a_closed_cavity_is_left_out_and_told():
    united = unite([body_of(BALL, "ball"), lining()], [0, 0])
    assert [body.name for body in united.bodies] == ["ball"]
    ((conductor, note),) = united.dropped
    assert (conductor, note.code) == (0, "inner-surface")
    assert "wall of a closed cavity in 'ball': it carries no charge" in str(note)


def test_a_cavity_with_another_conductor_stays():
    bodies = [body_of(BALL, "ball"), lining(), box((-0.1,) * 3, (0.1,) * 3, "core")]
    assert len(unite(bodies, [0, 0, 1]).bodies) == 3
    assert len(unite(bodies, [0, 0, 0]).bodies) == 1


def test_a_lug_on_a_hollow_ball_keeps_the_cavity_for_a_core():
    lug = box((1.5, -0.1, -0.1), (3, 0.1, 0.1), "lug")
    core = box((-0.1,) * 3, (0.1,) * 3, "core")
    united = unite([body_of(BALL, "ball"), lining(), lug, core], [0, 0, 0, 1])
    assert sorted(united.owner) == [0, 0, 1]
    volume = sum(Shape(body).volume for body, owner in zip(united.bodies, united.owner, strict=True) if owner == 0)
    part = trimesh.creation.box(bounds=[(1.5, -0.1, -0.1), (3, 0.1, 0.1)])
    both = trimesh.boolean.union([BALL, part], engine="manifold")
    assert volume == pytest.approx(both.volume - CORE.volume, rel=1e-7)  # slivers of 1e-9 of the size


def test_nested_open_sheets_stay():
    cup = trimesh.creation.icosphere(2, radius=1.0)
    rows = cup.faces[cup.triangles_center[:, 2] < 0.3]
    nested = [Body(str(r), np.array(cup.vertices) * r, np.array(rows), "cup.stl") for r in (1.0, 2.0)]
    united = unite(nested, [0, 0])
    assert [len(body.triangles) for body in united.bodies] == [len(rows)] * 2
    assert not united.dropped


CUBE = ((0, 0, 0), (1, 1, 1))


@pytest.mark.parametrize(
    ("corners", "left"),
    [
        (((-1, 0.2, 0.5), (2, 0.2, 0.5), (2, 0.7, 0.5), (-1, 0.7, 0.5)), 1.0),  # through the metal
        (((-1, 0.2, 1.0), (2, 0.2, 1.0), (2, 0.7, 1.0), (-1, 0.7, 1.0)), 1.0),  # upon a face
        (((1, 0.2, 0.5), (2, 0.2, 0.5), (2, 0.7, 0.5), (1, 0.7, 0.5)), 0.5),  # end on a face
        (((-1, -1, 1.5), (2, -1, 1.5), (2, 2, 1.5), (-1, 2, 1.5)), 9.0),  # beside it
    ],
)
@pytest.mark.parametrize("seed", [None, 5])
def test_what_a_sheet_has_in_metal_vanishes(corners, left, seed):
    turn = np.eye(3) if seed is None else Rotation.random(random_state=seed).as_matrix()
    flag = sheet(*(np.array(corners, dtype=float) @ turn.T))
    united = unite([box(*CUBE, "cube", turn), flag], [0, 0])
    cube, rest = united.bodies
    assert area(rest) == pytest.approx(left, rel=1e-6)
    assert len(cube.triangles) == 12
    assert codes(rest) == ([] if rest is flag else ["clipped"])


def test_a_sheet_within_metal_is_left_out():
    flag = sheet((0.1, 0.2, 0.5), (0.9, 0.2, 0.5), (0.9, 0.7, 0.5), (0.1, 0.7, 0.5))
    united = unite([box(*CUBE), flag], [0, 0])
    assert len(united.bodies) == 1
    assert [note.code for _, note in united.dropped] == ["dropped-sheet"]


def test_sheets_upon_each_other_count_once():
    first = sheet((0, 0, 0), (1, 0, 0), (1, 1, 0), (0, 1, 0))
    second = sheet((0.5, 0.5, 0), (2, 0.5, 0), (2, 2, 0), (0.5, 2, 0))
    kept, cut = unite([first, second], [0, 0]).bodies
    assert area(kept) == pytest.approx(1.0)
    assert area(cut) == pytest.approx(2.0, rel=1e-6)
    apart = unite([first, second], [0, 1]).bodies
    assert area(apart[1]) == pytest.approx(2.25)


def test_a_body_that_crosses_itself():
    """A ring of more than one turn, as a sweep along a closed path makes it."""
    angle = np.linspace(0, 2.2 * np.pi, 40)
    path = np.column_stack([np.cos(angle), np.sin(angle), 0.02 * angle])
    swept = trimesh.creation.sweep_polygon(shapely.Point(0, 0).buffer(0.2, 4), path)
    united = unite([body_of(swept, "ring")], [0])
    (ring,) = united.bodies
    assert codes(ring) == ["untangled"]
    assert Shape(ring).volume < 0.97 * swept.volume
    assert not self_contacts(Shape(ring), 1e-9)[2].any()


def write_case(folder, *meshes, **more):
    conductors = []
    for k, mesh in enumerate(meshes):
        mesh.export(folder / f"part{k}.ply")
        conductors.append({"name": f"C{k}", "surface": f"part{k}.ply"})
    return make_case({"unit": "mm", "conductor": conductors, **more}, folder=folder)


def test_conductors_that_cross_are_refused_with_places_and_marks(tmp_path):
    ball = trimesh.creation.icosphere(2, radius=2.0)
    other = ball.copy().apply_translation((3, 0.1, 0.2))
    case = write_case(tmp_path, ball, other)
    with pytest.raises(MeetingError, match=r"'C0' .*overlaps conductor 'C1' .* at \(.*\) mm; leave a gap") as caught:
        build_problem(case)
    (mark,) = caught.value.marks
    assert caught.value.unit == "mm"
    # the two spheres of facets meet near the circle midway between their middles
    away = np.linalg.norm(mark.lines.reshape(-1, 3) * 1e3, axis=1)
    assert len(mark.lines) > 10
    assert away.min() > 1.85
    assert away.max() <= 2.0 + 1e-9


def test_the_command_draws_the_places_beside_the_error(tmp_path, capsys):
    from vtkmodules.vtkIOXML import vtkXMLPolyDataReader

    for k, x in enumerate((0.0, 0.5)):
        trimesh.creation.box(bounds=[(x, x, x), (1 + x, 1 + x, 1 + x)]).export(tmp_path / f"{k}.stl")
    files = [str(tmp_path / f"{k}.stl") for k in (0, 1)]
    assert main(["solve", *files, "--unit", "mm"]) == 2
    said = capsys.readouterr().err
    drawn = tmp_path / "0.markers.vtp"
    assert f"drawn in {drawn}" in said
    assert said.count("\n") == 1
    reader = vtkXMLPolyDataReader()
    reader.SetFileName(str(drawn))
    reader.Update()
    data = reader.GetOutput()
    assert data.GetNumberOfLines() > 0
    assert data.GetNumberOfPolys() > 0
    assert data.GetFieldData().GetAbstractArray("unit").GetValue(0) == "mm"
    assert data.GetBounds()[1] == pytest.approx(1.5)  # in the unit of the files, to lie upon them
    assert main(["inspect", *files, "--unit", "mm", "--markers", str(tmp_path / "look.vtp")]) == 0
    assert (tmp_path / "look.vtp").exists()
    assert main(["inspect", *files, "--unit", "mm", "--markers", str(tmp_path / "look.txt")]) == 2
    capsys.readouterr()
    assert main(["solve", *files, "--unit", "mm", "--markers", str(tmp_path / "no" / "x.vtp")]) == 2
    said = capsys.readouterr().err
    assert "overlaps conductor" in said  # the error itself comes first
    assert "not drawn: " in said
    assert main(["inspect", *files, "--mend-within", "0.1 mm"]) == 2
    assert "but no unit; state it, such as --unit mm" in capsys.readouterr().err


def test_list_refuses_what_safe_would_unite_or_mend(tmp_path):
    cube = trimesh.creation.box(bounds=CUBE)
    broken = trimesh.Trimesh(cube.vertices, np.vstack([cube.faces, cube.faces[:1]]), process=False)
    broken.export(tmp_path / "broken.ply")
    cube.export(tmp_path / "cube.ply")
    parts = [{"surface": "cube.ply"}, {"surface": "cube.ply", "shift": "1 0 0 mm"}]
    for conductor, words in (
        ({"surface": "broken.ply"}, r"1 panel lying upon an equal one, at \(.*\) mm; mend = 'list' changes nothing"),
        ({"part": parts}, r"touches conductor 'A' .*; mend = 'list' changes nothing: unite them in CAD"),
    ):
        stated = {"unit": "mm", "conductor": [{"name": "A", **conductor}]}
        with pytest.raises(InputError, match=words):
            build_problem(make_case({**stated, "mend": "list"}, folder=tmp_path))
        assert build_problem(make_case(stated, folder=tmp_path)).surface.n_bodies == 1


def test_changes_reach_the_result(tmp_path, capsys):
    cube = trimesh.creation.box(bounds=CUBE)
    cube.export(tmp_path / "cube.ply")
    text = (
        'unit = "mm"\n[[conductor]]\nname = "A"\n[[conductor.part]]\nsurface = "cube.ply"\n'
        '[[conductor.part]]\nsurface = "cube.ply"\nshift = "1 0 0 mm"\n'
    )
    (tmp_path / "two.toml").write_text(text)
    assert main(["solve", str(tmp_path / "two.toml"), "-q", "--accuracy", "5%"]) == 0
    assert "united 'cube' and 'cube' into one" in " ".join(capsys.readouterr().out.split())
    document = json.loads((tmp_path / "two.daraf" / "result.json").read_text())
    (change,) = document["changes"]
    assert (change["conductor"], change["code"], change["count"]) == ("A", "united", 2)
    assert len(change["at"]) == 3
    assert "united 'cube'" in " ".join((tmp_path / "two.daraf" / "log.txt").read_text().split())


def test_inspection_of_a_case_tells_what_a_solve_unites_and_what_it_refuses(tmp_path):
    parts = [trimesh.creation.box(bounds=[(0, 0, z), (4, 4, z + 2)]) for z in (0, 1, 3)]
    for name, mesh in (("block", trimesh.util.concatenate(parts[:2])), ("lid", parts[2])):
        mesh.export(tmp_path / f"{name}.stl")
    conductors = [{"name": name, "surface": f"{name}.stl"} for name in ("block", "lid")]
    stated = {"unit": "mm", "conductor": conductors}
    inspection, notices = inspect_case(make_case(stated, folder=tmp_path))
    (notice,) = notices
    assert "a solve takes conductor 'block' so: united 'block-1' and 'block-2'" in notice.text
    told = [{fault.code: fault for fault in body.faults} for body in inspection.bodies]
    assert told[0]["overlaps-other"].severity == "note"
    assert told[0]["overlaps-other"].text == "overlaps 'block-2' of the same conductor"
    assert told[2]["touches-other"].severity == "error"
    assert told[2]["touches-other"].text == "touches 'block-2' of another conductor"
    assert "To be mended before a solve can be trusted: block-2, lid." in inspection_to_text(inspection)
    inspection, notices = inspect_case(make_case({**stated, "mend": "list"}, folder=tmp_path))
    assert notices == ()
    assert inspection.bodies[0].faults[0].severity == "error"
