"""Even companions of the two-level functions: what a panel hides whose halves are alike.

The two-level estimate compares the halves of a panel; where charge crowds alike toward both ends, or toward one end
and under another conductor at the other, they are equal and their difference says nothing. The companion compares the
middle half of the panel, between a quarter and three quarters of its width, with the two outer quarters.
"""

import numpy as np
from numpy.typing import NDArray

from .bisection import SPLIT_U, SPLIT_V
from .frames import AREA, panel_frames
from .indicator import PANELS_AT_ONCE, PartPotentials, self_integrals
from .panels import Panels

__all__ = ["companion_gains", "strip"]

FloatArray = NDArray[np.float64]


def strip(corners: FloatArray, direction: int, first: float, last: float) -> FloatArray:
    """Part of quadrilaterals between two shares of their sides.

    Parameters
    ----------
    corners : (n, 4, 3) float
    direction : SPLIT_U or SPLIT_V
        U cuts the sides 0-1 and 3-2, V the sides 0-3 and 1-2.
    first, last : float
        Shares of those sides.

    Returns
    -------
    (n, 4, 3) float
    """
    a, b, c, d = (corners[:, k] for k in range(4))
    if direction == SPLIT_U:
        return np.stack([a + first * (b - a), a + last * (b - a), d + last * (c - d), d + first * (c - d)], axis=1)
    return np.stack([a + first * (d - a), b + first * (c - b), b + last * (c - b), a + last * (d - a)], axis=1)


def companion_gains(
    panels: Panels,
    self_terms: FloatArray,
    potentials: FloatArray,
    wanted: NDArray[np.bool_],
    part_potentials: PartPotentials,
) -> FloatArray:
    """Gains of the even companions.

    Parameters
    ----------
    panels : Panels
    self_terms : (n_panels,) float, m3
    potentials : (n_panels, n_conductors) float
    wanted : (n_panels, 2) bool
        Directions to look at; triangles have none.
    part_potentials : callable
        As for :func:`daraf.bem.indicator.two_level_indicator`.

    Returns
    -------
    (n_panels, 2, n_conductors) float
        As :func:`daraf.bem.indicator.two_level_indicator`; zero where not wanted.
    """
    gains = np.zeros((len(panels), 2, potentials.shape[1]))
    wanted = wanted & (panels.n_corners == 4)[:, None]
    for slot, direction in enumerate((SPLIT_U, SPLIT_V)):
        chosen = np.flatnonzero(wanted[:, slot])
        for first in range(0, len(chosen), PANELS_AT_ONCE):
            rows = chosen[first : first + PANELS_AT_ONCE]
            corners = panels.corners[rows]
            # all three parts by the same rules: what these leave out cancels
            cuts = [strip(corners, direction, *ends) for ends in ((0.0, 0.25), (0.25, 0.75), (0.75, 1.0))]
            packed = [panel_frames(cut, largest_rule=4) for cut in cuts]
            parts = np.stack([*packed, np.zeros_like(packed[0])], axis=1)
            residual = parts[:, :3, AREA, None] * potentials[rows, None, :] - part_potentials(parts, rows)[:, :3]
            middle, with_whole = _products(corners, direction, self_terms[rows])
            share = with_whole / self_terms[rows]
            norm2 = middle - share * with_whole
            gains[rows, slot] = (residual[:, 1] - share[:, None] * residual.sum(axis=1)) / np.sqrt(norm2)[:, None]
    return gains


def _products(corners: FloatArray, direction: int, whole: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Energy products of the middle half with itself and with the whole, from those of strips with themselves."""
    names = {"middle": (0.25, 0.75), "low": (0.0, 0.25), "high": (0.75, 1.0), "up": (0.0, 0.75), "down": (0.25, 1.0)}
    own = {name: self_integrals(strip(corners, direction, *ends)) for name, ends in names.items()}
    with_low = 0.5 * (own["up"] - own["middle"] - own["low"])
    with_high = 0.5 * (own["down"] - own["middle"] - own["high"])
    return own["middle"], own["middle"] + with_low + with_high
