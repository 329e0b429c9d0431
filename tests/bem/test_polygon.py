import mpmath
import naive
import numpy as np
import pytest

from daraf.bem.frames import panel_frames
from daraf.bem.polygon import polygon_distance, polygon_potential

QUAD = np.array([(0.0, 0.0, 0.0), (1.0, 0.1, 0.0), (0.8, 0.9, 0.0), (0.1, 0.7, 0.0)])
TRIANGLE = naive.triangle((0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (0.3, 0.8, 0.0))
SLIVER = naive.triangle((0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (0.4, 1e-9, 0.0))
STRIP = naive.rectangle(1.0, 1e-6)
PANELS = {"quad": QUAD, "triangle": TRIANGLE, "sliver": SLIVER, "strip": STRIP}


def frame(corners):
    return panel_frames(np.ascontiguousarray(corners)[None])[0]


def telling_points(corners):
    """Vertices, points on edges and on their extensions, in the plane inside and outside, above, on a normal."""
    a, b, c, _ = corners
    along = b - a
    centre = corners[:3].mean(axis=0)
    return {
        "vertex": a,
        "edge": a + 0.37 * along,
        "edge extension": a + 1.5 * along,
        "near extension": a - 1e-9 * along,
        "in plane inside": centre,
        "in plane outside": centre + 2.0 * (c - a),
        "over vertex": b + np.array([0.0, 0.0, 0.2]),
        "over edge, low": a + 0.5 * along + np.array([0.0, 0.0, 1e-7]),
        "over inside, low": centre + np.array([0.0, 0.0, -1e-12]),
        "aside": centre + np.array([0.3, -0.4, 0.5]),
    }


@pytest.mark.parametrize("name", ["quad", "triangle"])
def test_potential_equals_a_fine_product_rule(name):
    for height in (0.3, -1.0):
        point = np.array([0.4, 0.2, height])
        # 200 x 200 points in blocks of 10 resolve a height of 0.3 panels to rounding
        assert polygon_potential(frame(PANELS[name]), *point) == pytest.approx(
            naive.brute_potential(PANELS[name], point), rel=1e-13, abs=0
        )


@pytest.mark.parametrize("name", PANELS)
@pytest.mark.parametrize("where", telling_points(QUAD))
def test_potential_equals_forty_digits(name, where):
    point = telling_points(PANELS[name])[where]
    expected = naive.potential_mp(PANELS[name], point)
    found = polygon_potential(frame(PANELS[name]), *point)
    # Rounding times the aspect ratio: a sliver's edge terms cancel. At a height of 1e-7 over one the parts of the
    # solid angle cancel too, by the square of length over height: 1e-16 x 1e14 of a term 1e-3 of the whole.
    relative = {"sliver": 1e-6, "strip": 1e-9}.get(name, 1e-13)
    if where == "over edge, low" and name in ("sliver", "strip"):
        relative = 2e-5
    assert found == pytest.approx(expected, rel=relative, abs=0)


def test_potential_at_random_points():
    rng = np.random.default_rng(4)
    for _ in range(20):
        corners = np.c_[rng.normal(size=(3, 2)), np.zeros(3)]
        corners = naive.triangle(*corners)
        point = rng.normal(size=3)
        expected = naive.potential_mp(corners, point)
        # rounding times the aspect ratio of a random triangle, mostly under 100
        assert polygon_potential(frame(corners), *point) == pytest.approx(expected, rel=1e-12, abs=0)


@pytest.mark.parametrize("offset", [1e3, 1e6])
def test_potential_far_from_the_origin_loses_only_what_the_coordinates_lose(offset):
    shift = np.array([offset, -offset, offset])
    point = np.array([0.3, 0.3, 0.2])
    near = polygon_potential(frame(QUAD), *point)
    far = polygon_potential(frame(QUAD + shift), *(point + shift))
    # a coordinate of size `offset` is rounded by 1e-16 of it
    assert far == pytest.approx(near, rel=1e-15 * offset, abs=0)


def test_potential_of_all_scales_is_finite_and_scales():
    for size in (1e-9, 1e-3, 1.0, 1e6):
        for point in telling_points(QUAD).values():
            found = polygon_potential(frame(QUAD * size), *(point * size))
            # a factor that is no power of two rounds every coordinate
            assert found == pytest.approx(size * polygon_potential(frame(QUAD), *point), rel=1e-12, abs=0)


def test_distance_to_a_panel():
    rng = np.random.default_rng(2)
    grid = np.linspace(0.0, 1.0, 201)
    for corners in (QUAD, TRIANGLE):
        samples = naive.bilinear(corners, *np.meshgrid(grid, grid))[0].reshape(-1, 3)
        for point in rng.normal(size=(20, 3)):
            sampled = np.linalg.norm(samples - point, axis=1).min()
            found = polygon_distance(frame(corners), *point)
            # the grid's nearest point lies within half a cell of the true one
            assert sampled - 4e-3 <= found <= sampled + 1e-12
    assert polygon_distance(frame(QUAD), *QUAD[1]) == 0.0


def test_the_oracle_knows_the_potential_at_the_centre_of_a_square():
    # 8 asinh(1) per half side: Jackson, Classical Electrodynamics, exercise (from memory), by hand
    expected = float(4 * mpmath.asinh(1))
    assert naive.potential_mp(naive.rectangle(1.0, 1.0), (0.5, 0.5, 0.0)) == pytest.approx(expected, rel=1e-14, abs=0)
