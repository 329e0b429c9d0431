import numpy as np

from daraf.bem.bisection import SPLIT_BOTH, SPLIT_NONE, SPLIT_U, SPLIT_V
from daraf.bem.refinement import (
    COUPLING_FLOOR,
    LEAST_MARKED,
    MOST_MARKED,
    accuracy_targets,
    choose_splits,
    gain_worth,
    marked_share,
)


def test_targets_are_relative_with_a_floor_for_weak_couplings():
    capacitance = np.array([(4.0, -1e-9), (-1e-9, 1.0)])
    targets = accuracy_targets(capacitance, 0.01)
    # products of a few numbers
    np.testing.assert_allclose(targets, [(0.04, 0.02 * COUPLING_FLOOR), (0.02 * COUPLING_FLOOR, 0.01)], rtol=1e-14)


def test_worth_is_the_weighted_sum_over_pairs():
    rng = np.random.default_rng(3)
    gains, weights = rng.normal(size=(5, 2, 3)), rng.uniform(size=(3, 3))
    expected = np.zeros((5, 2))
    for i in range(3):
        for j in range(3):
            expected += weights[i, j] * np.abs(gains[:, :, i] * gains[:, :, j])
    # nine terms in another order
    np.testing.assert_allclose(gain_worth(gains, weights), expected, rtol=1e-13)


def test_marked_panels_hold_the_share_and_are_the_fewest():
    rng = np.random.default_rng(8)
    worth = rng.exponential(size=(200, 2)) ** 3
    split = choose_splits(worth, LEAST_MARKED)
    total = worth.sum(axis=1)
    marked = np.sort(total[split != SPLIT_NONE])
    assert marked.sum() >= LEAST_MARKED * total.sum()
    assert marked[1:].sum() < LEAST_MARKED * total.sum()
    assert marked[0] >= total[split == SPLIT_NONE].max()


def test_direction_follows_the_gain():
    worth = np.array([(1.0, 0.01), (0.01, 1.0), (0.6, 0.5), (0.0, 1e-9)])
    np.testing.assert_array_equal(choose_splits(worth), [SPLIT_U, SPLIT_V, SPLIT_BOTH, SPLIT_NONE])


def test_no_worth_at_all_marks_at_most_one_panel():
    assert np.count_nonzero(choose_splits(np.zeros((4, 2)))) <= 1


def test_more_is_marked_the_farther_the_goal():
    shares = [marked_share(excess) for excess in (0.5, 1.0, 1.5, 1.8, 3.0, 100.0)]
    assert shares == sorted(shares)
    assert (shares[0], shares[-1]) == (LEAST_MARKED, MOST_MARKED)
