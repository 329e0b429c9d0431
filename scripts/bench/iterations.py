"""Iterations to a given accuracy of the capacitances, by shape and size: the counts must stay flat.

For each case the fast operator and the preconditioner are made and all conductors solved together. Printed are the
iterations until the estimated error of every C_ii is below 1e-4, 1e-6 and 1e-8 of it, the same to 1e-6 with the
diagonal alone as preconditioner, the memory of the preconditioner, and, as ratios of processor times taken in this run,
its set-up over that of the operator and one application over one product. What bounds it: the factorisations of the
patches, of order (patch size)^2 operations a panel, and for an application the reading of its values, twice.
"""

import argparse
import sys
import time
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

sys.path.insert(0, str(Path(__file__).resolve().parents[2] / "tests"))

from daraf.bem.adaptive import plan_next, run_pass
from daraf.bem.bisection import SPLIT_BOTH, split_panels
from daraf.bem.block_krylov import solve_block
from daraf.bem.capacitance import _judge, _prepare
from daraf.bem.operator import FastOperator
from daraf.bem.patches import stored_entries
from daraf.bem.preconditioner import factored_inverse
from published import shapes

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
Mesh = tuple[FloatArray, IntArray]

GAP = 0.01
SHARES = (1e-4, 1e-6, 1e-8)
#: Panels of the adaptive loop, before all are split alike.
ADAPTED = 2500


class Diagonal:
    """Preconditioner: the diagonal alone."""

    def __init__(self, operator: FastOperator) -> None:
        self.diagonal = operator.diagonal

    def apply(self, residual: FloatArray) -> FloatArray:
        """Divide."""
        return residual / self.diagonal[:, None]


def grid(n: int, m: int, origin: FloatArray, u: FloatArray, v: FloatArray) -> FloatArray:
    """A parallelogram in n x m panels, (n * m, 4, 3)."""
    i, j = np.meshgrid(np.arange(n), np.arange(m), indexing="ij")
    corners = [
        origin + ((i + a) / n)[..., None] * u + ((j + b) / m)[..., None] * v
        for a, b in ((0, 0), (1, 0), (1, 1), (0, 1))
    ]
    return np.stack(corners, axis=2).reshape(-1, 4, 3)


def sphere(n: int) -> Mesh:
    """Triangles of nearly equal size along the meridians."""
    rings = max(4, round((n / 4) ** 0.5))
    vertices, triangles = shapes.uv_sphere(1.0, 2 * rings, rings)
    return vertices[triangles][:, [0, 1, 2, 2]], np.zeros(len(triangles), dtype=np.int64)


def even_sheets(n: int) -> Mesh:
    """Two unit squares at a gap of 1 %, panels all alike."""
    side = round((n / 2) ** 0.5)
    e = np.eye(3)
    corners = np.concatenate([grid(side, side, k * GAP * e[2], e[0], e[1]) for k in (0, 1)])
    return corners, np.repeat([0, 1], side * side)


def graded_sheets(n: int) -> Mesh:
    """The same, refined by the adaptive loop, then all panels split until there are as many."""
    sheets = [shapes.plate(), shapes.moved(shapes.plate(), 0.0, 0.0, GAP)]
    plan, _, _, _ = _prepare(shapes.surface(sheets), "auto", 2**33)
    while len(plan.panels) < ADAPTED:
        result = run_pass(plan, lambda stage, done, total: None)
        judgement = _judge(result, None, np.full((2, 2), 0.01), 2)
        plan = plan_next(result, judgement.lines["discretisation"][:, :2] / judgement.targets**2)
    panels = plan.panels
    while 2 * len(panels) < n:
        panels, _ = split_panels(panels, np.full(len(panels), SPLIT_BOTH))
    return panels.corners, panels.conductor


def comb(n: int) -> Mesh:
    """64 bars of 0.1 x 1 x 0.1 at gaps of 0.03."""
    across = max(1, round((n / (64 * 42)) ** 0.5))
    e, bars = np.eye(3) * np.array([[0.1], [1.0], [0.1]]), []
    for k in range(64):
        at = np.array([0.13 * k, 0.0, 0.0])
        for axis in range(3):
            u, v = (axis + 1) % 3, (axis + 2) % 3
            count = [across, 10 * across, across]
            for side in (0, 1):
                bars.append(grid(count[u], count[v], at + side * e[axis], e[u], e[v]))
    corners = np.concatenate(bars)
    return corners, np.repeat(np.arange(64), len(corners) // 64)


CASES = {"sphere": sphere, "even sheets": even_sheets, "graded sheets": graded_sheets, "comb of 64": comb}


def first_below(history: list[FloatArray], values: FloatArray, share: float) -> str:
    """Iterations until all estimates are below a share of the values."""
    found = [k for k, error in enumerate(history) if k > 1 and (error <= share * values).all()]
    return str(found[0]) if found else "-"


def run(name: str, n: int, compare: bool) -> None:
    """Print one line."""
    corners, conductor = CASES[name](n)
    clock = time.process_time
    start = clock()
    operator = FastOperator(corners)
    made = clock() - start
    start = clock()
    inverse = factored_inverse(stored_entries(operator))
    factored = clock() - start
    right = operator.areas[:, None] * (conductor[:, None] == np.arange(int(conductor.max()) + 1))
    spent = []
    for work in (operator.apply, inverse.apply):
        times = []
        for _ in range(3):
            start = clock()
            work(right[:, :1])
            times.append(clock() - start)
        spent.append(min(times))
    wall = time.perf_counter()
    found = solve_block(operator, right, inverse, tolerance=SHARES[-1])
    wall = time.perf_counter() - wall
    values = np.diag(found.value)
    counts = [first_below(found.history, values, share) for share in SHARES]
    plain = "-"
    if compare:
        history = solve_block(operator, right, Diagonal(operator), tolerance=SHARES[1], most=150).history
        plain = first_below(history, values, SHARES[1])
    print(
        f"{name:14s} {len(corners):8d} {right.shape[1]:4d}   {'  '.join(f'{c:>4s}' for c in counts)}  {plain:>8s} "
        f"{inverse.mean_patch:6.0f} {inverse.bytes / len(corners):8.0f} {operator.bytes / len(corners):8.0f}   "
        f"{factored / made:6.2f} {spent[1] / spent[0]:6.2f}   {wall:6.1f}",
        flush=True,
    )


def main() -> int:
    """Run the cases."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--panels", type=float, nargs="+", default=[1e4, 1e5], metavar="N", help="about this many")
    parser.add_argument("--cases", nargs="+", choices=list(CASES), default=list(CASES), metavar="CASE")
    parser.add_argument("--no-diagonal", action="store_true", help="leave out the plain preconditioner")
    options = parser.parse_args()
    run("even sheets", 2000, False)  # compiles
    print("                                  iterations to    diagonal  patch  bytes a panel     set-up  apply   solve")
    print("case             panels cond.  1e-4  1e-6  1e-8  to 1e-6          own operator  /operator /product   s")
    for name in options.cases:
        for n in options.panels:
            run(name, int(n), not options.no_diagonal)
    return 0


if __name__ == "__main__":
    sys.exit(main())
