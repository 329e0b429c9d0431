import numpy as np
import pytest

from daraf.bem.translations import n_coefficients, shift_matrix, solid_harmonics, translation_matrices


@pytest.fixture
def inside():
    """Points of two cells of edge 1 about their centres."""
    return np.random.default_rng(0).uniform(-0.5, 0.5, (2, 40, 3))


def test_harmonics_are_normalised_after_racah(inside):
    points = inside[0]
    rho = solid_harmonics(points, 6)
    r = np.linalg.norm(points, axis=1)
    for degree in range(7):
        of_degree = rho[:, degree**2 : n_coefficients(degree)]
        np.testing.assert_allclose((of_degree**2).sum(axis=1), r ** (2 * degree), rtol=1e-12)


def test_first_harmonics_are_the_coordinates(inside):
    x, y, z = inside[0].T
    np.testing.assert_allclose(solid_harmonics(inside[0], 1), np.stack([1 + 0 * x, -y, z, -x], axis=1), atol=1e-15)


def test_shift_is_exact(inside):
    shift = np.array([0.5, -0.25, 1.5])
    moved = solid_harmonics(inside[0], 8) @ shift_matrix(shift, 8).T
    expected = solid_harmonics(inside[0] + shift, 8)
    np.testing.assert_allclose(moved, expected, atol=1e-13 * np.abs(expected).max())


def test_translation_converges_to_one_over_r(inside):
    u, v = 0.6 * inside
    offset = np.array([2.0, 1.0, -1.0])
    exact = 1.0 / np.linalg.norm(offset + u - v, axis=1)
    errors = []
    for degree in (4, 8, 12):
        matrix = translation_matrices(offset[None], degree)[0]
        series = np.einsum("ni,ij,nj->n", solid_harmonics(u, degree), matrix, solid_harmonics(v, degree))
        errors.append(np.abs(series / exact - 1.0).max())
    # the balls reach to (0.52 + 0.52) / 2.45 = 0.42 of the distance; 0.42^5, 0.42^9, 0.42^13 bound the terms left out
    assert errors[0] < 1.3e-2
    assert errors[1] < 4e-4
    assert errors[2] < 1.3e-5


def test_opposite_translation_is_the_transpose():
    offsets = np.array([[2.0, 1.0, -3.0], [-2.0, -1.0, 3.0]])
    matrix = translation_matrices(offsets, 5)
    np.testing.assert_allclose(matrix[1], matrix[0].T, atol=1e-15)
