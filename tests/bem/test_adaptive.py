import numpy as np
import pytest

from daraf.bem.adaptive import _solve
from daraf.bem.errors import NumericalError
from daraf.bem.galerkin import galerkin_matrix

SQUARE = np.array([(0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (1.0, 1.0, 0.0), (0.0, 1.0, 0.0)])


def test_solution_meets_the_equation():
    rng = np.random.default_rng(1)
    corners = np.stack([SQUARE + np.array([float(k), 0.3 * k, 0.0]) for k in range(6)])
    lower = galerkin_matrix(corners)
    full = lower + np.tril(lower, -1).T
    charges = rng.normal(size=(6, 2))
    density, notices = _solve(lower, charges)
    # a condition number of about 10
    np.testing.assert_allclose(full @ density, charges, rtol=1e-13, atol=1e-14)
    assert notices == []


def test_coincident_panels_are_solved_with_a_notice():
    lower = np.array([(1.0, 0.0, 0.0), (1.0, 1.0, 0.0), (0.1, 0.1, 1.0)])
    lower[1, 1] -= 1e-15
    charges = np.array([(1.0,), (1.0,), (1.0,)])
    density, notices = _solve(lower, charges)
    assert [notice.code for notice in notices] == ["coincident-panels"]
    # what the two share is arbitrary, their sum is not: by hand from the two by two system
    assert density[:2].sum() == pytest.approx(0.9 / 0.99, rel=1e-6)
    assert density[2, 0] == pytest.approx(0.9 / 0.99, rel=1e-6)


def test_an_indefinite_matrix_is_a_defect_of_ours():
    lower = np.array([(1.0, 0.0), (2.0, 1.0)])
    with pytest.raises(NumericalError, match="not positive definite"):
        _solve(lower, np.ones((2, 1)))
