"""Constant (P0) against discontinuous linear (P1) charge densities on the meshes that the adaptive loop makes.

Both degrees on the same panels of the cube and the plate. A linear function is built as a staircase: each panel is cut
into m x m, the functions 1, u and v take the values of the middles, and their Galerkin matrix is a sum of the entries
of the product's own exact integrals over the parts. What a staircase of m steps lacks of the linear function goes as
m^-2 (`--check` prints m = 2, 4 and 8 of a small mesh), so that m = 2 and 4 together give the value of P1.

"raw" is the Galerkin value. "limit" is the value extrapolated along the passes by Aitken's formula, for both degrees
alike; "loop" what the loop makes of P0 with its own estimate. The seconds are an estimate for P1 in favour of it: a
pair of panels costs twice that of P0 for its nine entries (closed forms for three densities share their logarithms),
and the factorisation 27 times.
"""

import argparse
import sys
import time
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from accuracy import Shape, shape_list
from numpy.typing import NDArray
from scipy.linalg import cho_factor, cho_solve
from threadpoolctl import threadpool_limits

sys.path.insert(0, str(Path(__file__).resolve().parents[2] / "tests"))

from daraf.bem import Panels, set_threads, solve_capacitance
from daraf.bem.bisection import SPLIT_U, SPLIT_V, halves
from daraf.bem.constants import FOUR_PI_EPSILON_0
from daraf.bem.galerkin import galerkin_matrix
from daraf.bem.panels import polygon_geometry

FloatArray = NDArray[np.float64]

#: Most parts of panels in one matrix.
MOST_PARTS = 9000
#: Time of a pair of panels for P1 over that for P0.
PAIR_COST = 2.0


@dataclass(frozen=True)
class Level:
    """One mesh: panels, values of P0 and P1 over 4 pi eps, extrapolated value of the loop, seconds of both."""

    panels: int
    constant: float
    linear: float
    loop: float
    seconds: tuple[float, float]


def parts_of(corners: FloatArray, steps: int) -> tuple[FloatArray, FloatArray]:
    """Parts of every panel, (n, m*m, 4, 3), and their middles along u and v from -1 to 1, (m*m, 2); m a power of 2."""
    parts, middles = corners[:, None], np.zeros((1, 2))
    width = 1.0
    while steps > 1:
        width *= 0.5
        steps //= 2
        for axis, direction in enumerate((SPLIT_U, SPLIT_V)):
            n, count = parts.shape[:2]
            parts = halves(parts.reshape(-1, 4, 3), direction).reshape(n, 2 * count, 4, 3)
            shift = np.zeros(2)
            shift[axis] = width
            middles = np.stack([middles - shift, middles + shift], axis=1).reshape(-1, 2)
    return parts, middles


def staircase_value(corners: FloatArray, steps: int) -> float:
    """Capacitance over 4 pi eps with 1, u and v on every panel, each in `steps` x `steps` stairs."""
    parts, middles = parts_of(corners, steps)
    n, count = parts.shape[:2]
    flat = parts.reshape(-1, 4, 3)
    lower = galerkin_matrix(flat)
    lower += np.tril(lower, -1).T
    shape = np.column_stack([np.ones(count), middles])
    # functions times parts from both sides, panel by panel
    half = np.einsum("ipjq,qb->ipjb", lower.reshape(n, count, n, count), shape)
    matrix = np.einsum("ipjb,pa->iajb", half, shape).reshape(3 * n, 3 * n)
    charges = (polygon_geometry(flat)[0].reshape(n, count) @ shape).ravel()
    return float(charges @ cho_solve(cho_factor(matrix, lower=True), charges))


def linear_value(corners: FloatArray) -> float:
    """The value of P1, from staircases of two and of four steps."""
    two, four = (staircase_value(corners, steps) for steps in (2, 4))
    return four + (four - two) / 3.0


def seconds_of(corners: FloatArray) -> tuple[float, float]:
    """Processor time of matrix and factorisation, measured for P0 and estimated for P1."""
    start = time.process_time()
    matrix = galerkin_matrix(corners)
    filled = time.process_time()
    cho_factor(matrix, lower=True)
    done = time.process_time()
    fill, factor = filled - start, done - filled
    return fill + factor, PAIR_COST * fill + 27.0 * factor


def levels(shape: Shape) -> list[Level]:
    """Meshes of the loop, until a staircase would be too large."""
    found: list[Level] = []
    asked = 0.2
    while True:
        solution = solve_capacitance(shape.surface(), accuracy=asked)
        asked /= 1.5
        panels: Panels = solution.panels
        if 16 * len(panels) > MOST_PARTS:
            return found
        if found and len(panels) == found[-1].panels:
            continue
        last, limit = (float(one[0, 0]) / FOUR_PI_EPSILON_0 for one in (solution.passes[-1].maxwell, solution.maxwell))
        found.append(Level(len(panels), last, linear_value(panels.corners), limit, seconds_of(panels.corners)))


def aitken(values: list[float]) -> float:
    """Limit of the last three values, nan where they do not settle."""
    if len(values) < 3:
        return float("nan")
    first, second, third = values[-3:]
    before, after = second - first, third - second
    return third + after**2 / (before - after) if before > after else float("nan")


def main() -> int:
    """Print the tables."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--check", action="store_true", help="only how the staircases of a small mesh converge")
    options = parser.parse_args()
    set_threads(1)
    with threadpool_limits(1):
        for shape in shape_list()[:2]:
            if options.check:
                corners = solve_capacitance(shape.surface(), accuracy=0.05).panels.corners
                values = [staircase_value(corners, steps) for steps in (2, 4, 8)]
                text = ", ".join(f"{value:.7f}" for value in values)
                print(f"{shape.name}, {len(corners)} panels: 2, 4, 8 steps {text}, P1 {linear_value(corners):.7f}")
                continue
            print(f"{shape.name}: relative errors")
            print("  panels unknowns:  P0 raw   limit    loop  seconds | unknowns:  P1 raw   limit  seconds, estimated")
            constants: list[float] = []
            linears: list[float] = []
            for one in levels(shape):
                constants.append(one.constant)
                linears.append(one.linear)
                errors = [
                    abs(value / shape.reference - 1.0)
                    for value in (one.constant, aitken(constants), one.loop, one.linear, aitken(linears))
                ]
                print(
                    f"  {one.panels:6d} {one.panels:8d}: {errors[0]:7.1e} {errors[1]:7.1e} {errors[2]:7.1e} "
                    f"{one.seconds[0]:8.4f} | {3 * one.panels:8d}: {errors[3]:7.1e} {errors[4]:7.1e} "
                    f"{one.seconds[1]:8.4f}",
                    flush=True,
                )
    return 0


if __name__ == "__main__":
    sys.exit(main())
