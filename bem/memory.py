"""How much memory is free, and how many panels a dense solve fits into it."""

import os
import resource
import sys
from pathlib import Path

from .errors import MemoryRefused

__all__ = ["dense_bytes", "free_memory", "panels_that_fit", "peak_memory", "refuse_if_too_large"]

#: Dense matrices of the current pass held at once: the matrix and its factor.
_MATRICES = 2
#: Bytes a panel costs apart from the matrices: packed geometry of itself, its parts and halves.
_BYTES_PER_PANEL = 13_000
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


def panels_that_fit(limit: int) -> int:
    """Largest number of panels that a single dense pass fits into `limit` bytes."""
    room = max(limit - _BASE, 0)
    b, a = _BYTES_PER_PANEL, 8 * _MATRICES
    return int((-b + (b * b + 4.0 * a * room) ** 0.5) / (2.0 * a))


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


def refuse_if_too_large(n_panels: int, limit: int) -> None:
    """Refuse a dense solve that would not fit.

    Raises
    ------
    MemoryRefused
        Naming what is needed, what there is and what would fit.
    """
    need = dense_bytes(n_panels)
    if need > limit:
        raise MemoryRefused(
            f"{n_panels} panels need {need / 2**30:.1f} GiB and {limit / 2**30:.1f} GiB are free; about "
            f"{panels_that_fit(limit)} panels would fit: export coarser surfaces, leave bodies out, or use a "
            "machine with more memory"
        )
