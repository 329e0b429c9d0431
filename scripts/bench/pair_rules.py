#!/usr/bin/env python3
"""Errors and times of the rules of bem/pairs.py, by regime.

For random pairs of panels (triangles, rectangles, parallelograms, kites; aspect ratio up to 30, size ratio up to
100) the table gives for each regime the worst and the root mean square relative error, against adaptive bisection
to 1e-10, and the time of one pair on one thread. Floor: worst 1e-6, root mean square 1e-7; "touching" 1e-7 worst.
Far pairs are bound by square roots and divisions, close ones by logarithms.

Usage: .venv/bin/python scripts/bench/pair_rules.py [pairs per regime, 200]
"""

import sys
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[2] / "tests" / "bem"))

import naive

from daraf.bem.frames import panel_frames
from daraf.bem.jit import kernel
from daraf.bem.pairs import pair_integral

#: Distance of the centres over the sum of the radii; "touching" pairs share a corner, an edge or part of one.
REGIMES = {
    "touching": (0.0, 0.0),
    "close": (0.05, 0.7),
    "near middle": (0.7, 1.4),
    "middle": (1.4, 2.3),
    "far, 4 x 4": (2.3, 3.8),
    "far, 3 x 3": (3.8, 13.0),
    "far, 2 x 2": (13.0, 40.0),
}


@kernel
def integrate(first, second, values):
    """Integrate pair after pair."""
    for p in range(len(values)):
        values[p] = pair_integral(first[p], second[p])


def random_panel(rng):
    """Return a triangle, rectangle, parallelogram or kite of length about 1."""
    width = 10.0 ** rng.uniform(-1.5, 0.0)
    kind = rng.integers(4)
    if kind == 0:
        return naive.rectangle(1.0, width)
    if kind == 1:
        lean = rng.uniform(-0.5, 0.5)
        return np.array([(0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (1.0 + lean, width, 0.0), (lean, width, 0.0)])
    triangle = naive.triangle((0.0, 0.0, 0.0), (1.0, 0.0, 0.0), (rng.uniform(-0.2, 1.2), width, 0.0))
    if kind == 2:
        return triangle
    a, b, c = triangle[:3]
    return np.array([a, 0.5 * (a + b), triangle[:3].mean(axis=0), 0.5 * (a + c)])


def random_turn(rng):
    """Return a random rotation."""
    q, _ = np.linalg.qr(rng.normal(size=(3, 3)))
    return q * np.sign(np.linalg.det(q))


def random_pair(rng, lowest, highest):
    """Return two panels that do not cross, their distance within the limits of a regime."""
    while True:
        first = random_panel(rng)
        second = random_panel(rng) * 10.0 ** rng.uniform(-2.0, 0.0)
        if highest == 0.0:
            return first, _joined(rng, second)
        second = (second - second.mean(axis=0)) @ random_turn(rng).T
        radii = sum(np.linalg.norm(p - p.mean(axis=0), axis=1).max() for p in (first, second))
        way = rng.normal(size=3)
        way *= rng.uniform(lowest, highest) * radii / np.linalg.norm(way)
        second = second + way + first.mean(axis=0)
        heights = second[:, 2]
        if np.all(heights > 0.0) or np.all(heights < 0.0):
            return first, second


def _joined(rng, second):
    """Put a panel's first edge at a random place of the other one's first edge, at a random angle."""
    angle = rng.choice([np.pi, 0.5 * np.pi, rng.uniform(0.2, np.pi)])
    c, s = np.cos(angle), np.sin(angle)
    start = rng.choice([0.0, rng.uniform(0.0, 1.0 - np.ptp(second[:2, 0]) * 0.99)])
    return second @ np.array([(1.0, 0.0, 0.0), (0.0, c, s), (0.0, -s, c)]) + np.array([start, 0.0, 0.0])


def measure(regime, n):
    """Return the worst and the root mean square error and the seconds of a pair."""
    rng = np.random.default_rng(5)
    pairs = [random_pair(rng, *REGIMES[regime]) for _ in range(n)]
    first, second = (panel_frames(np.stack([pair[k] for pair in pairs])) for k in range(2))
    values = np.empty(n)
    integrate(first, second, values)
    repeats, start = 0, time.perf_counter()
    while time.perf_counter() - start < 0.2:
        integrate(first, second, values)
        repeats += 1
    seconds = (time.perf_counter() - start) / (repeats * n)
    errors = np.abs(values / np.array([naive.pair_integral(*pair) for pair in pairs]) - 1.0)
    return errors.max(), np.sqrt(np.mean(errors**2)), seconds


def main():
    """Print the table."""
    n = int(sys.argv[1]) if len(sys.argv) > 1 else 200
    print(f"{'regime':<12} {'distance / radii':>16} {'worst':>9} {'rms':>9} {'ns a pair':>10}")
    for regime, (lowest, highest) in REGIMES.items():
        worst, rms, seconds = measure(regime, n)
        print(f"{regime:<12} {lowest:7.2f} to {highest:5.2f} {worst:9.1e} {rms:9.1e} {1e9 * seconds:10.0f}")


if __name__ == "__main__":
    main()
