import numpy as np
import pytest

from daraf.bem.extrapolation import (
    CANCELLED_SHARE,
    EDGE_SHOWN,
    GREATEST_DECAY,
    GREATEST_REALISED,
    LEAST_REALISED,
    RIM_SHOWN,
    SHARE,
    SMOOTH_DECAY,
    UNREFINED_SHARE,
    UNSEEN_SHARE,
    decay_of_parts,
    extrapolate,
    extrapolation_uncertainty,
    first_opinion,
    realised_share,
    second_opinion,
    series_factor,
    smooth_factor,
)


def at_edges(gains, decay):
    judged = np.ones(decay.shape, bool)
    return first_opinion(gains, decay, 1.0, judged, np.ones(decay.shape))


def test_series_factor_is_the_sum_of_the_series():
    decay = np.array([0.25, 0.5])
    # forty terms of 0.5^k leave 1e-12
    np.testing.assert_allclose(series_factor(decay), [np.sum(q ** np.arange(40)) for q in decay], rtol=2e-12)


def test_geometric_gains_are_extrapolated_exactly():
    """One conductor whose two panels gain a and b, decaying by q: the limit adds a/(1 - q) + b/(1 - q)."""
    gains = np.zeros((2, 2, 1))
    gains[:, 0, 0] = np.sqrt([0.1, 0.02])
    decay = np.full((2, 2), 0.5)
    opinion = at_edges(gains, decay)
    limit = extrapolate(np.array([[1.0]]), opinion, opinion)
    # a sum of four numbers
    assert limit[0, 0] == pytest.approx(1.0 + 2.0 * 0.12, rel=1e-14)


def test_sign_of_a_coupling_gain_is_kept():
    gains = np.zeros((1, 2, 2))
    gains[0, 0] = [0.3, -0.2]
    opinion = at_edges(gains, np.full((1, 2), 0.25))
    added = extrapolate(np.zeros((2, 2)), opinion, opinion)
    # products of the gains over 1 - 1/4
    np.testing.assert_allclose(added, np.array([(0.09, -0.06), (-0.06, 0.04)]) / 0.75, rtol=1e-14)


def test_realised_share_is_gained_over_promised_within_bounds():
    assert realised_share(np.array([0.08]), np.array([0.1])) == pytest.approx(0.8, rel=1e-14)
    assert realised_share(np.array([0.0]), np.array([0.1])) == LEAST_REALISED
    assert realised_share(np.array([9.0]), np.array([0.1])) == GREATEST_REALISED
    assert realised_share(np.array([0.0]), np.array([0.0])) == 1.0


def test_decay_is_read_off_the_parts():
    """A panel split along u: its halves gain 0.04 and 0 after 0.1, so the edge half decays by 0.4."""
    parent = np.array([0, 0])
    split = np.array([(True, False)])
    before, after = np.array([(0.1, 0.02)]), np.array([(0.04, 0.01), (0.0, 0.01)])
    decay = decay_of_parts(parent, split, before, after, np.full((1, 2), SMOOTH_DECAY))
    # the half without gain is taken as smooth; v was not split and keeps what was known
    np.testing.assert_allclose(decay, [(0.4, SMOOTH_DECAY), (SMOOTH_DECAY, SMOOTH_DECAY)], rtol=1e-14)


def test_panels_that_were_not_split_keep_their_decay():
    known = np.array([(0.5, 0.3)])
    decay = decay_of_parts(np.array([0]), np.zeros((1, 2), bool), np.ones((1, 2)), np.ones((1, 2)), known)
    np.testing.assert_array_equal(decay, known)


def test_no_gain_before_gives_no_decay_and_no_warning():
    known = np.full((1, 2), SMOOTH_DECAY)
    decay = decay_of_parts(np.array([0, 0]), np.ones((1, 2), bool), np.zeros((1, 2)), np.zeros((2, 2)), known)
    np.testing.assert_array_equal(decay, np.full((2, 2), SMOOTH_DECAY))


def test_series_never_diverges():
    """However large the measured decay, what is extrapolated stays bounded."""
    gains = np.ones((1, 2, 1))
    opinion = at_edges(gains, np.full((1, 2), 0.99))
    added = extrapolate(np.zeros((1, 1)), opinion, opinion)
    # two gains of one at the greatest decay that is believed
    assert added[0, 0] <= 2.0 / (1.0 - GREATEST_DECAY) * (1.0 + 1e-12)


def test_second_opinion_takes_the_companion_at_edges_and_smooth_charge_elsewhere():
    gains, companion = np.ones((2, 2, 1)), np.full((2, 2, 1), 0.3)
    judged = np.array([(True, False), (True, False)])
    smooth = np.full((2, 2), 1.2)
    # a rim and a right-angled edge along u
    opinion = second_opinion(gains, companion, np.array([(0.5, 0.25), (2.0 ** (-4.0 / 3.0), 0.25)]), judged, smooth)
    # squares of square roots
    np.testing.assert_allclose(opinion[:, :, 0] ** 2, [(0.09 / RIM_SHOWN, 1.2), (0.09 / EDGE_SHOWN, 1.2)], rtol=1e-14)


def test_smooth_panels_decay_by_an_eighth_and_long_ones_by_a_quarter():
    factor = smooth_factor(np.array([(1.0, 1.0), (4.0, 1.0), (1.5, 1.0)]), 0.8)
    # sums of two geometric series by hand
    np.testing.assert_allclose(factor, 0.8 * np.array([(8 / 7, 8 / 7), (4 / 3, 8 / 7), (16 / 13, 8 / 7)]), rtol=1e-14)


def _uncertainty(first, second, refined, unseen=0.0, realised=1.0):
    one, two = np.zeros((1, 2, 1)), np.zeros((1, 2, 1))
    one[0, 0], two[0, 0] = np.sqrt(first), np.sqrt(second)
    hidden = np.zeros((1, 2, 1))
    hidden[0, 0] = np.sqrt(unseen)
    body, refined = np.zeros(1, np.int64), np.array([refined])
    return extrapolation_uncertainty(one, two, hidden, body, None, np.ones((1, 1)), refined, realised)[0, 0]


def test_opinions_that_agree_leave_their_share_and_those_that_differ_leave_more():
    # squares of square roots
    assert _uncertainty(0.1, 0.1, 3) == pytest.approx(0.1 * SHARE, rel=1e-14)
    assert _uncertainty(0.1, 0.1, 0) == pytest.approx(0.1 * UNREFINED_SHARE, rel=1e-14)
    # one that sees nothing must not pass for certainty
    assert _uncertainty(0.0, 0.1, 3) > 0.04
    assert _uncertainty(0.1, 0.0, 3) > 0.04
    assert _uncertainty(0.1, 0.1, 3, unseen=0.2) == pytest.approx(0.1 * SHARE + 0.2 * UNSEEN_SHARE, rel=1e-14)
    assert _uncertainty(0.1, 0.1, 3, realised=0.5) > 3.0 * _uncertainty(0.1, 0.1, 3)


def test_parts_of_a_coupling_that_cancel_leave_a_share_of_what_they_are():
    opinion = np.zeros((2, 2, 2))
    opinion[0, 0], opinion[1, 0] = [0.3, 0.2], [0.3, -0.2]
    body, refined = np.zeros(2, np.int64), np.array([3])
    found = extrapolation_uncertainty(opinion, opinion, np.zeros((2, 2, 2)), body, None, np.eye(2), refined, 1.0)
    # by hand: the self entry sums 2 x 0.09, the coupling 0.06 - 0.06
    assert found[0, 0] == pytest.approx(0.18 * SHARE, rel=1e-14)
    assert found[0, 1] == pytest.approx(0.12 * CANCELLED_SHARE, rel=1e-14)
