"""A few rows of scripts/bench/effectivity.py: does the estimate tell the true error?"""

import pytest

from daraf.bem import solve_capacitance
from daraf.bem.constants import FOUR_PI_EPSILON_0
from published import exact, shapes

BODIES = {
    "cube": (shapes.surface([shapes.cube()]), exact.CUBE),
    "plate": (shapes.surface([shapes.plate()]), exact.plate(1, 1)),
    "plates": (
        shapes.surface([shapes.plate(), shapes.moved(shapes.plate(), z=0.1)]),
        exact.parallel_squares(1, 0.1)[0, 0],
    ),
}


@pytest.mark.parametrize("name", BODIES)
def test_estimate_is_half_to_twice_the_true_error_from_a_hundred_panels_on(name):
    surface, value = BODIES[name]
    solution = solve_capacitance(surface, accuracy=0.0002)
    rows = [row for row in solution.passes if row.panels >= 100]
    assert len(rows) >= 2
    for row in rows:
        missing = FOUR_PI_EPSILON_0 * value - row.maxwell[0, 0]
        assert 0.5 < row.estimate[0, 0] / missing < 2.0
        # and what is left once it is added is covered, on every pass
        assert abs(missing - row.estimate[0, 0]) < row.spread[0, 0]
