"""Print the values of tests/published/exact_rectangles.py: three graded meshes of each case, extrapolated.

The difference of the two extrapolations, coarse with middle and middle with fine, bounds the error of the second.
Takes about ten minutes on one core.
"""

import argparse
import sys
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "tests"))

from published.exact_rectangles import MODELS
from published.graded import richardson


def main() -> None:
    """Print matrices and how far two extrapolations differ."""
    parser = argparse.ArgumentParser(prog="make_rectangle_values", description=__doc__)
    parser.add_argument("names", nargs="*", metavar="CASE", help=f"of {', '.join(MODELS)}")
    parser.add_argument("--cells", type=int, nargs=3, default=(8, 12, 16), help="cells along a side")
    options = parser.parse_args()
    for name in options.names or MODELS:
        start = time.perf_counter()
        runs = [MODELS[name](n) for n in options.cells]
        coarse, middle, fine = runs
        first = richardson(coarse, middle, options.cells[1] / options.cells[0])
        second = richardson(middle, fine, options.cells[2] / options.cells[1])
        scale = np.sqrt(np.outer(np.diag(second), np.diag(second)))
        print(
            f'    "{name}": (\n        {np.array2string(second, separator=", ", precision=9, max_line_width=200)},\n'
            f"        {np.abs((second - first) / scale).max():.1e}  # asymmetric by "
            f"{np.abs((second - second.T) / scale).max():.0e}, {time.perf_counter() - start:.0f} s\n    ),",
            flush=True,
        )


if __name__ == "__main__":
    main()
