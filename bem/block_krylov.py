"""Conjugate gradients for several right-hand sides at once, with an estimate of the error in the capacitances.

Block conjugate gradients (O'Leary, Linear Algebra Appl. 29 (1980) 293) with the directions of each step made
orthonormal in the energy product and dependent ones left out (after Ji and Li, BIT 57 (2017) 379), so that equal,
zero and finished columns break nothing. Products and updates are matrix-matrix products.

For any densities X with residuals R = B - A X of the symmetric system A X = B the wanted matrix is, exactly,

    B^T A^-1 B = B^T X + X^T R + R^T A^-1 R,

so its error after an iteration is a Gram matrix, quadratic in the residuals: entries obey
|E_ij|^2 <= E_ii E_jj. The diagonal is estimated from what the following steps really gained (Hestenes and Stiefel,
J. Res. NBS 49 (1952) 409, sec. 6; as a means of estimation: Strakos and Tichy, ETNA 13 (2002) 56): for each earlier
step the ratio of r^T M^-1 r to the energy gained since is a Rayleigh quotient of the preconditioned matrix, and the
least one met so far turns the present r^T M^-1 r into an energy.
"""

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from .errors import NumericalError
from .preconditioner import Preconditioner

__all__ = ["BlockSolution", "SymmetricOperator", "second_order_value", "solve_block"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

#: Directions whose part outside the span of the others is below this share of their energy are left out.
DEPENDENT = 1e-10
#: Factor on the estimated error: the least Rayleigh quotient met is not the least of the matrix.
CAUTION = 2.0


class SymmetricOperator(Protocol):
    """What the solver asks of a matrix."""

    def apply(self, density: FloatArray) -> FloatArray:
        """Product with (n, n_columns) densities."""


@dataclass(frozen=True, eq=False)
class BlockSolution:
    """Densities and what their iteration left open.

    Attributes
    ----------
    density, residual : (n, n_columns) float
    value : (n_columns, n_columns) float
        ``B^T A^-1 B`` to second order in the residuals.
    error : (n_columns,) float
        Estimated errors E_ii of its diagonal; those of other entries are at most ``sqrt(E_ii E_jj)``.
    iterations : int
    products : int
        Columns multiplied by the matrix.
    converged : bool
    residuals : (n_columns,) float
        Norm of each residual over that of its right-hand side, both weighted with the preconditioner.
    history : list of (n_columns,) float
        Error estimates of each iteration.
    """

    density: FloatArray
    residual: FloatArray
    value: FloatArray
    error: FloatArray
    iterations: int
    products: int
    converged: bool
    residuals: FloatArray
    history: list[FloatArray] = field(default_factory=list)

    @property
    def error_matrix(self) -> FloatArray:
        """Bounds of the errors of all entries of `value`, (n_columns, n_columns)."""
        root = np.sqrt(self.error)
        return np.asarray(np.outer(root, root))


def second_order_value(right: FloatArray, density: FloatArray, residual: FloatArray) -> FloatArray:
    """``B^T X + X^T R``, made symmetric: ``B^T A^-1 B`` but for a term of second order in the residuals.

    Parameters
    ----------
    right, density, residual : (n, n_columns) float

    Returns
    -------
    (n_columns, n_columns) float
    """
    value = right.T @ density + density.T @ residual
    return np.asarray(0.5 * (value + value.T))


def solve_block(
    operator: SymmetricOperator,
    right: FloatArray,
    preconditioner: Preconditioner,
    *,
    tolerance: float = 1e-8,
    start: FloatArray | None = None,
    most: int = 200,
    progress: Callable[[int, float], None] | None = None,
) -> BlockSolution:
    """Solve ``A X = B`` for a symmetric positive definite matrix, all columns together.

    Parameters
    ----------
    operator : SymmetricOperator
    right : (n, n_columns) float
        B: panel areas for each conductor.
    preconditioner : Preconditioner
    tolerance : float
        Largest error of each diagonal entry of ``B^T A^-1 B`` over that entry.
    start : (n, m) float, optional
        Densities near the solution, of any number and scale: the iteration begins with the best of their
        combinations.
    most : int
        Iterations.
    progress : callable, optional
        Told (iterations, largest error over the tolerance); it may raise to interrupt.

    Returns
    -------
    BlockSolution

    Raises
    ------
    NumericalError
        If a product is not finite or the matrix is not positive definite.
    """
    state = _State(operator, np.ascontiguousarray(right, dtype=np.float64), preconditioner)
    if start is not None:
        state.step(np.ascontiguousarray(start, dtype=np.float64))
    iterations = 0
    while True:
        error = state.measure()
        state.history.append(error)
        wanted = tolerance * state.diagonal()
        # an estimate that rests on a single step is not believed
        done = (error <= wanted) & (state.n_steps > 1) | state.exact
        if progress is not None:
            progress(iterations, state.excess(error, wanted))
        if done.all() or iterations == most:
            return state.solution(iterations, bool(done.all()), error)
        if not state.step(state.directions(~done)):
            return state.solution(iterations, False, error)
        iterations += 1


class _State:
    """Blocks of the iteration."""

    def __init__(self, operator: SymmetricOperator, right: FloatArray, preconditioner: Preconditioner) -> None:
        self.operator, self.right, self.preconditioner = operator, right, preconditioner
        self.density, self.residual = np.zeros_like(right), right.copy()
        self.direction = self.image = np.zeros((len(right), 0))
        self.corrected = right
        self.first: FloatArray | None = None
        self.norm = np.zeros(right.shape[1])
        self.norms: list[FloatArray] = []
        self.gains: list[FloatArray] = []
        self.lowest = np.full(right.shape[1], np.inf)
        self.history: list[FloatArray] = []
        self.n_steps = self.products = 0

    @property
    def exact(self) -> BoolArray:
        """Columns without a residual."""
        return np.asarray(self.norm <= 0.0)

    def diagonal(self) -> FloatArray:
        """Present diagonal of the matrix wanted."""
        return np.asarray(np.abs(np.einsum("ni,ni->i", self.right, self.density)))

    @staticmethod
    def excess(error: FloatArray, wanted: FloatArray) -> float:
        """Largest error over what is wanted."""
        positive = wanted > 0.0
        return float(np.max(error[positive] / wanted[positive], initial=0.0))

    def measure(self) -> FloatArray:
        """Apply the preconditioner and estimate the errors of the diagonal."""
        self.corrected = self.preconditioner.apply(self.residual)
        self.norm = np.maximum(np.einsum("ni,ni->i", self.residual, self.corrected), 0.0)
        if self.first is None:
            self.first = np.maximum(np.einsum("ni,ni->i", self.right, self.preconditioner.apply(self.right)), 1e-300)
        # each earlier residual against the energy gained since
        since = np.zeros_like(self.norm)
        for norm, gain in zip(reversed(self.norms), reversed(self.gains), strict=True):
            since = since + gain
            ratio = np.divide(norm, since, out=np.full_like(norm, np.inf), where=since > 0.0)
            self.lowest = np.minimum(self.lowest, ratio)
        error = np.where(np.isfinite(self.lowest), CAUTION * self.norm / self.lowest, self.norm)
        if not np.isfinite(error).all():
            raise NumericalError("the iteration met numbers that are not finite")
        self.norms.append(self.norm)
        return np.asarray(error)

    def directions(self, active: BoolArray) -> FloatArray:
        """Next search directions: preconditioned residuals made conjugate to the last ones, without dependent ones."""
        chosen = np.flatnonzero(active)
        block = np.ascontiguousarray(self.corrected[:, chosen])
        block -= self.direction @ (self.image.T @ block)
        gram = self.residual[:, chosen].T @ self.corrected[:, chosen]
        kept = _independent(0.5 * (gram + gram.T))
        return np.ascontiguousarray(block[:, kept])

    def step(self, block: FloatArray) -> bool:
        """Make directions orthonormal in the energy product and move along them; whether anything was left to do."""
        image = self.operator.apply(block)
        self.n_steps += 1
        self.products += block.shape[1]
        energy = block.T @ image
        if not np.isfinite(energy).all():
            raise NumericalError("a product with the matrix gave numbers that are not finite")
        turn = _orthonormal(0.5 * (energy + energy.T))
        if turn.shape[1] == 0:
            return False
        self.direction, self.image = block @ turn, image @ turn
        along = self.direction.T @ self.residual
        self.density += self.direction @ along
        self.residual -= self.image @ along
        if self.norms:
            self.gains.append((along**2).sum(axis=0))
        return True

    def solution(self, iterations: int, converged: bool, error: FloatArray) -> BlockSolution:
        assert self.first is not None
        return BlockSolution(
            density=self.density,
            residual=self.residual,
            value=second_order_value(self.right, self.density, self.residual),
            error=error,
            iterations=iterations,
            products=self.products,
            converged=converged,
            residuals=np.sqrt(self.norm / self.first),
            history=self.history,
        )


def _independent(gram: FloatArray) -> IntArray:
    """Columns of a Gram matrix that are not combinations of those before: Cholesky with pivots."""
    n = len(gram)
    scale = np.sqrt(np.maximum(np.diag(gram), 0.0))
    safe = np.where(scale > 0.0, scale, 1.0)
    rest = gram / np.outer(safe, safe)
    left = np.diag(rest).copy()
    left[scale == 0.0] = 0.0
    factor = np.zeros((n, n))
    kept: list[int] = []
    for k in range(n):
        pivot = int(np.argmax(left))
        if left[pivot] <= DEPENDENT:
            break
        factor[:, k] = (rest[:, pivot] - factor[:, :k] @ factor[pivot, :k]) / np.sqrt(left[pivot])
        left -= factor[:, k] ** 2
        left[pivot] = -1.0
        kept.append(pivot)
    return np.array(sorted(kept), dtype=np.int64)


def _orthonormal(energy: FloatArray) -> FloatArray:
    """Combinations T with ``T^T E T = 1`` of directions with energy products E, dependent ones left out."""
    diagonal = np.diag(energy)
    if len(diagonal) and diagonal.min() < 0.0:
        raise NumericalError("the matrix is not positive definite: panels coincide or cross")
    scale = np.where(diagonal > 0.0, 1.0 / np.sqrt(np.where(diagonal > 0.0, diagonal, 1.0)), 0.0)
    values, vectors = np.linalg.eigh(energy * np.outer(scale, scale))
    good = values > DEPENDENT
    return np.asarray(scale[:, None] * vectors[:, good] / np.sqrt(values[good]))
