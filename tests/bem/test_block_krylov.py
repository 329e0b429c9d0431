import numpy as np
import pytest
from dense_operator import DenseOperator, sheets, stored_entries

from daraf.bem.block_krylov import solve_block
from daraf.bem.errors import NumericalError
from daraf.bem.preconditioner import factored_inverse


class Diagonal:
    """The plainest preconditioner: many iterations even on small systems."""

    def __init__(self, matrix):
        self.diagonal = np.diag(matrix)

    def apply(self, residual):
        return residual / self.diagonal[:, None]


def prepared(n=14, count=3):
    corners, matrix, right, density = sheets(n, count)
    return matrix, right, density, factored_inverse(stored_entries(corners, matrix, size=50))


def energies(matrix, right, found):
    """True errors E_ii of the value, (n_columns,)."""
    return np.einsum("ni,ni->i", found.residual, np.linalg.solve(matrix, found.residual))


@pytest.mark.parametrize("tolerance", [1e-4, 1e-8, 1e-12])
def test_capacitances_are_as_accurate_as_asked_and_known(tolerance):
    matrix, right, density, inverse = prepared()
    exact = right.T @ density
    found = solve_block(DenseOperator(matrix), right, inverse, tolerance=tolerance)
    assert found.converged
    assert found.value.shape == (3, 3)
    assert (found.error <= tolerance * np.diag(exact) * (1 + tolerance)).all()
    # rounding of a product of 588 terms adds to the bound
    assert (np.abs(found.value - exact) <= found.error_matrix + 1e-14 * np.diag(exact).max()).all()
    np.testing.assert_array_equal(found.value, found.value.T)


@pytest.mark.parametrize("shipped", [True, False])
def test_estimated_errors_are_honest_in_every_iteration(shipped):
    """Never below the truth from the second iteration on; within eight times it with the preconditioner that is used.

    With the diagonal alone the least eigenvalues are met late, and the estimate leaps to the safe side when they are.
    """
    matrix, right, _, inverse = prepared()
    for most in range(2, 12):
        found = solve_block(
            DenseOperator(matrix), right, inverse if shipped else Diagonal(matrix), tolerance=1e-11, most=most
        )
        true = energies(matrix, right, found)
        assert (found.error >= true).all()
        assert not shipped or (found.error <= 8.0 * true).all()


def test_value_identity_holds_for_any_density():
    """B^T A^-1 B = B^T X + X^T R + R^T A^-1 R, after one step as well as at the end."""
    matrix, right, density, inverse = prepared()
    found = solve_block(DenseOperator(matrix), right, inverse, most=1)
    rest = found.residual.T @ np.linalg.solve(matrix, found.residual)
    np.testing.assert_allclose(found.value + rest, right.T @ density, rtol=0, atol=1e-11)  # condition 1e6, rounding


def test_equal_zero_and_dependent_columns_break_nothing():
    matrix, right, density, inverse = prepared()
    columns = np.column_stack([right[:, 0], right[:, 0], np.zeros(len(right)), right @ [1.0, -2.0, 1.0], right[:, 1]])
    operator = DenseOperator(matrix)
    found = solve_block(operator, columns, inverse, tolerance=1e-12)
    assert found.converged
    expected = np.column_stack([density[:, 0], density[:, 0], 0 * density[:, 0], density @ [1, -2, 1], density[:, 1]])
    weight = np.sqrt(np.diag(matrix))[:, None]
    # energy error 1e-12 of the value: densities to its root
    assert np.abs(weight * (found.density - expected)).max() < 1e-5 * np.abs(weight * expected).max()
    assert operator.columns == found.products
    assert found.products <= 3 * found.iterations  # the block has rank three


def test_finished_columns_are_multiplied_no_more():
    matrix, right, density, inverse = prepared()
    near = np.column_stack([density[:, 0], right[:, 1]])
    found = solve_block(DenseOperator(matrix), right[:, :2], inverse, start=near, tolerance=1e-8)
    alone = solve_block(DenseOperator(matrix), right[:, :2], inverse, tolerance=1e-8)
    assert found.converged
    assert found.products < alone.products + 2


def test_warm_start_of_any_scale_saves_iterations():
    matrix, right, density, inverse = prepared()
    corners, *_ = sheets(14, 3)
    disturbed = 7.0 * density * (1.0 + 0.01 * corners[:, 0, 0, None])
    cold = solve_block(DenseOperator(matrix), right, Diagonal(matrix), tolerance=1e-6)
    warm = solve_block(DenseOperator(matrix), right, Diagonal(matrix), tolerance=1e-6, start=disturbed)
    assert warm.converged
    assert warm.iterations < 0.75 * cold.iterations
    perfect = solve_block(DenseOperator(matrix), right, inverse, start=density[:, ::-1])
    assert perfect.converged
    assert perfect.iterations <= 1


def test_a_useless_start_costs_a_product_only():
    matrix, right, _, inverse = prepared()
    cold = solve_block(DenseOperator(matrix), right, inverse)
    for start in (np.zeros_like(right), np.random.default_rng(7).standard_normal(right.shape)):
        found = solve_block(DenseOperator(matrix), right, inverse, start=start)
        assert found.converged
        assert found.iterations <= cold.iterations + 1


def test_limit_of_iterations_is_told():
    matrix, right, _, inverse = prepared()
    found = solve_block(DenseOperator(matrix), right, inverse, tolerance=1e-13, most=2)
    assert not found.converged
    assert found.iterations == 2
    assert len(found.history) == 3


def test_progress_is_told_and_may_interrupt():
    matrix, right, _, inverse = prepared()
    told = []
    solve_block(DenseOperator(matrix), right, inverse, progress=lambda done, excess: told.append((done, excess)))
    assert [done for done, _ in told] == list(range(len(told)))
    assert told[-1][1] <= 1.0

    def interrupt(done, excess):
        if done == 1:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        solve_block(DenseOperator(matrix), right, inverse, progress=interrupt)


def test_input_stays_unchanged():
    matrix, right, density, inverse = prepared()
    copies = right.copy(), density.copy()
    solve_block(DenseOperator(matrix), right, inverse, start=density)
    np.testing.assert_array_equal(right, copies[0])
    np.testing.assert_array_equal(density, copies[1])


def test_matrices_that_are_not_positive_definite_are_refused():
    matrix, right, _, inverse = prepared()
    with pytest.raises(NumericalError, match="positive definite"):
        solve_block(DenseOperator(-matrix), right, inverse)
    with pytest.raises(NumericalError, match="not finite"):
        solve_block(DenseOperator(matrix * np.nan), right, inverse)
