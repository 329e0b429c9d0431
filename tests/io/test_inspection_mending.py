"""Making bodies fit and orienting them: the shape stays, each change is listed."""

import numpy as np
import pytest
import trimesh
from hypothesis import given
from hypothesis import strategies as st

from daraf.bem.errors import InputError
from daraf.io.bodies import Body, read_bodies
from daraf.io.gaps import Shape
from daraf.io.mending import fit_bodies, make_fit
from daraf.io.orientation import orient

BALL = trimesh.creation.icosphere(1)
BOX = trimesh.creation.box((1.0, 1.0, 1.0))


def body_of(mesh, name="part", **fields):
    triangles = np.array(mesh.faces, dtype=np.int64)
    return Body(name, np.array(mesh.vertices, dtype=float), triangles, "part.stl", **fields)


def raw(vertices, triangles, **fields):
    return Body("part", np.array(vertices, dtype=float), np.array(triangles, dtype=np.int64), "part.stl", **fields)


def said(body):
    return [str(note) for note in body.notes]


def area(body):
    a, b, c = np.moveaxis(body.vertices[body.triangles], 1, 0)
    return 0.5 * np.linalg.norm(np.cross(b - a, c - a), axis=1).sum()


def test_a_good_body_is_the_same_object():
    body = body_of(BALL)
    assert make_fit(body) is body
    assert orient([body])[0] is body


@given(rows=st.sets(st.integers(0, 79), max_size=60))
def test_any_turned_panels_are_turned_back(rows):
    body = body_of(BALL)
    chosen = np.array(sorted(rows), dtype=int)
    triangles = body.triangles.copy()
    triangles[chosen] = triangles[chosen, ::-1]
    (result,) = orient([raw(body.vertices, triangles)])
    assert Shape(result).volume == pytest.approx(BALL.volume)
    assert bool(result.notes) == bool(rows)


def test_inside_out_is_told():
    (result,) = orient([raw(BALL.vertices, BALL.faces[:, ::-1])])
    assert said(result) == ["turned 80 panels over so that the normals point outwards"]


def test_wall_of_a_cavity_stays_inwards(tmp_path):
    outer, inner = trimesh.creation.icosphere(1, radius=2.0), BALL.copy()
    inner.invert()
    trimesh.util.concatenate([outer, inner]).export(tmp_path / "shell.stl")
    bodies = orient(read_bodies(tmp_path / "shell.stl", "mm"))
    assert Shape(bodies[0]).volume > 0 > Shape(bodies[1]).volume
    assert "wall of a cavity in 'shell-1'" in said(bodies[1])[0]
    apart = [body_of(outer, "outer", solid=1), body_of(inner, "inner", solid=2)]
    assert Shape(orient(apart)[1]).volume > 0  # another solid: a conductor of its own, wound wrongly


def test_moebius_strip_is_left_and_told():
    n = 12
    angle = np.arange(n) * 2 * np.pi / n
    ring = np.column_stack([np.cos(angle), np.sin(angle), 0 * angle])
    side = 0.3 * np.column_stack(
        [np.cos(angle / 2) * np.cos(angle), np.cos(angle / 2) * np.sin(angle), np.sin(angle / 2)]
    )
    vertices = np.stack([ring - side, ring + side], axis=1).reshape(-1, 3)
    triangles = []
    for k in range(n):
        a, b = 2 * k, 2 * k + 1
        c, d = (2 * k + 2, 2 * k + 3) if k < n - 1 else (1, 0)
        triangles += [[a, b, c], [b, d, c]]
    (result,) = orient([raw(vertices, triangles)])
    assert "single side" in said(result)[0]
    assert np.array_equal(result.triangles, triangles)


def split_edge(mesh, share=0.5, lift=0.0):
    """A CAD sliver: an edge carries an extra vertex on one side only, closed by a flat triangle."""
    vertices, triangles = mesh.vertices.copy(), mesh.faces.copy()
    a, b, c = triangles[0]
    extra = len(vertices)
    vertices = np.vstack([vertices, vertices[a] * (1 - share) + vertices[b] * share + lift])
    triangles[0] = [a, extra, c]
    return raw(vertices, np.vstack([triangles, [extra, b, c], [a, b, extra]]))


@pytest.mark.parametrize("share", [0.5, 0.1, 0.999])
def test_triangle_without_area_is_exchanged_and_the_body_stays_closed(share):
    body = split_edge(BOX, share)
    assert Shape(body).volume == pytest.approx(1.0)
    result = make_fit(body)
    assert Shape(result).volume == pytest.approx(1.0)
    assert area(result) == pytest.approx(area(body))
    assert said(result) == ["exchanged the edge of 1 panel without area; the shape is the same"]


def test_chain_of_triangles_without_area():
    # A fan of flat triangles along one edge of a sheet, as stitched by a CAD kernel between two facets.
    x = np.linspace(0.0, 1.0, 6)
    top = [[0.5, 1.0, 0.0]]
    vertices = np.vstack([np.column_stack([x, 0 * x, 0 * x]), top, [[0.5, -1.0, 0.0]]])
    upper = [[k, k + 1, 6] for k in range(5)]
    flat = [[0, k + 1, k] for k in range(1, 5)]
    body = raw(vertices, [*upper, *flat, [0, 7, 5]])
    result = make_fit(body)
    assert area(result) == pytest.approx(1.0)
    assert len(result.triangles) == 10
    (oriented,) = orient([result])
    normal = np.cross(*np.moveaxis(np.diff(oriented.vertices[oriented.triangles], axis=1), 1, 0))
    assert (normal[:, 2] > 0).all() or (normal[:, 2] < 0).all()


def test_needle_is_collapsed():
    body = split_edge(BOX, 1e-12)
    result = make_fit(body)
    assert len(result.vertices) == 8
    assert Shape(result).volume == pytest.approx(1.0)
    assert "merged 1 vertex" in said(result)[0]
    assert "dropped 2 panels with two equal vertices" in said(result)[1]


def test_doubled_panels():
    doubled = raw(BALL.vertices, np.vstack([BALL.faces, BALL.faces[:3], BALL.faces[5:6, ::-1]]))
    result = make_fit(doubled)
    assert len(result.triangles) == 80
    assert said(result) == ["dropped 4 panels that lay upon an equal one"]


def test_sheet_given_with_both_faces_keeps_one():
    front = [[0, 1, 2], [0, 2, 3]]
    body = raw([[0, 0, 0], [1, 0, 0], [1, 1, 0], [0, 1, 0]], [*front, [2, 1, 0], [3, 2, 0]])
    result = make_fit(body)
    assert area(result) == pytest.approx(1.0)


def test_wall_between_two_boxes_of_one_solid_is_removed(tmp_path):
    mirror = trimesh.transformations.reflection_matrix([0.5, 0, 0], [1, 0, 0])
    right = BOX.copy().apply_transform(mirror)
    trimesh.util.concatenate([BOX, right]).export(tmp_path / "pair.stl")
    (body,) = read_bodies(tmp_path / "pair.stl", "m")
    (result,) = fit_bodies([body])
    assert Shape(result).volume == pytest.approx(2.0)
    wall, check = said(result)
    assert wall == "removed a wall of 2 doubled panels inside the body"
    assert check == "area after mending -17 %, volume +0 %"  # 2 of 12 faces were the wall


def test_nothing_left_is_an_input_error():
    with pytest.raises(InputError, match=r"part\.stl: body 'part' has no area left"):
        make_fit(raw([[0, 0, 0], [1, 0, 0], [2, 0, 0]], [[0, 1, 2]]))


@given(seed=st.integers(0, 2**32 - 1), scale=st.sampled_from([1e-9, 1.0, 1e3]))
def test_fitting_keeps_volume_and_area_at_any_scale(seed, scale):
    rng = np.random.default_rng(seed)
    body = split_edge(BALL, rng.uniform(0.01, 0.99))
    triangles = np.vstack([body.triangles, body.triangles[rng.integers(0, 80, 3)]])
    turned = rng.uniform(size=len(triangles)) < 0.3
    triangles[turned] = triangles[turned, ::-1]
    (result,) = fit_bodies([raw(body.vertices * scale, rng.permutation(triangles))])
    assert Shape(result).volume == pytest.approx(BALL.volume * scale**3, rel=1e-9, abs=0)
    assert area(result) == pytest.approx(BALL.area * scale**2, rel=1e-9, abs=0)
