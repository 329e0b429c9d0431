"""How much memory is free, and how many panels a dense solve fits into it."""

import os
import resource
import sys
from pathlib import Path

from .errors import MemoryRefused

__all__ = ["dense_bytes", "fast_bytes", "free_memory", "panels_that_fit", "peak_memory", "refuse_if_too_large"]

#: Dense matrices of the current pass held at once: the matrix and its factor.
_MATRICES = 2
#: Bytes a panel costs apart from the matrices: packed geometry of itself, its parts and halves.
_BYTES_PER_PANEL = 13_000
#: Bytes a panel costs with the fast operator, and for each conductor besides: near integrals, moments, preconditioner,
#: geometry; vectors of the iteration, gains. A generous round figure: two balls of 764,000
#: panels took half of it (``scripts/bench/whole.py``).
_FAST_BYTES_PER_PANEL, _FAST_BYTES_PER_COLUMN = 8_000, 400
#: What the libraries and compiled kernels take, bytes.
_BASE = 300 * 2**20


def dense_bytes(n_panels: int, n_known: int = 0) -> int:
    """Memory that a dense pass needs, bytes.

    Parameters
    ----------
    n_panels : int
    n_known : int
        Panels of the previous pass, whose matrix is still held while the new one is filled.
    """
    return _BASE + 8 * (_MATRICES * n_panels**2 + n_known**2) + _BYTES_PER_PANEL * n_panels


def fast_bytes(n_panels: int, n_columns: int) -> int:
    """Memory that a pass with the fast operator needs, bytes.

    Parameters
    ----------
    n_panels, n_columns : int
        Panels and conductors.
    """
    return _BASE + n_panels * (_FAST_BYTES_PER_PANEL + _FAST_BYTES_PER_COLUMN * n_columns)


def panels_that_fit(limit: int, n_columns: int, *, fast: bool) -> int:
    """Largest number of panels that a single pass fits into `limit` bytes.

    Parameters
    ----------
    limit : int, bytes
    n_columns : int
        Conductors.
    fast : bool
        Whether the fast operator may be used.
    """
    room = max(limit - _BASE, 0)
    b, a = _BYTES_PER_PANEL, 8 * _MATRICES
    dense = int((-b + (b * b + 4.0 * a * room) ** 0.5) / (2.0 * a))
    return max(dense, room // (fast_bytes(1, n_columns) - _BASE)) if fast else dense


def free_memory() -> int:
    """Memory this process may still take, bytes: the machine's, or what is left of a control group's limit."""
    free = _machine_memory()
    for limit_file, used_file in (
        ("/sys/fs/cgroup/memory.max", "/sys/fs/cgroup/memory.current"),
        ("/sys/fs/cgroup/memory/memory.limit_in_bytes", "/sys/fs/cgroup/memory/memory.usage_in_bytes"),
    ):
        try:
            limit, used = Path(limit_file).read_text().strip(), Path(used_file).read_text().strip()
            free = min(free, max(int(limit) - int(used), 0))
        except (OSError, ValueError):  # no such group, or "max"
            continue
    return free


def _machine_memory() -> int:
    try:
        for line in Path("/proc/meminfo").read_text().splitlines():
            if line.startswith("MemAvailable:"):
                return int(line.split()[1]) * 1024
    except (OSError, ValueError):
        pass
    try:
        return os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES") // 2
    except (ValueError, OSError):
        return 2**33


def peak_memory() -> int:
    """Largest resident memory of this process so far, bytes."""
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return int(peak if sys.platform == "darwin" else peak * 1024)


def refuse_if_too_large(n_panels: int, n_columns: int, limit: int, *, fast: bool) -> None:
    """Refuse a solve that would not fit.

    Parameters
    ----------
    n_panels, n_columns : int
    limit : int, bytes
    fast : bool
        Whether the fast operator may be used.

    Raises
    ------
    MemoryRefused
        Naming what is needed, what there is and what would fit.
    """
    need = dense_bytes(n_panels)
    if fast:
        need = min(need, fast_bytes(n_panels, n_columns))
    if need > limit:
        raise MemoryRefused(
            f"{n_panels} panels need {need / 2**30:.1f} GiB and {limit / 2**30:.1f} GiB are free; about "
            f"{panels_that_fit(limit, n_columns, fast=fast)} panels would fit: export coarser surfaces, leave bodies "
            "out, or use a machine with more memory"
        )
