"""Distances, crossings and contacts against slow twins and by hand."""

import numpy as np
import pytest
import trimesh
from hypothesis import given, settings
from hypothesis import strategies as st

from daraf.io.bodies import Body
from daraf.io.contacts import contacts
from daraf.io.gaps import Shape, closest_approach, encloses
from daraf.io.triangle_boxes import BoxTree, near_pairs
from daraf.io.triangle_distance import pair_distances, slab_gaps, winding_numbers

BOX = trimesh.creation.box((1.0, 1.0, 1.0))
SHEET = trimesh.Trimesh([[0, 0, 0], [1, 0, 0], [1, 1, 0], [0, 1, 0]], [[0, 1, 2], [0, 2, 3]], process=False)


def body_of(mesh, name="part", **fields):
    triangles = np.array(mesh.faces, dtype=np.int64)
    return Body(name, np.array(mesh.vertices, dtype=float), triangles, "part.stl", **fields)


def moved(mesh, shift=(0.0, 0.0, 0.0), angle=0.0, axis=(1.0, 2.0, 3.0), size=1.0):
    # by hand: trimesh takes a shift of nanometres for none
    turn = trimesh.transformations.rotation_matrix(angle, axis)[:3, :3]
    vertices = size * np.array(mesh.vertices) @ turn.T + np.array(shift)
    return trimesh.Trimesh(vertices, mesh.faces, process=False)


def nearest_on_triangle(point, triangle):
    """Slow obvious twin: the foot in the plane if it lies inside, else the nearest foot on an edge."""
    a, b, c = triangle
    feet = []
    for p, q in ((a, b), (b, c), (c, a)):
        share = np.clip((point - p) @ (q - p) / max((q - p) @ (q - p), 1e-300), 0.0, 1.0)
        feet.append(p + share * (q - p))
    weights, *_ = np.linalg.lstsq(np.column_stack([b - a, c - a]), point - a, rcond=None)
    if weights.min() >= 0.0 and weights.sum() <= 1.0:
        feet.append(a + weights @ np.array([b - a, c - a]))
    return min(feet, key=lambda foot: np.linalg.norm(foot - point))


def distance_by_projection(a, b, steps=3000):
    """Slow obvious twin: nearest points in turn on one and the other, which converges for convex sets."""
    x = a.mean(axis=0)
    for _ in range(steps):
        y = nearest_on_triangle(x, b)
        moved_to = nearest_on_triangle(y, a)
        if np.linalg.norm(moved_to - x) < 1e-13:
            break
        x = moved_to
    return np.linalg.norm(x - y)


def test_pairs_by_hand():
    flat = np.array([[0.0, 0, 0], [1, 0, 0], [0, 1, 0]])
    cases = [
        (flat + np.array([0, 0, 0.5]), 0.5),  # faces
        (np.array([[0.2, 0.2, 0.3], [0.2, 0.2, 2], [1, 1, 2]]), 0.3),  # vertex over face
        (np.array([[2.0, 0, 0], [3, 0, 0], [3, 1, 0]]), 1.0),  # vertex to vertex in a plane
        (np.array([[0.5, -0.4, -1], [0.5, -0.4, 1], [0.5, -2, 0]]), 0.4),  # edge to edge
        (np.array([[0.2, 0.2, -1], [0.2, 0.2, 1], [5, 5, 0]]), 0.0),  # passes through
        (flat[[0, 0, 0]] + [0.25, 0.25, 0.125], 0.125),  # a point
    ]
    b = np.array([case for case, _ in cases])
    distance, on_a, on_b = pair_distances(np.repeat(flat[None], len(b), axis=0), b)
    assert distance == pytest.approx([wanted for _, wanted in cases], abs=1e-15)
    assert np.linalg.norm(on_a - on_b, axis=1) == pytest.approx(distance, abs=1e-15)


def test_pairs_against_alternating_projections():
    rng = np.random.default_rng(5)
    a = rng.normal(size=(60, 3, 3)) * [1.0, 1.0, 0.1]
    b = rng.normal(size=(60, 3, 3)) + rng.normal(size=(60, 1, 3)) * 2.0
    distance, _, _ = pair_distances(a, b)
    for k in range(60):
        # projections converge slowly where triangles nearly meet; from above always
        assert distance_by_projection(a[k], b[k]) == pytest.approx(distance[k], abs=2e-3)
        assert distance[k] <= distance_by_projection(a[k], b[k]) + 1e-12


@settings(max_examples=30)
@given(seed=st.integers(0, 2**32 - 1), scale=st.sampled_from([1e-9, 1.0, 1e6]))
def test_pair_identities(seed, scale):
    rng = np.random.default_rng(seed)
    a, b = rng.normal(size=(2, 20, 3, 3))
    distance, _, _ = pair_distances(a, b)
    turned, _, _ = pair_distances(b[:, [2, 0, 1]], a[:, ::-1])
    assert turned == pytest.approx(distance, abs=1e-13)
    larger, _, _ = pair_distances(a * scale, b * scale)
    assert larger == pytest.approx(distance * scale, abs=1e-13 * scale)
    normals = [np.cross(t[:, 1] - t[:, 0], t[:, 2] - t[:, 0]) for t in (a, b)]
    unit = [n / np.linalg.norm(n, axis=1, keepdims=True) for n in normals]
    assert (slab_gaps(a, unit[0], b, unit[1]) <= distance + 1e-13).all()


def test_walk_finds_all_near_pairs():
    rng = np.random.default_rng(3)
    a, b = rng.uniform(size=(2, 150, 1, 3)) + 0.05 * rng.normal(size=(2, 150, 3, 3))
    wanted = set()
    for i in range(150):
        for j in range(150):
            apart = np.maximum(a[i].min(0) - b[j].max(0), b[j].min(0) - a[i].max(0))
            if np.linalg.norm(np.maximum(apart, 0.0)) <= 0.1:
                wanted.add((i, j))
    found = [pair for i, j, _ in near_pairs(BoxTree(a), BoxTree(b), [0.1]) for pair in zip(i, j, strict=True)]
    assert len(found) == len(wanted)
    assert set(found) == wanted
    tree = BoxTree(a)
    itself = [frozenset(p) for i, j, _ in near_pairs(tree, tree, [9.0], itself=True) for p in zip(i, j, strict=True)]
    assert len(itself) == len(set(itself)) == 150 * 149 // 2


@pytest.mark.parametrize("angle", [0.0, 0.7])
def test_gap_against_all_pairs(angle):
    ball, bar = trimesh.creation.icosphere(2), moved(BOX, (1.6, 0.3, 0.2), 0.4, size=0.9)
    a, b = Shape(body_of(moved(ball, angle=angle))), Shape(body_of(moved(bar, angle=angle)))
    i, j = np.indices((len(a.corners), len(b.corners))).reshape(2, -1)
    wanted = pair_distances(a.corners[i], b.corners[j])[0].min()
    approach = closest_approach(a, b)
    assert approach.distance == pytest.approx(wanted, rel=1e-8)  # stated as 1e-9 of the gap
    back = closest_approach(b, a)
    assert back.distance == pytest.approx(wanted, rel=1e-8)
    assert np.linalg.norm(np.subtract(approach.point_a, approach.point_b)) == pytest.approx(wanted)


def test_gap_of_large_panels_far_from_each_others_corners():
    wide = moved(SHEET, size=1000.0, shift=(-500, -500, 0))
    pin = moved(BOX, (1.0, 2.0, 0.503), size=1.0)
    approach = closest_approach(Shape(body_of(wide)), Shape(body_of(pin)))
    assert approach.distance == pytest.approx(0.003, rel=1e-9)


def test_gap_at_the_nanometre_scale():
    a, b = moved(BOX, size=1e-9), moved(BOX, (1.5e-9, 0, 0), size=1e-9)
    assert closest_approach(Shape(body_of(a)), Shape(body_of(b))).distance == pytest.approx(0.5e-9)


def test_winding_number_inside_and_outside():
    points = np.array([[0.0, 0, 0], [0.49, 0.49, 0.49], [0.51, 0, 0], [3, 3, 3]])
    assert winding_numbers(points, BOX.triangles) == pytest.approx([1, 1, 0, 0], abs=1e-12)
    assert winding_numbers(points[:1], BOX.triangles[:, ::-1]) == pytest.approx([-1])


MEETINGS = {
    "apart": (BOX, moved(BOX, (1.01, 0, 0)), None),
    "cut": (BOX, moved(BOX, (0.5, 0.4, 0.3), 0.3), "overlaps"),
    "shifted along an axis": (BOX, moved(BOX, (0.5, 0, 0)), "overlaps"),
    "face on face": (BOX, moved(BOX, (1.0, 0.2, 0.3)), "touches"),
    "whole face on face": (BOX, moved(BOX, (1.0, 0, 0)), "touches"),
    "edge on edge": (BOX, moved(BOX, (1.0, 1.0, 0)), "touches"),
    "corner on corner": (BOX, moved(BOX, (1.0, 1.0, 1.0)), "touches"),
    "the same twice": (BOX, BOX, "touches"),
    "nested": (BOX, moved(BOX, size=0.5), "inside"),
    "sheet in a box": (BOX, moved(SHEET, (-0.2, -0.2, 0), size=0.4), "inside"),
    "sheets that cross": (SHEET, moved(SHEET, (0.1, 0.5, -0.5), np.pi / 2, (1, 0, 0)), "crosses"),
    "sheet with its edge on a sheet": (SHEET, moved(SHEET, (0.1, 0.5, 0), np.pi / 2, (1, 0, 0)), "touches"),
    "sheet through a box": (BOX, moved(SHEET, (-1.5, -1.5, 0.1), size=3.0), "crosses"),
    "pin through a sheet": (moved(SHEET, (-0.5, -0.5, 0)), moved(BOX, size=0.2), "crosses"),
}


@pytest.mark.parametrize("case", MEETINGS)
@pytest.mark.parametrize("angle", [0.0, 0.7])
@pytest.mark.parametrize("size", [1.0, 1e-6])
def test_meetings(case, angle, size):
    first, second, wanted = MEETINGS[case]
    # rotated coordinates are rounded as in a single-precision file
    spacing = 2.0**-24 * size if angle else 0.0
    bodies = [body_of(moved(mesh, angle=angle, size=size), spacing=spacing) for mesh in (first, second)]
    for pair in (bodies, bodies[::-1]):
        found = contacts(pair)
        assert [contact.kind for contact in found] == ([wanted] if wanted else [])
        for contact in found:
            for body in pair if contact.meets else ():
                to_surface = trimesh.proximity.closest_point(
                    trimesh.Trimesh(body.vertices / size, body.triangles, process=False),
                    [np.array(contact.place) / size],
                )[1][0]
                assert to_surface < 1e-6  # single-precision rounding of the coordinates


def test_inner_body_comes_first_and_conductors_are_told_apart():
    big, small, other = body_of(BOX), body_of(moved(BOX, size=0.5)), body_of(moved(BOX, (1.0, 0, 0)))
    found = contacts([big, small, other], [0, 0, 1])
    assert [(c.kind, c.body_a, c.body_b, c.same_conductor) for c in found] == [
        ("touches", 0, 2, False),
        ("inside", 1, 0, True),
    ]
    assert encloses(Shape(big), Shape(small))
    assert not encloses(Shape(small), Shape(big))


def test_touch_within_single_precision():
    left = trimesh.creation.cylinder(0.1, 0.37, sections=17)
    right = moved(left, (0, 0, 0.37))
    rounded = [m.vertices.astype(np.float32).astype(float) + 100.0 for m in (left, right)]
    spacing = 2.0**-24 * 0.6
    bodies = [
        Body("a", rounded[0], np.array(left.faces, dtype=np.int64), spacing=spacing),
        Body("b", rounded[1], np.array(right.faces, dtype=np.int64), spacing=spacing),
    ]
    assert [contact.kind for contact in contacts(bodies)] == ["touches"]
