import naive
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daraf.bem.frames import panel_frames
from daraf.bem.near import close_pair_integral, self_integral
from daraf.bem.pairs import pair_integral

# The promises of bem/near.py.
TOUCHING = 1e-7
CLOSE = 1e-6


def frame(corners):
    return panel_frames(np.ascontiguousarray(corners, dtype=np.float64)[None])[0]


def both_orders(first, second):
    a, b = frame(first), frame(second)
    return [close_pair_integral(a, b), close_pair_integral(b, a), pair_integral(a, b), pair_integral(b, a)]


def bent(corners, angle, axis_point=(0.0, 0.0, 0.0)):
    """Turn about a line parallel to x through a point, degrees."""
    c, s = np.cos(np.radians(angle)), np.sin(np.radians(angle))
    rotation = np.array([(1.0, 0.0, 0.0), (0.0, c, -s), (0.0, s, c)])
    return (corners - axis_point) @ rotation.T + axis_point


def somewhere(rng):
    q, _ = np.linalg.qr(rng.normal(size=(3, 3)))
    return q * np.sign(np.linalg.det(q))


@pytest.mark.parametrize("width", [1.0, 0.1, 1e-3, 1e-6, 1e-9])
def test_self_integral_of_a_rectangle(width):
    expected = naive.self_rectangle(1.0, width)
    assert self_integral(frame(naive.rectangle(1.0, width))) == pytest.approx(expected, rel=TOUCHING, abs=0)


@pytest.mark.parametrize("height", [1.0, 0.1, 1e-3, 1e-6, 1e-9])
@pytest.mark.parametrize("tip", [0.5, 0.0, 1.2])
def test_self_integral_of_a_triangle(height, tip):
    corners = naive.triangle((0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (tip, height, 0.0))
    assert self_integral(frame(corners)) == pytest.approx(naive.self_triangle(corners), rel=TOUCHING, abs=0)


def test_self_integral_of_a_quadrilateral_is_the_sum_over_its_halves():
    quad = np.array([(0.0, 0.0, 0.0), (1.0, 0.1, 0.0), (0.8, 0.9, 0.0), (0.1, 0.7, 0.0)])
    low, high = naive.triangle(*quad[:3]), naive.triangle(quad[0], quad[2], quad[3])
    halves = naive.self_triangle(low) + naive.self_triangle(high) + 2.0 * close_pair_integral(frame(low), frame(high))
    assert self_integral(frame(quad)) == pytest.approx(halves, rel=TOUCHING, abs=0)


SECONDS = {
    "same size, side by side": (1.0, 2.0, 0.0, 1.0),
    "hanging: half of an edge": (1.0, 1.5, 0.0, 0.5),
    "hanging: inner part of an edge": (1.0, 1.01, 0.31, 0.32),
    "wider than the edge": (1.0, 1.2, -3.0, 5.0),
    "corner": (1.0, 1.7, 1.0, 1.4),
    "child": (0.0, 0.5, 0.0, 0.5),
    "inner child": (0.25, 0.75, 0.25, 0.5),
    "crossing": (0.5, 1.5, 0.2, 0.8),
    "strip by an edge": (1.0, 1.0 + 1e-4, 0.0, 1.0),
}


@pytest.mark.parametrize("second", SECONDS.values(), ids=SECONDS.keys())
@pytest.mark.parametrize("height", [0.0, 1e-6, 1e-3, 0.1, 0.5])
def test_parallel_rectangles_equal_the_closed_form(second, height):
    x0, x1, y0, y1 = second
    expected = naive.parallel_rectangles((0.0, 1.0, 0.0, 1.0), second, height)
    found = both_orders(naive.rectangle(1.0, 1.0), naive.rectangle(x1 - x0, y1 - y0, at=(x0, y0, height)))
    tolerance = TOUCHING if height == 0.0 else CLOSE
    assert found == pytest.approx([expected] * 4, rel=tolerance, abs=0)


@pytest.mark.parametrize("gap", [1e-1, 1e-2, 1e-3, 1e-4, 1e-6])
@pytest.mark.parametrize("width", [0.3, 0.03])
def test_small_square_beside_a_long_edge(gap, width):
    """Parallel edges, the small one opposite the middle of the long one: no corner is near."""
    expected = naive.parallel_rectangles((0.0, 1.0, 0.0, 1.0), (0.4, 0.4 + width, 1.0 + gap, 1.0 + gap + width), 0.0)
    found = both_orders(naive.rectangle(1.0, 1.0), naive.rectangle(width, width, at=(0.4, 1.0 + gap, 0.0)))
    assert found == pytest.approx([expected] * 4, rel=CLOSE, abs=0)


@pytest.mark.parametrize("width", [1e-2, 1e-4, 1e-6])
def test_strips_side_by_side(width):
    """Touching, and a width apart: nothing cancels for the aspect ratio."""
    strip = naive.rectangle(1.0, width)
    for at, tolerance in ((width, TOUCHING), (2.0 * width, CLOSE)):
        expected = naive.parallel_rectangles((0.0, 1.0, 0.0, width), (0.0, 1.0, at, at + width), 0.0)
        found = both_orders(strip, naive.rectangle(1.0, width, at=(0.0, at, 0.0)))
        assert found == pytest.approx([expected] * 4, rel=tolerance, abs=0)


@pytest.mark.parametrize("angle", [10.0, 60.0, 90.0, 135.0, 179.0, 179.99])
def test_wedges(angle):
    first = naive.rectangle(1.0, 1.0)
    for second in (
        naive.rectangle(1.0, 1.0),
        naive.rectangle(0.5, 0.2),
        naive.rectangle(0.3, 0.01, at=(0.4, 0.0, 0.0)),
    ):
        other = bent(second, angle)
        found = both_orders(first, other)
        assert found == pytest.approx([naive.pair_integral(other, first)] * 4, rel=TOUCHING, abs=0)


@pytest.mark.parametrize("angle", [30.0, 90.0, 179.9])
def test_panels_that_share_a_corner(angle):
    first = naive.triangle((0.0, 0.0, 0.0), (-1.0, 0.2, 0.0), (-0.8, -0.5, 0.0))
    second = bent(naive.rectangle(0.4, 0.7), angle)
    assert both_orders(first, second) == pytest.approx([naive.pair_integral(first, second)] * 4, rel=TOUCHING, abs=0)


@pytest.mark.parametrize("width", [0.5, 0.05])
def test_panel_that_stands_on_the_inside_of_another(width):
    floor = naive.rectangle(1.0, 1.0)
    wall = bent(naive.rectangle(width, 0.3, at=(0.3, 0.4, 0.0)), 80.0, np.array([0.0, 0.4, 0.0]))
    # Not seen as touching; its line of closest points needs no special care, since the potential is linear there.
    assert both_orders(floor, wall) == pytest.approx([naive.pair_integral(wall, floor)] * 4, rel=CLOSE, abs=0)


def test_panel_that_goes_through_another():
    """Overlapping bodies of one conductor: the potential along the piercing edges has a kink."""
    floor = naive.rectangle(1.0, 1.0)
    wall = bent(naive.rectangle(0.3, 0.4, at=(0.3, 0.0, 0.0)), 70.0) + np.array([0.1, 0.5, -0.13])
    assert both_orders(floor, wall) == pytest.approx([naive.pair_integral(wall, floor)] * 4, rel=CLOSE, abs=0)


@pytest.mark.parametrize("gap", [1e-1, 1e-2, 1e-3, 1e-4, 1e-6])
def test_nearly_touching_panels(gap):
    rng = np.random.default_rng(7)
    first = naive.triangle((0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (0.2, 0.6, 0.0))
    for angle in (0.0, 40.0, 90.0, 178.0):
        second = bent(naive.rectangle(0.4, 0.3, at=(0.5, 0.0, 0.0)) * [1.0, -1.0, 1.0], angle)
        second = second[::-1] - np.array([0.0, gap, 0.3 * gap])
        turn = somewhere(rng)
        a, b = first @ turn.T, second @ turn.T
        assert both_orders(a, b) == pytest.approx([naive.pair_integral(a, b)] * 4, rel=CLOSE, abs=0)


@pytest.mark.parametrize("tilt", [1e-9, 1e-8, 1e-7, 1e-6, 1e-5, 1e-4, 1e-3, 1e-2])
@pytest.mark.parametrize("height", [0.3, 0.01])
def test_nearly_parallel_panels(tilt, height):
    """Files in single precision tilt parallel plates by 1e-8 to 1e-5."""
    if tilt > height:
        pytest.skip("the panels would cross")
    floor = naive.triangle((0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (0.2, 0.9, 0.0))
    lid = naive.rectangle(0.8, 0.7, at=(0.3, 0.2, height))
    lid = bent(lid, np.degrees(tilt), lid.mean(axis=0))
    assert both_orders(floor, lid) == pytest.approx([naive.pair_integral(floor, lid)] * 4, rel=CLOSE, abs=0)


@pytest.mark.parametrize("aspect", [10.0, 1e3, 1e5])
def test_slivers_against_squares(aspect):
    square = naive.rectangle(1.0, 1.0)
    sliver = naive.triangle((0.0, 1.0, 0.0), (1.0, 1.0, 0.0), (0.4, 1.0 + 1.0 / aspect, 0.0))
    for angle in (0.0, 90.0):
        other = bent(sliver, angle, np.array([0.0, 1.0, 0.0]))
        expected = naive.pair_integral(other, square)
        assert both_orders(square, other) == pytest.approx([expected] * 4, rel=TOUCHING, abs=0)


@st.composite
def pairs_of_triangles(draw):
    """Two triangles that share the edge from the origin to (1, 0, 0), not thinner than 1 to 100."""
    height, tip = draw(st.floats(0.01, 1.0)), draw(st.floats(-0.5, 1.5))
    other, second_tip = draw(st.floats(0.01, 1.0)), draw(st.floats(-0.5, 1.5))
    angle = draw(st.floats(5.0, 355.0))
    first = naive.triangle((0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (tip, height, 0.0))
    second = naive.triangle((0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (second_tip, other, 0.0))
    return first, bent(second, angle)


@given(pairs_of_triangles(), st.integers(0, 2**32 - 1), st.floats(-6.0, 6.0))
@settings(max_examples=40)
def test_value_does_not_depend_on_order_place_orientation_or_scale(pair, seed, exponent):
    first, second = pair
    rng = np.random.default_rng(seed)
    turn, shift, size = somewhere(rng), rng.normal(size=3), 10.0**exponent
    plain = pair_integral(frame(first), frame(second))
    swapped = pair_integral(frame(second), frame(first))
    moved = pair_integral(frame(first @ turn.T + shift), frame(second @ turn.T + shift))
    grown = pair_integral(frame(size * first), frame(size * second))
    # Shifted coordinates are rounded, after which the common corner may no longer be one: other branch, same promise.
    assert swapped == pytest.approx(plain, rel=1e-12, abs=0)
    assert moved == pytest.approx(plain, rel=TOUCHING, abs=0)
    assert grown == pytest.approx(size**3 * plain, rel=TOUCHING, abs=0)


def test_turning_a_panel_over_changes_nothing():
    first, second = naive.rectangle(1.0, 0.5), bent(naive.rectangle(0.7, 0.6), 100.0)
    expected = close_pair_integral(frame(first), frame(second))
    # the same edges in another order: the sums differ by rounding
    assert close_pair_integral(frame(first[::-1]), frame(second)) == pytest.approx(expected, rel=1e-12, abs=0)
    assert self_integral(frame(first[::-1])) == pytest.approx(self_integral(frame(first)), rel=1e-13, abs=0)
