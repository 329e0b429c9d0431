"""One product of the fast operator against a general-purpose fast multipole library on as many points.

Four geometries at 100,000 and at 1,000,000 panels, one thread, CPU time. The yardstick is fmm3dpy (pip install
fmm3dpy) at its eps 1e-3 on the centroids; its error there is 2e-5 to 3e-5. Both errors are against direct sums on
sampled targets, charges of random sign.

Where the time goes, and its bound: the near field streams its stored entries once (4 bytes and, for one column,
4 floating-point operations an entry: bound by memory; for eight columns by matrix products); translations are
matrix products of 2 K^2 operations a pair of cells. The table gives both against what this machine streams and
multiplies in the same run.

Setup is tree, lists, translations, moments and the near integrals; the yardstick's own product includes its setup but
works on points, which have no integrals: the ratio without these is printed besides. Whole solves: whole.py.

Floors: 40 times as fast, 25 times with the setup spread over 30 products, 25 times a column for eight columns;
time and memory per panel at 1,000,000 no more than 1.4 times those at 100,000.
"""

import argparse
import os
import time
from collections.abc import Callable

os.environ.setdefault("OMP_NUM_THREADS", "1")

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from daraf.bem import set_threads
from daraf.bem.operator import FastOperator, plan_operator
from daraf.bem.threads import one_blas_thread

FloatArray = NDArray[np.float64]

PRODUCTS = 30


def grid(u: FloatArray, v: FloatArray, place: Callable[[FloatArray, FloatArray], FloatArray]) -> FloatArray:
    """Quadrilaterals between lines of two parameters."""
    x = place(*np.meshgrid(u, v, indexing="ij"))
    return np.stack([x[:-1, :-1], x[1:, :-1], x[1:, 1:], x[:-1, 1:]], axis=2).reshape(-1, 4, 3)


def sphere(n: int) -> FloatArray:
    """Cube blown up to a sphere, its squares cut into triangles."""
    k = round((n / 12) ** 0.5)
    line = np.tan(np.linspace(-1.0, 1.0, k + 1) * np.pi / 4)
    face = grid(line, line, lambda u, v: np.stack([u, v, np.ones_like(u)], axis=-1))
    faces = np.concatenate([np.roll(sign * face[:, ::sign], k, axis=2) for k in range(3) for sign in (1, -1)])
    faces /= np.linalg.norm(faces, axis=2, keepdims=True)
    return np.concatenate([faces[:, [0, 1, 2, 2]], faces[:, [0, 2, 3, 3]]])


def plates(n: int, grade: float = 1.0) -> FloatArray:
    """Two unit plates at 1 % gap; lines crowded toward the rims as the power `grade` of their distance."""
    k = round((n / 2) ** 0.5)
    line = np.linspace(0.0, 1.0, k + 1)
    half = 0.5 * (2.0 * np.minimum(line, 1.0 - line)) ** grade
    line = np.where(line < 0.5, half, 1.0 - half)
    one = grid(line, line, lambda u, v: np.stack([u, v, np.zeros_like(u)], axis=-1))
    return np.concatenate([one, one + np.array([0.0, 0.0, 0.01])])


def tube(n: int) -> FloatArray:
    """Fifty times as long as wide, panels about square."""
    k = round((n * np.pi / 50) ** 0.5)
    lines = np.linspace(0.0, 50.0, round(n / k) + 1)
    turns = np.linspace(0.0, 2.0 * np.pi, k + 1)
    return grid(turns, lines, lambda u, v: np.stack([0.5 * np.cos(u), 0.5 * np.sin(u), v], axis=-1))


SHAPES: dict[str, Callable[[int], FloatArray]] = {
    "sphere": sphere,
    "plates": plates,
    "tube": tube,
    "graded": lambda n: plates(n, 3.0),
}


def least(task: Callable[[], object], times: int) -> float:
    """Least CPU time, s."""
    best = np.inf
    for _ in range(times):
        start = time.process_time()
        task()
        best = min(best, time.process_time() - start)
    return float(best)


def library(points: FloatArray, charges: FloatArray, sampled: NDArray[np.int64], times: int) -> tuple[float, float]:
    """CPU time and relative error of the yardstick, charges (n_columns, n)."""
    import fmm3dpy  # here, so that --memory and --whole need no further package

    x, n_columns = np.ascontiguousarray(points.T), len(charges)
    given = charges if n_columns > 1 else charges[0]
    found = {}

    def task() -> None:
        found["out"] = fmm3dpy.lfmm3d(eps=1e-3, sources=x, charges=given, pg=1, nd=n_columns)

    seconds = least(task, times)
    values = np.atleast_2d(found["out"].pot)[:, sampled]
    exact = np.empty_like(values)
    for k, i in enumerate(sampled):
        r = np.linalg.norm(points - points[i], axis=1)
        r[i] = np.inf
        exact[:, k] = charges @ (1.0 / r)
    # releases of the library differ by a factor of 4 pi
    error = min(np.linalg.norm(f * values - exact) for f in (1.0, 4.0 * np.pi)) / np.linalg.norm(exact)
    return seconds, float(error)


def machine() -> tuple[float, float]:
    """Bytes/s of a read that no cache holds, operations/s of a single-precision product, one thread."""
    read = np.ones(60_000_000, dtype=np.float32)
    a, b = (np.ones((1500, 1500), dtype=np.float32) for _ in range(2))
    with one_blas_thread():
        stream = read.nbytes / least(lambda: scipy.linalg.blas.sasum(read), 5)
        gemm = 2.0 * 1500**3 / least(lambda: a @ b, 5)
    return stream, gemm


def case(name: str, n: int, with_library: bool) -> tuple[float, float]:
    """Print one case; returns time and bytes per panel."""
    corners = SHAPES[name](n)
    n = len(corners)
    rng = np.random.default_rng(0)
    signs = rng.choice([-1.0, 1.0], (n, 8))
    start = time.process_time()
    plan = plan_operator(corners, 1e-5)
    listed = time.process_time()
    operator = FastOperator(corners, plan=plan)
    built = time.process_time()
    density = signs / operator.areas[:, None]
    operator.apply(density[:, :1])
    operator.apply(density)
    one = least(lambda: operator.apply(density[:, :1]), 5)
    eight = least(lambda: operator.apply(density), 3) / 8
    error = operator.check(density[:, :1], n_targets=50)
    charges = operator._charges(density[:, :1])[0]
    near = least(lambda: operator.near.multiply(charges), 3)
    multipoles = operator.far.multipoles(charges)
    far = least(lambda: operator.far.locals(multipoles), 3)
    kept = operator.far.translations[1][2 * plan.pairs.translation, 1].astype(np.float64)
    print(
        f"{name:8} {n:8} panels: product {one * 1e3:7.1f} ms, a column of eight {eight * 1e3:7.1f} ms, "
        f"error {error:.1e}; "
        f"lists {listed - start:.1f} s, moments and near integrals {built - listed:.1f} s; "
        f"{operator.bytes / n:.0f} bytes a panel (foretold {plan.bytes / n:.0f})"
    )
    print(
        f"         near {near * 1e3:.1f} ms, {plan.near_entries / n:.0f} entries a panel, "
        f"{4 * plan.near_entries / near / 1e9:.1f} GB/s; translations {far * 1e3:.1f} ms, "
        f"{4 * (kept**2).sum() / n:.0f} operations a panel, {4 * (kept**2).sum() / far / 1e9:.0f} GF/s",
        flush=True,
    )
    if with_library:
        points = corners.mean(axis=1)
        sampled = rng.choice(n, 50, replace=False)
        its_one, its_error = library(points, np.ascontiguousarray(signs[:, :1].T), sampled, 2)
        its_eight, _ = library(points, np.ascontiguousarray(signs.T), sampled, 1)
        print(
            f"         library {its_one:.2f} s, a column of eight {its_eight / 8:.2f} s, error {its_error:.1e}; "
            f"ratios: product {its_one / one:.0f}, with setup over {PRODUCTS} products "
            f"{PRODUCTS * its_one / (PRODUCTS * one + built - start):.0f} (the lists alone counted as setup: "
            f"{PRODUCTS * its_one / (PRODUCTS * one + listed - start):.0f}), "
            f"a column of eight {its_eight / 8 / eight:.0f}",
            flush=True,
        )
    return one / n, operator.bytes / n


def main() -> None:
    """Run the cases asked for."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--shapes", nargs="+", default=list(SHAPES), choices=list(SHAPES))
    parser.add_argument("--panels", nargs="+", type=int, default=[100_000, 1_000_000])
    parser.add_argument("--without-library", action="store_true")
    asked = parser.parse_args()
    set_threads(1)
    stream, gemm = machine()
    print(f"this machine now: {stream / 1e9:.1f} GB/s read, {gemm / 1e9:.0f} GF/s single precision, one thread")
    operator = FastOperator(SHAPES["sphere"](2000))  # compiles
    operator.apply(np.ones((operator.shape[0], 8)))
    operator.check(np.ones((operator.shape[0], 1)))
    for name in asked.shapes:
        results = [case(name, n, not asked.without_library) for n in asked.panels]
        if len(results) > 1:
            time_growth, memory_growth = (results[-1][k] / results[0][k] for k in (0, 1))
            print(f"         growth per panel: time {time_growth:.2f}, memory {memory_growth:.2f}")


if __name__ == "__main__":
    main()
