"""Names from files made printable, in one place: they reach terminals, tables, JSON, XML and reports."""

import unicodedata
from pathlib import Path

from daraf.bem.errors import InputError

__all__ = ["LONGEST_NAME", "check_file_name", "printable"]

#: Longer names are cut.
LONGEST_NAME = 60


def printable(name: str, longest: int = LONGEST_NAME) -> str:
    r"""A name without control, formatting, surrogate or unassigned characters, single blanks, of bounded length.

    Parameters
    ----------
    name : str
    longest : int

    Returns
    -------
    str
        Empty if nothing printable is left.

    Examples
    --------
    >>> printable(" lid\x1b[2J \u202e(top)\n")
    'lid[2J (top)'
    """
    kept = "".join(" " if c.isspace() else c for c in name if c.isspace() or unicodedata.category(c)[0] != "C")
    return " ".join(kept.split())[:longest].rstrip()


def check_file_name(path: str | Path) -> None:
    """Refuse a path that cannot be written into a result or shown on a terminal.

    Parameters
    ----------
    path : str or Path

    Raises
    ------
    InputError
        If it holds control characters, or bytes that are no text.
    """
    name = str(path)
    if any(unicodedata.category(c) in ("Cc", "Cs") for c in name):
        raise InputError(f"{name!r}: is no usable file name (control characters, or no UTF-8 text); rename the file")
