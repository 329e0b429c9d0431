"""SPICE subcircuit of a result: mutual capacitances and those to infinity, at three corners."""

import re
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from daraf.bem.errors import InputError
from daraf.bem.network import mutual_capacitance
from daraf.bem.terminals import Terminals

from .units import engineering

__all__ = ["Netlist", "legal_names", "netlist"]

FloatArray = NDArray[np.float64]

#: A capacitor below this share of the smaller total of its two pins is rounding, and left out without a word.
_NOTHING = 1e-15
_WIDTH = 78


@dataclass(frozen=True)
class Netlist:
    """A subcircuit as text, and what was left out of it.

    Attributes
    ----------
    text : str
        ASCII.
    subcircuit : str
        Its name.
    pins : tuple of str
        In the order of the terminals; the reference last, if it is a pin.
    dropped : int
        Couplings left out.
    dropped_sum : float, F
        Their sum, which was put to ground at both ends.
    """

    text: str
    subcircuit: str
    pins: tuple[str, ...]
    dropped: int
    dropped_sum: float


@dataclass(frozen=True, eq=False)
class _Lumped:
    """Capacitors of the circuit, symmetric, those to the reference on the diagonal, F."""

    nominal: FloatArray
    half_width: FloatArray
    dropped: int
    dropped_sum: float
    clipped: int  # came out negative


def netlist(
    network: Terminals,
    *,
    name: str = "daraf",
    drop: float = 0.0,
    reference_pin: bool = False,
    provenance: Sequence[str] = (),
) -> Netlist:
    """Write a subcircuit.

    Parameters
    ----------
    network : Terminals
        Its terminals become the pins, in order.
    name : str
        Of the subcircuit, made legal.
    drop : float
        Couplings below this share of the smaller total capacitance of their two pins are left out; each is
        put to ground at both of its pins, so that the total capacitance of every pin stays.
    reference_pin : bool
        Whether infinity (the reference) is a last pin ``ref`` instead of the global node 0.
    provenance : sequence of str
        Lines about where the numbers come from, set as comments.

    Returns
    -------
    Netlist

    Raises
    ------
    InputError
        If ``drop`` is out of range.
    """
    if not 0.0 <= drop < 1.0:
        raise InputError(f"netlist: the share below which couplings are dropped must be from 0 to below 1, not {drop}")
    subcircuit = legal_names([name])[0]
    pins = legal_names(network.names, taken=("ref",) if reference_pin else ())
    ground = "ref" if reference_pin else "0"
    lumped = _lump(network, drop)
    lines = [f"* {_ascii(line)}" for line in provenance]
    lines += _head(network, pins, lumped, drop, ground)
    all_pins = (*pins, ground) if reference_pin else pins
    lines += _folded(f".subckt {subcircuit} {' '.join(all_pins)} corner=0")
    lines += _capacitors(pins, ground, lumped)
    lines += [f".ends {subcircuit}", ""]
    return Netlist("\n".join(lines), subcircuit, all_pins, lumped.dropped, lumped.dropped_sum)


def legal_names(names: Sequence[str], *, taken: Sequence[str] = ()) -> tuple[str, ...]:
    """Names that every SPICE reads as one word: letters, digits, underscore, a letter first; told apart in any case.

    Parameters
    ----------
    names : sequence of str
    taken : sequence of str
        Words that may not be used.

    Returns
    -------
    tuple of str
    """
    legal: list[str] = []
    used = {word.lower() for word in (*taken, "0", "gnd")}
    for name in names:
        word = re.sub(r"[^A-Za-z0-9_]+", "_", name).strip("_")
        if not word or not word[0].isalpha():
            word = f"n_{word}".rstrip("_")
        unique, count = word, 2
        while unique.lower() in used:
            unique, count = f"{word}_{count}", count + 1
        used.add(unique.lower())
        legal.append(unique)
    return tuple(legal)


def _lump(network: Terminals, drop: float) -> _Lumped:
    """Capacitors between pins, small and negative ones moved to ground at both ends."""
    C = network.maxwell
    found = mutual_capacitance(
        C,
        network.uncertainty,
        to_infinity=network.to_infinity,
        to_infinity_uncertainty=network.to_infinity_uncertainty,
    )
    nominal, width = found.value.copy(), found.uncertainty.copy()
    total = np.diag(C)
    smaller = np.minimum.outer(total, total)
    off = ~np.eye(len(C), dtype=bool)
    clipped = nominal < 0.0
    dropped = off & (nominal >= 0.0) & (nominal < drop * smaller)
    moved = off & (clipped | dropped | (np.abs(nominal) < _NOTHING * smaller))
    nominal[np.diag_indices_from(nominal)] += np.where(moved, nominal, 0.0).sum(axis=1)
    # errors of one solve are correlated: their widths add
    width[np.diag_indices_from(width)] += np.where(moved, width, 0.0).sum(axis=1)
    dropped_sum = 0.5 * float(nominal[dropped].sum())
    nominal[moved], width[moved] = 0.0, 0.0
    return _Lumped(nominal, width, int(dropped.sum()) // 2, dropped_sum, int(np.triu(clipped).sum()))


def _head(network: Terminals, pins: Sequence[str], lumped: _Lumped, drop: float, ground: str) -> list[str]:
    lines = ["* capacitances in farad; inductance and resistance of the conductors are not part of this circuit"]
    lines.append(f"* {ground} stands for infinity and for whatever was taken as its potential")
    lines.append("* corner=0 nominal, corner=-1 low, corner=1 high: all values less or plus their expanded")
    lines.append("* uncertainty (k = 2) at once; a low value ends at zero")
    width = max(len(pin) for pin in pins)
    totals, spreads = np.diag(network.maxwell), np.diag(network.uncertainty)
    for pin, name, total, spread in zip(pins, network.names, totals, spreads, strict=True):
        text = f"total {engineering(float(total), 'F', 6)}, uncertainty {engineering(float(spread), 'F', 2)}"
        lines.append(f"* pin {pin:<{width}}  {text}  conductor {_ascii(name)!r}")
    if lumped.dropped:
        share = f"{100.0 * drop:g} % of the smaller total of their pins"
        total_text = engineering(lumped.dropped_sum, "F", 4)
        lines.append(f"* {lumped.dropped} couplings below {share} left out, {total_text} in sum;")
        lines.append("* each was put to ground at both of its pins: the total capacitance of every pin is kept")
    if lumped.clipped:
        lines.append(f"* {lumped.clipped} capacitances came out negative, which none can be: they are zero here")
    return lines


def _capacitors(pins: Sequence[str], ground: str, lumped: _Lumped) -> list[str]:
    cards: list[tuple[str, str, str]] = []
    largest = lumped.nominal.sum(axis=1).max()
    for i, pin in enumerate(pins):
        for j in (*range(i + 1, len(pins)), i):
            value, spread = float(lumped.nominal[i, j]), float(lumped.half_width[i, j])
            empty = abs(value) < _NOTHING * largest and spread == 0.0 if i == j else value == 0.0
            if not empty:
                other = ground if i == j else pins[j]
                word = f"C_{pin}" if i == j else f"C_{pin}__{other}"
                cards.append((word, f"{pin} {other}", _corner(value, spread)))
    words = legal_names([word for word, _, _ in cards])
    return [
        line
        for word, (_, nodes, value) in zip(words, cards, strict=True)
        for line in _folded(f"{word} {nodes} {{{value}}}")
    ]


def _corner(value: float, spread: float) -> str:
    """Value as an expression in ``corner``, kept from going below zero at the low one."""
    value = max(value, 0.0)
    if spread == 0.0:
        return f"{value:.12e}"
    text = f"{value:.12e}+corner*{spread:.3e}"
    return text if value >= spread else f"max(0,{text})"


def _folded(line: str) -> list[str]:
    """Continuation lines for what is too long for one."""
    lines, current = [], ""
    for word in line.split(" "):
        if current and len(current) + 1 + len(word) > _WIDTH:
            lines.append(current)
            current = f"+ {word}"
        else:
            current = f"{current} {word}" if current else word
    return [*lines, current]


def _ascii(text: str) -> str:
    """One printable line: a name must not end a comment and begin a card."""
    plain = "".join(one if one.isprintable() else "?" for one in text.replace("µ", "u"))
    return plain.encode("ascii", "replace").decode()
