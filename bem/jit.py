"""The project's only doorway to numba: two decorators, the cache guard and the thread count.

Numba keeps compiled kernels on disk but notices only an edit of the file a kernel stands in. A kernel that
calls a kernel of *another* file, or freezes a constant of another file, would keep running the old numbers
after an upgrade. The guard therefore puts the compiled code into a folder named by a hash over every source a
kernel can depend on, the versions of Python, numba, llvmlite and numpy, and the processor. The folder is, in
this order,

1. below ``NUMBA_CACHE_DIR`` (or the same key of numba's own settings file) where that is set,
2. ``$XDG_CACHE_HOME/daraf`` or ``~/.cache/daraf``,
3. ``daraf-<user number>`` in the folder for temporary files, only if it belongs to this user,
4. a temporary folder of this process, removed at its end.

Where none can be written, kernels are compiled afresh in every process. Other packages' use of numba is left
alone: the folder is in force only while a kernel of ours is declared.
"""

import atexit
import functools
import hashlib
import os
import platform
import re
import shutil
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar, overload

import llvmlite
import llvmlite.binding
import numba
import numpy as np
from numba.core import config

from .errors import InputError

if TYPE_CHECKING:
    prange = range
else:
    from numba import prange

__all__ = ["REORDER", "cache_folder", "kernel", "kernel_source_hash", "parallel_kernel", "prange", "set_threads"]

F = TypeVar("F", bound=Callable[..., Any])

#: The only place that names numba's options. fastmath stays off: it makes isnan() lie and gained nothing
#: on a 1/r loop.
_OPTIONS: dict[str, Any] = {"nogil": True, "error_model": "numpy", "fastmath": False}
#: For ``kernel(fastmath=REORDER)``: freedom to reorder sums, so that the compiler can use vector instructions; without
#: nnan and ninf. Measured: a far pair of panels takes a third of the time.
REORDER = {"reassoc", "contract", "arcp", "nsz"}

_SOURCES = Path(__file__).resolve().parent
_PREFIX = "kernels-"
_KEPT = 3
#: A folder used within this time may belong to a running process and is never removed, s.
_GRACE = 24 * 3600.0

_IMPORTED = re.compile(
    r"^\s*(?:from\s+(?:\.+|daraf\.bem\b\.?)([\w.]*)\s+import\b|import\s+daraf\.bem\b\.?([\w.]*))",
    re.MULTILINE,
)


def kernel_source_hash(folder: Path | None = None) -> str:
    """Hash over every source file that a kernel in a folder can depend on, and over the compiler.

    Parameters
    ----------
    folder : Path, optional
        Folder of the package (default: this one); its ``*.py`` files are read, sub-folders included.

    Returns
    -------
    str
        16 hexadecimal digits.

    Notes
    -----
    Files that import this module and, transitively, all that they import from the package count; an edit of
    a file no kernel can see (a result class, say) does not throw compiled code away. Where an import cannot
    be attributed to one file (``from . import x``) every file counts.
    """
    digest = hashlib.sha256(_compiler().encode())
    for name, text in sorted(_kernel_sources(folder or _SOURCES).items()):
        digest.update(f"\0{name}\0".encode())
        digest.update(text.encode())
    return digest.hexdigest()[:16]


def _kernel_sources(folder: Path) -> dict[str, str]:
    texts = {path.relative_to(folder).as_posix(): path.read_text("utf-8") for path in folder.rglob("*.py")}
    imports = {name: _imported_stems(text) for name, text in texts.items()}
    # A door (__init__) hands names on and declares no kernel of its own.
    seeds = {name for name in texts if "jit" in imports[name] and not name.endswith("__init__.py")}
    reached = seeds | ({"jit.py"} & texts.keys())
    while True:
        stems = set().union(*(imports[name] for name in reached))
        if "" in stems:
            return texts
        grown = reached | {name for name in texts if Path(name).stem in stems}
        if grown == reached:
            return {name: texts[name] for name in reached}
        reached = grown


def _imported_stems(text: str) -> set[str]:
    """Last names of the package's modules that a source imports; '' stands for 'cannot tell which'."""
    return {(first or second).rpartition(".")[2] for first, second in _IMPORTED.findall(text)}


def _compiler() -> str:
    versions = (platform.python_version(), numba.__version__, llvmlite.__version__, np.__version__)
    processor = llvmlite.binding.get_host_cpu_name()
    return " ".join((*versions, platform.machine(), processor, repr(sorted(_OPTIONS.items()))))


@functools.cache
def cache_folder() -> Path | None:
    """Folder that holds the compiled kernels of this process, made on the first call.

    Returns
    -------
    Path or None
        None where no folder at all can be written: nothing is kept then.
    """
    name = _PREFIX + kernel_source_hash()
    for base in _bases():
        folder = base / name
        if _claim(folder):
            _prune(base, keep=folder)
            return folder
    with suppress(OSError):
        folder = Path(tempfile.mkdtemp(prefix="daraf-"))
        atexit.register(shutil.rmtree, folder, ignore_errors=True)
        return folder
    return None


def _bases() -> Iterator[Path]:
    if config.CACHE_DIR:
        yield Path(config.CACHE_DIR)
    shared = os.environ.get("XDG_CACHE_HOME")
    with suppress(RuntimeError):  # no home folder known for this user
        yield (Path(shared) if shared and Path(shared).is_absolute() else Path.home() / ".cache") / "daraf"
    # Compiled code is executed when loaded: in a place open to all, take only a folder that is ours alone.
    with suppress(OSError):
        own = Path(tempfile.gettempdir()) / f"daraf-{os.getuid()}"
        own.mkdir(mode=0o700, exist_ok=True)
        state = own.lstat()
        ours = state.st_uid == os.getuid() and not state.st_mode & 0o022
        if ours and own.is_dir() and not own.is_symlink():
            yield own


def _claim(folder: Path) -> bool:
    """Make the folder, prove that it can be written and mark it as used now."""
    try:
        folder.mkdir(mode=0o700, parents=True, exist_ok=True)
        with tempfile.TemporaryFile(dir=folder):
            pass
        os.utime(folder)
    except OSError:
        return False
    return True


def _prune(base: Path, keep: Path) -> None:
    """Remove folders of earlier sources: all but the newest few and those that may be in use."""
    aged = []
    for folder in base.glob(_PREFIX + "*"):
        with suppress(OSError):
            aged.append((folder.stat().st_mtime, folder))
    aged.sort(reverse=True)
    for used, folder in aged[_KEPT:]:
        if folder != keep and time.time() - used > _GRACE:
            shutil.rmtree(folder, ignore_errors=True)


@contextmanager
def _guarded_cache() -> Iterator[bool]:
    """Put our cache folder in force while a kernel is declared; yields whether there is one."""
    folder = None if config.DISABLE_JIT else cache_folder()
    before = config.CACHE_DIR
    if folder is not None:
        config.CACHE_DIR = str(folder)
    try:
        yield folder is not None
    finally:
        config.CACHE_DIR = before


@overload
def kernel(function: F) -> F: ...
@overload
def kernel(function: None = None, **options: Any) -> Callable[[F], F]: ...
def kernel(function: F | None = None, **options: Any) -> F | Callable[[F], F]:
    """Compile a function with the project's options; used bare or with further numba options.

    Parameters
    ----------
    function : callable
        Small and pure: C-contiguous float64 and int64 arrays and scalars in, arrays out.
    **options
        Further options of ``numba.njit``, for example ``inline="always"`` or ``boundscheck=True``.

    Returns
    -------
    callable
        The compiled function, or the decorator if no function was given.
    """
    if function is None:
        return functools.partial(_compile, options=options)
    return _compile(function, options)


@overload
def parallel_kernel(function: F) -> F: ...
@overload
def parallel_kernel(function: None = None, **options: Any) -> Callable[[F], F]: ...
def parallel_kernel(function: F | None = None, **options: Any) -> F | Callable[[F], F]:
    """Compile a function whose outermost loop runs over `prange`; otherwise like `kernel`.

    Each iteration must own its output rows: a sum across iterations would change with the number of threads.
    """
    options = {"parallel": True, **options}
    return kernel(**options) if function is None else _compile(function, options)


def _compile(function: F, options: dict[str, Any]) -> F:
    with _guarded_cache() as kept:
        compiled: F = numba.njit(**(_OPTIONS | {"cache": kept} | options))(function)
    return compiled


def set_threads(n: int | None = None) -> int:
    """Set how many threads parallel kernels use from now on.

    Parameters
    ----------
    n : int, optional
        From 1 to what the machine (or ``NUMBA_NUM_THREADS``) offers; all of these if omitted.

    Returns
    -------
    int
        The number now in force. LAPACK keeps its own threads.

    Raises
    ------
    InputError
        If the number is out of range.
    """
    offered = int(config.NUMBA_NUM_THREADS)
    wanted = offered if n is None else n
    if not 1 <= wanted <= offered:
        raise InputError(f"threads: {wanted} asked for, this machine offers 1 to {offered}")
    numba.set_num_threads(wanted)
    return wanted
