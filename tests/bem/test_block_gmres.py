import numpy as np
import pytest
import scipy.sparse.linalg
from dense_operator import DenseOperator

from daraf.bem.block_gmres import solve_gmres
from daraf.bem.errors import NumericalError


class Inverse:
    def __init__(self, matrix):
        self.inverse = np.linalg.inv(matrix)

    def apply(self, block):
        return self.inverse @ block


def system(n=60, columns=4, seed=8):
    """A matrix far from symmetric, its right-hand sides and solutions."""
    rng = np.random.default_rng(seed)
    matrix = np.diag(np.linspace(1.0, 20.0, n)) + 0.5 * rng.standard_normal((n, n))
    right = rng.standard_normal((n, columns))
    return matrix, right, np.linalg.solve(matrix, right)


@pytest.mark.parametrize("restart", [10, 60])
def test_solves_all_columns_to_the_tolerance(restart):
    matrix, right, exact = system()
    found = solve_gmres(DenseOperator(matrix), right, restart=restart, tolerance=1e-9, most=2000)
    assert found.converged
    true = np.linalg.norm(right - matrix @ found.density, axis=0) / np.linalg.norm(right, axis=0)
    assert true.max() <= 1e-9
    np.testing.assert_allclose(found.residuals, true, rtol=1e-3, atol=1e-15)  # the same but for rounding
    np.testing.assert_allclose(found.density, exact, rtol=0, atol=1e-6)  # condition number below 1e3


def test_takes_the_steps_of_scipy():
    matrix, right, _ = system(columns=1)
    norms = []
    scipy.sparse.linalg.gmres(
        matrix, right[:, 0], rtol=1e-9, restart=60, maxiter=1, callback=norms.append, callback_type="pr_norm"
    )
    found = solve_gmres(DenseOperator(matrix), right, restart=60, tolerance=1e-9)
    assert abs(found.iterations - len(norms)) <= 1


def test_columns_finished_zero_or_equal_break_nothing():
    matrix, right, exact = system()
    columns = np.column_stack([right[:, 0], right[:, 0], np.zeros(60), right[:, 1]])
    start = np.column_stack([exact[:, 0], np.zeros(60), np.zeros(60), exact[:, 1]])
    operator = DenseOperator(matrix)
    found = solve_gmres(operator, columns, start=start, tolerance=1e-8, restart=60)
    assert found.converged
    np.testing.assert_array_equal(found.density[:, 2], 0.0)
    # one column is left to iterate; the true residuals at the begin and at the end are of all
    assert operator.columns == found.iterations + 8


def test_exact_preconditioner_takes_one_step_and_a_small_space_ends_well():
    matrix, right, exact = system()
    found = solve_gmres(DenseOperator(matrix), right, Inverse(matrix))
    assert found.iterations == 1
    np.testing.assert_allclose(found.density, exact, rtol=1e-9)
    unit = solve_gmres(DenseOperator(np.eye(60)), right)
    assert unit.iterations == 1
    np.testing.assert_allclose(unit.density, right, rtol=1e-14)


def test_limit_progress_interrupt_and_bad_products():
    matrix, right, _ = system()
    told = []
    found = solve_gmres(DenseOperator(matrix), right, most=5, progress=lambda done, excess: told.append(done))
    assert not found.converged
    assert told == [1, 2, 3, 4, 5]

    def interrupt(done, excess):
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        solve_gmres(DenseOperator(matrix), right, progress=interrupt)
    with pytest.raises(NumericalError, match="not finite"):
        solve_gmres(DenseOperator(matrix * np.nan), right)
