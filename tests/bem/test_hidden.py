import naive
import numpy as np

from daraf.bem.extrapolation import SMOOTH_DECAY
from daraf.bem.hidden import unseen_fringe
from daraf.bem.panels import Panels

RIM = 0.5


def pair(gap):
    """Two unit squares face to face, one panel each."""
    corners = np.stack([naive.rectangle(1.0, 1.0), naive.rectangle(1.0, 1.0, at=(0.0, 0.0, gap))])
    number = np.arange(2)
    return Panels(corners, np.full(2, 4), number, number, number)


def test_fringe_is_feared_where_panels_are_wider_than_the_gap():
    gains = np.zeros((2, 2, 2))
    at_rims = np.full((2, 4), RIM)
    fringe = unseen_fringe(pair(0.1), gains, at_rims)
    # charge that the rim gains comes from the other conductor
    np.testing.assert_array_equal(fringe[0, :, 0], -fringe[0, :, 1])
    assert np.all(fringe[0, :, 0] > 0.0)
    np.testing.assert_array_equal(unseen_fringe(pair(2.0), gains, at_rims), 0.0)


def test_nothing_is_feared_inside_a_face_or_where_more_is_measured():
    gains = np.zeros((2, 2, 2))
    np.testing.assert_array_equal(unseen_fringe(pair(0.1), gains, np.full((2, 4), SMOOTH_DECAY)), 0.0)
    np.testing.assert_array_equal(unseen_fringe(pair(0.1), np.ones((2, 2, 2)), np.full((2, 4), RIM)), 0.0)


def test_a_conductor_alone_has_no_gap():
    one = np.zeros(1, dtype=np.int64)
    panels = Panels(naive.rectangle(1.0, 1.0)[None], np.full(1, 4), one, one, one)
    np.testing.assert_array_equal(unseen_fringe(panels, np.zeros((1, 2, 1)), np.full((1, 4), RIM)), 0.0)
