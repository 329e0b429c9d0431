"""`daraf inspect`: what is in these files, is it fit to solve, what to mend."""

import argparse
import json
import sys
from typing import TYPE_CHECKING

from .mending_options import add_mending, mend_from, with_mending
from .parser import case_file_among

if TYPE_CHECKING:
    from daraf.io.inspection import Inspection

__all__ = ["DESCRIPTION", "HELP", "NAME", "add_arguments", "run"]

NAME = "inspect"
HELP = "what is in these files, is it fit, what to mend"
DESCRIPTION = """\
Lists the bodies of surface files (STL, OBJ, PLY, OFF, GLB, 3MF): name, panels, open
or closed, size, edges, smallest gap, faults and what to do about each. Of a case
file (.toml) it lists the bodies that the case uses, where the case puts them.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument("files", nargs="+", metavar="FILE", help="surface file, or one case file")
    parser.add_argument("--unit", metavar="UNIT", help="length unit of the surface files, such as mm")
    add_mending(parser)
    parser.add_argument("--markers", metavar="FILE", help="draw faults and contacts into a .vtp file")
    parser.add_argument("--json", action="store_true", help="print JSON instead of text")


def run(args: argparse.Namespace) -> int:
    """Inspect and print."""
    from daraf.io.inspection import inspection_to_dict, inspection_to_text
    from daraf.io.markers import write_marks

    inspection = _inspected(args)
    if args.markers:
        write_marks(args.markers, inspection.marks, inspection.unit)
    if args.json:
        text = json.dumps(inspection_to_dict(inspection), indent=2, ensure_ascii=False)
    else:
        text = inspection_to_text(inspection, args.unit or inspection.unit)
    sys.stdout.write(text.rstrip("\n") + "\n")
    return 0


def _inspected(args: argparse.Namespace) -> "Inspection":
    case_file = case_file_among(args.files, args.unit)
    if case_file is None:
        from daraf.io.inspection import inspect_files

        return inspect_files(args.files, args.unit, mend=mend_from(args), marked=bool(args.markers))
    from daraf.io.case import load_case
    from daraf.io.case_inspection import inspect_case

    case = with_mending(load_case(case_file), args)
    inspection, notices = inspect_case(case, marked=bool(args.markers))
    for notice in notices:
        sys.stderr.write(f"note: {notice.text}\n")
    return inspection
