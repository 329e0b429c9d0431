"""Assembly of the Galerkin matrix of the single-layer potential on flat panels."""

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from .frames import panel_frames
from .jit import parallel_kernel, prange
from .near import self_integral
from .pairs import pair_integral

__all__ = ["ROWS_PER_BLOCK", "galerkin_matrix", "galerkin_rows"]

FloatArray = NDArray[np.float64]

#: Entries per call of the kernel: short enough for progress and Ctrl-C, long enough to keep threads busy.
ROWS_PER_BLOCK = 200_000


@parallel_kernel
def galerkin_rows(frames, matrix, first, last):
    """Fill rows `first` <= i < `last` of the lower triangle: ``A_ij = int_i int_j dS dS / r``, j <= i.

    Parameters
    ----------
    frames : (n, FRAME_SIZE) float
    matrix : (n, n) float, m3
        Only the entries of these rows up to the diagonal are written, each by one thread.
    first, last : int
    """
    for i in prange(first, last):
        for j in range(i):
            matrix[i, j] = pair_integral(frames[i], frames[j])
        matrix[i, i] = self_integral(frames[i])


def galerkin_matrix(
    corners: FloatArray,
    *,
    known: FloatArray | None = None,
    progress: Callable[[float, float], None] | None = None,
) -> FloatArray:
    """Galerkin matrix of 1/r with one constant function per panel, lower triangle.

    Parameters
    ----------
    corners : (n, 4, 3) float, m
        Flat panels; a triangle repeats its third corner.
    known : (m, m) float, m3, optional
        Lower triangle for the first m panels, taken over unchanged.
    progress : callable, optional
        Told (entries done, entries in all).

    Returns
    -------
    matrix : (n, n) float, m3
        ``A_ij = int_i int_j dS dS / r`` for j <= i; the upper triangle is zero. Multiplied by
        1/(4 pi eps) it gives volts times square metres per unit of charge density.
    """
    frames = panel_frames(corners - corners.reshape(-1, 3).mean(axis=0))
    n = len(corners)
    matrix = np.zeros((n, n))
    first = 0
    if known is not None:
        first = len(known)
        matrix[:first, :first] = known
    total = 0.5 * (n * (n + 1.0) - first * (first + 1.0))
    done = 0.0
    while first < n:
        last = min(n, first + max(8, ROWS_PER_BLOCK // (first + 1)))
        galerkin_rows(frames, matrix, first, last)
        done += 0.5 * (last * (last + 1.0) - first * (first + 1.0))
        first = last
        if progress is not None:
            progress(done, total)
    return matrix
