"""Which panels to split."""

import numpy as np
from numpy.typing import NDArray

from .bisection import SPLIT_U, SPLIT_V

__all__ = ["accuracy_targets", "choose_splits", "gain_worth", "marked_share"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Share of the weighted estimate that the panels split in one pass must hold (Doerfler's marking), at least and most.
LEAST_MARKED, MOST_MARKED = 0.5, 0.95
#: What is left of the estimate of a panel at an edge once it is split: between an edge of 90 degrees and a rim.
LEFT_AFTER_SPLIT = 0.45
#: The next pass is to get this much below what is asked, lest it misses by a hair.
AIM = 0.85
#: A quadrilateral is split in its weaker direction too if that holds this share of the stronger one.
SECOND_DIRECTION = 0.3
#: Couplings below this share of sqrt(C_ii C_jj) must meet the accuracy of this share only.
COUPLING_FLOOR = 1e-3


def accuracy_targets(capacitance: FloatArray, accuracy: FloatArray) -> FloatArray:
    """Largest uncertainty allowed of every entry: relative, with a floor for weak couplings.

    Parameters
    ----------
    capacitance : (n, n) float
    accuracy : (n, n) float
        Relative expanded uncertainty allowed.
    """
    diagonal = np.sqrt(np.outer(np.diag(capacitance), np.diag(capacitance)))
    return accuracy * np.maximum(np.abs(capacitance), COUPLING_FLOOR * diagonal)


def gain_worth(gains: FloatArray, weights: FloatArray) -> FloatArray:
    """Worth of each gain, (n_panels, 2): its products over all pairs of conductors, weighted.

    Parameters
    ----------
    gains : (n_panels, 2, n_conductors) float
        From :func:`daraf.bem.indicator.two_level_indicator`.
    weights : (n_conductors, n_conductors) float
        How much each entry of the capacitance matrix matters, not negative.
    """
    size = np.abs(gains)
    return np.asarray(np.einsum("pdi,pdi->pd", size @ weights, size))


def marked_share(excess: float) -> float:
    """Share of the estimate to split, so that the next pass gets to the goal if it can.

    Splitting the share s leaves 1 - s (1 - `LEFT_AFTER_SPLIT`) of the estimate. Where several passes are missing
    nearly all panels are split many a time before the goal, and it is cheaper to split them at once.

    Parameters
    ----------
    excess : float
        Uncertainty over the one asked.
    """
    needed = (1.0 - AIM / max(excess, 1.0)) / (1.0 - LEFT_AFTER_SPLIT)
    return min(max(needed, LEAST_MARKED), MOST_MARKED)


def choose_splits(worth: FloatArray, share: float = 0.7) -> IntArray:
    """Mark the panels that hold most of the worth.

    Parameters
    ----------
    worth : (n_panels, 2) float
    share : float
        How much of the whole worth.

    Returns
    -------
    split : (n_panels,) int
        Marks for :func:`daraf.bem.bisection.split_panels`.
    """
    total = worth.sum(axis=1)
    order = np.argsort(-total, kind="stable")
    needed = int(np.searchsorted(np.cumsum(total[order]), share * total.sum())) + 1
    chosen = order[:needed]
    split = np.zeros(len(worth), dtype=np.int64)
    least = SECOND_DIRECTION * worth[chosen].max(axis=1)
    split[chosen] = SPLIT_U * (worth[chosen, 0] >= least) + SPLIT_V * (worth[chosen, 1] >= least)
    return split
