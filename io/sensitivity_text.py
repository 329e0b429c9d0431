"""Tables of how the capacitances move when a body is shifted, turned or grows."""

from collections.abc import Iterator
from typing import Any

import numpy as np

from .mesh_units import METRES_PER_UNIT
from .units import prefix_for, rounded

__all__ = ["sensitivity_tables"]

#: Entries of the matrix shown for each body: those that move most; all of them stand in `result.json`.
MOST_ENTRIES = 4
_DEGREE = np.pi / 180.0


def sensitivity_tables(document: dict[str, Any]) -> Iterator[list[str]]:
    """One block of lines per body.

    Parameters
    ----------
    document : dict
        Content of `result.json`.

    Yields
    ------
    list of str
    """
    record, names = document.get("sensitivity"), document["conductors"]
    if not record:
        return
    unit = document["case"].get("unit") or "mm"
    metres = METRES_PER_UNIT.get(unit, 1e-3)
    yield [f"Change of Maxwell entries per {unit} shift and offset, per degree turn"]
    for body, name in enumerate(record["bodies"]):
        lines = [f"{name}  (turns about the middle of its box)"]
        shift, turn = np.array(record["shift"]["value"][body]), np.array(record["rotation"]["value"][body])
        offset = record["offset"]["value"][body]
        size = metres * np.linalg.norm(shift, axis=0)
        if offset is not None:
            size = size + metres * np.abs(offset)
        first, second = np.triu_indices(len(names))
        for k in np.argsort(-size[first, second], kind="stable")[:MOST_ENTRIES]:
            i, j = int(first[k]), int(second[k])
            moves = [(f"shift {axis}", shift[a, i, j] * metres, "shift", metres) for a, axis in enumerate("xyz")]
            moves += [(f"turn {axis}", turn[a, i, j] * _DEGREE, "rotation", _DEGREE) for a, axis in enumerate("xyz")]
            if offset is not None:
                moves.append(("offset", offset[i][j] * metres, "offset", metres))
            exponent, prefix = prefix_for(max(abs(value) for _, value, _, _ in moves))
            lines.append(f"  {names[i]} - {names[j]}, {prefix}F")
            for word, value, key, scale in moves:
                spread = record[key]["uncertainty"][body][i][j] * scale
                text, around = rounded(value, spread, exponent)
                lines.append(f"    {word:8}  {text.rjust(12)} ± {around}")
        yield lines
