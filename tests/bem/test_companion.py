import naive
import numpy as np
import pytest
from test_indicator import as_panels, solve

from daraf.bem.bisection import SPLIT_U, SPLIT_V
from daraf.bem.companion import companion_gains, strip
from daraf.bem.indicator import direct_part_potentials

EVERYWHERE = np.ones((1, 2), bool)


def test_strips_cut_a_panel_along_u_and_v():
    corners = naive.rectangle(1.0, 0.4)[None]
    low, high = strip(corners, SPLIT_U, 0.0, 0.25), strip(corners, SPLIT_V, 0.75, 1.0)
    origin = corners[0, 0]
    # differences of numbers of order one
    np.testing.assert_allclose(np.ptp(low[0] - origin, axis=0), [0.25, 0.4, 0.0], atol=1e-15)
    np.testing.assert_allclose(np.ptp(high[0] - origin, axis=0), [1.0, 0.1, 0.0], atol=1e-15)


@pytest.mark.parametrize("direction", [SPLIT_U, SPLIT_V])
def test_companion_gains_what_three_strips_bring(direction):
    """On a rectangle alone the outer quarters are alike: three free strips are the panel and its companion."""
    corners = naive.rectangle(1.0, 0.4)[None]
    panels = as_panels(corners)
    value, density, diagonal, potentials = solve(panels)
    gains = companion_gains(panels, diagonal, potentials, EVERYWHERE, direct_part_potentials(panels, density))
    cuts = [strip(corners, direction, *ends) for ends in ((0.0, 0.25), (0.25, 0.75), (0.75, 1.0))]
    gained = solve(as_panels(np.concatenate(cuts)))[0][0, 0] - value[0, 0]
    # residuals are formed from coarse rules, 1e-2 of their variation
    assert gains[0, direction - 1, 0] ** 2 == pytest.approx(gained, rel=0.05)


def test_companion_sees_what_equal_halves_hide():
    """A square alone: its halves are equal, and more than a tenth of what it is off shows in each companion."""
    panels = as_panels(naive.rectangle(1.0, 1.0)[None])
    value, density, diagonal, potentials = solve(panels)
    gains = companion_gains(panels, diagonal, potentials, EVERYWHERE, direct_part_potentials(panels, density))
    # published.exact_tables.PLATES
    missing = 0.366788 - value[0, 0]
    assert 0.1 < gains[0, 0, 0] ** 2 / missing < 0.5
    # the square is the same both ways, but for the order of the sums
    assert gains[0, 0, 0] ** 2 == pytest.approx(gains[0, 1, 0] ** 2, rel=1e-6)


def test_companion_is_found_only_where_wanted():
    panels = as_panels(np.stack([naive.rectangle(1.0, 0.4), naive.rectangle(0.3, 1.0, at=(1.0, 0.0, 0.0))]))
    _, density, diagonal, potentials = solve(panels)
    wanted = np.array([(True, False), (False, False)])
    gains = companion_gains(panels, diagonal, potentials, wanted, direct_part_potentials(panels, density))
    np.testing.assert_array_equal(gains[~wanted], 0.0)
    assert np.abs(gains[wanted]).min() > 0.0
