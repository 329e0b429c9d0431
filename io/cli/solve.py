"""`daraf solve`: the main job."""

import argparse
import json
import os
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Any

from .mending_options import add_mending, mending_keys, with_mending
from .parser import UsageError, case_file_among, positive_whole_number

if TYPE_CHECKING:
    from daraf.io.outcome import Outcome
    from daraf.io.problem import Problem

__all__ = ["DESCRIPTION", "HELP", "NAME", "add_arguments", "run"]

NAME = "solve"
HELP = "capacitances, charges and potentials of a case"
DESCRIPTION = """\
Solves a case file, or surface files with every body a conductor:

  daraf solve CASE.toml
  daraf solve FILE... --unit mm

Prints the Maxwell and the mutual capacitances with their uncertainty and writes the
result folder.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument("files", nargs="*", metavar="FILE", help="one case file (.toml), or surface files")
    parser.add_argument("--unit", metavar="UNIT", help="length unit of the surface files that carry none")
    parser.add_argument(
        "--facet-tolerance",
        metavar="X",
        help="largest distance of facets from curved shapes (STEP), such as '0.02 mm' or '0.1 %%' of the size",
    )
    parser.add_argument("--accuracy", metavar="X", help="relative, such as '0.5 %%'; overrides the case (default 1 %%)")
    parser.add_argument(
        "--method",
        choices=("auto", "dense", "fast"),
        help="full matrix, or multipoles and iteration; overrides the case (default: by size)",
    )
    add_mending(parser)
    parser.add_argument("--coarsen", metavar="X", help="auto, no, or a length within which round parts are coarsened")
    parser.add_argument("--markers", metavar="FILE", help="where to draw places at which conductors meet (.vtp)")
    parser.add_argument("--out", metavar="DIR", help="result folder (default: NAME.daraf beside the first file)")
    parser.add_argument("--json", action="store_true", help="print result.json instead of tables")
    parser.add_argument("-q", "--quiet", action="store_true", help="no progress and no messages")
    parser.add_argument("--threads", type=positive_whole_number, metavar="N", help="number of threads")
    parser.add_argument("--schema", action="store_true", help="print the JSON Schema of the case file")


def run(args: argparse.Namespace) -> int:
    """Solve, write, print."""
    if args.schema:
        from daraf.io.schema import json_schema

        sys.stdout.write(json.dumps(json_schema(), indent=2, ensure_ascii=False) + "\n")
        return 0
    if not args.files:
        raise UsageError("name a case file or surface files; see `daraf solve --help`")
    case_file = case_file_among(args.files, unit=args.unit, facet_tolerance=args.facet_tolerance)
    if args.threads is not None:
        _limit_threads(args.threads)
    from daraf.io.progress import progress_for
    from daraf.io.result import check_destination

    problem, seconds, accuracy = _marked(args, case_file)
    out = args.out or str(Path(args.files[0]).with_suffix(".daraf"))
    # Before the solve: an hour's work must not end at a folder that cannot be written.
    check_destination(out)
    with progress_for(quiet=args.quiet) as progress:
        outcome = _solve(problem, accuracy, args.method, progress, seconds)
        progress("writing", 0, 1)
        outcome.write(out)
    _show(outcome, out, args)
    if outcome.solution.interrupted:
        return 130
    return 0 if outcome.solution.reached else 3


def _limit_threads(n: int) -> None:
    """Limit the threads of BLAS and numba; before they are loaded where possible.

    Both read their environment variable once, when they are loaded. Loaded earlier (in a process that
    calls `main` itself), only numba can still be told, and only to use fewer.
    """
    if "numpy" not in sys.modules:
        for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
            os.environ[name] = str(n)
    if "numba" not in sys.modules:
        os.environ["NUMBA_NUM_THREADS"] = str(n)
        return
    from daraf.bem import set_threads

    set_threads(n)


def _marked(args: argparse.Namespace, case_file: str | None) -> tuple["Problem", float, float | None]:
    """As `_read`; where conductors meet, the places are drawn beside the error."""
    from daraf.bem.errors import InputError
    from daraf.io.markers import MeetingError, write_marks

    try:
        return _read(args, case_file)
    except MeetingError as error:
        file = args.markers or Path(args.files[0]).with_suffix(".markers.vtp")
        try:
            drawn = f"drawn in {write_marks(file, error.marks, error.unit)}"
        except InputError as trouble:
            drawn = f"not drawn: {trouble}"
        raise InputError(f"{error}; {drawn}") from None


def _read(args: argparse.Namespace, case_file: str | None) -> tuple["Problem", float, float | None]:
    """Read case and surfaces: the problem, the seconds it took, the accuracy that overrides the case."""
    import time

    from daraf.io.case import load_case
    from daraf.io.problem import build_problem, problem_from_files
    from daraf.io.schema import parse_accuracy

    started = time.perf_counter()
    accuracy = None if args.accuracy is None else parse_accuracy(args.accuracy)
    if case_file is None:
        problem = problem_from_files(
            args.files,
            args.unit,
            accuracy=accuracy,
            facet_tolerance=args.facet_tolerance,
            mending=mending_keys(args),
        )
    else:
        problem = build_problem(with_mending(load_case(case_file), args), accuracy=accuracy)
    return problem, time.perf_counter() - started, accuracy


def _solve(problem: "Problem", accuracy: float | None, method: str | None, progress: Any, seconds: float) -> "Outcome":
    from daraf.io.outcome import solve_problem

    return solve_problem(problem, accuracy=accuracy, method=method, progress=progress, reading=seconds)


def _show(outcome: "Outcome", out: str, args: argparse.Namespace) -> None:
    from daraf.io.result import document_text

    if not args.json:
        sys.stdout.write(f"{outcome.text()}\nresult: {out}\n")
        return
    sys.stdout.write(document_text(outcome.document))
    if not args.quiet:
        sys.stderr.write(f"result: {out}\n")
