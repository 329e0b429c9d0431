"""From a case to a surface: bodies chosen, placed, assigned."""

import hashlib

import numpy as np
import pytest
import trimesh
from sample_solution import ascii_stl

from daraf.bem.errors import InputError
from daraf.io.bodies import read_bodies
from daraf.io.case import make_case
from daraf.io.joining import bodies_to_surface
from daraf.io.problem import build_problem, problem_from_files


@pytest.fixture
def folder(tmp_path):
    text = ascii_stl("drive") + ascii_stl("sense", shift=(5, 0, 0)) + ascii_stl("guard", shift=(0, 5, 0), size=2)
    (tmp_path / "head.stl").write_text(text)
    (tmp_path / "wall.stl").write_text(ascii_stl("wall", shift=(0, 0, 9)))
    return tmp_path


def build(folder, *conductors, **more):
    return build_problem(make_case({"unit": "mm", "conductor": list(conductors), **more}, folder=folder))


def box(problem, conductor):
    surface = problem.surface
    mine = surface.body_conductor[surface.triangle_body] == conductor
    used = surface.vertices[surface.triangles[mine].ravel()]
    return np.array([used.min(axis=0), used.max(axis=0)])


def test_conductors_in_the_order_of_the_case_in_metres(folder):
    problem = build(
        folder,
        {"name": "W", "surface": "wall.stl", "ground": True},
        {"name": "D", "surface": "head.stl", "body": "drive", "potential": "5 V"},
        {"name": "SG", "surface": "head.stl", "body": ["sense", 3], "charge": "2 nC"},
    )
    assert problem.surface.conductor_names == ("W", "D", "SG")
    assert problem.surface.body_names == ("wall", "drive", "sense", "guard")
    assert problem.surface.body_conductor.tolist() == [0, 1, 2, 2]
    assert box(problem, 0) == pytest.approx(np.array([[0, 0, 9], [1, 1, 10]]) * 1e-3)
    assert problem.held.tolist() == [True, True, False]
    assert problem.values.tolist() == [0.0, 5.0, 2e-9]
    assert [one.file for one in problem.inputs] == ["wall.stl", "head.stl"]
    assert problem.inputs[0].sha256 == hashlib.sha256((folder / "wall.stl").read_bytes()).hexdigest()
    assert problem.inputs[0].bytes == (folder / "wall.stl").stat().st_size


def test_rotation_first_then_shift(folder):
    turned = {"angle": "90 deg", "axis": "z", "about": "1 0 0 mm"}
    problem = build(folder, {"name": "W", "surface": "wall.stl", "rotation": turned, "shift": "0 0 1 mm"})
    # x from 0 to 1 about x = 1 by a quarter turn: y from -1 to 0; y from 0 to 1: x from 0 to 1.
    assert box(problem, 0) == pytest.approx(np.array([[0, -1, 10], [1, 0, 11]]) * 1e-3, abs=1e-17)


def test_rotation_keeps_the_shape(folder):
    turned = {"angle": "33 deg", "axis": [1, 2, -3], "about": "4 5 6 mm"}
    plain = build(folder, {"name": "W", "surface": "wall.stl"}).surface
    placed = build(folder, {"name": "W", "surface": "wall.stl", "rotation": turned}).surface
    gaps = [np.linalg.norm(s.vertices[:, None] - s.vertices, axis=2) for s in (plain, placed)]
    # Rounding of lengths of a few mm.
    assert gaps[1] == pytest.approx(gaps[0], abs=1e-17)


def test_one_body_placed_twice_as_parts(folder):
    parts = [{"surface": "wall.stl"}, {"surface": "wall.stl", "shift": "3 0 0 mm"}]
    problem = build(folder, {"name": "both", "part": parts})
    assert problem.surface.body_conductor.tolist() == [0, 0]
    assert box(problem, 0)[1, 0] == pytest.approx(4e-3)
    assert problem.held is None
    assert len(problem.inputs) == 1


def test_a_body_used_twice_in_one_place(folder):
    with pytest.raises(InputError, match=r"conductor 'B': body 'wall' of wall\.stl already belongs to conductor 'A'"):
        build(folder, {"name": "A", "surface": "wall.stl"}, {"name": "B", "surface": "wall.stl"})


def test_bodies_left_out_are_told(folder):
    problem = build(folder, {"name": "D", "surface": "head.stl", "body": 1})
    told = [one.text for one in problem.notices if one.code == "unused-body"]
    assert told == ["head.stl: 2 of 3 bodies belong to no conductor: 'sense', 'guard'; left out of the computation"]


def test_a_shift_in_metres_is_questioned(folder):
    problem = build(folder, {"name": "W", "surface": "wall.stl", "shift": [0, 0, 2]})
    assert [one.code for one in problem.notices] == ["far-shift"]
    assert "bare numbers are metres" in problem.notices[0].text


@pytest.mark.parametrize(
    ("conductor", "words"),
    [
        ({"surface": "none.stl"}, "none.stl"),
        ({"surface": "head.stl", "body": 4}, "no body number 4"),
        ({"surface": "head.stl", "body": 0}, "no body number 0"),
        ({"surface": "head.stl", "body": "drvie"}, "did you mean 'drive'"),
    ],
)
def test_bad_surfaces_and_bodies_name_the_conductor(folder, conductor, words):
    with pytest.raises(InputError, match=words) as caught:
        build(folder, {"name": "A", **conductor})
    assert "case: conductor 'A': " in str(caught.value)
    assert "\n" not in str(caught.value)


def test_a_missing_unit_names_plausible_ones(folder):
    case = make_case({"conductor": [{"name": "A", "surface": "wall.stl"}]}, folder=folder)
    with pytest.raises(InputError, match=r"wall\.stl: .*unit"):
        build_problem(case)


def test_touching_conductors_are_refused_with_the_place(folder):
    shifted = {"name": "B", "surface": "wall.stl", "shift": "1 0 0 mm"}
    with pytest.raises(InputError, match=r"'A' .*touches conductor 'B' .* at \(1, .*\) mm; leave a gap"):
        build(folder, {"name": "A", "surface": "wall.stl"}, shifted)
    inside = {"name": "B", "surface": "wall.stl", "shift": "0.5 0.5 0.25 mm"}
    with pytest.raises(InputError, match=r"'A' .*overlaps conductor 'B' .* at \(.*\) mm; leave a gap"):
        build(folder, {"name": "A", "surface": "wall.stl"}, inside)


def test_every_body_of_files_a_conductor(folder):
    problem = problem_from_files([folder / "head.stl", folder / "wall.stl"], "mm", accuracy=0.02)
    assert problem.surface.conductor_names == ("drive", "sense", "guard", "wall")
    assert problem.held is None
    assert problem.case.content.accuracy == 0.02
    assert [one.file for one in problem.inputs] == ["head.stl", "wall.stl"]
    assert problem.notices == ()


def test_bodies_to_surface(folder):
    bodies = read_bodies(folder / "head.stl", "mm")
    assert bodies_to_surface(bodies).conductor_names == ("drive", "sense", "guard")
    joined = bodies_to_surface(bodies, [0, 1, 0], names=("hot", "cold"))
    assert joined.n_conductors == 2
    with pytest.raises(InputError, match="no conductor"):
        bodies_to_surface([])


def test_mended_and_doubtful_bodies_are_told(folder):
    lines = ascii_stl("wall").splitlines()
    facet = lines[1:8]
    (folder / "double.stl").write_text("\n".join([*lines[:-1], *facet, lines[-1]]))
    (folder / "holed.stl").write_text("\n".join([lines[0], *lines[8:]]))
    problem = build(
        folder,
        {"name": "A", "surface": "double.stl"},
        {"name": "B", "surface": "holed.stl", "shift": "4 0 0 mm"},
    )
    assert len(problem.surface.triangles) == 12 + 11
    told = {one.code: one.text for one in problem.notices}
    assert told["mended"].startswith("conductor 'A'")


def test_bodies_of_one_conductor_that_meet_are_united_and_it_is_told(folder):
    parts = [{"surface": "wall.stl"}, {"surface": "wall.stl", "shift": "0.5 0.5 0.25 mm"}]
    problem = build(folder, {"name": "both", "part": parts})
    assert [one.code for one in problem.notices] == ["mended"]
    assert problem.surface.n_bodies == 1
    ((conductor, body, change),) = problem.changes
    assert (conductor, body, change.code, change.count) == ("both", "wall+wall", "united", 2)


def test_the_wall_of_a_cavity_is_not_called_inside_out(folder):
    outer, inner = trimesh.creation.icosphere(1, radius=2.0), trimesh.creation.icosphere(1)
    inner.invert()
    trimesh.util.concatenate([outer, inner]).export(folder / "shell.stl")
    problem = build(folder, {"name": "shell", "surface": "shell.stl"})
    assert "inside-out" not in [one.code for one in problem.notices]


def test_the_wall_of_a_cavity_is_no_mending(folder):
    ball = trimesh.creation.box((4, 4, 4))
    hole = trimesh.creation.box((2, 2, 2))
    hole.invert()
    trimesh.util.concatenate([ball, hole]).export(folder / "hollow.stl")
    problem = build(folder, {"name": "H", "surface": "hollow.stl"})
    told = [one.code for one in problem.notices if one.code in ("mended", "cavity-wall", "inner-surface")]
    assert told == ["inner-surface"]  # no other conductor lies in it: left out, since it carries no charge


def test_rounding_of_the_file_is_handed_on(folder):
    """Half a step of single precision at the largest coordinate, in metres, body by body."""
    box_there = trimesh.creation.box((4, 4, 4))
    box_there.apply_translation((3000.0, 0, 0))
    box_there.export(folder / "there.stl")  # binary
    problem = build(folder, {"name": "T", "surface": "there.stl"}, {"name": "W", "surface": "wall.stl"})
    # 3002 mm lies between 2^11 and 2^12: half a step is at most 2^-24 of it
    assert problem.rounding[0] == pytest.approx(3.002 * 2.0**-24, rel=0.01)
    assert problem.rounding[1] < 1e-9
