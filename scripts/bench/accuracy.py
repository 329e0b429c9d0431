"""Unknowns and time to a true error of 1e-3, 1e-4 and 1e-5, from the plain CAD triangulation, without hints.

Against it: an even Galerkin mesh of the same code, without extrapolation, at the same true error. Its error and time
are measured up to some 3,000 panels and carried on from there as powers (of its last two errors; n^2 for the matrix,
n^3 for its factorisation) up to 50,000 panels, a matrix of 20 GB; beyond, a lower bound is given.

The adaptive figure for an error is that of the cheapest accuracy asked from which on every tighter one stays below
that error: a lucky zero does not count. The time is that of all its passes. All times are processor time on one
thread, the least of several runs.

Floors: 300, 1,000 and 3,000 unknowns on cube and plate (1e-5: 6,000 over all passes); 1e-4 in at most 6 times the
time of a dense matrix of 3,000 and its factorisation; on cube and plate pair 1e-3 in a tenth of the even mesh's time.
"""

import argparse
import sys
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lapack
from threadpoolctl import threadpool_limits

sys.path.insert(0, str(Path(__file__).resolve().parents[2] / "tests"))

from daraf.bem import CapacitanceSolution, Surface, set_threads, solve_capacitance
from daraf.bem.constants import FOUR_PI_EPSILON_0
from daraf.bem.galerkin import galerkin_matrix
from daraf.bem.panels import polygon_geometry
from published import exact, shapes

FloatArray = NDArray[np.float64]

GOALS = (1e-3, 1e-4, 1e-5)
MOST_UNKNOWNS = dict(zip(GOALS, (300, 1000, 3000), strict=True))
GAP = 0.05
#: Between two unit squares 0.05 apart, Q/(V1 - V2) over 4 pi eps: own graded mesh of this project, two
#: discretisations of which agree to the digits given, 1.861900(2).
PLATE_PAIR = 1.861900
DENSE = 3000
MOST_EVEN = 50_000
REPEATS = 3
#: Longer runs are not repeated, s.
LONG = 2.0


@dataclass(frozen=True)
class Shape:
    """What is solved, and how it is panelled evenly with n panels a side, (m, 4, 3) and the conductor of each."""

    name: str
    surface: Callable[[], Surface]
    reference: float
    even: Callable[[int], tuple[FloatArray, NDArray[np.int64]]]
    sides: tuple[int, int]


@dataclass(frozen=True)
class Run:
    """One run: the accuracy asked, the true error, panels of the last pass and of all, seconds."""

    asked: float
    error: float
    unknowns: int
    all_passes: int
    seconds: float
    reached: bool


def square(n: int, origin: FloatArray, u: FloatArray, v: FloatArray) -> FloatArray:
    """A unit square in n x n panels, (n*n, 4, 3)."""
    i, j = np.meshgrid(np.arange(n), np.arange(n), indexing="ij")
    steps = [(i + a, j + b) for a, b in ((0, 0), (1, 0), (1, 1), (0, 1))]
    corners = [origin + (p[..., None] * u + q[..., None] * v) / n for p, q in steps]
    return np.stack(corners, axis=2).reshape(-1, 4, 3)


def even_cube(n: int) -> tuple[FloatArray, NDArray[np.int64]]:
    """Unit cube, n x n panels a face."""
    x, y, z = np.eye(3)
    zero = np.zeros(3)
    faces = [square(n, o, u, v) for a, u, v in ((x, y, z), (y, z, x), (z, x, y)) for o in (zero, a)]
    corners = np.concatenate(faces)
    return corners, np.zeros(len(corners), dtype=np.int64)


def even_plates(*heights: float) -> Callable[[int], tuple[FloatArray, NDArray[np.int64]]]:
    """Unit squares at these heights, n x n panels each, every one a conductor."""

    def make(n: int) -> tuple[FloatArray, NDArray[np.int64]]:
        x, y, z = np.eye(3)
        corners = np.concatenate([square(n, h * z, x, y) for h in heights])
        return corners, np.repeat(np.arange(len(heights)), n * n)

    return make


def shape_list() -> list[Shape]:
    """Cube, plate, plate pair."""
    plate = shapes.plate()
    pair = [plate, shapes.moved(plate, z=GAP)]
    return [
        Shape("cube", lambda: shapes.surface([shapes.cube()]), exact.CUBE, even_cube, (11, 22)),
        Shape("plate", lambda: shapes.surface([plate]), exact.plate(1, 1), even_plates(0.0), (27, 55)),
        Shape("plates, gap 0.05", lambda: shapes.surface(pair), PLATE_PAIR, even_plates(0.0, GAP), (19, 38)),
    ]


def value_of(matrix: FloatArray) -> float:
    """Of one conductor, or between two."""
    return float(matrix[0, 0]) if len(matrix) == 1 else exact.pair_capacitance(matrix)


def _timed(shape: Shape, asked: float) -> tuple[CapacitanceSolution, float]:
    surface, least = shape.surface(), np.inf
    for _ in range(REPEATS):
        start = time.process_time()
        solution = solve_capacitance(surface, accuracy=asked)
        least = min(least, time.process_time() - start)
        if least > LONG:
            break
    return solution, least


def adaptive_runs(shape: Shape, tightest: float, longest: float) -> list[Run]:
    """Accuracies asked in steps of two, until `tightest` or until a run takes `longest` seconds."""
    runs: list[Run] = []
    asked = 0.04
    while asked >= tightest and (not runs or runs[-1].seconds < longest):
        solution, took = _timed(shape, asked)
        error = abs(value_of(solution.maxwell / FOUR_PI_EPSILON_0) / shape.reference - 1.0)
        panels = [one.panels for one in solution.passes]
        runs.append(Run(asked, error, panels[-1], sum(panels), took, solution.reached))
        if not solution.reached:
            break
        asked /= 2.0
    return runs


def even_run(shape: Shape, n: int) -> tuple[int, float, float, float]:
    """Panels, relative error, seconds for the matrix and for its factorisation."""
    corners, conductor = shape.even(n)
    start = time.process_time()
    matrix = galerkin_matrix(corners)
    filled = time.process_time()
    charges = polygon_geometry(corners)[0][:, None] * (conductor[:, None] == np.arange(conductor.max() + 1))
    factor, info = lapack.dpotrf(matrix.T, lower=0, clean=0, overwrite_a=1)
    assert info == 0
    density = lapack.dpotrs(factor, charges, lower=0)[0]
    done = time.process_time()
    error = abs(value_of(charges.T @ density) / shape.reference - 1.0)
    return len(corners), error, filled - start, done - filled


def report(shape: Shape, tightest: float, longest: float) -> None:
    """Print the table of one shape."""
    coarse, *fines = (even_run(shape, n) for n in (shape.sides[0], *[shape.sides[1]] * REPEATS))
    fine = min(fines, key=lambda one: one[2] + one[3])
    order = np.log(coarse[1] / fine[1]) / np.log(fine[0] / coarse[0])
    panels, error, matrix, factor = fine
    print(f"{shape.name}: even mesh of {panels} panels {error:.1e} off (order {order:.2f}), {matrix + factor:.2f} s")
    scale = DENSE / panels
    dense = matrix * scale**2 + factor * scale**3
    runs = adaptive_runs(shape, tightest, longest)
    for run in runs:
        print(
            f"  asked {run.asked:7.1e}: off {run.error:7.1e}, {run.unknowns:5d} unknowns, {run.all_passes:6d} over "
            f"all passes, {run.seconds:6.2f} s{'' if run.reached else ', not reached'}"
        )
    for goal in GOALS:
        kept = [k for k in range(len(runs)) if all(run.error <= goal for run in runs[k:])]
        wanted = panels * max((error / goal) ** (1.0 / order), 1e-3)
        grow = min(wanted, MOST_EVEN) / panels
        cost = matrix * grow**2 + factor * grow**3
        over = "more than " if wanted > MOST_EVEN else ""
        even = f"even mesh {over}{panels * grow:.0f} panels, {cost:.3g} s"
        if not kept:
            print(f"  {goal:g}: not reached; {even}")
            continue
        run = runs[kept[0]]
        limit = "" if shape.name.startswith("plates") else f" (floor {MOST_UNKNOWNS[goal]})"
        print(
            f"  {goal:g}: {run.unknowns} unknowns{limit}, {run.all_passes} over all passes, {run.seconds:.2f} s = "
            f"{run.seconds / dense:.2f} x a dense {DENSE}; {even}, {over}{cost / run.seconds:.0f} times as long"
        )


def main() -> int:
    """Print the tables."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--tightest", type=float, default=5e-6, metavar="X", help="accuracy asked last (default 5e-6)")
    parser.add_argument("--longest", type=float, default=60.0, metavar="S", help="no run after one that took so long")
    options = parser.parse_args()
    solve_capacitance(shapes.surface([shapes.cube()]), accuracy=0.05)  # compiles
    set_threads(1)
    with threadpool_limits(1):
        for shape in shape_list():
            report(shape, options.tightest, options.longest)
    return 0


if __name__ == "__main__":
    sys.exit(main())
