"""A text file written whole or not at all."""

import contextlib
import os
import tempfile
from pathlib import Path

from daraf.bem.errors import InputError

__all__ = ["write_text"]


def write_text(path: str | Path, text: str) -> Path:
    """Write under a temporary name, then rename.

    Parameters
    ----------
    path : str or Path
        Replaced if it exists.
    text : str

    Returns
    -------
    Path

    Raises
    ------
    InputError
        If it cannot be written; an older file stays.
    """
    target = Path(path).expanduser()
    if target.is_dir():
        raise InputError(f"{path}: is a folder; name a file with --out")
    draft: str | None = None
    try:
        handle, draft = tempfile.mkstemp(prefix=f".{target.name}-", suffix=".part", dir=target.parent)
        with os.fdopen(handle, "w", encoding="utf-8", newline="\n") as stream:
            stream.write(text)
            stream.flush()
            os.fsync(stream.fileno())
        mask = os.umask(0)
        os.umask(mask)
        Path(draft).chmod(0o666 & ~mask)
        os.replace(draft, target)
        draft = None
    except OSError as error:
        reason = error.strerror or str(error)
        raise InputError(f"{path}: cannot be written ({reason}); choose another place with --out") from None
    finally:
        if draft is not None:
            with contextlib.suppress(OSError):
                os.unlink(draft)
    return target
