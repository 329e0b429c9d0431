"""From the passes with media to a value and its discretisation uncertainty.

One opinion alone, the series of the two-level gains: the even companions of :mod:`daraf.bem.companion` show a known
share of what is missing at edges of conductors in one medium; at the edges of dielectrics, whose charge crowds with
any power between 0 and 1/2 by the permittivities, that share has not been measured. What a conductor's panel hides by
symmetry or by chance is feared instead of measured, and the shares of the extrapolated part that count as uncertain
are larger: those of the one opinion, as they covered the exact set of plain conductors and cover all fourteen exact
values with media (``tests/published/media_cases.py``), where the error at 2 % is at most 0.28 of the uncertainty.
"""

from typing import Any

import numpy as np
from numpy.typing import NDArray

from .adaptive import sides_by_direction
from .extrapolation import SMOOTH_DECAY, series_factor
from .hidden import unseen_fringe
from .media import PanelMedia
from .media_indicator import MediaGains
from .panels import Panels

__all__ = ["DOUBTFUL_DECAY", "feared_decay", "feared_media_gains", "media_spread", "weighted_gains"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]
Array = NDArray[Any]

#: A decay measured beyond GREATEST_DECAY says that the mesh does not see a gap or an edge yet: it is not extrapolated,
#: but counts in the uncertainty up to this value.
DOUBTFUL_DECAY = 0.8
#: Expanded uncertainty (k = 2) of the extrapolated part as a share of it: of a body not refined yet, refined once,
#: twice, and more.
SHARES = (1.0, 0.6, 0.5, 0.25)
#: Share of the change since the pass before that counts as uncertain.
CHANGE_SHARE = 1.0
#: Gains of both signs add up to less than their size: this share of what cancels within a body counts as uncertain.
CANCELLED_SHARE = 0.3
#: Share of its self energy that a panel may hide by symmetry. Charge that crowds toward both edges of a strip lowers
#: the energy against uniform charge, in two dimensions, by 3/2 - ln 4 = 0.11 of about ln(2 l / w) + 1/2 for the
#: length l and width w of the strip.
SYMMETRIC_GAIN = 0.05
#: Share of its self energy that a panel at an edge gains at least by a split across: its halves may be equal by chance,
#: where the charge crowds at the edge and under another conductor's as well.
EDGE_GAIN = 0.005


def weighted_gains(gains: MediaGains, decay: FloatArray, realised: float) -> tuple[Array, Array]:
    """Gains with the root of what all further splits add to them, flattened: (2 n_panels, n_conductors)."""
    factor = np.sqrt(np.sqrt(realised) * series_factor(decay))[:, :, None]
    n = gains.left.shape[2]
    return np.asarray((gains.left * factor).reshape(-1, n)), np.asarray((gains.right * factor).reshape(-1, n))


def feared_media_gains(
    panels: Panels,
    media: PanelMedia,
    gains: MediaGains,
    solved: tuple[Array, Array],
    self_terms: FloatArray,
    symmetric: BoolArray,
    sides: FloatArray,
) -> MediaGains:
    """Gains, or what conductor panels may hide where that is more.

    Parameters
    ----------
    panels : Panels
    media : PanelMedia
    gains : MediaGains
    solved : two (n_panels, n) float or complex
        State and adjoint.
    self_terms : (n_panels,) float, m3
        With the images that fall on the panel; not used on interfaces.
    symmetric : (n_panels, 2) bool
        Directions in which halves may be equal by symmetry.
    sides : (n_panels, 4) float
        Decay of splits toward each side.

    Returns
    -------
    MediaGains
    """
    metal = np.flatnonzero(~media.interface)
    if len(metal) == 0:
        return gains
    part = Panels(
        panels.corners[metal],
        panels.n_corners[metal],
        panels.body[metal],
        panels.conductor[metal],
        panels.region[metal],
    )
    edge = sides_by_direction(sides[metal])
    share = np.where(symmetric[metal], SYMMETRIC_GAIN, np.where(edge > SMOOTH_DECAY, EDGE_GAIN, 0.0))
    hidden = np.sqrt(share * self_terms[metal, None])[:, :, None]
    unit = np.abs(media.outside[metal])
    state, adjoint = solved
    left, right = gains.left.copy(), gains.right.copy()
    for found, density, factor in ((left, adjoint, unit), (right, state, np.ones(len(metal)))):
        by_symmetry = hidden * density[metal, None, :]
        feared = np.where(np.abs(by_symmetry) > np.abs(found[metal]), by_symmetry, found[metal])
        fringe = unseen_fringe(part, feared / factor[:, None, None], sides[metal]) * factor[:, None, None]
        found[metal] = np.where((fringe != 0.0).any(axis=2)[:, :, None], fringe, feared)
    return MediaGains(left, right)


def feared_decay(gains: MediaGains, feared: MediaGains, decay: FloatArray) -> FloatArray:
    """Decay of gains, (n_panels, 2); none where they are only feared."""
    only_feared = (feared.left != gains.left).any(axis=2) | (feared.right != gains.right).any(axis=2)
    return np.where(only_feared, 0.0, decay)


def media_spread(
    feared: MediaGains,
    decay: FloatArray,
    realised: float,
    drift: float,
    body: IntArray,
    change: Array | None,
    sums: FloatArray,
    refined: IntArray,
) -> Array:
    """Expanded uncertainty (k = 2) of the extrapolated value of one state.

    Parameters
    ----------
    feared : MediaGains
    decay : (n_panels, 2) float
        From :func:`feared_decay`.
    realised : float
        From :func:`daraf.bem.extrapolation.realised_share`.
    drift : float
        Change of the realised share since the pass before: while it moves it will move on.
    body : (n_panels,) int
    change : (n, n) float or complex, or None
        Extrapolated value now less that of the pass before.
    sums : (n, m) float
        Combinations of conductors that the second index stands for.
    refined : (n_bodies,) int

    Returns
    -------
    (n, m) float or complex
        The imaginary part holds that of the imaginary part.
    """
    left, right = weighted_gains(feared, decay, realised)
    right = right @ sums
    body = np.repeat(body, 2)
    parts = (np.real, np.imag) if np.iscomplexobj(left) else (np.real,)
    found = []
    for take in parts:
        spread = np.zeros((left.shape[1], right.shape[1]))
        for number in np.unique(body):
            own = body == number
            net = np.abs(take(left[own].T @ right[own]))
            size = np.abs(left[own]).T @ np.abs(right[own])
            share = SHARES[min(refined[number], len(SHARES) - 1)]
            share += max(abs(drift) / realised, 0.5 * abs(1.0 - realised))
            if len(parts) == 1:
                net = net + CANCELLED_SHARE * (size - net)
            spread += share * net
        if change is not None:
            spread = np.hypot(spread, CHANGE_SHARE * take(change @ sums))
        found.append(spread)
    return np.asarray(found[0] if len(found) == 1 else found[0] + 1j * found[1])
