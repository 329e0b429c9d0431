"""Splitting panels in the direction that asks for it against splitting them both ways always, on the exact set.

Each case is solved at 0.5 % asked. The same loop then runs again with every marked panel split both ways, asked for
more until its Galerkin values are as good. Both start from the same panels on the same surface and only split them, so
that the self entries rise with every pass toward the same limit: the mesh with the larger mean self entry is the
better one, whatever the true value. Printed: panels of the last directional pass, those that the isotropic loop takes
for the same mean (between two of its passes along a power of what is missing), their ratio, and the largest true error
of both at the accuracy asked, as a share of it.

Floor: a ratio of 1, never worse than isotropic on any case; the cases below it are listed.
"""

import argparse
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

sys.path.insert(0, str(Path(__file__).resolve().parents[2] / "tests"))

from daraf.bem import CapacitanceSolution, adaptive, capacitance, solve_capacitance
from daraf.bem.bisection import SPLIT_BOTH
from daraf.bem.refinement import choose_splits
from published.cases import CASES, Case
from published.covering import part_of

FloatArray = NDArray[np.float64]

ASKED = 0.005
MOST = 6000
#: Ratios above this count as equal: the interpolation between passes is no better.
SAME = 0.98
#: What is missing is taken as this share of the last gain at least, so that its logarithm exists.
LEAST_MISSING = 0.1


def both_ways(worth: FloatArray, share: float) -> NDArray[np.int64]:
    """Mark the same panels as the loop does, each for a split in both directions."""
    return np.where(choose_splits(worth, share) > 0, SPLIT_BOTH, 0)


@contextmanager
def isotropic() -> Iterator[None]:
    """The loop splits both ways meanwhile, and stops at MOST panels."""
    kept = adaptive.choose_splits, capacitance.MOST_PANELS
    adaptive.choose_splits, capacitance.MOST_PANELS = both_ways, MOST
    try:
        yield
    finally:
        adaptive.choose_splits, capacitance.MOST_PANELS = kept


def true_error(case: Case, solution: CapacitanceSolution) -> float:
    """Largest true error over what was asked, of the entries whose value is known."""
    exact = case.reference()
    value, _ = case.observe(solution)
    floor = np.sqrt(np.outer(np.diag(exact), np.diag(exact))) if exact.ndim == 2 else np.nanmax(np.abs(exact))
    allowed = ASKED * np.maximum(np.abs(exact), 1e-3 * floor)
    return float(np.nanmax(np.abs(value - exact) / allowed))


def curve(solution: CapacitanceSolution, limit: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Panels and mean self entry of each pass, relative to these limits."""
    means = [float(np.mean(np.diag(one.maxwell) / limit)) for one in solution.passes]
    return np.array([one.panels for one in solution.passes], dtype=np.float64), np.array(means)


def panels_for(mean: float, limit: float, panels: FloatArray, means: FloatArray) -> tuple[float, bool]:
    """Panels at which a loop has this mean, and whether it got there."""
    if means[-1] < mean:
        return float(panels[-1]), False
    missing = np.log(np.maximum(limit - means, LEAST_MISSING * (limit - means[-1])))
    return float(np.exp(np.interp(-np.log(limit - mean), -missing, np.log(panels)))), True


@dataclass(frozen=True)
class Outcome:
    """Panels of both at the same Galerkin value, whether the isotropic loop got there, true errors over asked."""

    name: str
    directional: float
    even: float
    met: bool
    errors: tuple[float, float]

    @property
    def ratio(self) -> float:
        """How many times as many panels the isotropic loop takes."""
        return self.even / self.directional


def compare(case: Case) -> Outcome:
    """Run both loops on one case."""
    surface = case.surface()
    first = solve_capacitance(surface, accuracy=ASKED)
    limits = np.diag(first.maxwell)
    panels, means = curve(first, limits)
    with isotropic():
        second = solve_capacitance(surface, accuracy=ASKED)
        error = true_error(case, second)
        asked = ASKED
        while True:
            more, values = curve(second, limits)
            if values[-1] >= means[-1] or not second.reached:
                break
            asked *= 0.5
            second = solve_capacitance(surface, accuracy=asked)
    limit = max(1.0, float(values[-1]) * (1.0 + 1e-6), float(means[-1]) * (1.0 + 1e-6))
    even, met = panels_for(float(means[-1]), limit, more, values)
    return Outcome(case.name, float(panels[-1]), even, met, (true_error(case, first), error))


def main() -> int:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--part", default="1/1", metavar="K/N", help="every N-th case from the K-th on")
    parser.add_argument("cases", nargs="*", metavar="CASE", help="by name; all by default")
    options = parser.parse_args()
    part, parts = (int(word) for word in options.part.split("/"))
    chosen = [case for case in CASES if case.name in options.cases] or part_of(CASES, part, parts)
    print(f"{'case':20s} directional  isotropic  ratio   true error over asked: directional, isotropic")
    found = []
    for case in chosen:
        one = compare(case)
        found.append(one)
        sign = " " if one.met else ">"
        print(
            f"{one.name:20s} {one.directional:11.0f} {sign}{one.even:10.0f} {sign}{one.ratio:5.2f}"
            f"   {one.errors[0]:.2f}, {one.errors[1]:.2f}",
            flush=True,
        )
    worse = [one for one in found if one.met and one.ratio < SAME]
    print(f"{len(found)} cases, ratio median {np.median([one.ratio for one in found]):.2f}")
    print("below 1: " + (", ".join(f"{one.name} ({one.ratio:.2f})" for one in worse) or "none"))
    return 0


if __name__ == "__main__":
    sys.exit(main())
