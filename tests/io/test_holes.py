"""Small holes: found, closed with bold mending, and only if the body is closed otherwise."""

import numpy as np
import pytest
import trimesh
from hypothesis import given
from hypothesis import strategies as st

from daraf.io.bodies import Body
from daraf.io.changes import Mend
from daraf.io.gaps import Shape
from daraf.io.holes import fill_loop, hole_loops
from daraf.io.mending import fit_bodies

BALL = trimesh.creation.icosphere(3)


def body_without(rows, mesh=BALL):
    kept = np.delete(np.array(mesh.faces, dtype=np.int64), rows, axis=0)
    return Body("ball", np.array(mesh.vertices, dtype=float), kept, "ball.stl")


def around(vertex, mesh=BALL):
    return np.flatnonzero((mesh.faces == vertex).any(axis=1))


def test_two_holes_are_closed_and_told():
    rows = np.concatenate([around(0), around(3)])
    (body,) = fit_bodies([body_without(rows)], Mend("bold", holes=0.6))
    assert Shape(body).volume == pytest.approx(BALL.volume, rel=5e-3)  # a flat cap over a vertex
    filled = [note for note in body.notes if note.code == "filled"]
    assert [note.count for note in filled] == [2]
    # beside vertex 0 or 3
    middle = min(np.linalg.norm(BALL.vertices[v] - filled[0].place) for v in (0, 3))
    assert middle < 0.05
    assert any("area after mending" in str(note) for note in body.notes)


@pytest.mark.parametrize("mend", [Mend("safe"), Mend("list"), Mend("bold", holes=0.01)])
def test_others_leave_them(mend):
    body = body_without(around(0))
    assert Shape(fit_bodies([body], mend)[0]).volume is None


def test_a_sheet_is_no_body_with_a_hole():
    half = BALL.faces[BALL.triangles_center[:, 2] > 0]
    body = Body("cup", np.array(BALL.vertices), np.delete(half, [5], axis=0), "cup.stl")
    assert len(fit_bodies([body], Mend("bold"))[0].triangles) == len(half) - 1


def test_holes_that_meet_in_a_vertex():
    first = around(0)
    vertex = BALL.faces[first[0]][BALL.faces[first[0]] != 0][0]
    far = [v for v in BALL.vertex_neighbors[vertex] if v != 0 and v not in BALL.vertex_neighbors[0]]
    rows = np.unique(np.concatenate([first, around(far[0])]))
    body = body_without(rows)
    loops = hole_loops(body.triangles)
    assert len(loops) >= 1
    (filled,) = fit_bodies([body], Mend("bold", holes=0.8))
    assert Shape(filled).volume == pytest.approx(BALL.volume, rel=2e-2)


@given(seed=st.integers(0, 2**32 - 1), n=st.integers(3, 20))
def test_a_flat_loop_gets_its_area(seed, n):
    rng = np.random.default_rng(seed)
    angle = (np.arange(n) + rng.uniform(0.2, 0.8, n)) * 2 * np.pi / n
    flat = np.column_stack([np.cos(angle), np.sin(angle), 0 * angle]) * rng.uniform(0.5, 1.0, n)[:, None]
    triangles = fill_loop(flat)
    corners = flat[triangles]
    vector = 0.5 * np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]).sum(axis=0)
    expected = 0.5 * np.cross(flat, np.roll(flat, -1, axis=0)).sum(axis=0)
    assert len(triangles) == n - 2
    assert vector == pytest.approx(expected, abs=1e-12)


def test_a_saddle_gets_the_triangles_of_least_area():
    loop = np.array([[0.0, 0, 0], [1, 0, 1], [1, 1, 0], [0, 1, 1], [-2, 0.5, 5.0], [-0.5, 0.2, -3.0]])
    triangles = fill_loop(loop)
    assert len(triangles) == 4
    assert set(triangles.ravel()) == set(range(6))


def test_a_long_loop_without_a_simple_projection_is_left():
    t = np.linspace(0, 2 * np.pi, 200, endpoint=False)
    trefoil = np.column_stack([np.sin(t) + 2 * np.sin(2 * t), np.cos(t) - 2 * np.cos(2 * t), -np.sin(3 * t)])
    assert fill_loop(trefoil) is None
