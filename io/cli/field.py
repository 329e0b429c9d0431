"""`daraf field`: potential and field off the surfaces of a result."""

import argparse
import sys
from typing import TYPE_CHECKING, Any

from .parser import UsageError, positive_whole_number

if TYPE_CHECKING:
    from daraf.bem.field_lines import FieldLine
    from daraf.bem.probing import ChargedPanels, Probed
    from daraf.io.places import Places
    from daraf.io.result import Result

__all__ = ["DESCRIPTION", "HELP", "NAME", "add_arguments", "run"]

NAME = "field"
HELP = "potential and field at points, along lines, on planes; field lines"
DESCRIPTION = """\
Evaluates a result where you ask, without solving again. Name one kind of place:

  daraf field RESULT --points FILE.csv          columns x, y, z; others are kept
  daraf field RESULT --at 0,0,5 --at 0,0,6      single points
  daraf field RESULT --line 0,0,5 0,0,20        points along a line
  daraf field RESULT --plane z=2 --picture cut.png
  daraf field RESULT --sheet 0,0,0 1,1,0 0,0,1 --out cut.vts
  daraf field RESULT --box 0,0,0 10,10,10 --out room.vti
  daraf field RESULT --trace 0,0,5              field line from a surface or through a point
  daraf field RESULT --trace-peak terminal      field line from the highest field

Potentials are those of the case; --conductor NAME holds that one at 1 V and all others
at 0 V, --potential NAME=VALUE (repeated) gives others. Points and lines are printed as
CSV, or written to --out. Every value has its expanded uncertainty, k = 2; in metal the
column `metal` names the conductor.
"""
#: Kinds of places, of which one is named.
_KINDS = ("points", "at", "line", "plane", "sheet", "box", "trace", "trace_peak")


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument("result", metavar="RESULT", help="result folder that `daraf solve` wrote")
    place = parser.add_argument_group("where")
    place.add_argument("--points", metavar="FILE", help="CSV file of points")
    place.add_argument("--at", action="append", metavar="X,Y,Z", help="a point; may be repeated")
    place.add_argument("--line", nargs=2, metavar="X,Y,Z", help="from one place to another")
    place.add_argument("--plane", metavar="AXIS=VALUE", help="across an axis, such as z=2")
    place.add_argument("--window", nargs=2, metavar="X,Y,Z", help="opposite corners that limit a plane")
    place.add_argument("--sheet", nargs=3, metavar="X,Y,Z", help="a corner and its two neighbours")
    place.add_argument("--box", nargs=2, metavar="X,Y,Z", help="two opposite corners")
    place.add_argument("--trace", action="append", metavar="X,Y,Z", help="field line; may be repeated")
    place.add_argument("--trace-peak", metavar="CONDUCTOR", help="field line from the peak field as stated")
    place.add_argument("--steps", type=positive_whole_number, metavar="N", help="along a line or the longest side")
    place.add_argument("--unit", metavar="UNIT", help="of all places (default: that of the case)")
    state = parser.add_argument_group("at which potentials")
    state.add_argument("--conductor", metavar="NAME", help="this one at 1 V, all others at 0 V")
    state.add_argument("--potential", action="append", metavar="NAME=VALUE", help="such as drive='20 kV'; others 0 V")
    out = parser.add_argument_group("what becomes of it")
    out.add_argument("--out", metavar="FILE", help=".csv, .vti, .vts or .vtp, by what is asked")
    out.add_argument("--picture", metavar="FILE", help=".png, .svg or .pdf of a line or a plane")
    out.add_argument("-q", "--quiet", action="store_true", help="no progress and no messages")


def run(args: argparse.Namespace) -> int:
    """Evaluate, write, print."""
    kind = _kind(args)
    from daraf.io.charged_result import charged_result, result_unit
    from daraf.io.mesh_units import length_unit
    from daraf.io.result import read_result

    result = read_result(args.result)
    args.unit = length_unit(args.unit) if args.unit else result_unit(result)
    state = charged_result(result, _potentials(args))
    if kind.startswith("trace"):
        return _trace(args, result, state)
    return _evaluate(args, kind, result, state)


def _kind(args: argparse.Namespace) -> str:
    named = [kind for kind in _KINDS if getattr(args, kind)]
    options = ", ".join("--" + kind.replace("_", "-") for kind in _KINDS)
    if not named:
        raise UsageError(f"name where: one of {options}; see `daraf field --help`")
    if len(named) > 1:
        raise UsageError(f"--{named[0]} and --{named[1].replace('_', '-')} are both given; name one kind of place")
    kind = named[0]
    if args.window and kind != "plane":
        raise UsageError("--window limits a plane; give --plane as well")
    if args.conductor and args.potential:
        raise UsageError("--conductor and --potential are both given; keep one")
    if kind in ("plane", "sheet", "box") and not (args.out or args.picture):
        raise UsageError(
            f"--{kind} makes many points; name a file with --out" + ("" if kind == "box" else " or --picture")
        )
    return kind


def _potentials(args: argparse.Namespace) -> dict[str, float] | None:
    from daraf.io.units import parse_quantity

    if args.conductor:
        return {args.conductor: 1.0}
    found = {}
    for text in args.potential or []:
        name, _, value = text.rpartition("=")
        if not name:
            raise UsageError(f"--potential {text}: write NAME=VALUE such as drive='20 kV'")
        found[name] = parse_quantity(float(value) if _is_number(value) else value, "voltage")
    return found or None


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True


def _places(args: argparse.Namespace, kind: str, state: "ChargedPanels") -> "Places":
    import numpy as np

    from daraf.io import places
    from daraf.io.mesh_units import METRES_PER_UNIT

    scale = METRES_PER_UNIT[args.unit]
    if kind == "points":
        return places.points_from_file(args.points, scale)
    if kind == "plane":
        axis, _, value = args.plane.replace(" ", "").partition("=")
        if axis not in ("x", "y", "z") or not _is_number(value):
            raise UsageError(f"--plane {args.plane}: write an axis and its value, such as z=2")
        if args.window:
            window = np.array([places.parse_place(text, scale) for text in args.window])
            window = np.array([window.min(axis=0), window.max(axis=0)])
        else:
            flat = state.panels.corners.reshape(-1, 3)
            low, high = flat.min(axis=0), flat.max(axis=0)
            beyond = places.BEYOND * float(np.linalg.norm(high - low))
            window = np.array([low - beyond, high + beyond])
        return places.plane(axis, float(value) * scale, window, args.steps or 160)
    found = [places.parse_place(text, scale) for text in getattr(args, kind)]
    if kind == "at":
        return places.Places("points", np.array(found))
    if kind == "line":
        return places.line(found[0], found[1], args.steps or 100)
    if kind == "sheet":
        return places.parallelogram(found[0], found[1], found[2], args.steps or 160)
    return places.box(found[0], found[1], args.steps or 40)


def _evaluate(args: argparse.Namespace, kind: str, result: "Result", state: "ChargedPanels") -> int:
    from daraf.bem.probing import probe
    from daraf.io.field_files import field_csv, places_vtk, write_field
    from daraf.io.field_picture import write_picture
    from daraf.io.progress import progress_for

    asked = _places(args, kind, state)
    with progress_for(quiet=args.quiet) as progress:
        probed = probe(state, asked.points, progress=lambda done, total: progress("field", done, total))
    names, title = result.document["conductors"], result.document["title"] or result.folder.name
    grid = kind in ("plane", "sheet", "box")
    text, extension = places_vtk(asked, probed, title) if grid else ("", ".csv")
    if not grid and (args.out or not args.picture):
        text = field_csv(asked, probed, names, args.unit)
    if text and args.out:
        write_field(args.out, text, extension)
    if args.picture:
        write_picture(args.picture, asked, probed, unit=args.unit, title=title)
    if not (args.out or args.picture):
        sys.stdout.write(text)
    else:
        sys.stdout.write(_summary(args, asked, probed))
    _caution(args, state)
    return 0


def _trace(args: argparse.Namespace, result: "Result", state: "ChargedPanels") -> int:
    from daraf.bem.field_lines import field_line
    from daraf.bem.probing import probe
    from daraf.io.field_files import lines_csv, lines_vtp, write_field
    from daraf.io.mesh_units import METRES_PER_UNIT
    from daraf.io.places import parse_place
    from daraf.io.progress import progress_for

    if args.picture:
        raise UsageError("--picture shows lines and planes; write field lines with --out NAME.vtp or NAME.csv")
    if args.trace_peak:
        starts = [_peak(result, args.trace_peak)]
    else:
        starts = [parse_place(text, METRES_PER_UNIT[args.unit]) for text in args.trace]
    lines: list[FieldLine] = []
    with progress_for(quiet=args.quiet) as progress:
        for k, start in enumerate(starts):
            progress("field lines", k, len(starts))
            lines.append(field_line(state, start))
        probed = [probe(state, line.points) for line in lines]
    names = result.document["conductors"]
    if args.out and args.out.lower().endswith(".vtp"):
        write_field(args.out, lines_vtp(lines, probed, result.document["title"]), ".vtp")
    elif args.out:
        write_field(args.out, lines_csv(lines, probed, names, args.unit), ".csv")
    else:
        sys.stdout.write(lines_csv(lines, probed, names, args.unit))
    told = sys.stdout if args.out else sys.stderr
    if args.out or not args.quiet:
        for k, line in enumerate(lines, 1):
            ends = [names[j] if j >= 0 else "far away" for j in (line.starts_on, line.ends_on)]
            length = line.distance[-1] / METRES_PER_UNIT[args.unit]
            told.write(f"field line {k}: {ends[0]} - {ends[1]}, length {length:.4g} {args.unit}\n")
    _caution(args, state)
    return 0


def _peak(result: "Result", name: str) -> Any:
    from daraf.bem.errors import InputError

    peaks = result.document.get("surface_field") or []
    for one in peaks:
        if one["conductor"] == name:
            import numpy as np

            return np.array(one["at"])
    known = ", ".join(repr(one["conductor"]) for one in peaks) or "none"
    raise InputError(f"{result.folder}: no peak field of a conductor {name!r} as stated; there is one of {known}")


def _summary(args: argparse.Namespace, asked: "Places", probed: "Probed") -> str:
    import numpy as np

    from daraf.io.mesh_units import METRES_PER_UNIT
    from daraf.io.units import engineering, with_uncertainty

    metal = int(np.count_nonzero(probed.inside >= 0))
    strength = probed.strength
    top = int(np.argmax(strength))
    place = ", ".join(f"{x + 0.0:.4g}" for x in asked.points[top] / METRES_PER_UNIT[args.unit])
    low, high = float(probed.potential.min()), float(probed.potential.max())
    lines = [
        f"{len(asked.points)} points, {metal} of them in metal",
        f"potential from {engineering(low, 'V')} to {engineering(high, 'V')}",
        f"highest field {with_uncertainty(strength[top], probed.field_uncertainty[top], 'V/m')} "
        f"at ({place}) {args.unit}",
    ]
    lines += [f"written: {name}" for name in (args.out, args.picture) if name]
    return "\n".join(lines) + "\n"


def _caution(args: argparse.Namespace, state: "ChargedPanels") -> None:
    import numpy as np

    from daraf.io.document import EXTRA_LOW_VOLTAGE

    if not args.quiet and float(np.max(np.abs(state.potential))) > EXTRA_LOW_VOLTAGE:
        sys.stderr.write(
            "potentials beyond extra-low voltage: touching live or charged parts can kill; "
            "a computed field replaces no insulation test\n"
        )
