"""Potential and field at points: against adaptive quadrature, by identity, and on an exact solution."""

import math

import numpy as np
import pytest
import trimesh
from scipy.integrate import dblquad

from daraf.bem.errors import InputError
from daraf.bem.off_surface import inside_closed, off_surface

SQUARE = np.array([[[0.0, 0.0, 0.0], [1.0, 0.0, 0.0], [1.0, 1.0, 0.0], [0.0, 1.0, 0.0]]])


def triangles(mesh):
    corners = mesh.vertices[mesh.faces]
    return np.concatenate([corners, corners[:, 2:]], axis=1)


@pytest.mark.parametrize(
    "point", [(0.3, 0.4, 0.05), (1.5, -0.2, 0.3), (3.0, 2.0, 1.0), (9.0, -4.0, 2.0), (0.0, 90.0, 400.0)]
)
def test_square_against_adaptive_quadrature(point):
    x, y, z = point
    found = off_surface([point], SQUARE, [1.0])

    def inverse(v, u, power, shift):
        r = math.sqrt((x - u) ** 2 + (y - v) ** 2 + z**2)
        return shift(u, v) / r**power

    exact, _ = dblquad(inverse, 0, 1, 0, 1, args=(1, lambda u, v: 1.0), epsabs=1e-12, epsrel=1e-11)
    # limits of the three ranges, module docstring
    assert found.potential[0, 0] == pytest.approx(exact, rel=1e-6)
    parts = [
        dblquad(inverse, 0, 1, 0, 1, args=(3, shift), epsabs=1e-12, epsrel=1e-10)[0]
        for shift in (lambda u, v: x - u, lambda u, v: y - v, lambda u, v: z)
    ]
    assert found.field[0, :, 0] == pytest.approx(parts, rel=3e-6, abs=3e-6 * np.linalg.norm(parts))


@pytest.mark.parametrize("distance", [19.9, 20.1, 30.0, 399.0, 401.0, 3000.0])
def test_ranges_join_within_their_error(distance):
    # a narrow triangle, the worst for a point charge
    corners = np.array([[[0.0, 0.0, 0.0], [1.0, 0.0, 0.0], [0.9, 0.05, 0.0], [0.9, 0.05, 0.0]]])
    centroid = corners[0, :3].mean(axis=0)
    radius = np.linalg.norm(corners[0, :3] - centroid, axis=1).max()
    direction = np.array([1.0, 0.2, 0.1]) / math.sqrt(1.05)
    point = centroid + distance * radius * direction
    found = off_surface([point], corners, [1.0])
    # slow twin: the triangle cut into 4,096 points
    split = trimesh.Trimesh(corners[0, :3], [[0, 1, 2]])
    for _ in range(6):
        split = split.subdivide()
    r = point - split.triangles_center
    length = np.linalg.norm(r, axis=1)
    assert found.potential[0, 0] == pytest.approx(float((split.area_faces / length).sum()), rel=1e-6)
    exact = (split.area_faces[:, None] * r / length[:, None] ** 3).sum(axis=0)
    assert found.field[0, :, 0] == pytest.approx(exact, rel=3e-6, abs=3e-6 * np.linalg.norm(exact))


def test_field_is_minus_the_gradient_of_the_potential():
    rng = np.random.default_rng(3)
    corners = triangles(trimesh.creation.icosphere(subdivisions=1))
    density = rng.normal(size=(len(corners), 2))
    points = rng.normal(size=(20, 3))
    points *= (rng.uniform(1.05, 3.0, 20) / np.linalg.norm(points, axis=1))[:, None]
    found, h = off_surface(points, corners, density), 1e-5
    for axis in range(3):
        step = np.zeros(3)
        step[axis] = h
        up, down = off_surface(points + step, corners, density), off_surface(points - step, corners, density)
        slope = (up.potential - down.potential) / (2 * h)
        # central difference: h^2 of the third derivative, and rounding over h
        assert found.field[:, axis] == pytest.approx(-slope, rel=1e-5, abs=1e-6)


def test_columns_points_and_panels_are_independent():
    rng = np.random.default_rng(4)
    corners = triangles(trimesh.creation.icosphere(subdivisions=1))
    density, points = rng.normal(size=(len(corners), 3)), rng.normal(size=(7, 3))
    together = off_surface(points, corners, density)
    for k in range(3):
        alone = off_surface(points[2:3], corners, density[:, k])
        assert alone.potential[0, 0] == pytest.approx(together.potential[2, k], rel=1e-13)
        assert alone.field[0, :, 0] == pytest.approx(together.field[2, :, k], rel=1e-12)


def test_charged_ball_of_many_panels_has_the_field_of_a_point_charge():
    mesh = trimesh.creation.icosphere(subdivisions=4)
    corners = triangles(mesh)
    found = off_surface([[0.0, 0.0, 2.0], [0.1, 0.2, 0.3]], corners, np.full(len(corners), 1.0 / mesh.area))
    # an inscribed polyhedron of 5,120 facets: h^2 is 1e-3
    assert found.potential[:, 0] == pytest.approx([0.5, 1.0], rel=1e-3)
    assert found.field[0, :, 0] == pytest.approx([0.0, 0.0, 0.25], abs=1e-3)
    assert found.field[1, :, 0] == pytest.approx([0.0, 0.0, 0.0], abs=1e-3)


def test_jump_across_a_panel_is_four_pi_density():
    above, below = off_surface([[0.4, 0.6, 1e-9], [0.4, 0.6, -1e-9]], SQUARE, [2.0]).field[:, 2, 0]
    assert above - below == pytest.approx(4.0 * math.pi * 2.0, rel=1e-6)


def test_inside_is_told_for_closed_bodies_alone():
    ball, box = trimesh.creation.icosphere(subdivisions=2, radius=2.0), trimesh.creation.box((1.0, 1.0, 1.0))
    plate = np.array([[[5.0, 0, 0], [6.0, 0, 0], [6.0, 1, 0], [5.0, 1, 0]]])
    corners = np.concatenate([triangles(ball), triangles(box), plate])
    body = np.repeat([0, 1, 2], [len(ball.faces), 12, 1])
    points = [[0.2, 0.2, 0.3], [1.2, 0.0, 0.0], [3.0, 0.0, 0.0], [5.5, 0.5, 0.0], [0.499, 0.499, 0.499]]
    assert inside_closed(points, corners, body, np.array([True, True, False])).tolist() == [1, 0, -1, -1, 1]


def test_inside_near_the_surface_against_the_distance():
    box = trimesh.creation.box((1.0, 1.0, 1.0)).subdivide().subdivide()
    rng = np.random.default_rng(5)
    points = rng.uniform(-0.6, 0.6, (400, 3))
    points[:100, 0] = 0.5 + rng.uniform(-1e-6, 1e-6, 100)
    expected = np.where((np.abs(points) < 0.5).all(axis=1), 0, -1)
    assert (inside_closed(points, triangles(box), np.zeros(192, int), np.array([True])) == expected).all()


@pytest.mark.parametrize(
    ("points", "density"),
    [([[0.0, 0.0]], [1.0]), ([[0.0, 0.0, math.nan]], [1.0]), ([[0.0, 0.0, 1.0]], [1.0, 2.0])],
)
def test_refuses_nonsense(points, density):
    with pytest.raises(InputError, match="field"):
        off_surface(points, SQUARE, density)
