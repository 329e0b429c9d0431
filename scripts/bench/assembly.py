"""The speed floor: filling the dense matrix of 4,000 panels costs at most 4 Cholesky factorisations of 8,000.

Both are timed in this run, with one thread and with all. Then: pairs per second and core by integration regime, and
what bounds each, against rates measured in this run (matrix product, memory, reciprocal square roots, logarithms).
The exit code is 1 if the floor is missed on the evenly panelled block with all threads.
"""

import argparse
import math
import sys
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lapack
from threadpoolctl import threadpool_limits

sys.path.insert(0, str(Path(__file__).resolve().parents[2] / "tests"))

from daraf.bem import pairs as rules
from daraf.bem import set_threads
from daraf.bem.frames import CENTROID, RADIUS, panel_frames
from daraf.bem.galerkin import galerkin_matrix
from daraf.bem.jit import kernel, parallel_kernel, prange
from daraf.bem.polygon import polygon_distance, polygon_potential
from published import shapes

FloatArray = NDArray[np.float64]

FLOOR = 4.0
PANELS, FACTORED = 4000, 8000
SAMPLE = 20_000
#: Operations per pair of points of a far pair: 3 differences, 5 for the square, root, quotient, 1 for the sum.
FAR_FLOPS = 11
NAMES = ["far 2x2", "far 3x3", "far 4x4", "middle 3x3", "middle 4x4", "middle 5x5", "close"]
_FAR, _MIDDLE = np.array(rules._FAR), np.array(rules._MIDDLE)


@kernel
def regime_of(source, target, far, middle):
    """Which rule `pair_integral` takes, 0 to 6."""
    x = source[CENTROID] - target[CENTROID]
    y = source[CENTROID + 1] - target[CENTROID + 1]
    z = source[CENTROID + 2] - target[CENTROID + 2]
    ratio = math.sqrt(x * x + y * y + z * z) / (source[RADIUS] + target[RADIUS])
    for k in range(3):
        if ratio > far[k]:
            return k
    outer, inner = (source, target) if source[RADIUS] <= target[RADIUS] else (target, source)
    ratio = polygon_distance(inner, outer[CENTROID], outer[CENTROID + 1], outer[CENTROID + 2]) / outer[RADIUS]
    for k in range(3):
        if ratio > middle[k]:
            return 3 + k
    return 6


@parallel_kernel
def regimes(frames, far, middle, out):
    """Regime of every pair j < i; 255 elsewhere."""
    for i in prange(len(frames)):
        for j in range(i):
            out[i, j] = regime_of(frames[i], frames[j], far, middle)


@kernel
def sum_pairs(frames, i, j):
    """Integrals of listed pairs, one thread."""
    total = 0.0
    for k in range(len(i)):
        total += rules.pair_integral(frames[i[k]], frames[j[k]])
    return total


@kernel
def sum_potentials(frames, i, j):
    """One closed-form potential per listed pair, one thread."""
    total = 0.0
    for k in range(len(i)):
        p = frames[j[k]]
        total += polygon_potential(frames[i[k]], p[CENTROID], p[CENTROID + 1], p[CENTROID + 2])
    return total


@kernel(fastmath={"reassoc", "contract", "arcp", "nsz"})
def sum_reciprocal_roots(x):
    """1/sqrt of each, as fast as the compiler can make it."""
    total = 0.0
    for k in range(len(x)):
        total += 1.0 / math.sqrt(x[k])
    return total


@kernel
def sum_logarithms(x):
    """A logarithm of each."""
    total = 0.0
    for k in range(len(x)):
        total += math.log(x[k])
    return total


def seconds(work: Callable[[], object], repeat: int, clock: Callable[[], float] = time.perf_counter) -> float:
    """Least time of some calls: what else runs can only lengthen it."""
    times = []
    for _ in range(repeat):
        start = clock()
        work()
        times.append(clock() - start)
    return min(times)


def core_seconds(work: Callable[[], object], repeat: int) -> float:
    """Least processor time of some calls on one thread: other programs' share is left out."""
    return seconds(work, repeat, time.thread_time)


def block_panels(grade: float) -> FloatArray:
    """A 1 x 1 x 2 block in 20 x 20 x 40 quadrilaterals, crowded toward the edges as t**grade."""

    def nodes(n: int, length: float) -> FloatArray:
        t = np.linspace(0.0, 1.0, n // 2 + 1) ** grade
        return np.concatenate([0.5 * t, 1.0 - 0.5 * t[-2::-1]]) * length

    size, count = (1.0, 1.0, 2.0), (20, 20, 40)
    faces = []
    for axis in range(3):
        u, v = [k for k in range(3) if k != axis]
        a, b = nodes(count[u], size[u]), nodes(count[v], size[v])
        grid = np.zeros((len(a) - 1, len(b) - 1, 4, 3))
        for k, (du, dv) in enumerate(((0, 0), (1, 0), (1, 1), (0, 1))):
            grid[:, :, k, u] = a[du : len(a) - 1 + du, None]
            grid[:, :, k, v] = b[None, dv : len(b) - 1 + dv]
        for at in (0.0, size[axis]):
            face = grid.copy()
            face[..., axis] = at
            faces.append(face.reshape(-1, 4, 3))
    return np.concatenate(faces)


def meshes() -> dict[str, FloatArray]:
    """Panels of the three meshes, (4000, 4, 3) m each."""
    vertices, triangles = shapes.uv_sphere(1.0, 50, 41)
    return {
        "block, even quadrilaterals": block_panels(1.0),
        "block, graded quadrilaterals": block_panels(3.0),
        "sphere, triangles": vertices[triangles][:, [0, 1, 2, 2]],
    }


def factorisation(threads: int, repeat: int) -> float:
    """Time of one Cholesky factorisation, s."""
    rng = np.random.default_rng(1)
    matrix = np.asfortranarray(rng.random((FACTORED, FACTORED)))
    matrix[np.diag_indices(FACTORED)] += FACTORED
    with threadpool_limits(threads):
        times = []
        for _ in range(repeat):
            work = matrix.copy(order="F")
            start = time.perf_counter()
            info = lapack.dpotrf(work, lower=0, clean=0, overwrite_a=1)[1]
            times.append(time.perf_counter() - start)
            assert info == 0
    return min(times)


def rates(repeat: int) -> dict[str, float]:
    """What one core does at best, per second."""
    a = np.random.default_rng(2).random((1500, 1500)) + 0.5
    line = np.random.default_rng(3).random(1 << 25) + 0.5
    target = np.empty_like(line)
    small = line[:4096]
    for sum_of in (sum_reciprocal_roots, sum_logarithms):
        sum_of(small)
    with threadpool_limits(1):
        return {
            "flops": 2.0 * 1500**3 / core_seconds(lambda: a @ a, repeat),
            "bytes": 16.0 * len(line) / core_seconds(lambda: np.copyto(target, line), repeat),
            "roots": 512 * 4096 / core_seconds(lambda: [sum_reciprocal_roots(small) for _ in range(512)], repeat),
            "logarithms": 512 * 4096 / core_seconds(lambda: [sum_logarithms(small) for _ in range(512)], repeat),
        }


def by_regime(corners: FloatArray, best: dict[str, float], repeat: int) -> None:
    """Print pairs per second and core by regime, and against what bounds them."""
    frames = panel_frames(corners)
    kind = np.full((len(frames), len(frames)), 255, dtype=np.uint8)
    regimes(frames, _FAR, _MIDDLE, kind)
    set_threads(1)
    rng = np.random.default_rng(4)
    total, costs = len(frames) * (len(frames) - 1) / 2, []
    for k, name in enumerate(NAMES):
        i, j = np.nonzero(kind == k)
        if not len(i):
            continue
        # ascending, as the assembly walks: its rows stay in the cache
        chosen = np.sort(rng.choice(len(i), min(SAMPLE, len(i)), replace=False))
        pair = (np.ascontiguousarray(i[chosen]), np.ascontiguousarray(j[chosen]))
        sum_pairs(frames, *pair)
        each = core_seconds(lambda p=pair: sum_pairs(frames, *p), repeat) / len(chosen)
        sum_potentials(frames, *pair)
        potential = core_seconds(lambda p=pair: sum_potentials(frames, *p), repeat) / len(chosen)
        costs.append((name, len(i), each, potential))
    work = sum(n * each for _, n, each, _ in costs)
    print("  regime       share of pairs  of time   pairs/s/core  bound")
    for name, n, each, potential in costs:
        bound = _bound(name, each, potential, best)
        print(f"  {name:11s} {n / total:12.2%} {n * each / work:10.1%} {1 / each:12.3g}    {bound}")
    set_threads()


def _bound(name: str, each: float, potential: float, best: dict[str, float]) -> str:
    if name.startswith("far"):
        points = int(name[4]) ** 4
        return (
            f"{points} roots a pair: {points / each / best['roots']:.0%} of the rate of 1/sqrt, "
            f"{FAR_FLOPS * points / each / best['flops']:.0%} of the matrix product's flops"
        )
    if name.startswith("middle"):
        points = int(name[7]) ** 2
        return (
            f"{points} potentials a pair, {potential * 1e9:.0f} ns each alone; their 4 logarithms take "
            f"{4 * points / best['logarithms'] / each:.0%} of it"
        )
    return f"as much as {each / potential:.0f} closed-form potentials of {potential * 1e9:.0f} ns"


def main() -> int:
    """Time, print, judge."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--repeat", type=int, default=3, metavar="N", help="timings of each kind (default 3)")
    repeat = parser.parse_args().repeat
    galerkin_matrix(block_panels(1.0)[:50])  # compiles
    most = set_threads()
    even = "block, even quadrilaterals"
    floor: dict[tuple[str, int], float] = {}
    for threads in sorted({1, most}):
        set_threads(threads)
        one = factorisation(threads, repeat)
        print(f"{threads} thread(s): Cholesky of {FACTORED}: {one:.2f} s ({FACTORED**3 / 3e9 / one:.0f} GF/s)")
        for name, corners in meshes().items():
            assert len(corners) == PANELS
            took = seconds(lambda c=corners: galerkin_matrix(c), repeat)
            floor[name, threads] = took / one
            speed = PANELS * (PANELS + 1) / 2 / took / threads
            print(f"  {name:30s} {took:6.2f} s = {took / one:5.2f} factorisations; {speed:.3g} pairs/s/core")
    best = rates(repeat)
    print(
        f"one core: matrix product {best['flops'] / 1e9:.0f} GF/s, copy {best['bytes'] / 1e9:.1f} GB/s, "
        f"1/sqrt {best['roots'] / 1e9:.2f} G/s, logarithm {best['logarithms'] / 1e6:.0f} M/s"
    )
    print(f"memory bounds nothing: 8 bytes written a pair, {best['bytes'] / 16:.2g} pairs/s")
    for name, corners in meshes().items():
        print(name)
        by_regime(corners, best, repeat)
    good = floor[even, most] <= FLOOR
    word = "met" if good else "MISSED"
    print(f"floor {FLOOR:g}: {floor[even, most]:.2f} with {most} thread(s), {floor[even, 1]:.2f} with one: {word}")
    return 0 if good else 1


if __name__ == "__main__":
    sys.exit(main())
