"""How well the estimates tell the true error, pass by pass, on bodies whose capacitance is known.

Three columns: the relative error of the Galerkin value; the estimate over that error (goal 0.5 to 2 from 100 panels
on); and the stated uncertainty over the error that is left once the estimate is added (below 1 the statement was
false). Round bodies stand as polyhedra for themselves, ``facets="true"``.
What bounds it: the reference values, good to 1e-8, or, where none is known, the last pass of the same run: rows near
it are left out.
"""

import argparse
import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[2] / "tests"))

from collections.abc import Callable

from daraf.bem import Pass, Surface, solve_capacitance
from daraf.bem.constants import FOUR_PI_EPSILON_0
from published import exact, shapes

BODIES: dict[str, tuple[Callable[[], Surface], float | None]] = {
    "cube": (lambda: shapes.surface([shapes.cube()]), exact.CUBE),
    "plate": (lambda: shapes.surface([shapes.plate()]), exact.plate(1, 1)),
    "disc of 24 sides": (lambda: shapes.surface([shapes.disc(1.0, 24)]), None),
    "two spheres": (
        lambda: shapes.surface([shapes.icosphere(1.0, 1), shapes.moved(shapes.icosphere(1.0, 1), z=2.5)]),
        None,
    ),
    "plates at 0.05": (lambda: shapes.surface([shapes.plate(), shapes.moved(shapes.plate(), z=0.05)]), None),
}
#: Relative accuracy of the run that stands for the exact value where none is known; its limit is better by far.
FINE = 2e-5


def passes(name: str, accuracy: float) -> tuple[list[Pass], float]:
    """Passes of a run, and the exact value of its first self entry, F."""
    make, known = BODIES[name]
    solution = solve_capacitance(make(), accuracy=accuracy, facets="true", want=[(0, 0)])
    if known is not None:
        return solution.passes, known * FOUR_PI_EPSILON_0
    return solution.passes, float(solution.maxwell[0, 0])


def ratios(found: Pass, exact_value: float) -> tuple[float, float, float]:
    """Relative error of the Galerkin value, estimate over it, and uncertainty over the error that remains."""
    missing = exact_value - found.maxwell[0, 0]
    left = missing - found.estimate[0, 0]
    return missing / exact_value, found.estimate[0, 0] / missing, found.spread[0, 0] / abs(left)


def main() -> None:
    """Print a table per body."""
    parser = argparse.ArgumentParser(prog="effectivity", description=__doc__)
    parser.add_argument("names", nargs="*", metavar="BODY", help=f"of {', '.join(BODIES)}")
    parser.add_argument(
        "--accuracy", type=float, default=FINE, metavar="X", help=f"of the last pass (default {FINE:g})"
    )
    options = parser.parse_args()
    for name in options.names or BODIES:
        found, value = passes(name, options.accuracy)
        last = "" if BODIES[name][1] is not None else "; its own last pass stands for the exact value"
        print(f"{name}{last}\n panels  error of Galerkin  estimate/error  uncertainty/error left")
        for row in found if BODIES[name][1] is not None else found[:-3]:
            error, effect, cover = ratios(row, value)
            print(f"{row.panels:7d} {error:18.2e} {effect:15.2f} {cover:23.1f}")


if __name__ == "__main__":
    main()
