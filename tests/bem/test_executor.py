import os
import pickle
import time
from concurrent.futures import Future, ProcessPoolExecutor, ThreadPoolExecutor
from multiprocessing import get_context

import numpy as np
import pytest
from dense_operator import sheet, sheets
from dying import FLAG, die_once

from daraf.bem import executor as executing
from daraf.bem.errors import InputError
from daraf.bem.executor import ColumnTask, solve_cases, solve_columns, solve_task
from published import shapes

# one more thread or process in any order must not change a digit; sums of one thread count are equal bit by bit
SAME = {"rtol": 1e-13, "atol": 0.0}


def stack(count=6, n=10):
    """A stack of sheets: corners and conductors."""
    return np.concatenate([sheet(n, 0.4 * k) for k in range(count)]), np.repeat(np.arange(count), n * n)


def assert_same(found, expected):
    for name in ("density", "value", "error"):
        want = getattr(expected, name)
        np.testing.assert_allclose(getattr(found, name), want, rtol=1e-13, atol=1e-13 * np.abs(want).max())
    assert found.converged
    assert found.iterations == expected.iterations


class Backwards(ThreadPoolExecutor):
    """Begins only when all is submitted, the last first."""

    def __init__(self):
        super().__init__(1)
        self.waiting = []

    def submit(self, work, *arguments):
        future = Future()
        self.waiting.append((future, work, arguments))
        if len(self.waiting) == 3:
            for later, job, given in reversed(self.waiting):
                later.set_result(job(*given))
        return future


def test_capacitances_equal_the_dense_ones():
    corners, _, right, density = sheets(10, 6, 0.4, 1.0)
    found = solve_columns(corners, np.repeat(np.arange(6), 100), group_size=4, tolerance=1e-9, operator_tolerance=1e-7)
    exact = right.T @ density
    # 1e-7 of a product
    np.testing.assert_allclose(found.value, exact, rtol=0, atol=3e-7 * exact.max())
    assert found.error.shape == (6,)
    assert found.density.shape == density.shape


def test_numbers_do_not_depend_on_order_threads_or_processes(monkeypatch):
    monkeypatch.setattr(executing, "_kept", {})
    corners, conductor = stack()
    here = solve_columns(corners, conductor, group_size=2)
    assert_same(solve_columns(corners, conductor, Backwards(), group_size=2), here)
    with ThreadPoolExecutor(3) as threads:
        assert_same(solve_columns(corners, conductor, threads, group_size=2), here)


def test_tasks_and_results_can_be_sent():
    corners, conductor = stack()
    task = pickle.loads(pickle.dumps(ColumnTask(corners, conductor, (1,), 1e-8, 1e-5)))
    found = pickle.loads(pickle.dumps(solve_task(task)))
    assert found.density.shape == (600, 1)
    assert task.geometry != ColumnTask(corners, conductor, (1,), 1e-8, 1e-6).geometry


def test_an_operator_is_made_once_for_all_groups(monkeypatch):
    made = []
    original = executing.FastOperator
    monkeypatch.setattr(executing, "FastOperator", lambda *given: made.append(1) or original(*given))
    monkeypatch.setattr(executing, "_kept", {})
    solve_columns(*stack(), group_size=2)
    assert made == [1]


def test_progress_is_told_and_an_interrupt_cancels_what_has_not_begun(monkeypatch):
    told = []
    corners, conductor = stack()
    solve_columns(corners, conductor, group_size=4, progress=lambda done, total: told.append((done, total)))
    assert told == [(4.0, 6.0), (6.0, 6.0)]
    done = []
    monkeypatch.setattr(executing, "solve_task", lambda task: (done.append(1), time.sleep(0.3), solve_task(task))[2])

    def interrupt(*_):
        raise KeyboardInterrupt

    with ThreadPoolExecutor(1) as pool, pytest.raises(KeyboardInterrupt):
        solve_columns(corners, conductor, pool, group_size=1, progress=interrupt)
    assert len(done) < 6


def test_groups_below_one_column_are_refused():
    with pytest.raises(InputError, match="group_size"):
        solve_columns(*stack(1), group_size=0)


def test_cases_keep_their_order():
    cases = [shapes.surface([shapes.plate(size, size)]) for size in (1.0, 2.0, 3.0)]
    told = []
    with ThreadPoolExecutor(2) as pool:
        found = solve_cases(cases, pool, accuracy=0.1, progress=lambda done, total: told.append(done))
    alone = solve_cases(cases, accuracy=0.1)
    for one, other in zip(found, alone, strict=True):
        np.testing.assert_allclose(one.maxwell, other.maxwell, **SAME)
    values = [float(one.maxwell[0, 0]) for one in found]
    # scales with length: 8e-8 off at a size that is no power of two, by the rounding of equal gains
    np.testing.assert_allclose(values, values[0] * np.array([1.0, 2.0, 3.0]), rtol=1e-6)
    assert told == [1.0, 2.0, 3.0]


@pytest.mark.slow
def test_a_broken_pool_of_processes_does_not_lose_the_job(tmp_path, monkeypatch):
    corners, conductor = stack()
    here = solve_columns(corners, conductor, group_size=2)
    monkeypatch.setenv(FLAG, str(tmp_path / "died"))
    monkeypatch.setattr(executing, "solve_task", die_once)
    with ProcessPoolExecutor(2, mp_context=get_context("spawn")) as pool:
        found = solve_columns(corners, conductor, pool, group_size=2)
    assert (tmp_path / "died").exists()
    assert_same(found, here)


@pytest.mark.slow
@pytest.mark.filterwarnings("default")  # of the cluster library, not ours
def test_a_cluster_of_two_processes_finishes_though_one_is_killed(tmp_path, monkeypatch):
    distributed = pytest.importorskip("distributed")
    corners, conductor = stack()
    here = solve_columns(corners, conductor, group_size=1)
    monkeypatch.setenv(FLAG, str(tmp_path / "died"))
    monkeypatch.setattr(executing, "solve_task", die_once)
    cluster = distributed.LocalCluster(
        n_workers=2, threads_per_worker=1, processes=True, dashboard_address=None, local_directory=str(tmp_path)
    )
    with cluster, distributed.Client(cluster) as client:
        before = set(client.run(os.getpid).values())
        found = solve_columns(corners, conductor, client.get_executor(), group_size=1)
        client.wait_for_workers(2, timeout=60)
        after = set(client.run(os.getpid).values())
    assert len(before) == 2
    assert len(before & after) == 1  # one was killed and replaced
    assert_same(found, here)
