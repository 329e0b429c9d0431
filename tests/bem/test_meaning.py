"""Which side of a body is metal, and how far facets were moved."""

import numpy as np
import pytest

from daraf.bem import solve_capacitance
from daraf.bem.creases import find_creases
from daraf.bem.meaning import body_fill, surface_meaning
from daraf.bem.regions import find_regions
from published import shapes


def fill_of(conductors):
    surface = shapes.surface(conductors)
    return body_fill(surface, find_creases(surface, find_regions(surface)[0])).tolist()


def test_solid_sheet_shell_and_cavity():
    ball, small = shapes.icosphere(1.0, 1), shapes.icosphere(0.4, 1)
    sheet = shapes.moved(shapes.plate(), z=5.0)
    assert fill_of([ball, sheet]) == [1, 0]
    # a ball round another conductor is a thin shell: there is a field in it
    assert fill_of([ball, small]) == [0, 1]
    # the same ball with the wall of a cavity round the inner one is solid in between
    wall = shapes.flipped(shapes.icosphere(0.7, 1))
    assert fill_of([[ball, wall], small]) == [1, -1, 1]
    # a wall wound inwards with no metal round it is a shell too
    assert fill_of([wall]) == [0]


def test_facets_are_moved_only_where_they_stand_for_something_round():
    surface = shapes.surface([shapes.icosphere(1.0, 2), shapes.moved(shapes.cube(), z=4.0)])
    panels = solve_capacitance(surface, accuracy=0.2).panels
    found = surface_meaning(surface, panels)
    ball = panels.body == 0
    # the sagitta of a facet of this sphere is 0.9 % of the radius; the mean over the facet is less
    assert np.all((found.facet_offset[ball] > 0.001) & (found.facet_offset[ball] < 0.03))
    assert not found.facet_offset[~ball].any()
    assert not surface_meaning(surface, panels, "as drawn").facet_offset.any()
    assert found.fill.tolist() == [1, 1]
    with pytest.raises(ValueError, match="facets"):
        surface_meaning(surface, panels, "soft")
