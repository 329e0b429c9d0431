"""From the passes of refinement to a value and its discretisation uncertainty.

Halving a panel again and again gains less each time by a factor q that the charge near it decides: 1/2 across the
rim of a sheet (charge ~ r^(-1/2)), 2^(-4/3) across a right-angled edge (r^(-1/3)), 1/4 where it is smooth. The sum
of the series, first gain / (1 - q), is what the panel is off. q is read off each panel's own history: the gains
of its halves over the gain that it had before it was split.

That is one opinion. The even companion of each panel at an edge (:mod:`daraf.bem.companion`) gives another, from the
present pass alone: it gains a share of what the panel is off that hardly depends on the body. Their mean is added to
the Galerkin value; where they differ, neither is sure.
"""

import numpy as np
from numpy.typing import NDArray

__all__ = [
    "SMOOTH_DECAY",
    "decay_of_parts",
    "extrapolate",
    "extrapolation_uncertainty",
    "first_opinion",
    "realised_share",
    "second_opinion",
    "series_factor",
    "smooth_factor",
]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

#: Decay where the charge is smooth; also taken for a direction in which a panel has not been split yet.
SMOOTH_DECAY = 0.25
#: Decay where the charge is smooth and the panel no longer than wide: a capacitance then converges as h^3. Splitting
#: the long side of a longer one gains 1/4 (a row of dipoles on a strip), as SMOOTH_DECAY has it.
COMPACT_DECAY = 0.125
#: Share of promised gains that smooth regions realise at most, where many neighbours are split alike: 0.80 to 0.91
#: measured on plate and cube once these regions rule.
SMOOTH_REALISED = 0.85
#: Decays are kept between those of smooth charge and of a rim, with room for what neighbours do.
LEAST_DECAY, GREATEST_DECAY = 0.15, 0.55
#: Bounds of the realised share of promised gains.
LEAST_REALISED, GREATEST_REALISED = 0.4, 1.3
#: Share of what a panel is off that its even companion gains: at the rim of a sheet and at any other edge. Measured
#: against exact values, from the third pass on: 0.16 to 0.18 on squares, discs and tubes, alone and in close pairs, and
#: 0.25 to 0.28 on the cube, blocks, cylinders and the other Platonic solids.
RIM_SHOWN, EDGE_SHOWN = 0.17, 0.265
#: Decay beyond which a side counts as a rim: half-way from the sharpest wedge, a full turn, to that of 60 degrees.
RIM_DECAY = 0.47
#: Expanded uncertainty (k = 2) of the extrapolated part as a share of it: of a body never refined, and of others. The
#: mean of the two opinions is off by 1 to 3 % of it on graded sheets and 8 % on graded solids; on smooth bodies never
#: refined by up to 80 %.
UNREFINED_SHARE, SHARE = 1.0, 0.1
#: To it is added this multiple of what the realised share lacks to one: neighbours that gain together mislead both
#: opinions. Twice what was seen on a rod of 200 to 1, where both promised 1.5 times what was missing.
JOINT_SHARE = 0.5
#: Expanded uncertainty as a share of what the two opinions differ by.
DISPUTED_SHARE = 0.4
#: Share of the change since the pass before: where errors fall by a factor 0.6 a pass, what is left is 1.5 times it.
CHANGE_SHARE = 1.5
#: Expanded uncertainty as a share of what cancels in the sum over the panels of a body: the parts of a weak coupling
#: cancel, their errors need not. Seen on two plates with a sheet between that shields them, and through a closed shell.
CANCELLED_SHARE = 0.15
#: Share of what narrow gaps may hide; measured on discs at 1 % of their size.
UNSEEN_SHARE = 0.6


def decay_of_parts(
    parent: IntArray, was_split: BoolArray, before: FloatArray, after: FloatArray, decay: FloatArray
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
        measured = np.clip(ratio, LEAST_DECAY, GREATEST_DECAY)[parent]
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


def smooth_factor(lengths: FloatArray, realised: float) -> FloatArray:
    """What a panel with smooth charge is off over its two-level gains, (n_panels, 2).

    Parameters
    ----------
    lengths : (n_panels, 2) float, m
        Of the panel along u and v.
    realised : float
        From :func:`realised_share`.

    Returns
    -------
    (n_panels, 2) float
    """
    aspect = lengths / np.maximum(lengths[:, ::-1], 1e-300)
    return min(realised, SMOOTH_REALISED) * series_factor(
        COMPACT_DECAY * np.clip(aspect, 1.0, SMOOTH_DECAY / COMPACT_DECAY)
    )


def first_opinion(
    gains: FloatArray, decay: FloatArray, realised: float, judged: BoolArray, smooth: FloatArray
) -> FloatArray:
    """What each panel is off by the series of its two-level gains.

    Parameters
    ----------
    gains : (n_panels, 2, n) float
        Two-level gains.
    decay : (n_panels, 2) float
        How much less each further split gains.
    realised : float
        From :func:`realised_share`; 1 if there was no pass before.
    judged : (n_panels, 2) bool
        At an edge, or where halves may be equal by symmetry.
    smooth : (n_panels, 2) float
        From :func:`smooth_factor`, for the rest.

    Returns
    -------
    (n_panels, 2, n) float
        The sum of the products of their entries i and j over panels and directions is what entry (i, j) of the
        capacitance matrix is off.
    """
    # At edges the share moves toward 1 as panels get finer than what lies around them: half-way, in the logarithm.
    factor = np.sqrt(realised) * series_factor(np.minimum(decay, GREATEST_DECAY))
    return np.asarray(gains * np.sqrt(np.where(judged, factor, smooth))[:, :, None])


def second_opinion(
    gains: FloatArray, companion: FloatArray, edge: FloatArray, judged: BoolArray, smooth: FloatArray
) -> FloatArray:
    """What each panel is off by its even companion, or, where it has none, by smooth charge.

    Parameters
    ----------
    gains : (n_panels, 2, n) float
        Two-level gains.
    companion : (n_panels, 2, n) float
        From :func:`daraf.bem.companion.companion_gains`.
    edge : (n_panels, 2) float
        Decay of splits toward the sharper side.
    judged, smooth
        As for :func:`first_opinion`; there is a companion where `judged`.

    Returns
    -------
    (n_panels, 2, n) float
        As :func:`first_opinion`.
    """
    shown = np.where(edge > RIM_DECAY, RIM_SHOWN, EDGE_SHOWN)[:, :, None]
    return np.where(judged[:, :, None], companion / np.sqrt(shown), gains * np.sqrt(smooth)[:, :, None])


def extrapolate(value: FloatArray, first: FloatArray, second: FloatArray) -> FloatArray:
    """Add to the Galerkin value what it is off by the mean of two opinions.

    Parameters
    ----------
    value : (n, n) float
        Galerkin value of the last pass.
    first, second : (n_panels, 2, n) float
        From :func:`first_opinion` and :func:`second_opinion`.

    Returns
    -------
    (n, n) float
    """
    return value + 0.5 * (_products(first) + _products(second))


def extrapolation_uncertainty(
    first: FloatArray,
    second: FloatArray,
    unseen: FloatArray,
    body: IntArray,
    change: FloatArray | None,
    sums: FloatArray,
    refined: IntArray,
    realised: float,
) -> FloatArray:
    """Expanded uncertainty (k = 2) of the extrapolated value.

    A share of the extrapolated part; a share of what the two opinions on it differ by, which is large while the mesh
    does not show yet how the charge lies; what no opinion sees; and the change of the extrapolated value since the
    pass before. Panels of one body are taken to err together, since the same edges decide them; those of different
    bodies add without regard to sign.

    Parameters
    ----------
    first, second
        As for :func:`extrapolate`.
    unseen : (n_panels, 2, n) float
        From :func:`daraf.bem.hidden.unseen_fringe`.
    body : (n_panels,) int
    change : (n, n) float or None
        Extrapolated value now less that of the pass before.
    sums : (n, m) float
        Combinations of conductors that the second index stands for.
    refined : (n_bodies,) int
        How often each body has been refined.
    realised : float
        From :func:`realised_share`.

    Returns
    -------
    (n, m) float
    """
    spread = np.zeros_like(sums)
    for number in np.unique(body):
        own = body == number
        one, two = _products(first[own]) @ sums, _products(second[own]) @ sums
        share = UNREFINED_SHARE if refined[number] == 0 else SHARE + JOINT_SHARE * abs(1.0 - realised)
        known = np.hypot(share * 0.5 * (one + two), DISPUTED_SHARE * (one - two))
        sizes = 0.5 * (_products(np.abs(first[own])) + _products(np.abs(second[own]))) @ sums
        cancelled = sizes - 0.5 * np.abs(one + two)
        spread += np.hypot(known, CANCELLED_SHARE * cancelled) + UNSEEN_SHARE * np.abs(_products(unseen[own]) @ sums)
    return spread if change is None else np.hypot(spread, CHANGE_SHARE * change @ sums)


def _products(opinion: FloatArray) -> FloatArray:
    flat = opinion.reshape(-1, opinion.shape[2])
    return np.asarray(flat.T @ flat)
