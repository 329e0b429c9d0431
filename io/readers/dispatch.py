"""From the extension of a file to its reader, and from whatever a reader raises to one line."""

import numpy as np

from daraf.bem.errors import InputError

from .raw import READERS, RawFile, Source, check_extent

__all__ = ["read_source"]


def read_source(source: Source) -> RawFile:
    """Read a file by its extension, `RawFile`.

    Parameters
    ----------
    source : Source

    Raises
    ------
    InputError
        If the format is unknown or the file unusable.
    """
    path = source.path
    reader = READERS.get(path.suffix.lower())
    if reader is None:
        known = ", ".join(sorted(READERS))
        raise InputError(f"{path}: the format {path.suffix or '(no extension)'!r} is unknown; known are {known}")
    try:
        with np.errstate(all="ignore"):  # numbers out of range are refused, not warned of
            raw = reader(source)
            for part in raw.parts:
                check_extent(path, part)
        return raw
    except InputError:
        raise
    except MemoryError:
        raise InputError(f"{path}: there is not enough memory to read it; export it with fewer triangles") from None
    except Exception as error:  # a library may raise anything on a damaged file
        reason = " ".join(str(error).split())[:120] or type(error).__name__
        raise InputError(f"{path}: is damaged or no valid {path.suffix} file ({reason}); export it again") from error
