"""Flat regions of triangle meshes."""

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from daraf.bem.regions import find_regions, mesh_edges
from daraf.bem.surface import Surface

TILT = Rotation.from_euler("xyz", [0.3, -1.1, 0.7]).as_matrix()


def one_body(vertices, triangles):
    triangles = np.asarray(triangles)
    return Surface(np.asarray(vertices, float), triangles, np.zeros(len(triangles), int), np.zeros(1, int))


def box(size=(1.0, 1.0, 1.0)):
    corners = np.array([[x, y, z] for x in (0, 1) for y in (0, 1) for z in (0, 1)]) * size
    faces = [(0, 1, 3, 2), (4, 6, 7, 5), (0, 4, 5, 1), (2, 3, 7, 6), (0, 2, 6, 4), (1, 5, 7, 3)]
    return corners, np.array([t for a, b, c, d in faces for t in ((a, b, c), (a, c, d))])


def prism(angles, radius=1.0, height=0.2):
    """Strips of a cylinder between the given angles; no ends."""
    n = len(angles)
    ring = radius * np.stack([np.cos(angles), np.sin(angles)], axis=1)
    vertices = np.concatenate([np.c_[ring, np.zeros(n)], np.c_[ring, np.full(n, height)]])
    k = np.arange(n - 1)
    return vertices, np.concatenate([np.c_[k, k + 1, k + n + 1], np.c_[k, k + n + 1, k + n]])


def test_edges_of_a_box_and_of_a_sheet():
    _, triangles = box()
    edges = mesh_edges(triangles)
    assert len(edges.vertices) == 18
    assert edges.consistent.all()
    for t, near in enumerate(edges.across):
        for k in range(3):
            assert {triangles[t, k], triangles[t, (k + 1) % 3]} <= set(triangles[near[k]])
    open_edges = mesh_edges(triangles[:2])
    assert sorted(open_edges.count) == [1, 1, 1, 1, 2]


def test_a_reversed_or_third_triangle_makes_an_edge_inconsistent():
    edges = mesh_edges(np.array([[0, 1, 2], [0, 1, 3]]))
    shared = np.flatnonzero(edges.count == 2)
    assert not edges.consistent[shared].any()
    edges = mesh_edges(np.array([[0, 1, 2], [1, 0, 3], [1, 0, 4]]))
    assert edges.count.max() == 3
    assert (edges.across == -1).all()


def test_box_has_six_regions_with_outward_normals():
    vertices, triangles = box((3.0, 2.0, 1.0))
    regions, notices = find_regions(one_body(vertices, triangles))
    assert len(regions) == 6
    assert not notices
    centre = np.array([1.5, 1.0, 0.5])
    assert (np.einsum("ij,ij->i", regions.normals, regions.origins - centre) > 0).all()
    assert sorted(regions.areas) == pytest.approx([2, 2, 3, 3, 6, 6])
    assert sorted(np.concatenate([regions.triangles_of(r) for r in range(6)])) == list(range(12))


def test_slivers_with_meaningless_normals_join_their_face():
    # A fan of 40 triangles whose base points differ by 1e-5 of the height: aspect ratios of 1e5.
    x = np.r_[0.0, 0.5 + 1e-5 * np.arange(40), 1.0]
    vertices = np.c_[x, np.zeros_like(x), np.zeros_like(x)]
    vertices = np.vstack([vertices, [0.5, 1.0, 0.0]]) @ TILT.T
    vertices = (vertices + 10.0).astype(np.float32)
    triangles = np.array([[k, k + 1, len(x)] for k in range(len(x) - 1)])
    regions, _ = find_regions(one_body(vertices, triangles))
    assert len(regions) == 1
    # single precision at a distance of 17 on a base of 1
    assert abs(regions.normals[0] @ (TILT @ [0, 0, 1.0])) == pytest.approx(1, abs=1e-5)


@pytest.mark.parametrize("facets", [16, 48, 200, 2000])
def test_facets_of_a_cylinder_stay_apart(facets):
    vertices, triangles = prism(np.linspace(0, 2 * np.pi, facets + 1))
    regions, _ = find_regions(one_body(vertices.astype(np.float32), triangles))
    assert len(regions) == facets


def test_no_creeping_around_a_gentle_curve():
    # A quarter turn in 2000 facets: neighbours may join, but no region leaves its plane.
    vertices, triangles = prism(np.linspace(0, np.pi / 2, 2001))
    body = one_body(vertices, triangles)
    regions, _ = find_regions(body)
    offset = vertices[triangles] - regions.origins[regions.triangle_region][:, None]
    distance = np.abs(np.einsum("tki,ti->tk", offset, regions.normals[regions.triangle_region]))
    assert distance.max() < 1e-5
    assert len(regions) > 500


def test_degenerate_triangles_are_absorbed_or_reported():
    # A T-junction closed by a triangle without area: two large triangles above, one below.
    vertices = [[0, 0, 0], [2, 0, 0], [1, 0, 0], [1, 1, 0], [1, -1, 0]]
    triangles = [[0, 2, 3], [2, 1, 3], [0, 1, 2], [1, 0, 4]]
    regions, notices = find_regions(one_body(vertices, triangles))
    assert len(regions) == 1
    assert not notices
    alone = [*triangles, [0, 0, 4]]
    regions, notices = find_regions(one_body(vertices, alone))
    assert regions.triangle_region[-1] == -1
    assert [n.code for n in notices] == ["degenerate-triangles"]


def test_bodies_do_not_join():
    vertices = [[0, 0, 0], [1, 0, 0], [1, 1, 0], [0, 1, 0]]
    triangles = np.array([[0, 1, 2], [0, 2, 3]])
    surface = Surface(np.array(vertices, float), triangles, np.array([0, 1]), np.array([0, 1]))
    assert len(find_regions(surface)[0]) == 2


def test_regions_do_not_depend_on_position_or_size():
    vertices, triangles = box()
    for scale in (1e-6, 1.0, 1e4):
        moved = (vertices @ TILT.T + 5.0) * scale
        assert len(find_regions(one_body(moved.astype(np.float32), triangles))[0]) == 6
