"""`daraf netlist`: the result as a SPICE subcircuit, and reductions of its network."""

import argparse
import sys
from pathlib import Path
from typing import TYPE_CHECKING

from .parser import UsageError

if TYPE_CHECKING:
    from daraf.bem.terminals import Terminals
    from daraf.io.result import Result

__all__ = ["DESCRIPTION", "HELP", "NAME", "add_arguments", "run"]

NAME = "netlist"
HELP = "SPICE subcircuit of a result, or one number of its network"
DESCRIPTION = """\
Writes the capacitances of a result as a SPICE subcircuit, its pins in the order of the case:

  daraf netlist probe.daraf
  daraf netlist probe.daraf --join shield=guard,housing --float screw --drop 0.1%

Its parameter `corner` gives nominal (0), low (-1) and high (1) values. With --between,
--modes or --elastance numbers are printed and no file is written:

  daraf netlist probe.daraf --between drive,sense --others earthed

Reductions are done in this order: join, float, earth, reference.
"""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the arguments."""
    parser.add_argument("result", metavar="RESULT", help="result folder that `daraf solve` wrote")
    parser.add_argument("--out", metavar="FILE", help="netlist (default: NAME.cir beside the result; - prints it)")
    parser.add_argument("--name", metavar="NAME", help="of the subcircuit (default: the result's)")
    parser.add_argument(
        "--drop", metavar="SHARE", default="0", help="leave out couplings below this share, such as 0.1%%"
    )
    parser.add_argument("--reference-pin", action="store_true", help="infinity as a last pin `ref`, not node 0")
    parser.add_argument("--join", action="append", default=[], metavar="NEW=A,B", help="connect conductors by a wire")
    parser.add_argument("--float", metavar="A,B", help="leave conductors unconnected and uncharged")
    parser.add_argument("--earth", metavar="A,B", help="hold conductors at the potential of infinity")
    parser.add_argument("--reference", metavar="A", help="measure all potentials from this conductor")
    parser.add_argument(
        "--infinity",
        choices=("floating", "joined"),
        default="floating",
        help="with --reference: far surroundings float, or are joined to the reference",
    )
    parser.add_argument("--between", metavar="A,B", help="print the two-terminal capacitance")
    parser.add_argument("--modes", metavar="P,N", help="print differential and common mode of a pair")
    parser.add_argument("--elastance", action="store_true", help="print the potential coefficients")
    parser.add_argument(
        "--others",
        choices=("floating", "earthed", "guarded"),
        help="what the other conductors do (default: floating; earthed for --modes)",
    )


def run(args: argparse.Namespace) -> int:
    """Reduce, then print a number or write the netlist."""
    from daraf.io.result import read_result

    result = read_result(args.result)
    network = _reduced(args, _network(result))
    numbers = _numbers(args, network)
    if numbers:
        sys.stdout.write("\n".join(numbers) + "\n")
        return 0
    return _write(args, result, network)


def _network(result: "Result") -> "Terminals":
    from daraf.bem.errors import InputError
    from daraf.bem.terminals import terminals

    try:
        capacitance = result.document["capacitance"]
        return terminals(
            result.document["conductors"],
            capacitance["maxwell"],
            capacitance["maxwell_uncertainty"],
            to_infinity_uncertainty=capacitance["to_infinity_uncertainty"],
        )
    except (KeyError, TypeError, ValueError) as error:
        raise InputError(f"{result.folder}: result.json is damaged ({error}); solve the case again") from None


def _reduced(args: argparse.Namespace, network: "Terminals") -> "Terminals":
    groups: dict[str, list[str]] = {}
    for text in args.join:
        new, _, members = text.partition("=")
        if not new.strip() or not members.strip():
            raise UsageError(f"--join {text}: write NEW=A,B")
        groups[new.strip()] = _names(members)
    if groups:
        network = network.join(groups)
    if args.float:
        network = network.let_float(_names(args.float))
    if args.earth:
        network = network.earth(_names(args.earth))
    if args.reference:
        network = network.refer_to(args.reference, infinity=args.infinity)
    return network


def _names(text: str) -> list[str]:
    return [word.strip() for word in text.split(",") if word.strip()]


def _pair(option: str, text: str) -> tuple[str, str]:
    names = _names(text)
    if len(names) != 2:
        raise UsageError(f"{option} {text}: name two conductors, such as drive,sense")
    return names[0], names[1]


def _numbers(args: argparse.Namespace, network: "Terminals") -> list[str]:
    from daraf.io.units import with_uncertainty

    lines = []
    if args.between:
        one, other = _pair("--between", args.between)
        others = args.others or "floating"
        found = network.between(one, other, others=others)
        lines.append(f"{one} - {other}, others {others}: {with_uncertainty(found.value, found.uncertainty, 'F')}")
    if args.modes:
        one, other = _pair("--modes", args.modes)
        others = args.others or "earthed"
        modes = network.modes(one, other, others=others)
        for word, found in vars(modes).items():
            value = with_uncertainty(found.value, found.uncertainty, "F")
            lines.append(f"{one} / {other}, others {others}: {word} {value}")
    if args.elastance:
        P, spread = network.elastance()
        for i, one in enumerate(network.names):
            for j in range(i, len(network.names)):
                value = with_uncertainty(float(P[i, j]), float(spread[i, j]), "V/C")
                lines.append(f"{one} - {network.names[j]}: {value}")
    return lines


def _write(args: argparse.Namespace, result: "Result", network: "Terminals") -> int:
    from daraf.io.netlist import netlist
    from daraf.io.text_file import write_text
    from daraf.io.units import engineering

    folder = result.folder.resolve()
    made = netlist(
        network,
        name=args.name or folder.stem,
        drop=_share(args.drop),
        reference_pin=args.reference_pin,
        provenance=_provenance(result, args),
    )
    if args.out == "-":
        sys.stdout.write(made.text)
        return 0
    out = Path(args.out) if args.out else folder.with_suffix(".cir")
    write_text(out, made.text)
    lines = [f"subcircuit {made.subcircuit}, pins {' '.join(made.pins)}"]
    if made.dropped:
        lines.append(f"{made.dropped} couplings left out, {engineering(made.dropped_sum, 'F')} in sum, put to ground")
    sys.stdout.write("\n".join([*lines, f"netlist: {out}"]) + "\n")
    return 0


def _share(text: str) -> float:
    number = text.strip()
    scale = 0.01 if number.endswith("%") else 1.0
    try:
        value = float(number.removesuffix("%")) * scale
    except ValueError:
        raise UsageError(f"--drop {text}: write a share such as 0.1% or 0.001") from None
    if not 0.0 <= value < 1.0:
        raise UsageError(f"--drop {text}: must be from 0 to below 100 %")
    return value


def _provenance(result: "Result", args: argparse.Namespace) -> list[str]:
    document = result.document
    lines = [f"{document.get('title') or 'capacitances'}; daraf {document['daraf']}, from {result.folder.name}"]
    lines += [f"input {one['file']} sha256 {one['sha256']}" for one in document.get("inputs", [])]
    lines += [f"warning ({one['code']}): {one['text']}" for one in document.get("warnings", [])]
    steps = [f"joined {text}" for text in args.join]
    for word in ("float", "earth", "reference"):
        if getattr(args, word):
            steps.append(f"{word} {getattr(args, word)}")
    if args.reference:
        steps.append(f"infinity {args.infinity}")
    return lines + ([f"reductions: {'; '.join(steps)}"] if steps else [])
