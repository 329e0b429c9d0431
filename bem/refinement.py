"""Which panels to split."""

import numpy as np
from numpy.typing import NDArray

from .bisection import SPLIT_U, SPLIT_V

__all__ = ["accuracy_targets", "choose_splits", "gain_worth"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Share of the weighted estimate that the panels split in one pass must hold (Doerfler's marking).
MARKED_SHARE = 0.7
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


def choose_splits(worth: FloatArray) -> IntArray:
    """Mark the panels that hold most of the worth.

    Parameters
    ----------
    worth : (n_panels, 2) float

    Returns
    -------
    split : (n_panels,) int
        Marks for :func:`daraf.bem.bisection.split_panels`.
    """
    total = worth.sum(axis=1)
    order = np.argsort(-total, kind="stable")
    needed = int(np.searchsorted(np.cumsum(total[order]), MARKED_SHARE * total.sum())) + 1
    chosen = order[:needed]
    split = np.zeros(len(worth), dtype=np.int64)
    least = SECOND_DIRECTION * worth[chosen].max(axis=1)
    split[chosen] = SPLIT_U * (worth[chosen, 0] >= least) + SPLIT_V * (worth[chosen, 1] >= least)
    return split
