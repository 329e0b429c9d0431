"""Where the fast operator overtakes the dense matrix: one pass (assembly, solution, estimate) of two balls.

Processor time of one thread, the least of two, and the ratio. The dense pass is bound by the pair integrals
(n^2) and the factorisation (n^3), the fast one by the near integrals (n).
Run with ``.venv/bin/python scripts/bench/crossover.py``.
"""

import sys
import time

import numpy as np

sys.path.insert(0, "tests")

from daraf.bem import Panels, set_threads
from daraf.bem.indicator import two_level_indicator
from daraf.bem.system import make_system
from published import shapes


def balls(n):
    """Two balls of n panels each: the first n facets of a fine ball."""
    vertices, triangles = shapes.icosphere(1.0, 4)
    one = vertices[triangles][:n, [0, 1, 2, 2]]
    zero = np.zeros(2 * n, np.int64)
    conductor = np.repeat([0, 1], n)
    return Panels(np.concatenate([one, one + np.array([2.3, 0.0, 0.0])]), np.full(2 * n, 3), conductor, conductor, zero)


def seconds_of_a_pass(panels, method):
    """Processor time of assembly, solution and estimate."""
    potentials = (panels.conductor[:, None] == np.arange(2)).astype(float)
    begin = time.process_time()
    system = make_system(panels, 0.01, method, None, lambda stage, done, total: None)
    density = system.solve(panels.areas[:, None] * potentials, None, lambda stage, done, total: None).density
    two_level_indicator(panels, system.diagonal, potentials, system.read(density))
    return time.process_time() - begin


def main():
    """Print the table."""
    set_threads(1)
    print("panels   dense s    fast s   dense / fast")
    for n in (250, 500, 1000, 1500, 2500, 4000):
        panels = balls(n)
        dense, fast = (min(seconds_of_a_pass(panels, method) for _ in range(2)) for method in ("dense", "fast"))
        print(f"{2 * n:6d} {dense:9.2f} {fast:9.2f} {dense / fast:14.2f}")


if __name__ == "__main__":
    main()
