"""Round parts finer than needed: fewer facets within a measured distance that enters the budget."""

import numpy as np
import pytest
import trimesh

from daraf.bem import solve_capacitance
from daraf.bem.coarse import region_deviation, take_as_drawn
from daraf.bem.creases import find_creases
from daraf.bem.facets import find_facets
from daraf.bem.regions import find_regions
from daraf.io.bodies import Body
from daraf.io.coarsening import coarsen, coarsen_bodies, count_faces
from daraf.io.gaps import Shape
from daraf.io.joining import bodies_to_surface
from daraf.io.narrow import narrow_notices, narrowest_gaps
from daraf.io.topology import edges_of


def body_of(mesh, name="part"):
    return Body(name, np.array(mesh.vertices, dtype=float), np.array(mesh.faces, dtype=np.int64), "part.stl")


def rounded_bar(step_degrees):
    """A square bar with two rounded ends, each facet of the rounding a few degrees wide."""
    n = round(180 / step_degrees)
    angle = np.linspace(-np.pi / 2, np.pi / 2, n + 1)
    right = np.column_stack([2 + np.cos(angle), np.sin(angle)])
    outline = np.vstack([right, -right])
    return trimesh.creation.extrude_polygon(trimesh.path.polygons.Polygon(outline), 1.0)


FINE = body_of(rounded_bar(0.5))


def test_nothing_moves_by_more_than_allowed_and_flat_faces_stay():
    tolerance = 1e-3
    found = coarsen(FINE, tolerance)
    assert found.moved.max() <= tolerance
    assert (edges_of(found.body.triangles).count == 2).all()
    assert count_faces(found.body) < 0.3 * count_faces(FINE)
    assert Shape(found.body).volume == pytest.approx(Shape(FINE).volume, rel=2e-3)
    # every vertex of the drawing lies within the tolerance of the coarse one: asked of the outline alone
    z = found.body.vertices[:, 2]
    assert np.minimum(np.abs(z), np.abs(z - 1.0)).max() <= tolerance


def test_a_coarse_part_is_left():
    assert coarsen(body_of(trimesh.creation.box((1.0, 2.0, 3.0))), 1e-3) is None


def test_open_and_crossing_bodies_are_left():
    ball = trimesh.creation.icosphere(4)
    assert coarsen(Body("cup", np.array(ball.vertices), np.array(ball.faces[100:]), "cup.stl"), 1e-2) is None
    both = trimesh.util.concatenate([ball, ball.copy().apply_translation((1, 0, 0))])
    assert coarsen(body_of(both), 1e-2) is None


def test_the_rule():
    bodies = [FINE]
    same, deviation = coarsen_bodies(bodies, [np.inf], 0.01, "auto")
    assert same[0] is FINE  # 722 faces can be solved as they are
    assert not deviation[0].any()
    assert coarsen_bodies(bodies, [np.inf], 0.01, "no")[0][0] is FINE
    (coarse,), (deviation,) = coarsen_bodies(bodies, [np.inf], 0.01, 1e-3)
    (note,) = coarse.notes
    assert note.code == "coarsened"
    assert 0.0 < note.moved <= 1e-3
    assert deviation.shape == (len(coarse.triangles),)
    ball = body_of(trimesh.creation.icosphere(4))  # 5,120 faces: more than the rule lets pass
    (round_one,), _ = coarsen_bodies([ball], [np.inf], 0.01, "auto")
    assert count_faces(round_one) < 3000
    assert round_one.notes[0].moved <= 1e-3 * ball.diagonal
    # a tight gap allows next to nothing
    (left,), _ = coarsen_bodies([ball], [1e-4], 0.01, "auto")
    assert left.triangles is ball.triangles
    assert [note.code for note in left.notes] == ["not-coarsened"]


def test_the_capacitance_is_the_same_and_the_budget_says_so():
    (coarse,), deviation = coarsen_bodies([FINE], [np.inf], 0.01, 2e-3)
    fine = solve_capacitance(bodies_to_surface([FINE]), accuracy=0.003)  # the sharper of the two is the reference
    less = solve_capacitance(bodies_to_surface([coarse], deviation=deviation), accuracy=0.01)
    assert "coarsening" not in fine.budget
    assert 0.0 < less.budget["coarsening"][0, 0] < 0.01 * less.maxwell[0, 0]
    spread = np.hypot(fine.maxwell_uncertainty[0, 0], less.maxwell_uncertainty[0, 0])
    assert abs(fine.maxwell[0, 0] - less.maxwell[0, 0]) <= spread
    assert len(less.panels) < 0.6 * len(fine.panels)


def test_the_line_is_exact_for_a_sphere_that_grows():
    """C = 4 pi eps a: a deviation delta everywhere may change it by delta / a of itself."""
    ball = body_of(trimesh.creation.icosphere(2))
    delta = 1e-3
    surface = bodies_to_surface([ball], deviation=[np.full(len(ball.triangles), delta)])
    answer = solve_capacitance(surface, accuracy=0.05)
    share = answer.budget["coarsening"][0, 0] / answer.maxwell[0, 0]
    # 3 %: the facets of this ball lie that much inside, and their charges differ
    assert share == pytest.approx(delta, rel=0.03)


def test_merged_facets_are_not_moved_outward_again():
    ball, other = trimesh.creation.icosphere(2), trimesh.creation.icosphere(2).apply_translation((5, 0, 0))
    bodies = [body_of(ball), body_of(other)]
    deviation = [np.full(len(ball.faces), 1e-3), np.zeros(len(other.faces))]
    surface = bodies_to_surface(bodies, deviation=deviation)
    regions, _ = find_regions(surface)
    facets = find_facets(surface, regions, find_creases(surface, regions))
    left = take_as_drawn(facets, regions, region_deviation(surface, regions))
    assert facets.offset.all()
    assert not left.offset[regions.body == 0].any()
    assert np.array_equal(left.offset[regions.body == 1], facets.offset[regions.body == 1])


def test_narrow_gaps_are_told_with_the_halvings():
    plates = [trimesh.creation.box(bounds=[(0, 0, z), (10, 8, z + 1)]) for z in (0.0, 1.01, 5.0)]
    bodies = [body_of(mesh, name) for mesh, name in zip(plates, "abc", strict=True)]
    narrowest = narrowest_gaps(bodies, [0, 1, 2])
    assert [one[0] for one in narrowest] == pytest.approx([0.01, 0.01, 2.99])
    assert [one[1] for one in narrowest] == [1, 0, 1]
    (notice,) = narrow_notices(bodies, ["A", "B", "C"], narrowest, "mm")
    assert notice.code == "narrow-gap"
    # 0.35 of a diagonal of 12.8 over 0.01 is 449: nine halvings
    assert "halved up to 9 times" in notice.text
    assert "between A and B" in notice.text
    assert narrowest_gaps(bodies, [0, 0, 0])[0] == (float("inf"), -1, None)
