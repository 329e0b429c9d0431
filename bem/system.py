"""The equations of one pass, ``A density = areas``: held as a dense matrix or as a fast operator.

Both give the same numbers within what they report. The dense matrix is factorised; it takes n^2 memory and n^3 time,
but little of either for a few thousand panels. The operator is solved by block conjugate gradients; what the
iteration and the expansions leave open is measured in every solve.
"""

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lapack

from .block_krylov import solve_block
from .errors import NumericalError
from .galerkin import galerkin_matrix
from .indicator import PartPotentials, direct_part_potentials
from .operator import FastOperator
from .panels import Panels
from .patches import stored_entries
from .preconditioner import factored_inverse
from .solution import Notice
from .threads import blas_threads

__all__ = [
    "Carried",
    "DenseSystem",
    "FastSystem",
    "Solved",
    "System",
    "factorise",
    "far_tolerance",
    "make_system",
    "uses_fast",
]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
Progress = Callable[[str, float, float], None]

#: The factorisation is repeated with this share added to the diagonal if it fails: two panels coincide.
COINCIDENT = 1e-10
#: Below this many panels LAPACK runs on one thread.
SERIAL = 3000
#: From this many panels on the fast operator is used. A pass over two balls of together 1,000, 2,000, 3,000, 5,000 and
#: 8,000 panels took the dense matrix 1.3, 2.0, 4.5, 7.2 and 8.7 times the processor time (scripts/bench/crossover.py);
#: small models need not wait until the kernels of the fast path are compiled.
CROSS_OVER = 2_000
#: Relative error of a product, per relative uncertainty asked: its effect on the capacitances is measured and lies
#: well below, since errors of single panels average out.
FAR_SHARE = 3e-3
LEAST_TOLERANCE, GREATEST_TOLERANCE = 1e-7, 1e-4
#: Error of the iteration per relative uncertainty asked, of one conductor and of several: the error of a weak coupling
#: is only bounded by those of both self entries, and it is asked to 1e-3 of them.
ALONE_SHARE, COUPLED_SHARE = 1e-2, 1e-4
#: Most iterations; more than a hundred have not been seen.
MOST_ITERATIONS = 300
#: Panels sampled for every conductor to measure what the expansions do to the capacitances.
SAMPLES = 60


@dataclass(frozen=True, eq=False)
class Solved:
    """Densities, and what the solution left open.

    Attributes
    ----------
    density : (n_panels, n_conductors) float
    value : (n_conductors, n_conductors) float, m
        Bare capacitance matrix.
    open : dict of str to (n_conductors, n_conductors) float, m
        Expanded uncertainty by cause: "solver", "far field".
    iterations : int
    notices : list of Notice
    """

    density: FloatArray
    value: FloatArray
    open: dict[str, FloatArray] = field(default_factory=dict)
    iterations: int = 0
    notices: list[Notice] = field(default_factory=list)


@dataclass(frozen=True, eq=False)
class Carried:
    """What a pass hands on to the next, for panels that stay.

    Attributes
    ----------
    kept : (m,) int
        Panels that stay; they come first in the next pass.
    matrix : (m, m) float or None
        Lower triangle among them.
    operator : FastOperator or None
        Of all panels.
    """

    kept: IntArray
    matrix: FloatArray | None = None
    operator: FastOperator | None = None


class System(Protocol):
    """What a pass asks of its equations."""

    method: str

    @property
    def diagonal(self) -> FloatArray:
        """Self integrals, (n_panels,) m3."""

    def solve(self, charges: FloatArray, start: FloatArray | None, report: Progress) -> Solved:
        """Densities for (n_panels, n_conductors) panel areas on each conductor."""

    def read(self, density: FloatArray) -> PartPotentials:
        """Integrals of the potential of a density (n_panels, n_conductors) over parts of panels."""

    def carried(self, kept: IntArray) -> Carried:
        """What the next pass may take over for the panels `kept`."""


class DenseSystem:
    """The full matrix and its Cholesky factorisation."""

    method = "dense Cholesky"

    def __init__(self, panels: Panels, carried: Carried | None, report: Progress) -> None:
        known = None if carried is None else carried.matrix
        self._panels = panels
        self.matrix = galerkin_matrix(
            panels.corners, known=known, progress=lambda done, total: report("matrix", done, total)
        )

    @property
    def diagonal(self) -> FloatArray:
        """Self integrals, (n_panels,) m3."""
        return np.diag(self.matrix).copy()

    def solve(self, charges: FloatArray, start: FloatArray | None, report: Progress) -> Solved:
        """Densities by Cholesky factorisation of the lower triangle.

        Raises
        ------
        NumericalError
            If the matrix is not positive definite.
        """
        report("factorisation", 0.0, 1.0)
        density, notices = factorise(self.matrix, charges)
        value = charges.T @ density
        return Solved(density, 0.5 * (value + value.T), notices=notices)

    def read(self, density: FloatArray) -> PartPotentials:
        """See :class:`System`."""
        return direct_part_potentials(self._panels, density)

    def carried(self, kept: IntArray) -> Carried:
        """See :class:`System`."""
        return Carried(kept, matrix=self.matrix[np.ix_(kept, kept)])


def factorise(matrix: FloatArray, charges: FloatArray) -> tuple[FloatArray, list[Notice]]:
    """Densities by Cholesky factorisation.

    Parameters
    ----------
    matrix : (n, n) float, m3
        Lower triangle.
    charges : (n, n_columns) float

    Returns
    -------
    density : (n, n_columns) float
    notices : list of Notice
        If panels coincide.

    Raises
    ------
    NumericalError
        If the matrix is not positive definite.
    """
    notices = []
    # a small factorisation gains nothing from threads and waits long for them where the machine is busy
    with blas_threads(1 if len(matrix) < SERIAL else None):
        factor, info = _cholesky(matrix, 1.0)
        if info != 0:
            factor, info = _cholesky(matrix, 1.0 + COINCIDENT)
            text = (
                "panels coincide: bodies of one conductor overlap or touch along a face; the capacitances hold, "
                "but how the charge is shared there is arbitrary"
            )
            notices.append(Notice("coincident-panels", text))
        if info != 0:
            raise NumericalError(
                f"the matrix of {len(matrix)} panels is not positive definite: panels coincide or cross"
            )
        density, _ = lapack.dpotrs(factor, charges, lower=0)
    return np.ascontiguousarray(density), notices


def _cholesky(matrix: FloatArray, diagonal: float) -> tuple[FloatArray, int]:
    # the transpose of the lower triangle in C order is the upper one in Fortran order: no copy but this one
    copy = np.array(matrix.T, order="F")
    copy[np.diag_indices_from(copy)] *= diagonal
    factor, info = lapack.dpotrf(copy, lower=0, clean=0, overwrite_a=1)
    return factor, int(info)


class FastSystem:
    """The fast operator and block conjugate gradients."""

    method = "fast multipole, conjugate gradients"

    def __init__(self, panels: Panels, accuracy: float, carried: Carried | None, report: Progress) -> None:
        self._panels, self._accuracy = panels, accuracy
        previous, known = None, None
        if carried is not None and carried.operator is not None:
            previous = carried.operator
            known = np.full(len(panels), -1, dtype=np.int64)
            known[: len(carried.kept)] = carried.kept
        self.operator = FastOperator(
            panels.corners,
            far_tolerance(accuracy),
            previous=previous,
            known=known,
            progress=lambda done, total: report("matrix", done, total),
        )

    @property
    def diagonal(self) -> FloatArray:
        """Self integrals, (n_panels,) m3."""
        return self.operator.diagonal

    def solve(self, charges: FloatArray, start: FloatArray | None, report: Progress) -> Solved:
        """Densities by block conjugate gradients.

        Raises
        ------
        NumericalError
            If the iteration breaks down or does not converge.
        """
        n = charges.shape[1]
        tolerance = self._accuracy * (ALONE_SHARE if n == 1 else COUPLED_SHARE)
        found = solve_block(
            self.operator,
            charges,
            factored_inverse(stored_entries(self.operator)),
            tolerance=tolerance,
            start=start,
            most=MOST_ITERATIONS,
            progress=lambda step, excess: report("iteration", *_advance(step, excess)),
        )
        if not found.converged:
            raise NumericalError(
                f"the iteration for {len(charges)} panels stopped after {found.iterations} steps short of its "
                "tolerance; panels may coincide or cross"
            )
        value = 0.5 * (found.value + found.value.T)
        report("check", 0.0, 1.0)
        left = {"solver": found.error_matrix, "far field": self._far_field(found.density, charges)}
        return Solved(found.density, value, left, found.iterations)

    def _far_field(self, density: FloatArray, charges: FloatArray) -> FloatArray:
        """What expansions and single precision do to the capacitances, by direct sums on sampled panels.

        The change of entry (i, j) is the sum over panels of charge i times the error of potential j. Panels are drawn
        with probabilities like the magnitude of charge i: the mean of the errors times the total magnitude estimates
        it, twice its standard error is added.
        """
        n = density.shape[1]
        product, areas = self.operator.apply(density), self._panels.areas
        magnitude = np.abs(density) * areas[:, None]
        random = np.random.default_rng(len(density))
        spread = np.zeros((n, n))
        for i in range(n):
            total = magnitude[:, i].sum()
            drawn = random.choice(len(density), SAMPLES, p=magnitude[:, i] / total)
            exact = self.operator.direct_rows(drawn, density)
            errors = (product[drawn] - exact) / areas[drawn, None] * np.sign(density[drawn, i])[:, None]
            spread[i] = total * (np.abs(errors.mean(axis=0)) + 2.0 * errors.std(axis=0, ddof=1) / np.sqrt(SAMPLES))
        return np.maximum(spread, spread.T)

    def read(self, density: FloatArray) -> PartPotentials:
        """See :class:`System`."""
        expansion = self.operator.expand(density)
        return lambda parts, rows: self.operator.at_parts(parts, expansion, rows)

    def carried(self, kept: IntArray) -> Carried:
        """See :class:`System`."""
        return Carried(kept, operator=self.operator)


def far_tolerance(accuracy: float) -> float:
    """Relative error of a product for an accuracy asked."""
    return float(np.clip(FAR_SHARE * accuracy, LEAST_TOLERANCE, GREATEST_TOLERANCE))


def _advance(step: int, excess: float) -> tuple[float, float]:
    """Progress of an iteration whose error falls by a constant factor a step: steps done, and in all."""
    if step == 0 or excess <= 1.0:
        return float(step), float(max(step, 1))
    return float(step), step * (1.0 + np.log(excess) / 12.0)


def make_system(
    panels: Panels, accuracy: float, method: str, carried: Carried | None, report: Progress
) -> DenseSystem | FastSystem:
    """Equations of a pass.

    Parameters
    ----------
    panels : Panels
        With coordinates about the middle of the model.
    accuracy : float
        Relative uncertainty asked.
    method : {"auto", "dense", "fast"}
        "auto": by the number of panels.
    carried : Carried or None
        From the pass before.
    report : callable
        Told (stage, done, total).

    Returns
    -------
    DenseSystem or FastSystem
    """
    if uses_fast(len(panels), method):
        return FastSystem(panels, accuracy, carried, report)
    return DenseSystem(panels, carried, report)


def uses_fast(n_panels: int, method: str) -> bool:
    """Whether so many panels are solved with the fast operator."""
    return method == "fast" or (method == "auto" and n_panels >= CROSS_OVER)
