"""Gauss-Legendre rules on [0, 1] as frozen tables for the kernels."""

import numpy as np

__all__ = ["GAUSS_NODES", "GAUSS_WEIGHTS", "MAX_RULE"]

MAX_RULE = 10

#: Row n holds the n-point rule; the rest of the row is zero.
GAUSS_NODES = np.zeros((MAX_RULE + 1, MAX_RULE))
GAUSS_WEIGHTS = np.zeros((MAX_RULE + 1, MAX_RULE))
for _n in range(1, MAX_RULE + 1):
    _x, _w = np.polynomial.legendre.leggauss(_n)
    GAUSS_NODES[_n, :_n] = 0.5 * (_x + 1.0)
    GAUSS_WEIGHTS[_n, :_n] = 0.5 * _w
