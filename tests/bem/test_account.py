"""What was made of the mesh, and which facets were taken as round."""

from dataclasses import replace

import numpy as np
import pytest

from daraf.bem import solve_capacitance
from daraf.bem.account import WORTH_A_WARNING, account_bodies, change_notices, facet_notices
from daraf.bem.creases import find_creases
from daraf.bem.facets import find_facets, greatest_turn
from daraf.bem.flats import panel_regions
from daraf.bem.regions import find_regions
from published import shapes


def account(*meshes, meaning="auto"):
    surface = shapes.surface(meshes)
    regions, _ = find_regions(surface)
    creases = find_creases(surface, regions, greatest_turn=greatest_turn(meaning))
    panels, _ = panel_regions(surface, regions, creases=creases)
    facets = None if meaning == "as drawn" else find_facets(surface, regions, creases)
    accounts = account_bodies(surface, regions, creases, panels, facets)
    return accounts, facet_notices(surface, regions, creases, accounts, meaning)


def test_a_cube_becomes_six_panels():
    (one,), notices = account(shapes.moved(shapes.cube(), 500.0))
    assert (one.triangles, one.faces, one.panels, one.slivers) == (12, 6, 6, 0)
    # rounding of coordinates near 500
    assert abs(one.area_change) < 1e-9
    assert abs(one.volume_change) < 1e-9
    assert (one.round_faces, one.round_outline, one.round_holes) == (0, 0, 0)
    assert one.turn is None
    assert notices == []


def test_a_sheet_has_no_volume_and_its_hole_is_round():
    (one,), _ = account(shapes.drilled_plate(1.0, 0.25, 32))
    assert one.volume_change is None
    assert abs(one.area_change) < 1e-9
    assert (one.round_outline, one.round_holes) == (0, 32)
    # 32 corners share a turn
    assert np.degrees(one.rim_turn) == pytest.approx([11.25, 11.25], rel=0.02)


def test_a_closed_body_without_thickness_has_no_volume_to_compare():
    points, triangles = shapes.plate()
    (one,), notices = account((points, np.concatenate([triangles, triangles[:, ::-1]])))
    assert one.volume_change is None
    assert notices == []


def test_faces_bent_less_than_can_be_told_are_flat():
    points, triangles = shapes.cube()
    points = points + 2e-5 * np.random.default_rng(1).normal(size=points.shape)
    solution = solve_capacitance(shapes.surface([(points, triangles)]), accuracy=0.05)
    assert solution.bodies[0].round_faces == 0
    assert solution.bodies[0].turn is None


def test_cylinder_and_box_are_told_apart():
    (tube, box), _ = account(shapes.cylinder(1.0, 2.0, 24), shapes.moved(shapes.cube(), 5.0))
    assert (tube.round_faces, tube.faces) == (24, 26)
    assert tube.round_outline == 48
    assert np.degrees(tube.turn) == pytest.approx([15.0, 15.0])
    assert box.round_faces == 0


@pytest.mark.parametrize(
    ("sides", "meaning", "round_faces", "codes"),
    [
        (24, "auto", 24, []),
        (12, "auto", 12, ["facets-taken-round"]),
        (12, "as drawn", 0, []),
        (8, "auto", 0, ["facets-taken-as-drawn"]),
        (8, "round", 8, []),
        (6, "round", 0, []),
    ],
)
def test_what_was_assumed_is_told_where_it_is_a_matter_of_opinion(sides, meaning, round_faces, codes):
    (one,), notices = account(shapes.cylinder(1.0, 2.0, sides), meaning=meaning)
    assert one.round_faces == round_faces
    assert [notice.code for notice in notices] == codes


def test_only_changes_that_matter_are_warned_of():
    accounts, _ = account(shapes.cube())
    assert change_notices(accounts) == []
    small = replace(accounts[0], area_change=0.5 * WORTH_A_WARNING)
    large = replace(accounts[0], area_change=2e-3, volume_change=-3e-4)
    (notice,) = change_notices((small, large))
    assert notice.code == "area-changed"
    assert "area by +2.0e-03 and its volume by -3.0e-04" in notice.text


def test_solution_carries_the_account():
    solution = solve_capacitance(shapes.surface([shapes.cube()]), accuracy=0.05)
    assert solution.facets == "auto"
    assert [one.panels for one in solution.bodies] == [6]
    assert solution.passes[-1].uncertainty <= 0.05
