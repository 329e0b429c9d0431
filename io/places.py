"""Where a field is wanted: points of a file, lines, planes and boxes, in the user's unit."""

import csv
import re
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from daraf.bem.errors import InputError

__all__ = ["Places", "box", "line", "parallelogram", "parse_place", "plane", "points_from_file"]

FloatArray = NDArray[np.float64]

#: More points than this are refused: they would fill the memory before they filled a picture.
MOST_POINTS = 20_000_000
#: How far a plane without limits reaches beyond the conductors, as a share of the diagonal of their box.
BEYOND = 0.25


@dataclass(frozen=True, eq=False)
class Places:
    """Points, and how they hang together.

    Attributes
    ----------
    kind : {"points", "line", "plane", "box"}
    points : (m, 3) float, m
        The first index of the shape runs fastest.
    shape : tuple of int
        Points along each direction; () for loose points.
    axes : tuple of str
        Names of the directions of a plane along the axes of the drawing; empty otherwise.
    carried : dict of str to list of str
        Further columns of a file of points.
    """

    kind: str
    points: FloatArray
    shape: tuple[int, ...] = ()
    axes: tuple[str, ...] = ()
    carried: dict[str, list[str]] = field(default_factory=dict)


def parse_place(text: str, scale: float) -> FloatArray:
    """Place of text such as "0, 1.5, 20", (3,) m.

    Parameters
    ----------
    text : str
    scale : float
        Metres in the unit.

    Raises
    ------
    InputError
        If it is not three finite numbers.
    """
    words = re.split(r"[,;\s]+", text.strip())
    try:
        values = np.array([float(word) for word in words])
    except ValueError:
        values = np.zeros(0)
    if values.shape != (3,) or not np.isfinite(values).all():
        raise InputError(f"{text!r} is no place; write three numbers such as '0,1.5,20'")
    return values * scale


def points_from_file(path: str | Path, scale: float) -> Places:
    """Points of a CSV file: columns x, y, z under a header, or three columns without one.

    Parameters
    ----------
    path : str or Path
        Separated by commas, semicolons, tabs or blanks; lines that start with # are skipped.
    scale : float
        Metres in the unit of the file.

    Returns
    -------
    Places
        Further columns are carried along.

    Raises
    ------
    InputError
        If the file cannot be read, or a line does not hold three finite numbers.
    """
    file = Path(path)
    try:
        text = file.read_text(encoding="utf-8-sig")
    except (OSError, UnicodeDecodeError) as error:
        reason = getattr(error, "strerror", None) or "no UTF-8 text"
        raise InputError(f"{file}: cannot be read ({reason}); give a CSV file with columns x, y, z") from None
    lines = [(k, row) for k, row in enumerate(text.splitlines(), 1) if row.strip() and not row.startswith("#")]
    if not lines:
        raise InputError(f"{file}: holds no points; write a header x,y,z and one point a line")
    rows = [(k, _cells(row)) for k, row in lines]
    head = [cell.strip().lower() for cell in rows[0][1]]
    columns = [
        next((i for i, name in enumerate(head) if re.fullmatch(rf"{axis}(\W.*|_.*)?", name)), -1) for axis in "xyz"
    ]
    if min(columns) >= 0:
        names, rows = [cell.strip() for cell in rows[0][1]], rows[1:]
    elif len(head) == 3 and _numbers(rows[0][1]) is not None:
        columns, names = [0, 1, 2], ["x", "y", "z"]
    else:
        raise InputError(f"{file}: line {rows[0][0]} names no columns x, y and z; write a header such as name,x,y,z")
    points = []
    for k, row in rows:
        found = _numbers([row[i] for i in columns]) if len(row) == len(names) else None
        if found is None:
            raise InputError(
                f"{file}: line {k} holds no three finite numbers in {len(names)} columns; mend or remove it"
            )
        points.append(found)
    if not points:
        raise InputError(f"{file}: holds no points below its header; write one a line")
    carried = {name: [row[i] for _, row in rows] for i, name in enumerate(names) if i not in columns}
    return Places("points", np.array(points) * scale, carried=carried)


def _cells(row: str) -> list[str]:
    for separator in (",", ";", "\t"):
        if separator in row:
            return next(csv.reader([row], delimiter=separator))
    return row.split()


def _numbers(cells: Sequence[str]) -> list[float] | None:
    try:
        values = [float(cell) for cell in cells]
    except ValueError:
        return None
    return values if np.isfinite(values).all() else None


def line(start: FloatArray, end: FloatArray, steps: int) -> Places:
    """Points at equal steps from one place to another, both included.

    Parameters
    ----------
    start, end : (3,) float, m
    steps : int

    Returns
    -------
    Places

    Raises
    ------
    InputError
        If both are the same.
    """
    if np.array_equal(start, end):
        raise InputError("a line needs two different places")
    share = np.linspace(0.0, 1.0, steps + 1)
    return Places("line", start + share[:, None] * (end - start), (steps + 1,))


def plane(axis: str, at: float, window: FloatArray, steps: int) -> Places:
    """Points on a plane across one axis of the drawing.

    Parameters
    ----------
    axis : {"x", "y", "z"}
    at : float, m
    window : (2, 3) float, m
        Low and high corner; the entry along `axis` is not used.
    steps : int
        Along the longer side; the cells are squares as nearly as possible.

    Returns
    -------
    Places
    """
    across = [k for k in range(3) if "xyz"[k] != axis]
    low, high = window[0].copy(), window[1].copy()
    low["xyz".index(axis)] = high["xyz".index(axis)] = at
    one, two = np.zeros(3), np.zeros(3)
    one[across[0]] = high[across[0]] - low[across[0]]
    two[across[1]] = high[across[1]] - low[across[1]]
    made = _grid("plane", low, [one, two], steps)
    return Places("plane", made.points, made.shape, tuple("xyz"[k] for k in across))


def parallelogram(corner: FloatArray, one: FloatArray, two: FloatArray, steps: int) -> Places:
    """Points on a piece of any plane, spanned from a corner to two others.

    Parameters
    ----------
    corner, one, two : (3,) float, m
    steps : int
        Along the longer side.

    Returns
    -------
    Places

    Raises
    ------
    InputError
        If the three lie on a line.
    """
    if np.linalg.norm(np.cross(one - corner, two - corner)) == 0.0:
        raise InputError("the three corners of a sheet lie on one line; give others")
    return _grid("plane", corner, [one - corner, two - corner], steps)


def box(low: FloatArray, high: FloatArray, steps: int) -> Places:
    """Points in a box along the axes of the drawing.

    Parameters
    ----------
    low, high : (3,) float, m
        Opposite corners.
    steps : int
        Along the longest side.

    Returns
    -------
    Places

    Raises
    ------
    InputError
        If the box is flat or holds too many points.
    """
    first, last = np.minimum(low, high), np.maximum(low, high)
    if not np.all(last > first):
        raise InputError("the corners of the box do not enclose anything; give two opposite ones")
    return _grid("box", first, [np.diag(last - first)[k] for k in range(3)], steps)


def _grid(kind: str, corner: FloatArray, sides: Sequence[FloatArray], steps: int) -> Places:
    lengths = np.array([np.linalg.norm(side) for side in sides])
    counts = np.maximum(1, np.round(steps * lengths / lengths.max())).astype(int) + 1
    if np.prod(counts.astype(float)) > MOST_POINTS:
        raise InputError(f"{' x '.join(map(str, counts))} points are too many; ask for fewer with --steps")
    shares = np.meshgrid(*[np.linspace(0.0, 1.0, count) for count in counts], indexing="ij")
    # the first direction runs fastest, as VTK wants it
    flat = np.stack([share.ravel(order="F") for share in shares], axis=1)
    return Places(kind, corner + flat @ np.array(sides), tuple(int(count) for count in counts))
