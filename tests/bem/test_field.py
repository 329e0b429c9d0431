import naive
import numpy as np
import pytest

from daraf.bem.field import normal_field, panel_field, polygon_field
from daraf.bem.frames import panel_frames

QUAD = np.array([(0.0, 0.0, 0.0), (1.0, 0.1, 0.0), (0.8, 0.9, 0.0), (0.1, 0.7, 0.0)])
TRIANGLE = naive.triangle((0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (0.3, 0.8, 0.0))
SLIVER = naive.triangle((0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (0.4, 1e-9, 0.0))
STRIP = naive.rectangle(1.0, 1e-6)
PANELS = {"quad": QUAD, "triangle": TRIANGLE, "sliver": SLIVER, "strip": STRIP}


def frame(corners):
    return panel_frames(np.ascontiguousarray(corners)[None])[0]


@pytest.mark.parametrize("name", PANELS)
def test_field_is_minus_the_gradient_of_the_potential(name):
    corners = PANELS[name]
    for point in (np.array([0.4, 0.3, 0.5]), np.array([-0.6, 0.2, 0.1]), np.array([1.5, 1.2, -0.3])):
        step = 1e-3
        gradient = np.empty(3)
        for k in range(3):
            e = np.zeros(3)
            e[k] = step
            samples = [naive.potential_mp(corners, point + m * e) for m in (-2, -1, 1, 2)]
            gradient[k] = np.dot([1.0, -8.0, 8.0, -1.0], samples) / (12.0 * step)
        found = np.array(polygon_field(frame(corners), *point))
        # fourth order differences: step^4 over the distance^5 to the panel; slivers lose digits as above
        tolerance = 1e-5 if name == "sliver" else 1e-7
        np.testing.assert_allclose(found, -gradient, rtol=0, atol=tolerance * np.linalg.norm(gradient))


@pytest.mark.parametrize("name", ["quad", "triangle"])
def test_field_equals_a_fine_product_rule(name):
    for point in (np.array([0.4, 0.2, 0.4]), np.array([2.0, 1.0, 0.0]), np.array([0.1, 0.1, -0.7])):
        found = np.array(polygon_field(frame(PANELS[name]), *point))
        # as for the potential, one order steeper
        np.testing.assert_allclose(found, naive.brute_field(PANELS[name], point), rtol=0, atol=1e-12)


def test_field_jumps_by_four_pi_and_has_no_normal_part_in_the_plane():
    f = frame(QUAD)
    inside = QUAD.mean(axis=0)
    above, below, on = (polygon_field(f, inside[0], inside[1], h)[2] for h in (1e-9, -1e-9, 0.0))
    # the solid angle differs from 2 pi by the height over the size
    assert above == pytest.approx(2.0 * np.pi, rel=1e-8, abs=0)
    assert below == pytest.approx(-above, rel=1e-8, abs=0)
    assert on == 0.0


def test_field_of_a_far_panel_is_that_of_a_point_charge():
    f = frame(QUAD)
    away = np.array([30.0, -25.0, 20.0])
    found, exact = np.array(panel_field(f, *away)), np.array(polygon_field(f, *away))
    # the quadrupole that is left out: (radius / distance)^2, the distance over 30 radii
    np.testing.assert_allclose(found, exact, rtol=0, atol=1.5e-3 * np.linalg.norm(exact))


def test_field_is_finite_on_extensions_of_edges_and_in_the_plane():
    for corners in PANELS.values():
        a, b, c, _ = corners
        for point in (a + 1.5 * (b - a), a - 1e-9 * (b - a), c + 2.0 * (c - a), b + np.array([0.0, 0.0, 0.2])):
            assert np.isfinite(polygon_field(frame(corners), *point)).all()


def test_flux_of_a_panel_through_a_closed_box_is_four_pi_times_its_area():
    """Gauss's law, with the sum over panels of `normal_field`."""
    nodes, weights = np.polynomial.legendre.leggauss(24)
    u, v = (4.0 * grid.ravel() for grid in np.meshgrid(nodes, nodes))
    points, normals = [], []
    for axis in range(3):
        for side in (-4.0, 4.0):
            points.append(np.insert(np.column_stack([u, v]), axis, side, axis=1))
            normals.append(np.tile(np.insert([0.0, 0.0], axis, np.sign(side)), (len(u), 1)))
    points, normals = np.concatenate(points), np.concatenate(normals)
    frames = panel_frames(np.stack([QUAD, TRIANGLE + np.array([0.0, 0.0, 1.0])]))
    density = np.array([(1.0, 0.0), (0.5, 2.0)])
    found = np.empty((len(points), 2))
    normal_field(points, normals, frames, density, found)
    flux = np.tile(16.0 * np.outer(weights, weights).ravel(), 6) @ found
    areas = np.array([0.5 * np.linalg.norm(np.cross(p[2] - p[0], p[3] - p[1])) for p in (QUAD, TRIANGLE)])
    areas[1] = 0.4
    # the field of panels 3 to 4 away is smooth over a face of 24 x 24 points
    np.testing.assert_allclose(flux, 4.0 * np.pi * areas @ density, rtol=1e-8)
