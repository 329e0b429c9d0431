"""`daraf inspect`: what is in these files, is it fit to solve, what to mend."""

import argparse
import json
import sys

from .mending_options import add_mending, mend_from

__all__ = ["DESCRIPTION", "HELP", "NAME", "add_arguments", "run"]

NAME = "inspect"
HELP = "what is in these files, is it fit, what to mend"
DESCRIPTION = """\
Lists the bodies of surface files (STL, OBJ, PLY, OFF, GLB, 3MF): name, panels, open
or closed, size, edges, smallest gap, faults and what to do about each.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument("files", nargs="+", metavar="FILE", help="surface file")
    parser.add_argument("--unit", metavar="UNIT", help="length unit of the files, such as mm")
    add_mending(parser)
    parser.add_argument("--markers", metavar="FILE", help="draw faults and contacts into a .vtp file")
    parser.add_argument("--json", action="store_true", help="print JSON instead of text")


def run(args: argparse.Namespace) -> int:
    """Inspect and print."""
    from daraf.io.inspection import inspect_files, inspection_to_dict, inspection_to_text
    from daraf.io.markers import write_marks

    inspection = inspect_files(args.files, args.unit, mend=mend_from(args), marked=bool(args.markers))
    if args.markers:
        write_marks(args.markers, inspection.marks, inspection.unit)
    if args.json:
        text = json.dumps(inspection_to_dict(inspection), indent=2, ensure_ascii=False)
    else:
        text = inspection_to_text(inspection, args.unit)
    sys.stdout.write(text.rstrip("\n") + "\n")
    return 0
