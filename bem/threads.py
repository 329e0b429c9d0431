"""Tiles of work on several threads: each tile owns what it writes, so that results do not depend on the threads.

Compiled kernels release the interpreter, so plain threads that fetch the next tile serve as well as a parallel loop
of the compiler, balance uneven tiles, and spare the compile time of one parallel loop for each step. Matrix products
inside the tiles must run on one thread each: see :func:`one_blas_thread`.
"""

import functools
import itertools
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from contextlib import AbstractContextManager

import numba
import scipy.linalg  # noqa: F401  kernels take their matrix products from here: it must be loaded to be limited
from threadpoolctl import ThreadpoolController

__all__ = ["blas_threads", "one_blas_thread", "run_tiles"]


@functools.cache
def _pool() -> ThreadPoolExecutor:
    return ThreadPoolExecutor(int(numba.config.NUMBA_NUM_THREADS), thread_name_prefix="tiles")


@functools.cache
def _controller() -> ThreadpoolController:
    return ThreadpoolController()


def blas_threads(limit: int | None) -> AbstractContextManager[object]:
    """Keep the libraries of linear algebra to some threads; None leaves them free."""
    limited: AbstractContextManager[object] = _controller().limit(limits=limit, user_api="blas")
    return limited


def one_blas_thread() -> AbstractContextManager[object]:
    """Keep the libraries of linear algebra to one thread: the tiles are what runs side by side."""
    return blas_threads(1)


def run_tiles(task: Callable[[int], None], n_tiles: int) -> None:
    """Call ``task(tile)`` once for each tile, on as many threads as kernels may use.

    Parameters
    ----------
    task : callable
        Must write only what belongs to its tile.
    n_tiles : int

    Notes
    -----
    The first exception, an interrupt included, is raised once the tiles begun are finished; no further are begun.
    """
    n_threads = min(int(numba.get_num_threads()), n_tiles)
    if n_threads <= 1:
        for tile in range(n_tiles):
            task(tile)
        return
    counter = itertools.count()
    stopped = False

    def work() -> None:
        nonlocal stopped
        try:
            while not stopped and (tile := next(counter)) < n_tiles:
                task(tile)
        except BaseException:
            stopped = True
            raise

    others = [_pool().submit(work) for _ in range(n_threads - 1)]
    try:
        work()
    finally:
        stopped = True
        for other in others:
            other.exception()
    for other in others:
        other.result()
