"""Columns and whole cases through the executor interface of :mod:`concurrent.futures`.

Any executor serves: of threads, of processes, or of a cluster (``dask.distributed.Client(...).get_executor()``, the
extra ``cluster``). What is sent are plain arrays and records; a process makes the operator of a geometry once and
keeps it for further groups of columns. Groups are cut by their size alone, never by the number of workers, and each is
solved as if it were alone: the numbers do not depend on who solves what, or when. Work that was lost with a process is
done again: by a cluster's own scheduler on another worker, else here. Each worker process uses as many threads as
NUMBA_NUM_THREADS allows it.
"""

import hashlib
import threading
from collections.abc import Callable, Iterable, Sequence
from concurrent.futures import BrokenExecutor, Executor, Future, as_completed
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .block_krylov import BlockSolution, second_order_value, solve_block
from .capacitance import solve_capacitance
from .errors import InputError
from .operator import FastOperator
from .panels import polygon_geometry
from .patches import stored_entries
from .preconditioner import FactoredInverse, factored_inverse
from .solution import CapacitanceSolution
from .surface import Surface

__all__ = ["ColumnTask", "solve_cases", "solve_columns", "solve_task"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Columns solved together: more share the passes over the operator's memory, fewer balance better.
GROUP_SIZE = 8

# one geometry is kept per process; kernels that run their own threads must not be entered twice at a time
_turn = threading.Lock()
_kept: dict[str, tuple[FastOperator, FactoredInverse]] = {}


@dataclass(frozen=True, eq=False)
class ColumnTask:
    """Some excitations of a geometry.

    Attributes
    ----------
    corners : (n, 4, 3) float, m
    conductor : (n,) int
    columns : tuple of int
        Conductors at 1 V, one after the other.
    tolerance : float
        Of the capacitances: see :func:`daraf.bem.block_krylov.solve_block`.
    operator_tolerance : float
        Of a product: see :class:`daraf.bem.operator.FastOperator`.
    start : (n, m) float or None
        Densities to begin with.
    """

    corners: FloatArray
    conductor: IntArray
    columns: tuple[int, ...]
    tolerance: float
    operator_tolerance: float
    start: FloatArray | None = None

    @property
    def geometry(self) -> str:
        """Name of the operator: a hash of all that makes it."""
        digest = hashlib.sha256(np.ascontiguousarray(self.corners).tobytes())
        digest.update(repr(self.operator_tolerance).encode())
        return digest.hexdigest()


def solve_task(task: ColumnTask) -> BlockSolution:
    """Solve the columns of a task; runs in the process of a worker.

    Parameters
    ----------
    task : ColumnTask

    Returns
    -------
    BlockSolution
    """
    name = task.geometry
    with _turn:
        if name not in _kept:
            _kept.clear()
            operator = FastOperator(task.corners, task.operator_tolerance)
            _kept[name] = operator, factored_inverse(stored_entries(operator))
        operator, inverse = _kept[name]
        right = operator.areas[:, None] * (task.conductor[:, None] == np.array(task.columns))
        return solve_block(operator, right, inverse, tolerance=task.tolerance, start=task.start)


def solve_columns(
    corners: FloatArray,
    conductor: IntArray,
    executor: Executor | None = None,
    *,
    tolerance: float = 1e-8,
    operator_tolerance: float = 1e-5,
    start: FloatArray | None = None,
    group_size: int = GROUP_SIZE,
    progress: Callable[[float, float], None] | None = None,
) -> BlockSolution:
    """Bare densities and capacitances of all conductors, groups of columns solved by an executor.

    Parameters
    ----------
    corners : (n, 4, 3) float, m
        Flat panels; a triangle repeats its third corner.
    conductor : (n,) int
        Of each panel.
    executor : Executor, optional
        Here, one group after the other, if omitted.
    tolerance, operator_tolerance : float
        See :class:`ColumnTask`.
    start : (n, n_conductors) float, optional
        Densities to begin with.
    group_size : int
        Columns solved together.
    progress : callable, optional
        Told (columns done, in all); it may raise to interrupt: groups not begun are cancelled.

    Returns
    -------
    BlockSolution
        Of all columns; its history is empty.

    Raises
    ------
    InputError
        If the size of a group is out of range.
    """
    if group_size < 1:
        raise InputError(f"group_size must be at least 1, got {group_size}")
    n = int(conductor.max()) + 1
    groups = [tuple(range(first, min(first + group_size, n))) for first in range(0, n, group_size)]
    tasks = [
        ColumnTask(
            corners,
            conductor,
            columns,
            tolerance,
            operator_tolerance,
            None if start is None else np.ascontiguousarray(start[:, list(columns)]),
        )
        for columns in groups
    ]
    parts: list[BlockSolution] = [None] * len(tasks)  # type: ignore[list-item]
    done = 0
    for k, part in _completed(executor, solve_task, tasks):
        parts[k] = part
        done += len(groups[k])
        if progress is not None:
            progress(float(done), float(n))
    areas = polygon_geometry(corners)[0]
    right = areas[:, None] * (conductor[:, None] == np.arange(n))
    density = np.hstack([part.density for part in parts])
    residual = np.hstack([part.residual for part in parts])
    return BlockSolution(
        density=density,
        residual=residual,
        value=second_order_value(right, density, residual),
        error=np.concatenate([part.error for part in parts]),
        iterations=max(part.iterations for part in parts),
        products=sum(part.products for part in parts),
        converged=all(part.converged for part in parts),
        residuals=np.concatenate([part.residuals for part in parts]),
    )


def solve_cases(
    surfaces: Sequence[Surface],
    executor: Executor | None = None,
    *,
    progress: Callable[[float, float], None] | None = None,
    **options: Any,
) -> list[CapacitanceSolution]:
    """Solve several cases, each whole, by an executor.

    Parameters
    ----------
    surfaces : sequence of Surface
    executor : Executor, optional
        Here, one after the other, if omitted.
    progress : callable, optional
        Told (cases done, in all).
    **options
        Of :func:`daraf.bem.capacitance.solve_capacitance`, the same for all.

    Returns
    -------
    list of CapacitanceSolution
        In the order of the surfaces.
    """
    found: dict[int, CapacitanceSolution] = {}
    for k, solution in _completed(executor, _solve_case, [(surface, options) for surface in surfaces]):
        found[k] = solution
        if progress is not None:
            progress(float(len(found)), float(len(surfaces)))
    return [found[k] for k in range(len(surfaces))]


def _solve_case(case: tuple[Surface, dict[str, Any]]) -> CapacitanceSolution:
    surface, options = case
    with _turn:
        return solve_capacitance(surface, **options)


def _completed(
    executor: Executor | None, work: Callable[[Any], Any], tasks: Sequence[Any]
) -> Iterable[tuple[int, Any]]:
    """Place and result of each task, as they come; tasks lost with a broken executor are done here."""
    if executor is None:
        yield from ((k, work(task)) for k, task in enumerate(tasks))
        return
    places: dict[Future[Any], int] = {}
    lost: list[int] = []
    try:
        for k, task in enumerate(tasks):
            try:
                places[executor.submit(work, task)] = k
            except BrokenExecutor:
                lost.append(k)
        for future in as_completed(places):
            try:
                yield places[future], future.result()
            except BrokenExecutor:
                lost.append(places[future])
        for k in lost:
            yield k, work(tasks[k])
    finally:
        for future in places:
            future.cancel()
