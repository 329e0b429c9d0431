"""Entry point `daraf`: hands over to the sub-commands and turns every end into an exit code."""

import argparse
import atexit
import contextlib
import errno
import os
import sys
import tempfile
import traceback
from collections.abc import Sequence

from . import field, inspect, netlist, solve
from .parser import Parser, UsageError

__all__ = ["main", "program"]

#: Registry of sub-commands: each module has NAME, HELP, ``add_arguments(parser)`` and ``run(args)``.
_COMMANDS = (inspect, solve, field, netlist)

#: Longer complaints are cut.
_LONGEST_LINE = 4000

_DESCRIPTION = "Capacitance of conductors from CAD surface meshes, with its uncertainty."
_EPILOG = """\
Results go to standard output, progress and messages to standard error.
Exit codes: 0 done; 2 bad input; 3 done, but the accuracy asked was not reached;
130 interrupted; 1 a defect of daraf.
"""


def main(argv: Sequence[str] | None = None) -> int:
    """Run the command line.

    Parameters
    ----------
    argv : sequence of str, optional
        Arguments without the program's name; those of the process by default.

    Returns
    -------
    int
        Exit code.
    """
    words = list(sys.argv[1:] if argv is None else argv)
    for stream in (sys.stdout, sys.stderr):
        # A terminal that cannot show ± or a name must not end a solve.
        with contextlib.suppress(AttributeError, ValueError):
            stream.reconfigure(errors="replace")  # type: ignore[union-attr]
    try:
        return _run(words)
    except UsageError as error:
        return _complain(str(error), 2)
    except MemoryError:
        return _complain("not enough memory; close other programs or ask for a lower accuracy", 2)
    except KeyboardInterrupt:
        return _complain("interrupted; no half-written result is left", 130)
    except BrokenPipeError:
        # The reader of our output left (as `| head` does): nothing is wrong with the result.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return 0
    except OSError as error:
        if error.errno != errno.ENOSPC or error.filename is not None:
            return _failure(error, "--debug" in words)
        return _complain("the output cannot be printed, the disk is full; free space or send it elsewhere", 2)
    except Exception as error:
        return _failure(error, "--debug" in words)


def program() -> None:
    """Entry of the installed command: `main`, then leave at once.

    Taking the interpreter and the libraries apart would cost a third of a second for nothing; what was
    registered for the end (temporary folders) is still done.
    """
    code = main()
    atexit._run_exitfuncs()
    with contextlib.suppress(OSError, ValueError):
        sys.stdout.flush()
        sys.stderr.flush()
    os._exit(code)


def _run(words: list[str]) -> int:
    parser = _parser()
    try:
        args = parser.parse_args(words)
    except SystemExit as leave:
        # --help and --version print and leave by themselves.
        return int(leave.code or 0)
    if args.version:
        from daraf.io.document import daraf_version

        sys.stdout.write(f"daraf {daraf_version()}\n")
        return 0
    if args.command is None:
        names = ", ".join(module.NAME for module in _COMMANDS)
        raise UsageError(f"name a command: {names}; see `daraf --help`")
    code: int = args.run(args)
    sys.stdout.flush()
    return code


def _parser() -> argparse.ArgumentParser:
    raw = argparse.RawDescriptionHelpFormatter
    parser = Parser(prog="daraf", description=_DESCRIPTION, epilog=_EPILOG, formatter_class=raw, allow_abbrev=False)
    parser.add_argument("--version", action="store_true", help="print the version")
    commands = parser.add_subparsers(dest="command", metavar="COMMAND", title="commands")
    for module in _COMMANDS:
        sub = commands.add_parser(
            module.NAME,
            help=module.HELP,
            description=module.DESCRIPTION,
            formatter_class=raw,
            allow_abbrev=False,
        )
        module.add_arguments(sub)
        sub.add_argument("--debug", action="store_true", help="write the traceback of a defect to a file")
        sub.set_defaults(run=module.run)
    return parser


def _complain(text: str, code: int) -> int:
    from daraf.io.names import printable  # what an error quotes may come from a hostile file

    sys.stderr.write(f"daraf: {printable(text, _LONGEST_LINE)}\n")
    return code


def _failure(error: Exception, debug: bool) -> int:
    """Tell bad input from a defect. Loads the physics only now: its help must not wait for numba."""
    from daraf.bem.errors import InputError

    return _complain(str(error), 2) if isinstance(error, InputError) else _defect(error, debug)


def _defect(error: Exception, debug: bool) -> int:
    text = f"defect of daraf, please report it: {type(error).__name__}: {error}"
    if not debug:
        return _complain(f"{text} (the same command with --debug writes a traceback to a file)", 1)
    with tempfile.NamedTemporaryFile("w", prefix="daraf-defect-", suffix=".txt", delete=False) as file:
        traceback.print_exception(error, file=file)
    return _complain(f"{text} (traceback in {file.name})", 1)
