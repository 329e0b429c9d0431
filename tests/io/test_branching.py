"""Edges with more than two panels: solids that touch along an edge come apart, fins stay."""

import numpy as np
import pytest
import trimesh

from daraf.io.bodies import Body, read_bodies
from daraf.io.branching import split_branching
from daraf.io.mending import fit_bodies
from daraf.io.topology import connected_pieces, edges_of, signed_volume


def box(low, high):
    return trimesh.creation.box(bounds=[low, high])


def pair(*, flipped=False):
    """Two cubes that share an edge, as one mesh."""
    both = trimesh.util.concatenate([box((0, 0, 0), (1, 1, 1)), box((1, 1, 0), (2, 2, 1))])
    both.merge_vertices()
    return np.array(both.vertices), np.array(both.faces)[:, :: -1 if flipped else 1]


def test_two_cubes_along_an_edge_come_apart():
    vertices, triangles = pair()
    assert edges_of(triangles).count.max() == 4
    points, apart, split = split_branching(vertices, triangles)
    assert len(split) == 1
    assert (edges_of(apart).count == 2).all()
    assert connected_pieces(apart)[0] == 2
    assert len(points) == len(vertices) + 2
    assert signed_volume(points, apart) == pytest.approx(2.0)
    assert np.array_equal(points[apart], vertices[triangles])  # the same triangles in the same places


def test_solid_stays_together_where_a_notch_touches():
    # a block with two notches whose tips meet: metal on the left and right of the common edge, or above and below
    left = box((0, 0, 0), (3, 1, 1))
    right = box((0, 1, 0), (3, 2, 1))
    solid = trimesh.util.concatenate([left, right])
    solid.merge_vertices()
    _, apart, split = split_branching(np.array(solid.vertices), np.array(solid.faces))
    assert len(split) == 0  # the doubled wall lies upon itself: no order around the edge
    assert np.array_equal(apart, solid.faces)


def test_a_fin_is_left():
    cube = box((0, 0, 0), (1, 1, 1))
    edge = [k for k, v in enumerate(cube.vertices) if v[0] == 1 and v[1] == 1]
    vertices = np.vstack([cube.vertices, [2.0, 2.0, 0.0]])
    triangles = np.vstack([cube.faces, [edge[0], edge[1], 8]])
    _, apart, split = split_branching(vertices, triangles)
    assert len(split) == 0
    assert apart is triangles


def test_mending_tells(tmp_path):
    vertices, triangles = pair()
    trimesh.Trimesh(vertices, triangles, process=False).export(tmp_path / "pair.stl")
    (body,) = read_bodies(tmp_path / "pair.stl", "mm")
    (fit,) = fit_bodies([body])
    (change,) = [note for note in fit.notes if note.code == "split-edges"]
    assert change.count == 1
    assert change.place == pytest.approx((1e-3, 1e-3, 0.5e-3))


def test_inward_winding_pairs_the_other_way():
    vertices, triangles = pair(flipped=True)
    body = Body("pair", vertices, np.ascontiguousarray(triangles, dtype=np.int64), "pair.stl")
    (fit,) = fit_bodies([body])  # turned outwards first
    assert connected_pieces(fit.triangles)[0] == 2
