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

from .errors import NumericalError
from .frames import panel_frames
from .galerkin import galerkin_matrix
from .indicator import child_potentials
from .operator import FastOperator
from .panels import Panels
from .solution import Notice
from .threads import blas_threads

__all__ = ["Carried", "DenseSystem", "FastSystem", "Solved", "System", "make_system"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
Progress = Callable[[str, float, float], None]

#: The factorisation is repeated with this share added to the diagonal if it fails: two panels coincide.
COINCIDENT = 1e-10
#: Below this many panels LAPACK runs on one thread.
SERIAL = 3000
#: From this many panels on the fast operator is used. Measured by ``scripts/bench/scale.py --crossover``.
CROSS_OVER = 6000
#: Relative error of a product, per relative uncertainty asked: its effect on the capacitances is measured and lies
#: well below, since errors of single panels average out.
FAR_SHARE = 1e-3
#: Error of the iteration per relative uncertainty asked, of one conductor and of several: the error of a weak coupling
#: is only bounded by those of both self entries, and it is asked to 1e-3 of them.
ALONE_SHARE, COUPLED_SHARE = 1e-2, 1e-4
#: Most iterations; more than a hundred have not been seen.
MOST_ITERATIONS = 300
#: Panels sampled for every conductor to measure what the expansions do to the capacitances.
SAMPLES = 60
#: Panels whose parts are evaluated at once.
_PARTS_AT_ONCE = 20_000


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

    def part_potentials(
        self, parts: Callable[[IntArray], FloatArray], rows: IntArray, density: FloatArray, report: Progress
    ) -> FloatArray:
        """Integrals of the potential over parts of panels `rows`, (len(rows), n_parts, n_conductors) m3.

        `parts` gives the packed frames (k, n_parts, FRAME_SIZE) of any of the panels, in coordinates about
        :attr:`centre`.
        """

    @property
    def centre(self) -> FloatArray:
        """Origin of the coordinates of parts, (3,) m."""

    def carried(self, kept: IntArray) -> Carried:
        """What the next pass may take over."""


class DenseSystem:
    """The full matrix and its Cholesky factorisation."""

    method = "dense Cholesky"

    def __init__(self, panels: Panels, carried: Carried | None, report: Progress) -> None:
        known = None if carried is None else carried.matrix
        self._panels = panels
        self.centre: FloatArray = panels.corners.reshape(-1, 3).mean(axis=0)
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
        matrix, notices = self.matrix, []
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
        density = np.ascontiguousarray(density)
        value = charges.T @ density
        return Solved(density, 0.5 * (value + value.T), notices=notices)

    def part_potentials(
        self, parts: Callable[[IntArray], FloatArray], rows: IntArray, density: FloatArray, report: Progress
    ) -> FloatArray:
        """See :class:`System`."""
        frames = panel_frames(self._panels.corners - self.centre, largest_rule=4)
        result = []
        step = max(8, 400_000 // len(frames))
        for first in range(0, len(rows), step):
            chosen = rows[first : first + step]
            packed = parts(chosen)
            moments = np.empty((len(chosen), packed.shape[1], density.shape[1]))
            child_potentials(packed, frames[chosen], frames, density, moments)
            result.append(moments)
            report("estimate", min(first + step, len(rows)), len(rows))
        return np.concatenate(result) if result else np.zeros((0, 4, density.shape[1]))

    def carried(self, kept: IntArray) -> Carried:
        """See :class:`System`."""
        return Carried(kept, matrix=self.matrix[np.ix_(kept, kept)])


def _cholesky(matrix: FloatArray, diagonal: float) -> tuple[FloatArray, int]:
    # the transpose of the lower triangle in C order is the upper one in Fortran order: no copy but this one
    copy = np.array(matrix.T, order="F")
    copy[np.diag_indices_from(copy)] *= diagonal
    factor, info = lapack.dpotrf(copy, lower=0, clean=0, overwrite_a=1)
    return factor, int(info)
