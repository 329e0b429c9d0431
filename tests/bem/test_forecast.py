"""Where refinement stands and how long it still takes."""

import numpy as np
import pytest

from daraf.bem.forecast import Goal, rough_duration, time_to_goal
from daraf.bem.solution import Pass


def passes(panels, uncertainties, power=2.0):
    nothing = np.zeros((2, 2))
    return [
        Pass(n, nothing, nothing, nothing, 1e-6 * n**power, u, (0, 1), "facets")
        for n, u in zip(panels, uncertainties, strict=True)
    ]


def test_none_before_two_passes():
    assert time_to_goal([], 0.01, 10**6) is None
    assert time_to_goal(passes([100], [0.1]), 0.01, 10**6) is None


@pytest.mark.parametrize("power", [1.0, 2.0, 3.0])
def test_powers_are_continued(power):
    """Uncertainty 1/panels^2, panels doubled each time: the passes still to come are known exactly."""
    panels = [50, 100, 200, 400]
    history = passes(panels, [n**-2.0 for n in panels], power)
    # 400 -> 1600 panels: two passes more; the goal a hair above lest rounding asks for a third
    expected = 1e-6 * (800**power + 1600**power)
    assert time_to_goal(history, 1.0001 * 1600**-2.0, 10**6) == pytest.approx(expected, rel=1e-9)


def test_no_forecast_where_none_is_honest():
    flat = passes([100, 200, 400], [0.1, 0.1, 0.099])
    assert time_to_goal(flat, 0.01, 10**9) is None
    falling = passes([100, 200, 400], [0.4, 0.2, 0.1])
    assert time_to_goal(falling, 0.03, 10**4) > 0.0
    assert time_to_goal(falling, 0.03, 10**3) is None  # 1,333 panels needed, no room
    assert time_to_goal(falling, 0.02, 10**4) is None  # 2,000 panels: further than it has come
    assert time_to_goal(falling, 0.2, 10**4) == 0.0


def test_standing_in_words():
    history = passes([1000, 2000], [0.05, 0.02], 2.0)
    text = Goal(0.01, 10**6, ("drive", "sense")).standing(history)
    assert text == "uncertainty 2 % (drive - sense, facets), asked 1 %, about 20 s to the goal"
    assert Goal(0.01, 10**6, ("drive", "sense")).standing(history[:1]).endswith("asked 1 %")


@pytest.mark.parametrize(
    ("seconds", "text"), [(0.02, "1 s"), (23.4, "20 s"), (88.0, "90 s"), (130.0, "2.2 min"), (7300.0, "2 h")]
)
def test_rough_duration(seconds, text):
    assert rough_duration(seconds) == text
