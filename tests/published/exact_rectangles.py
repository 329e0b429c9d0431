"""Maxwell matrices of conductors made of rectangles, over 4 pi epsilon_0, from the scheme in graded.py.

`MODELS` builds each from its mesh, with the number of cells along a side; `VALUES` holds what
scripts/make_rectangle_values.py printed, with the difference of two extrapolations as a share of the self entries.
"""

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from published.graded import Rectangle, box, graded, maxwell_matrix, sheet

__all__ = ["MODELS", "TILT", "VALUES", "rectangles"]

FloatArray = NDArray[np.float64]

#: Of the leaning strip, rad.
TILT = np.radians(20.0)
#: Grading toward rims of sheets and toward right-angled edges.
RIM, EDGE = 4.0, 3.0


def _half(n: int, *stops: float, power: float = RIM) -> FloatArray:
    """Lines from a mirror plane outward."""
    return graded(n, *stops, power=power, ends=(False, True))


def _quarter_box(conductor: int, x: FloatArray, half_y: FloatArray, half_z: FloatArray) -> list[Rectangle]:
    """Box whose planes y = 0 and z = 0 are mirrors: its faces at positive y and z."""
    faces = box(conductor, (0, 0, 0), x, half_y, half_z)
    # in the order of the axes, low end first: drop the low ends of y and z
    return [face for k, face in enumerate(faces) if k not in (2, 4)]


def _stacked(n: int) -> FloatArray:
    outer, middle = _half(n, 0.0, 0.5), _half(n, 0.0, 0.5, 0.55)
    sheets = [sheet(0, (0, 0, -0.1), outer, outer), sheet(1, (0, 0, 0), middle, middle)]
    return maxwell_matrix([*sheets, sheet(2, (0, 0, 0.1), outer, outer)], (0, 1))


def _screened(n: int) -> FloatArray:
    small, large = _half(n, 0.0, 0.5), _half(n, 0.0, 0.5, 2.0)
    sheets = [sheet(0, (0, 0, -0.12), small, small), sheet(1, (0, 0, 0), large, large)]
    return maxwell_matrix([*sheets, sheet(2, (0, 0, 0.12), small, small)], (0, 1))


def _coplanar(n: int) -> FloatArray:
    x, y = graded(2 * n, 0.05, 1.05, power=RIM), _half(n, 0.0, 0.5)
    return maxwell_matrix([sheet(0, (0, 0, 0), -x[::-1], y), sheet(1, (0, 0, 0), x, y)], (1,))


def _offset(n: int) -> FloatArray:
    low, high, y = graded(n, -0.5, 0.0, 0.5, power=RIM), graded(n, 0.0, 0.5, 1.0, power=RIM), _half(n, 0.0, 0.5)
    return maxwell_matrix([sheet(0, (0, 0, 0), low, y), sheet(1, (0, 0, 0.2), high, y)], (1,))


def _leaning(n: int) -> FloatArray:
    strip, ends = graded(2 * n, -0.25, 0.25, power=RIM), _half(n, 0.0, 1.0)
    reach = 0.25 * float(np.cos(TILT))
    under, sides = graded(n, -1.0, -reach, reach, 1.0, power=EDGE), _half(n, 0.0, 1.0, 1.5)
    lift = 0.1 + 0.25 * float(np.sin(TILT))
    return maxwell_matrix([sheet(0, (0, 0, lift), strip, ends, TILT), sheet(1, (0, 0, 0), under, sides)], (1,))


def _strips(n: int) -> FloatArray:
    y = _half(n, 0.0, 1.0)
    spans = [graded(2 * n, 0.4 * k - 0.55, 0.4 * k - 0.25, power=RIM) for k in range(3)]
    return maxwell_matrix([sheet(k, (0, 0, 0), x, y) for k, x in enumerate(spans)], (1,))


def _bracket(n: int) -> FloatArray:
    x, y = graded(2 * n, 0.0, 1.0, power=RIM), _half(n, 0.0, 0.5)
    return maxwell_matrix([sheet(0, (0, 0, 0), x, y), sheet(0, (0, 0, 0), x, y, 0.5 * np.pi)], (1,))


def _cubes(n: int) -> FloatArray:
    x, side = graded(2 * n, 0.05, 1.05, power=EDGE), _half(n, 0.0, 0.5, power=EDGE)
    return maxwell_matrix(_quarter_box(0, -x[::-1], side, side) + _quarter_box(1, x, side, side), (1, 2))


def _cubes_in_row(n: int) -> FloatArray:
    side, small = _half(n, 0.0, 0.5, power=EDGE), _half(n, 0.0, 0.25, power=EDGE)
    faces = _quarter_box(0, graded(2 * n, -1.5, -0.5, power=EDGE), side, side)
    faces += _quarter_box(1, graded(2 * n, -0.25, 0.25, power=EDGE), small, small)
    return maxwell_matrix(faces + _quarter_box(2, graded(2 * n, 0.5, 1.5, power=EDGE), side, side), (1, 2))


def _box_over_sheet(n: int) -> FloatArray:
    side, high = _half(n, 0.0, 0.5, power=EDGE), graded(2 * n, 0.1, 0.6, power=EDGE)
    faces = box(0, (0, 0, 0), side, side, high)
    wide = _half(n, 0.0, 0.5, 1.0)
    return maxwell_matrix([faces[1], faces[3], faces[4], faces[5], sheet(1, (0, 0, 0), wide, wide)], (0, 1))


def _shielded(n: int) -> FloatArray:
    """A box in a closed one, and one beside: the inside and the outside are two problems that share the shell."""
    inner, shell = _half(n, 0.0, 0.5, power=EDGE), _half(n, 0.0, 0.75, power=EDGE)
    octants = [box(k, (0, 0, 0), *(lines,) * 3)[1::2] for k, lines in ((0, inner), (1, shell))]
    between = maxwell_matrix([*octants[0], *octants[1]], (0, 1, 2))[0, 0]
    faces = _quarter_box(0, graded(2 * n, -0.75, 0.75, power=EDGE), shell, shell)
    outside = maxwell_matrix(faces + _quarter_box(1, graded(2 * n, 1.25, 2.25, power=EDGE), inner, inner), (1, 2))
    matrix = np.zeros((3, 3))
    matrix[:2, :2] = between * np.array([[1.0, -1.0], [-1.0, 1.0]])
    matrix[1:, 1:] += outside
    return matrix


MODELS: dict[str, Callable[[int], FloatArray]] = {
    "stacked": _stacked,
    "screened": _screened,
    "coplanar": _coplanar,
    "offset": _offset,
    "leaning": _leaning,
    "strips": _strips,
    "bracket": _bracket,
    "cubes": _cubes,
    "cubes-in-row": _cubes_in_row,
    "box-over-sheet": _box_over_sheet,
    "shielded": _shielded,
}
#: With 10, 14 and 20 cells along a side.
VALUES: dict[str, tuple[list[list[float]], float]] = {
    "stacked": (
        [
            [1.18605909, -0.969982589, -0.049581382],
            [-0.969982865, 2.06358086, -0.969982865],
            [-0.049581382, -0.969982589, 1.18605909],
        ],
        7.5e-06,
    ),
    "screened": (
        [
            [1.09191655, -1.05419544, -0.000348056324],
            [-1.05419606, 3.50334014, -1.05419606],
            [-0.000348056324, -1.05419544, 1.09191655],
        ],
        3.2e-05,
    ),
    "coplanar": (
        [
            [0.456156208, -0.183225885],
            [-0.183225885, 0.456156208],
        ],
        1.3e-05,
    ),
    "offset": (
        [
            [0.618734768, -0.379860266],
            [-0.379860266, 0.618734768],
        ],
        4.0e-05,
    ),
    "leaning": (
        [
            [0.948709908, -0.86520215],
            [-0.865202244, 1.69644718],
        ],
        2.6e-05,
    ),
    "strips": (
        [
            [0.490352628, -0.23134979, -0.054153605],
            [-0.231349774, 0.603130444, -0.231349774],
            [-0.054153605, -0.23134979, 0.490352628],
        ],
        1.1e-05,
    ),
    "bracket": (
        [
            [0.504983759],
        ],
        4.8e-06,
    ),
    "cubes": (
        [
            [1.62775477, -1.18868302],
            [-1.18868302, 1.62775477],
        ],
        9.1e-07,
    ),
    "cubes-in-row": (
        [
            [0.910504958, -0.267594768, -0.166746549],
            [-0.267594772, 0.591534866, -0.267594772],
            [-0.166746549, -0.267594768, 0.910504958],
        ],
        8.1e-07,
    ),
    "box-over-sheet": (
        [
            [1.65156705, -1.43413995],
            [-1.43414013, 2.01191772],
        ],
        1.1e-05,
    ),
    "shielded": (
        [
            [2.46035978, -2.46035978, 0.0],
            [-2.46035978, 3.78460577, -0.531970485],
            [0.0, -0.53197049, 0.92171189],
        ],
        9.8e-07,
    ),
}


def rectangles(name: str) -> FloatArray:
    """Maxwell matrix of a case of `VALUES`, symmetric."""
    matrix = np.asarray(VALUES[name][0], dtype=np.float64)
    return np.asarray(0.5 * (matrix + matrix.T))
