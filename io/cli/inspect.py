"""`daraf inspect`: what is in these files, is it fit to solve, what to mend."""

import argparse
import json
import os
import sys
from typing import TYPE_CHECKING

from .parser import case_file_among

if TYPE_CHECKING:
    from daraf.io.inspection import Inspection
    from daraf.io.progress import ProgressCallback

__all__ = ["DESCRIPTION", "HELP", "NAME", "add_arguments", "run"]

#: Files of fewer bytes are inspected within a second or two.
_WORTH_PROGRESS = 2_000_000

NAME = "inspect"
HELP = "what is in these files, is it fit, what to mend"
DESCRIPTION = """\
Lists the bodies of surface files (STL, OBJ, PLY, OFF, glTF, 3MF, STEP, also zipped): name,
panels, open or closed, size, edges, smallest gap, faults and what to do about each. Of a
case file (.toml) it lists the bodies that the case uses, where the case puts them.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument("files", nargs="+", metavar="FILE", help="surface file, or one case file")
    parser.add_argument("--unit", metavar="UNIT", help="length unit of the files that carry none")
    parser.add_argument(
        "--facet-tolerance",
        metavar="X",
        help="largest distance of facets from curved shapes (STEP), such as '0.02 mm' or '0.1 %%' of the size",
    )
    parser.add_argument("--json", action="store_true", help="print JSON instead of text")
    parser.add_argument("-q", "--quiet", action="store_true", help="no progress")


def run(args: argparse.Namespace) -> int:
    """Inspect and print."""
    from daraf.io.inspection import inspection_to_dict, inspection_to_text
    from daraf.io.progress import progress_for

    with progress_for(quiet=args.quiet or _soon_done(args.files)) as progress:
        inspection = _inspected(args, progress)
    if args.json:
        text = json.dumps(inspection_to_dict(inspection), indent=2, ensure_ascii=False)
    else:
        text = inspection_to_text(inspection, args.unit or inspection.unit)
    sys.stdout.write(text.rstrip("\n") + "\n")
    return 0


def _inspected(args: argparse.Namespace, progress: "ProgressCallback") -> "Inspection":
    case_file = case_file_among(args.files, unit=args.unit, facet_tolerance=args.facet_tolerance)
    if case_file is None:
        from daraf.io.inspection import inspect_files

        return inspect_files(args.files, args.unit, facet_tolerance=args.facet_tolerance, progress=progress)
    from daraf.io.case import load_case
    from daraf.io.case_inspection import inspect_case

    inspection, notices = inspect_case(load_case(case_file), progress=progress)
    for notice in notices:
        sys.stderr.write(f"note: {notice.text}\n")
    return inspection


def _soon_done(files: list[str]) -> bool:
    """Whether so little is to be read that nobody waits for it."""
    return sum(os.path.getsize(file) for file in files if os.path.isfile(file)) < _WORTH_PROGRESS
