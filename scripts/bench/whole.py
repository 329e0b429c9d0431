"""Whole solves with the fast operator: time by stage and peak memory, against LAPACK.

`--solve N K`: K balls a tenth of their radius apart, N panels in all, at 1e-3; prints the time of each stage and the
peak of the process. `--memory`: the peaks of several such solves, each in a process of its own, what
``daraf.bem.memory.fast_bytes`` foretold, and the two figures a panel that would fit them.
`--against-cholesky`: 100,000 panels against the Cholesky factorisation of a dense system of 15,000, taken from one of
6,000 with the cube of the size (floor: under 3 times).

Run alone on the machine. CPU time with one thread; wall time besides.
"""

import argparse
import subprocess
import sys
import time

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from daraf.bem import CapacitanceSolution, Surface, set_threads, solve_capacitance
from daraf.bem.memory import fast_bytes, peak_memory
from daraf.bem.threads import one_blas_thread

FloatArray = NDArray[np.float64]

ACCURACY = 1e-3
#: Panels and conductors of the solves whose memory is measured.
MEASURED = ((20_000, 2), (60_000, 2), (120_000, 2), (60_000, 8))


def ball(n: int) -> tuple[FloatArray, NDArray[np.int64]]:
    """Unit sphere of about n triangles: a cube's squares blown up, each cut in two."""
    k = round((n / 12) ** 0.5)
    line = np.tan(np.linspace(-1.0, 1.0, k + 1) * np.pi / 4)
    u, v = np.meshgrid(line, line, indexing="ij")
    face = np.stack([u, v, np.ones_like(u)], axis=-1)
    at = np.arange((k + 1) ** 2).reshape(k + 1, k + 1)
    a, b, c, d = (m.ravel() for m in (at[:-1, :-1], at[1:, :-1], at[1:, 1:], at[:-1, 1:]))
    cells = np.concatenate([np.column_stack([a, b, c]), np.column_stack([a, c, d])])
    points, triangles = [], []
    for axis in range(3):
        for sign in (1.0, -1.0):
            triangles.append((cells if sign > 0 else cells[:, ::-1]) + len(points) * face[:, :, 0].size)
            points.append(np.roll(face.reshape(-1, 3) * np.array([1.0, 1.0, sign]), axis, axis=1))
    vertices = np.concatenate(points)
    vertices /= np.linalg.norm(vertices, axis=1, keepdims=True)
    merged, place = np.unique(np.round(vertices, 12), axis=0, return_inverse=True)
    return merged, place.reshape(-1)[np.concatenate(triangles)]


def balls(n: int, n_conductors: int) -> Surface:
    """Balls in a square grid, n panels in all."""
    vertices, triangles = ball(n // n_conductors)
    side = int(np.ceil(n_conductors**0.5))
    shift = np.array([[2.1 * (k // side), 2.1 * (k % side), 0.0] for k in range(n_conductors)])
    every = np.arange(n_conductors)
    return Surface(
        (vertices[None] + shift[:, None]).reshape(-1, 3),
        (triangles[None] + len(vertices) * every[:, None, None]).reshape(-1, 3),
        np.repeat(every, len(triangles)),
        every,
    )


def solve(n: int, n_conductors: int) -> tuple[CapacitanceSolution, float]:
    """Solve, tell the stages as they end; the solution and its CPU time, s."""
    surface = balls(n, n_conductors)
    stage, began, cpu = "", time.perf_counter(), time.process_time()

    def told(now: str, done: float, total: float, note: str = "") -> None:
        nonlocal stage, began, cpu
        if now != stage:
            wall, used = time.perf_counter(), time.process_time()
            if stage:
                print(
                    f"  {stage:14} wall {wall - began:7.1f} s, CPU {used - cpu:7.1f} s, "
                    f"peak {peak_memory() / 2**30:.2f} GiB",
                    flush=True,
                )
            stage, began, cpu = now, wall, used

    start, wall = time.process_time(), time.perf_counter()
    solution = solve_capacitance(surface, accuracy=ACCURACY, method="fast", progress=told)
    told("", 1.0, 1.0)
    seconds = time.process_time() - start
    print(
        f"{len(solution.panels)} panels, {n_conductors} conductors: CPU {seconds:.1f} s, "
        f"wall {time.perf_counter() - wall:.1f} s, {solution.iterations} iterations in {len(solution.passes)} passes, "
        f"reached {solution.reached}; peak {peak_memory() / 2**30:.2f} GiB, foretold "
        f"{fast_bytes(len(solution.panels), n_conductors) / 2**30:.2f} GiB",
        flush=True,
    )
    return solution, seconds


def measure_memory() -> None:
    """Peaks of several solves, and the fit ``base + n (a + b columns)``."""
    rows, peaks = [], []
    for n, n_conductors in MEASURED:
        asked = [sys.executable, __file__, "--bare", str(n), str(n_conductors)]
        said = subprocess.run(asked, check=True, capture_output=True, text=True).stdout.split()
        panels, peak = int(said[-2]), int(said[-1])
        rows.append((1.0, panels, panels * n_conductors))
        peaks.append(peak)
        foretold = fast_bytes(panels, n_conductors)
        print(
            f"{panels:8} panels, {n_conductors} conductors: peak {peak / 2**20:.0f} MiB, {foretold / peak:.2f} foretold"
        )
    base, panel, column = np.linalg.lstsq(np.array(rows), np.array(peaks, dtype=np.float64), rcond=None)[0]
    print(f"fit: {base / 2**20:.0f} MiB, {panel:.0f} bytes a panel, {column:.0f} a panel and conductor")


def cholesky_seconds(n: int = 15_000, measured: int = 6_000) -> float:
    """CPU time of LAPACK's Cholesky factorisation, one thread, from a smaller one, s."""
    matrix = np.full((measured, measured), 1.0, order="F")
    matrix[np.diag_indices(measured)] = 2.0 * measured
    with one_blas_thread():
        best = np.inf
        for _ in range(2):
            copy, start = matrix.copy(order="F"), time.process_time()
            scipy.linalg.lapack.dpotrf(copy, overwrite_a=1)
            best = min(best, time.process_time() - start)
    return float(best * (n / measured) ** 3)


def main() -> None:
    """Run what is asked for."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--solve", nargs=2, type=int, metavar=("N", "K"))
    parser.add_argument("--bare", nargs=2, type=int, help=argparse.SUPPRESS)
    parser.add_argument("--memory", action="store_true")
    parser.add_argument("--against-cholesky", action="store_true")
    parser.add_argument("--threads", type=int, default=1)
    asked = parser.parse_args()
    set_threads(asked.threads)
    if asked.bare:
        solution = solve_capacitance(balls(*asked.bare), accuracy=ACCURACY, method="fast")
        print(len(solution.panels), peak_memory())
        return
    if asked.memory:
        measure_memory()
        return
    solve_capacitance(balls(2_500, 2), accuracy=0.05, method="fast")  # compiles
    if asked.solve:
        solve(*asked.solve)
    if asked.against_cholesky:
        _, seconds = solve(100_000, 2)
        dense = cholesky_seconds()
        print(f"Cholesky of 15,000 (from 6,000): {dense:.1f} s; ratio {seconds / dense:.2f}")


if __name__ == "__main__":
    main()
