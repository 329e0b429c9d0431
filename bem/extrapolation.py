"""From the passes of refinement to a value and its discretisation uncertainty.

Halving a panel again and again gains less each time by a factor q that the charge near it decides: 1/2 across the
rim of a sheet (charge ~ r^(-1/2)), 2^(-4/3) across a right-angled edge (r^(-1/3)), 1/4 where it is smooth. The sum
of the series, first gain / (1 - q), is what the panel is off. q is read off each panel's own history: the gains
of its halves over the gain that it had before it was split.
"""

import numpy as np
from numpy.typing import NDArray

__all__ = [
    "SMOOTH_DECAY",
    "decay_of_parts",
    "extrapolate",
    "extrapolation_uncertainty",
    "realised_share",
    "series_factor",
]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Decay where the charge is smooth; also taken for a direction in which a panel has not been split yet.
SMOOTH_DECAY = 0.25
#: Decays are kept between those of smooth charge and of a rim, with room for what neighbours do.
LEAST_DECAY, GREATEST_DECAY = 0.15, 0.55
#: A decay measured beyond that says that the mesh does not see a gap or an edge yet: it is not extrapolated, but
#: counts in the uncertainty up to this value.
DOUBTFUL_DECAY = 0.8
#: Bounds of the realised share of promised gains.
LEAST_REALISED, GREATEST_REALISED = 0.4, 1.3
#: Expanded uncertainty (k = 2) of the extrapolated part as a share of it: of a body not refined yet, refined once,
#: twice, and more.
#: Measured with ``scripts/coverage`` on the exact set.
SHARES = (1.0, 0.6, 0.5, 0.25)
#: Share of the change since the pass before that counts as uncertain.
CHANGE_SHARE = 1.0


def decay_of_parts(
    parent: IntArray, was_split: NDArray[np.bool_], before: FloatArray, after: FloatArray, decay: FloatArray
) -> FloatArray:
    """Decay of the gain at each split, for the panels after a pass.

    Parameters
    ----------
    parent : (n_new,) int
        Panel of the pass before that each panel is or comes from.
    was_split : (n_old, 2) bool
        Directions in which the panels of the pass before were split.
    before : (n_old, 2) float
        Worth of their gains.
    after : (n_new, 2) float
        Worth of the gains now.
    decay : (n_old, 2) float
        Decays known before.

    Returns
    -------
    (n_new, 2) float
    """
    new = decay[parent]
    for direction in range(2):
        gain = after[:, direction]
        total = np.bincount(parent, gain, len(before))
        largest = np.zeros(len(before))
        np.maximum.at(largest, parent, gain)
        known = was_split[:, direction] & (before[:, direction] > 0) & (total > 0)
        ratio = total / np.where(known, before[:, direction], 1.0)
        measured = np.clip(ratio, LEAST_DECAY, DOUBTFUL_DECAY)[parent]
        # the part that holds the gain holds the singular edge too; the others are as smooth as any
        near_edge = gain / np.where(known, largest, 1.0)[parent]
        blended = SMOOTH_DECAY + (measured - SMOOTH_DECAY) * near_edge
        new[:, direction] = np.where(known[parent], blended, new[:, direction])
    return new


def series_factor(decay: FloatArray) -> FloatArray:
    """Sum of the geometric series of gains over its first term."""
    return 1.0 / (1.0 - decay)


def realised_share(gained: FloatArray, promised: FloatArray) -> float:
    """What a pass gained over what the two-level estimate had promised for the panels it split.

    The estimate takes the split functions one by one; where many neighbours are split alike they gain less
    together.

    Parameters
    ----------
    gained, promised : (n,) float
        Of the self entries, each relative to its entry.
    """
    total = float(promised.sum())
    if not total > 0.0:
        return 1.0
    return min(max(float(gained.sum()) / total, LEAST_REALISED), GREATEST_REALISED)


def extrapolate(value: FloatArray, gains: FloatArray, decay: FloatArray, realised: float) -> FloatArray:
    """Add to the Galerkin value what all further splits would gain.

    Parameters
    ----------
    value : (n, n) float
        Galerkin value of the last pass.
    gains : (n_panels, 2, n) float
        Two-level gains of the last pass.
    decay : (n_panels, 2) float
    realised : float
        From :func:`realised_share`; 1 if there was no pass before.

    Returns
    -------
    (n, n) float
    """
    weighted = _series(gains, np.minimum(decay, GREATEST_DECAY), realised)
    return value + weighted.T @ weighted


def extrapolation_uncertainty(
    gains: FloatArray,
    decay: FloatArray,
    realised: float,
    drift: float,
    body: IntArray,
    change: FloatArray | None,
    sums: FloatArray,
    refined: IntArray,
) -> FloatArray:
    """Expanded uncertainty (k = 2) of the extrapolated value.

    A share of the extrapolated gains, and the change of the extrapolated value since the pass before, which is
    large while the mesh does not see a narrow gap yet. Gains of one body are taken to err together, since the
    same edges decide them; those of different bodies add without regard to sign.

    Parameters
    ----------
    gains, decay, realised
        As for :func:`extrapolate`.
    drift : float
        Change of the realised share since the pass before: while it moves it will move on.
    body : (n_panels,) int
    change : (n, n) float or None
        Extrapolated value now less that of the pass before.
    sums : (n, m) float
        Combinations of conductors that the second index stands for.
    refined : (n_bodies,) int
        How often each body has been refined.

    Returns
    -------
    (n, m) float
    """
    spread = np.zeros_like(sums)
    for number in np.unique(body):
        own = body == number
        weighted = _series(gains[own], decay[own], realised)
        share = SHARES[min(refined[number], len(SHARES) - 1)]
        share += max(abs(drift) / realised, 0.5 * abs(1.0 - realised))
        spread += share * np.abs(weighted.T @ (weighted @ sums))
    return spread if change is None else np.hypot(spread, CHANGE_SHARE * change @ sums)


def _series(gains: FloatArray, decay: FloatArray, realised: float) -> FloatArray:
    # The share moves toward 1 as panels get finer than what lies around them: half-way, in the logarithm, to it.
    return np.asarray(
        (gains * np.sqrt(np.sqrt(realised) * series_factor(decay))[:, :, None]).reshape(-1, gains.shape[2])
    )
