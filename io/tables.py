"""The tables on standard output: plain text, at most 80 columns wide."""

from collections.abc import Iterator, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .account_text import counted, facet_columns
from .mesh_units import METRES_PER_UNIT
from .sensitivity_text import sensitivity_tables
from .strength_text import strength_table
from .units import engineering, prefix_for, rounded, with_uncertainty

__all__ = [
    "WIDTH",
    "budget_line",
    "couplings",
    "facet_share",
    "force_table",
    "matrix_table",
    "peak_table",
    "result_text",
]

FloatArray = NDArray[np.float64]

WIDTH = 80
#: Up to so many conductors the matrices are written out; beyond, the couplings are listed by size.
LARGEST_MATRIX = 12
#: Longest list of couplings; the rest stands in `result.json`.
MOST_COUPLINGS = 40
_NAME_WIDTH = 18
#: Notices that ask for a look and are no reason for doubt.
NOTES = (
    "cavity-wall",
    "facet-tolerance",
    "facets-taken-as-drawn",
    "facets-taken-round",
    "inner-surface",
    "mended",
    "own-unit",
    "unused-body",
)
#: Causes below this share of the largest are not printed.
_PRINTED = 1e-3


def result_text(document: dict[str, Any]) -> str:
    """Everything a user wants to read of a `result.json`.

    Parameters
    ----------
    document : dict
        Content of `result.json`.

    Returns
    -------
    str
        Lines of at most `WIDTH` columns, ending in a newline.
    """
    blocks = [
        _heading(document),
        *_capacitances(document),
        _state(document),
        force_table(document),
        peak_table(document),
        strength_table(document, _wrapped),
        *sensitivity_tables(document),
        _facets(document),
        _accuracy(document),
        _effort(document),
    ]
    # What this version cannot compute stands in `result.json`; the tables claim nothing about it.
    told = [one for one in document["warnings"] if one["code"] != "not-computed"]
    blocks += [
        _wrapped(f"{'note' if one['code'] in NOTES else 'warning'} ({one['code']}): {one['text']}") for one in told
    ]
    return "\n\n".join("\n".join(block) for block in blocks if block) + "\n"


def _heading(document: dict[str, Any]) -> list[str]:
    names, medium = document["conductors"], document["solution"]["relative_permittivity"]
    title = document["title"] or "capacitance"
    count = counted(len(names), "conductor")
    lines = [*_wrapped(title), f"{count}, relative permittivity {medium:g}"]
    return [*lines, "± is the expanded uncertainty, k = 2, for the geometry as modelled"]


def _capacitances(document: dict[str, Any]) -> Iterator[list[str]]:
    names, content = document["conductors"], document["capacitance"]
    maxwell, spread = np.array(content["maxwell"]), np.array(content["maxwell_uncertainty"])
    mutual, mutual_spread = np.array(content["mutual"]), np.array(content["mutual_uncertainty"])
    if len(names) == 1:
        yield [f"capacitance to infinity  {with_uncertainty(maxwell[0, 0], spread[0, 0], 'F')}"]
        return
    if len(names) <= LARGEST_MATRIX:
        yield matrix_table("Maxwell capacitance matrix", names, names, maxwell, spread)
        # The diagonal becomes a column of its own: it is no coupling of a conductor with itself.
        beside = np.column_stack([mutual, np.diag(mutual)])
        beside_spread = np.column_stack([mutual_spread, np.diag(mutual_spread)])
        beside[range(len(names)), range(len(names))] = np.nan
        yield matrix_table("Mutual capacitances", names, [*names, "infinity"], beside, beside_spread)
        return
    yield _self_list(names, maxwell, spread, content)
    yield couplings(names, mutual, mutual_spread)


def matrix_table(
    title: str,
    rows: Sequence[str],
    columns: Sequence[str],
    values: FloatArray,
    spreads: FloatArray,
    unit: str = "F",
) -> list[str]:
    """Lines of a table with one prefix, cut into blocks of columns that fit the width.

    Parameters
    ----------
    title : str
    rows, columns : sequence of str
    values, spreads : (n_rows, n_columns) float
        A value that is not a number leaves its cell empty.
    unit : str

    Returns
    -------
    list of str
    """
    exponent, prefix = prefix_for(float(np.nanmax(np.abs(values))))
    cells = [_cells(column, column_spread, exponent) for column, column_spread in zip(values.T, spreads.T, strict=True)]
    labels = _labels(rows)
    heads = [_label(name, k) if k < len(rows) else name for k, name in enumerate(columns)]
    left = max(map(len, labels))
    width = max(len(cell) for column in cells for cell in column)
    per_block = max(1, (WIDTH - left) // (width + 2))
    lines = [f"{title}, {prefix}{unit}"]
    for start in range(0, len(columns), per_block):
        block = range(start, min(start + per_block, len(columns)))
        if start:
            lines.append("")
        lines.append(" " * left + "".join("  " + _cut(heads[k], width).rjust(width) for k in block))
        for row, label in enumerate(labels):
            lines.append((label.ljust(left) + "".join("  " + cells[k][row].rjust(width) for k in block)).rstrip())
    return lines


def _cells(values: FloatArray, spreads: FloatArray, exponent: int) -> list[str]:
    """Cells of one column, value and uncertainty each aligned at its decimal point."""
    pairs = [
        ("", "") if np.isnan(value) else rounded(float(value), float(spread), exponent)
        for value, spread in zip(values, spreads, strict=True)
    ]
    left, right = _aligned([one[0] for one in pairs]), _aligned([one[1] for one in pairs])
    sign = [" ± " if one[1] else "   " for one in pairs]
    return [a + s + b if a.strip() else "" for a, s, b in zip(left, sign, right, strict=True)]


def _aligned(texts: Sequence[str]) -> list[str]:
    """Texts of one width with their decimal points below each other."""
    whole = max(len(text.partition(".")[0]) for text in texts)
    padded = [" " * (whole - len(text.partition(".")[0])) + text for text in texts]
    full = max(map(len, padded))
    return [text.ljust(full) for text in padded]


def couplings(names: Sequence[str], mutual: FloatArray, spreads: FloatArray, most: int = MOST_COUPLINGS) -> list[str]:
    """Lines of the mutual capacitances between pairs, largest first.

    Parameters
    ----------
    names : sequence of str
    mutual, spreads : (n, n) float, F
    most : int

    Returns
    -------
    list of str
    """
    first, second = np.triu_indices(len(names), 1)
    order = np.argsort(-mutual[first, second], kind="stable")[:most]
    lines = [f"Mutual capacitances, the largest {len(order)} of {len(first)}"]
    pairs = [f"{_label(names[first[k]], first[k])} - {_label(names[second[k]], second[k])}" for k in order]
    left = max(map(len, pairs))
    for k, pair in zip(order, pairs, strict=True):
        text = with_uncertainty(mutual[first[k], second[k]], spreads[first[k], second[k]], "F")
        lines.append(f"{pair.ljust(left)}  {text}")
    if len(order) < len(first):
        lines.append("all of them stand in result.json")
    return lines


def _self_list(names: Sequence[str], maxwell: FloatArray, spread: FloatArray, content: dict[str, Any]) -> list[str]:
    labels = _labels(names)
    own = [with_uncertainty(maxwell[k, k], spread[k, k], "F") for k in range(len(names))]
    far = [
        with_uncertainty(value, around, "F")
        for value, around in zip(content["to_infinity"], content["to_infinity_uncertainty"], strict=True)
    ]
    columns = {"": labels, "Maxwell C_ii": own, "to infinity": far}
    return ["Capacitances of each conductor", *_columns(columns)]


def _columns(columns: dict[str, list[str]]) -> list[str]:
    """Lines of columns under their heads, left-aligned."""
    padded = []
    for head, cells in columns.items():
        width = max(map(len, [head, *cells]))
        padded.append([cell.ljust(width) for cell in [head, *cells]])
    return ["  ".join(row).rstrip() for row in zip(*padded, strict=True)]


def _state(document: dict[str, Any]) -> list[str]:
    potential, charge, energy = document["potential"], document["charge"], document["energy"]
    if potential["value"] is None:
        return []
    volts = [with_uncertainty(v, u, "V") for v, u in zip(potential["value"], potential["uncertainty"], strict=True)]
    coulombs = [with_uncertainty(v, u, "C") for v, u in zip(charge["value"], charge["uncertainty"], strict=True)]
    columns = {"": _labels(document["conductors"]), "potential": volts, "charge": coulombs}
    lines = ["Potentials and charges as stated", *_columns(columns)]
    return [*lines, f"energy {with_uncertainty(energy['value'], energy['uncertainty'], 'J')}"]


def force_table(document: dict[str, Any]) -> list[str]:
    """Lines of the forces on all conductors, with one prefix.

    Parameters
    ----------
    document : dict
        Content of `result.json`.

    Returns
    -------
    list of str
        None where no force was computed or there is only one conductor.
    """
    force, names = document.get("force"), document["conductors"]
    if not force or len(names) < 2:
        return []
    values = np.array(force["value"])
    spreads = np.array(force["uncertainty"])
    exponent, prefix = prefix_for(float(np.max(np.linalg.norm(values, axis=1))))
    rows = [
        [rounded(float(value), float(spread), exponent) for value in row]
        for row, spread in zip(values, spreads, strict=True)
    ]
    columns = [_aligned([row[k][0] for row in rows]) for k in range(3)]
    columns.append(_aligned([row[0][1] for row in rows]))
    labels = _labels(names)
    heads = [head.rjust(max(len(column[0]), 1)) for head, column in zip("xyz±", columns, strict=True)]
    title = f"Forces as stated, {prefix}N; ± holds for the length of the error"
    return [title, *_columns({"": labels, **dict(zip(heads, columns, strict=True))})]


def peak_table(document: dict[str, Any]) -> list[str]:
    """Lines of the peak surface fields.

    Parameters
    ----------
    document : dict
        Content of `result.json`.

    Returns
    -------
    list of str
        None where no field was computed.
    """
    peaks = document.get("surface_field")
    if not peaks:
        return []
    unit = document["case"].get("unit") or "m"
    labels = _labels([one["conductor"] for one in peaks])
    left = max(map(len, labels))
    lines = ["Peak field on the surface as stated"]
    for label, one in zip(labels, peaks, strict=True):
        if one["bounded"]:
            text = with_uncertainty(one["peak"], one["uncertainty"], "V/m")
        else:
            text = "unbounded" if one["exponent"] is None else f"unbounded (E ~ r^-{one['exponent']:.2f})"
        place = ", ".join(f"{value / METRES_PER_UNIT.get(unit, 1.0) + 0.0:.4g}" for value in one["at"])
        radius = (one.get("edge") or {}).get("radius")
        text += "" if radius is None else f" (edges rounded by {engineering(radius, 'm')})"
        line = f"{label.ljust(left)}  {text} at ({place}) {unit if unit in METRES_PER_UNIT else 'm'}"
        lines += [line] if len(line) <= WIDTH else _wrapped(line)
    if any("edge" in one for one in peaks):
        lines += _wrapped("edges: at their middles; corners where edges meet are stronger and need a larger radius")
    if not all(one["bounded"] for one in peaks):
        lines += _wrapped("unbounded: at sharp convex edges; result.json names the radius to state")
    return lines


def _facets(document: dict[str, Any]) -> list[str]:
    columns = facet_columns(document)
    meaning = document["solution"]["facets"]
    return [f'Taken as round (facets = "{meaning}")', *_columns(columns)] if columns else []


def _accuracy(document: dict[str, Any]) -> list[str]:
    solution = document["solution"]
    pairs = ", ".join(" - ".join(pair) for pair in document["case"].get("want", []))
    wanted = f" for {pairs}" if pairs else ""
    asked = f"accuracy asked {_percent(solution['accuracy'])}{wanted}: " + (
        "reached" if solution["reached"] else "NOT reached; the uncertainties above are what was reached"
    )
    if solution["interrupted"]:
        asked += " when the solve was interrupted"
    return [*_wrapped(asked), *_wrapped(budget_line(document)), *_wrapped(facet_share(document))]


def budget_line(document: dict[str, Any]) -> str:
    """Largest relative contribution of each cause, such as "uncertainty: discretisation 0.4 %, facets 0.1 %".

    Causes that add nothing are left out. An entry counts relative to its own size, but not less than 1e-3 of the
    geometric mean of the two diagonal entries: the scale on which the accuracy is asked.

    Parameters
    ----------
    document : dict

    Returns
    -------
    str
    """
    maxwell = np.abs(np.array(document["capacitance"]["maxwell"]))
    own = np.sqrt(np.outer(np.diag(maxwell), np.diag(maxwell)))
    scale = np.maximum(maxwell, 1e-3 * own)
    shares = {one["cause"]: float(np.max(np.abs(np.array(one["maxwell"])) / scale)) for one in document["budget"]}
    least = _PRINTED * max(shares.values())
    ordered = sorted(((cause, x) for cause, x in shares.items() if x > least), key=lambda item: -item[1])
    return "largest relative uncertainty by cause: " + ", ".join(f"{cause} {_percent(x)}" for cause, x in ordered)


def facet_share(document: dict[str, Any]) -> str:
    """Largest share that the facets have in (the square of) an uncertainty, and where.

    Parameters
    ----------
    document : dict

    Returns
    -------
    str
        Empty where nothing is round.
    """
    lines = [one for one in document["budget"] if one["cause"] == "facets" and one["largest_share"] > 0.0]
    if not lines:
        return ""
    share = lines[0]["largest_share"]
    one, other = lines[0]["largest_share_at"]
    shown = "less than 1 %" if share < 0.01 else f"{100 * share:.0f} %"
    return f"facets: at most {shown} of an uncertainty squared, at {one if one == other else f'{one} - {other}'}"


def _effort(document: dict[str, Any]) -> list[str]:
    solution = document["solution"]
    total = solution["seconds"]["total"]
    passes = counted(solution["passes"], "pass", "passes")
    line = f"{counted(solution['panels'], 'panel')}, {passes}, {solution['method']}, {total:.2f} s"
    memory = solution["peak_memory_bytes"]
    return _wrapped(line + (f", peak memory {engineering(memory, 'B', 3)}" if memory else ""))


def _percent(fraction: float) -> str:
    return f"{100 * fraction:.2g} %"


def _label(name: str, index: int) -> str:
    """Join number and name: numbers keep shortened names apart."""
    return f"{index + 1} {_cut(name, _NAME_WIDTH)}"


def _labels(names: Sequence[str]) -> list[str]:
    return [_label(name, k) for k, name in enumerate(names)]


def _cut(name: str, width: int) -> str:
    return name if len(name) <= width else name[: width - 1] + "…"


def _wrapped(text: str) -> list[str]:
    lines, line = [], ""
    for word in text.split():
        if line and len(line) + 1 + len(word) > WIDTH:
            lines.append(line)
            line = "  " + word
        else:
            line = f"{line} {word}" if line else word
    return [*lines, line] if line else lines
