"""Does the stated uncertainty cover the true error? The whole exact-solution set at several accuracies.

Goal: the true value lies within the uncertainty in at least 95 % of the entries, the median of uncertainty over
true error is at most 5, and the accuracy asked is truly met in at least 95 %. The exit code is 1 if the first is
missed at any accuracy.
"""

import argparse
import json
import sys
from dataclasses import asdict
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "tests"))

from published.cases import CASES
from published.covering import Summary, Verdict, by_cause, judge, part_of, summarise

ACCURACIES = (0.02, 0.005, 0.001)
GOAL = 0.95


def line(verdict: Verdict) -> str:
    """One case: what it took, and its worst entry."""
    k = verdict.worst
    budget = " ".join(f"{cause[:4]} {value[k]:.1e}" for cause, value in verdict.lines.items())
    error, uncertainty = verdict.error[k], verdict.uncertainty[k]
    missed = [e for e, hit in zip(verdict.entry, verdict.hit, strict=True) if not hit]
    mark = f"MISS {' '.join(missed)}" if missed else ""
    return (
        f"{verdict.name:18s} {verdict.panels:6d} {verdict.passes:3d} {verdict.seconds:7.1f} "
        f"{'yes' if verdict.reached else 'no':3s} {verdict.entry[k]:4s} {error:+9.1e} {uncertainty:8.1e} "
        f"{abs(error) / uncertainty:6.2f}  [{budget}] {mark}".rstrip()
    )


def totals(summary: Summary, accuracy: float) -> str:
    """The last lines of one accuracy."""
    return (
        f"{accuracy:.2%} asked: {summary.entries} entries of {summary.cases} cases, hit rate {summary.hit_rate:.1%}, "
        f"uncertainty/|error| median {summary.median_ratio:.1f} least {summary.worst_ratio:.2f}\n"
        f"  truly met {summary.truly_met:.1%}, claimed by {summary.claimed:.1%} of the cases, "
        f"{summary.panels} panels, {summary.seconds:.0f} s"
    )


def parse() -> argparse.Namespace:
    """Options."""
    parser = argparse.ArgumentParser(prog="coverage", description=__doc__)
    names = [case.name for case in CASES]
    parser.add_argument("names", nargs="*", metavar="CASE", help=f"only these cases of: {', '.join(names)}")
    parser.add_argument(
        "--accuracy", type=float, action="append", metavar="X", help="0.02, 0.005 and 0.001 unless given; repeatable"
    )
    parser.add_argument("--part", type=_part, default=(1, 1), metavar="K/N", help="every N-th case from the K-th on")
    parser.add_argument("--memory", type=float, default=2.0, metavar="GB", help="limit of each solve (default 2)")
    parser.add_argument("--json", metavar="FILE", help="write all entries here")
    options = parser.parse_args()
    for name in set(options.names) - set(names):
        parser.error(f"no case {name!r}; --help lists them")
    return options


def _part(text: str) -> tuple[int, int]:
    part, _, parts = text.partition("/")
    if not 1 <= int(part) <= int(parts):
        raise ValueError(text)
    return int(part), int(parts)


def main() -> int:
    """Run and print; 1 if the hit rate falls short."""
    options = parse()
    cases = part_of([c for c in CASES if not options.names or c.name in options.names], *options.part)
    record, good = [], True
    for accuracy in options.accuracy or ACCURACIES:
        print(f"{accuracy:.2%} asked")
        print("case               panels pass seconds met worst     error   uncert. ratio  [budget]")
        verdicts = []
        for case in cases:
            verdicts.append(judge(case, accuracy, int(options.memory * 1e9)))
            print(line(verdicts[-1]), flush=True)
        summary = summarise(verdicts)
        print(totals(summary, accuracy))
        for cause, ratios in by_cause(verdicts).items():
            middle, high = np.quantile(ratios, [0.5, 0.95])
            print(f"  driven by {cause}: {len(ratios)} entries, |error|/line median {middle:.2f}, 95 % {high:.2f}")
        print(flush=True)
        good &= summary.hit_rate >= GOAL
        record.append({"summary": asdict(summary), "cases": [_plain(v) for v in verdicts]})
    if options.json:
        Path(options.json).write_text(json.dumps(record, indent=1), encoding="utf-8")
    return 0 if good else 1


def _plain(verdict: Verdict) -> dict[str, object]:
    return {key: _listed(value) for key, value in vars(verdict).items()}


def _listed(value: object) -> object:
    if isinstance(value, dict):
        return {key: _listed(item) for key, item in value.items()}
    return value.tolist() if hasattr(value, "tolist") else value


if __name__ == "__main__":
    sys.exit(main())
