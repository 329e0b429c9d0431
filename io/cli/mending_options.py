"""Options that say how far mending goes, shared by the commands that read surface files."""

import argparse
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from daraf.io.case import Case
    from daraf.io.changes import Mend

__all__ = ["add_mending", "mend_from", "mending_keys", "with_mending"]


def add_mending(parser: argparse.ArgumentParser) -> None:
    """Declare the options."""
    parser.add_argument(
        "--mend",
        choices=("list", "safe", "bold"),
        help="list: change nothing; safe: keep the shape (default); bold: sew cracks, close small holes",
    )
    parser.add_argument("--mend-within", metavar="LENGTH", help="nothing moves farther than this, such as '0.01 mm'")
    parser.add_argument("--close-holes", metavar="LENGTH", help="largest hole that bold mending closes")


def mending_keys(args: argparse.Namespace) -> dict[str, str]:
    """The options given, as keys of a case."""
    given = {key: getattr(args, key, None) for key in ("mend", "mend_within", "close_holes", "coarsen")}
    return {key: value for key, value in given.items() if value is not None}


def mend_from(args: argparse.Namespace) -> "Mend":
    """How far mending may go.

    Raises
    ------
    InputError
        If a length cannot be read.
    """
    from daraf.io.changes import Mend
    from daraf.io.units import parse_quantity

    keys = mending_keys(args)
    lengths = [parse_quantity(keys[key], "length") if key in keys else None for key in ("mend_within", "close_holes")]
    return Mend(keys.get("mend", "safe"), *lengths)


def with_mending(case: "Case", args: argparse.Namespace) -> "Case":
    """The case with what the command line says about mending.

    Raises
    ------
    InputError
        If a value does not fit.
    """
    from daraf.io.case import make_case

    keys = mending_keys(args)
    return make_case({**case.stated, **keys}, folder=case.folder, file=case.file) if keys else case
