"""Readers of mesh files: one module per format family, found by the extension of the file."""

from pathlib import Path

from daraf.bem.errors import InputError

from . import glb, obj, off, ply, stl, threemf  # noqa: F401  (each registers its extensions)
from .raw import READERS, RawFile, RawPart, read_bytes, register

__all__ = ["READERS", "RawFile", "RawPart", "read_file", "register"]


def read_file(path: str | Path) -> RawFile:
    """Read one mesh file as it is, in its own unit.

    Parameters
    ----------
    path : str or Path

    Returns
    -------
    RawFile

    Raises
    ------
    InputError
        If the file is missing, empty, damaged or of an unknown format; one line that names the file.
    """
    path = Path(path)
    reader = READERS.get(path.suffix.lower())
    if reader is None:
        read_bytes(path)  # a missing file is the better complaint
        known = ", ".join(sorted(READERS))
        raise InputError(f"{path}: the format {path.suffix or '(no extension)'!r} is unknown; known are {known}")
    try:
        return reader(path)
    except InputError:
        raise
    except MemoryError:
        raise InputError(f"{path}: there is not enough memory to read it; export it with fewer triangles") from None
    except Exception as error:  # a mesh library may raise anything on a damaged file
        reason = " ".join(str(error).split())[:120] or type(error).__name__
        raise InputError(f"{path}: is damaged or no valid {path.suffix} file ({reason}); export it again") from error
