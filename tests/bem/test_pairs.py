import naive
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daraf.bem.frames import panel_frames
from daraf.bem.near import close_pair_integral
from daraf.bem.pairs import far_integral, middle_integral, pair_integral


def frame(corners):
    return panel_frames(np.ascontiguousarray(corners, dtype=np.float64)[None])[0]


@pytest.mark.parametrize("n", [2, 3, 4])
def test_far_rule_is_a_product_of_gauss_rules(n):
    first = np.array([(0.0, 0.0, 0.0), (1.0, 0.1, 0.0), (0.8, 0.9, 0.0), (0.1, 0.7, 0.0)])
    second = naive.triangle((5.0, 0.0, 1.0), (6.0, 0.3, 1.0), (5.2, 0.8, 2.0))
    nodes, weights = np.polynomial.legendre.leggauss(n)
    u, v = (0.5 * (1.0 + grid.ravel()) for grid in np.meshgrid(nodes, nodes))
    product = 0.25 * np.outer(weights, weights).ravel()
    (x, swept_x), (y, swept_y) = naive.bilinear(first, u, v), naive.bilinear(second, u, v)
    distance = np.linalg.norm(x[:, None] - y[None], axis=2)
    expected = (product * swept_x) @ (1.0 / distance) @ (product * swept_y)
    # the same sum in another order
    assert far_integral(frame(first), frame(second), n) == pytest.approx(expected, rel=1e-13, abs=0)


@pytest.mark.parametrize("n", [2, 3, 4, 5])
def test_middle_rule_is_the_potential_at_gauss_points(n):
    inner = np.array([(0.0, 0.0, 0.0), (1.0, 0.1, 0.0), (0.8, 0.9, 0.0), (0.1, 0.7, 0.0)])
    outer = naive.triangle((0.0, 0.0, 0.5), (0.3, 0.0, 0.6), (0.1, 0.2, 0.5))
    nodes, weights = np.polynomial.legendre.leggauss(n)
    u, v = (0.5 * (1.0 + grid.ravel()) for grid in np.meshgrid(nodes, nodes))
    points, swept = naive.bilinear(outer, u, v)
    expected = 0.25 * np.outer(weights, weights).ravel() @ (swept * naive.potential(inner, points))
    # the same sum in another order and another closed form
    assert middle_integral(frame(outer), frame(inner), n) == pytest.approx(expected, rel=1e-12, abs=0)


def test_every_regime_keeps_its_error(bench_pairs):
    """A seeded sample of the bench's table; the table itself is wider."""
    rng = np.random.default_rng(11)
    for regime, (lowest, highest) in bench_pairs.REGIMES.items():
        errors = []
        for _ in range(40):
            first, second = bench_pairs.random_pair(rng, lowest, highest)
            expected = naive.pair_integral(first, second)
            found = pair_integral(frame(first), frame(second))
            errors.append(abs(found / expected - 1.0))
        # The promise of pairs.py is about 1e-7; 1e-6 for the worst slivers, which is the budget's line "integration".
        assert max(errors) < 1e-6, regime
        assert np.sqrt(np.mean(np.square(errors))) < 2e-7, regime


@pytest.fixture(scope="module")
def bench_pairs():
    import importlib.util
    from pathlib import Path

    path = Path(__file__).parents[2] / "scripts" / "bench" / "pair_rules.py"
    spec = importlib.util.spec_from_file_location("pair_rules", path)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@given(st.floats(0.2, 30.0), st.floats(-3.0, 0.0), st.integers(0, 2**32 - 1))
@settings(max_examples=40)
def test_order_and_scale_and_place_do_not_matter_at_any_distance(distance, exponent, seed):
    rng = np.random.default_rng(seed)
    q, _ = np.linalg.qr(rng.normal(size=(3, 3)))
    first = naive.rectangle(1.0, 0.6)
    second = 10.0**exponent * naive.triangle((0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (0.3, 0.7, 0.0)) @ q.T
    way = rng.normal(size=3)
    second = second + distance * way / np.linalg.norm(way)
    plain = pair_integral(frame(first), frame(second))
    # With panels of one size the two orders may put the closed form on different panels; and rounding may move a
    # pair over the limit of a rule: both leave the error of the rules.
    assert pair_integral(frame(second), frame(first)) == pytest.approx(plain, rel=1e-6, abs=0)
    moved = pair_integral(frame(first @ q.T + way), frame(second @ q.T + way))
    assert moved == pytest.approx(plain, rel=1e-6, abs=0)
    # A power of two changes no digit of the geometry; square roots and logarithms round alike.
    scaled = pair_integral(frame(0.25 * first), frame(0.25 * second))
    assert scaled == pytest.approx(plain / 64.0, rel=1e-12, abs=0)


def test_rules_join_at_their_limits():
    """Just on either side of every limit the value agrees with the edge integrals."""
    first, second = naive.rectangle(1.0, 1.0), naive.rectangle(1.0, 1.0)
    for distance in (1.5, 2.0, 3.0, 3.3, 5.4, 7.0, 18.0, 23.0):
        other = second + np.array([0.6 * distance, 0.0, 0.8 * distance])
        expected = naive.parallel_rectangles(
            (0.0, 1.0, 0.0, 1.0), (0.6 * distance, 1.0 + 0.6 * distance, 0.0, 1.0), 0.8 * distance
        )
        # squares are the mild case
        assert pair_integral(frame(first), frame(other)) == pytest.approx(expected, rel=2e-7, abs=0)
        if distance < 6.0:
            assert close_pair_integral(frame(first), frame(other)) == pytest.approx(expected, rel=1e-6, abs=0)
