"""The line "coordinates" of the budget."""

import numpy as np
import pytest

from daraf.bem import InputError, solve_capacitance
from daraf.bem.constants import FOUR_PI_EPSILON_0
from published import shapes


def concentric(a, b):
    return np.array([[a * b / (b - a), -a * b / (b - a)], [-a * b / (b - a), b * b / (b - a)]])


def test_shell_changes_as_much_as_its_radii():
    """Concentric spheres: the derivative of the exact matrix with respect to both radii, added without sign."""
    rounding = np.array([2e-4, 1e-3])
    surface = shapes.surface([shapes.icosphere(1.0, 2), shapes.icosphere(2.0, 2)])
    solution = solve_capacitance(surface, accuracy=0.02, rounding=rounding)
    step = 1e-6
    by_a = (concentric(1.0 + step, 2.0) - concentric(1.0 - step, 2.0)) / (2.0 * step)
    by_b = (concentric(1.0, 2.0 + step) - concentric(1.0, 2.0 - step)) / (2.0 * step)
    expected = rounding[0] * np.abs(by_a) + rounding[1] * np.abs(by_b)
    found = solution.budget["coordinates"] / FOUR_PI_EPSILON_0
    # 320 facets have 1.5 % less area than their sphere, which crowds the charge by as much
    assert found[0, 0] == pytest.approx(expected[0, 0], rel=0.03)
    # the outer shell is a sheet with charge on both sides, of which the bound does not know which is which
    assert expected[0, 1] <= found[0, 1] <= 2.0 * expected[0, 1]
    assert expected[1, 1] <= found[1, 1]


def test_narrow_gaps_feel_it_most():
    """Two plates: a shift of both by delta changes the gap by 2 delta, and the capacitance by as much of it."""
    gap, delta = 0.02, 1e-4
    surface = shapes.surface([shapes.plate(), shapes.moved(shapes.plate(), z=gap)])
    solution = solve_capacitance(surface, accuracy=0.02, rounding=np.full(2, delta))
    relative = solution.budget["coordinates"][0, 1] / abs(solution.maxwell[0, 1])
    # more than the ideal 2 delta / gap only by the crowded charge at the rims
    assert 2.0 * delta / gap < relative < 4.0 * delta / gap
    assert solution.maxwell_uncertainty[0, 1] >= solution.budget["coordinates"][0, 1]


def test_rounding_that_swamps_the_accuracy_is_told():
    surface = shapes.surface([shapes.cube()])
    solution = solve_capacitance(surface, accuracy=0.01, rounding=np.array([0.06]))
    assert not solution.reached
    assert any("coordinates" in one.text and "origin" in one.text for one in solution.warnings)


@pytest.mark.parametrize("rounding", [np.zeros(2), np.array([-1.0]), np.array([np.nan])])
def test_bad_rounding_is_refused(rounding):
    with pytest.raises(InputError, match="rounding"):
        solve_capacitance(shapes.surface([shapes.cube()]), rounding=rounding)
