"""Generalised minimal residuals for several right-hand sides at once, for systems that are not symmetric.

Each column keeps a Krylov space of its own (Saad and Schultz, SIAM J. Sci. Stat. Comput. 7 (1986) 856), and all
take their steps together, so that the operator sees one product with many columns. Preconditioned from the right: the
residuals that are minimised are those of the system itself. General libraries solve one column at a time.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from .errors import NumericalError

__all__ = ["GmresSolution", "solve_gmres"]

FloatArray = NDArray[np.float64]


class _Product(Protocol):
    def apply(self, density: FloatArray) -> FloatArray:
        """Product with (n, n_columns) densities."""


@dataclass(frozen=True, eq=False)
class GmresSolution:
    """Densities and what is left.

    Attributes
    ----------
    density : (n, n_columns) float
    residuals : (n_columns,) float
        Norm of each true residual over that of its right-hand side.
    iterations : int
    converged : bool
    """

    density: FloatArray
    residuals: FloatArray
    iterations: int
    converged: bool


def solve_gmres(
    operator: _Product,
    right: FloatArray,
    preconditioner: _Product | None = None,
    *,
    tolerance: float = 1e-8,
    start: FloatArray | None = None,
    restart: int = 40,
    most: int = 400,
    progress: Callable[[int, float], None] | None = None,
) -> GmresSolution:
    """Solve ``A X = B``, all columns together.

    Parameters
    ----------
    operator : with ``apply``
    right : (n, n_columns) float
        B.
    preconditioner : with ``apply``, optional
        Approximate inverse of A.
    tolerance : float
        Largest norm of a residual over that of its right-hand side.
    start : (n, n_columns) float, optional
    restart : int
        Steps after which the Krylov spaces are given up; they hold ``restart`` times the memory of `right`.
    most : int
        Iterations.
    progress : callable, optional
        Told (iterations, largest relative residual over the tolerance); it may raise to interrupt.

    Returns
    -------
    GmresSolution

    Raises
    ------
    NumericalError
        If a product is not finite.
    """
    right = np.ascontiguousarray(right, dtype=np.float64)
    density = np.zeros_like(right) if start is None else np.array(start, dtype=np.float64)
    size = np.linalg.norm(right, axis=0)
    size[size == 0.0] = 1.0
    iterations = 0
    while True:
        residual = right - operator.apply(density) if density.any() else right.copy()
        norms = np.linalg.norm(residual, axis=0)
        if not np.isfinite(norms).all():
            raise NumericalError("a product with the matrix gave numbers that are not finite")
        active = np.flatnonzero(norms > tolerance * size)
        if len(active) == 0 or iterations >= most:
            return GmresSolution(density, norms / size, iterations, len(active) == 0)
        cycle = _Cycle(operator, preconditioner, residual[:, active], tolerance * size[active])
        steps = min(restart, most - iterations)
        for _ in range(steps):
            left = cycle.step()
            iterations += 1
            if progress is not None:
                progress(iterations, float(np.max(left / (tolerance * size[active]))))
            if cycle.done:
                break
        density[:, active] += cycle.correction()


class _Cycle:
    """Krylov spaces of all columns from one restart to the next."""

    def __init__(
        self, operator: _Product, preconditioner: _Product | None, residual: FloatArray, wanted: FloatArray
    ) -> None:
        self.operator, self.preconditioner, self.wanted = operator, preconditioner, wanted
        norms = np.linalg.norm(residual, axis=0)
        self.basis = [residual / norms]
        self.columns: list[FloatArray] = []  # of the triangular matrices, (n_columns, k + 1)
        self.turns: list[tuple[FloatArray, FloatArray]] = []
        self.rest = [norms]  # right-hand sides of the least squares problems, turned
        self.done = False

    def _solved(self, block: FloatArray) -> FloatArray:
        return block if self.preconditioner is None else self.preconditioner.apply(block)

    def step(self) -> FloatArray:
        """One more direction for every column; returns the norms of the residuals."""
        block = self.operator.apply(self._solved(self.basis[-1]))
        height = np.zeros((len(self.wanted), len(self.basis)))
        for _ in range(2):  # twice is enough to stay orthogonal to rounding
            for k, vector in enumerate(self.basis):
                part = np.einsum("nc,nc->c", vector, block)
                block = block - vector * part
                height[:, k] += part
        norms = np.linalg.norm(block, axis=0)
        if not np.isfinite(norms).all():
            raise NumericalError("a product with the matrix gave numbers that are not finite")
        # a column whose space is exhausted goes on with zeros
        self.basis.append(
            np.where(norms > 1e-14 * np.linalg.norm(height, axis=1), block / np.maximum(norms, 1e-300), 0)
        )
        for k, (cosine, sine) in enumerate(self.turns):
            upper, lower = height[:, k].copy(), height[:, k + 1].copy()
            height[:, k], height[:, k + 1] = cosine * upper + sine * lower, cosine * lower - sine * upper
        last = height[:, -1]
        length = np.hypot(last, norms)
        safe = np.where(length > 0.0, length, 1.0)
        cosine, sine = np.where(length > 0.0, last / safe, 1.0), norms / safe
        height[:, -1] = safe
        self.turns.append((cosine, sine))
        self.columns.append(height)
        rest = self.rest[-1]
        self.rest[-1] = cosine * rest
        self.rest.append(-sine * rest)
        left = np.abs(self.rest[-1])
        self.done = bool((left <= self.wanted).all())
        return np.asarray(left)

    def correction(self) -> FloatArray:
        """What to add to the densities."""
        n = len(self.columns)
        factors = np.zeros((n, len(self.wanted)))
        for k in range(n - 1, -1, -1):
            known = sum((self.columns[j][:, k] * factors[j] for j in range(k + 1, n)), np.zeros(len(self.wanted)))
            factors[k] = (self.rest[k] - known) / self.columns[k][:, k]
        return self._solved(sum((v * f for v, f in zip(self.basis[:n], factors, strict=True)), 0.0 * self.basis[0]))
