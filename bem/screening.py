"""How far the potentials of a solved arrangement in air are from corona and breakdown. Screening, no design rule.

For each conductor with a peak field: Schwaiger's utilisation of the gap, Peek's visual corona for the curvature at the
peak, and the streamer criterion along the field line from it; laws and sources in :mod:`daraf.bem.strength`.
"""

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from .errors import InputError
from .field_lines import field_line, nearest_on_panels
from .off_surface import PanelSum
from .panels import Panels
from .probing import ChargedPanels
from .rounded_wedge import arc_factor
from .strength import inception_factor, peek_field, utilisation

__all__ = ["PeakPlace", "Screening", "curvature_radii", "gap_between", "screen"]

FloatArray = NDArray[np.float64]

#: Points along a field line, closer together at its ends.
LINE_POINTS = 160
#: Panels about the peak whose normals tell the curvature there; normals that lean further lie on other faces.
NORMALS, LEAN = 14, 0.7
#: A surface that bends so much less one way than the other is a wire, else a sphere.
WIRE = 0.3
#: Points of each conductor from which the gap is measured exactly.
_NEAREST = 12
#: Field over pressure has no data beyond: a streamer factor above this means "no gap here", in volts per volt.
_NO_ONSET = 1e6


@dataclass(frozen=True)
class PeakPlace:
    """A peak that is known.

    Attributes
    ----------
    conductor : int
    peak, uncertainty : float, V/m
    at : tuple of 3 float, m
    edge_radius, exponent : float or None, m
        Where it lies at a rounded edge.
    """

    conductor: int
    peak: float
    uncertainty: float
    at: tuple[float, float, float]
    edge_radius: float | None = None
    exponent: float | None = None


@dataclass(frozen=True)
class Screening:
    """Margins of one conductor: factors by which all potentials may be raised; below 1 it has happened.

    Attributes
    ----------
    conductor : int
    opposite : int
        Conductor at the other end of the field line, -1 far away.
    voltage : float, V
        Between both.
    gap : float or None, m
        Shortest distance between both.
    utilisation : float or None
        Mean over highest field; only of the conductor that has the highest one.
    streamer : float or None
        Margin to the streamer onset; None where the line is too short or weak for one.
    peek : float
        Margin to visual corona.
    peek_shape : str
    radius : float or None, m
        Of curvature, as it entered Peek's law; None where the surface is flat.
    withstand : float or None
        Margin to the stated gradient.
    """

    conductor: int
    opposite: int
    voltage: float
    gap: float | None
    utilisation: float | None
    streamer: float | None
    peek: float | None
    peek_shape: str
    radius: float | None
    withstand: float | None


def screen(
    charged: ChargedPanels,
    places: list[PeakPlace],
    density: float,
    *,
    withstand: float | None = None,
    progress: Callable[[float, float], None] | None = None,
) -> list[Screening]:
    """Screen every conductor with a known peak.

    Parameters
    ----------
    charged : ChargedPanels
    places : list of PeakPlace
    density : float
        Of the air, relative to 20 C and 101.325 kPa.
    withstand : float, V/m, optional
        Gradient that the surface may carry.
    progress : callable, optional
        Told (conductors done, in all).

    Returns
    -------
    list of Screening
    """
    sums = PanelSum(charged.panels.corners, charged.density[:, 0])
    peaks = {place.conductor: place.peak for place in places}
    result = []
    for k, place in enumerate(places):
        if progress is not None:
            progress(k, len(places))
        if place.peak > 0.0:
            one = _one(charged, sums, place, density, withstand)
            # the factor compares the mean field of a gap with its highest one, wherever that is
            weaker = place.peak < peaks.get(one.opposite, 0.0)
            result.append(replace(one, utilisation=None) if weaker else one)
    return result


def _one(
    charged: ChargedPanels, sums: PanelSum, place: PeakPlace, density: float, withstand: float | None
) -> Screening:
    line = field_line(charged, place.at)
    opposite = line.ends_on
    far = charged.potential[opposite] if opposite >= 0 else 0.0
    voltage = abs(float(charged.potential[place.conductor] - far))
    gap = (
        None if opposite < 0 or opposite == place.conductor else gap_between(charged.panels, place.conductor, opposite)
    )
    distance, strength = _along(charged, sums, line.points, line.distance, place)
    try:
        streamer: float | None = inception_factor(distance, strength, density)
    except InputError:
        streamer = None
    shape, radius = _shape(charged.panels, place)
    return Screening(
        conductor=place.conductor,
        opposite=opposite,
        voltage=voltage,
        gap=gap,
        utilisation=None if gap is None or voltage == 0.0 else utilisation(voltage, gap, place.peak),
        streamer=streamer if streamer is None or streamer < _NO_ONSET else None,
        peek=None if radius is None else peek_field(radius, density, shape=shape) / place.peak,
        peek_shape=shape,
        radius=radius,
        withstand=None if withstand is None else withstand / place.peak,
    )


def _along(
    charged: ChargedPanels, sums: PanelSum, points: FloatArray, way: FloatArray, place: PeakPlace
) -> tuple[FloatArray, FloatArray]:
    """Distance and field along a line, the peak at its start.

    Right above a panel the sum over constant densities is rough: there the field goes over from the peak.
    """
    distance = way[-1] * 0.5 * (1.0 - np.cos(np.pi * np.arange(LINE_POINTS) / (LINE_POINTS - 1.0)))
    at = np.stack([np.interp(distance, way, points[:, axis]) for axis in range(3)], axis=1)
    field = sums(at).field[:, :, 0] / charged.four_pi_epsilon
    strength = np.linalg.norm(field, axis=1)
    if place.edge_radius is not None and place.exponent:
        # from the law of the sharp edge to that of the rounded one, whose distance starts at s
        angle = float(np.clip(np.pi * (2.0 - 1.0 / (1.0 - place.exponent)), 0.0, np.pi))
        s = place.edge_radius * arc_factor(angle) ** (-1.0 / place.exponent)
        strength[1:] *= (distance[1:] / (distance[1:] + s)) ** place.exponent
        strength[0] = place.peak
        return distance, np.minimum(strength, place.peak)
    panel, _, _ = nearest_on_panels(charged.panels, np.asarray(place.at))
    rough = 0.5 * np.sqrt(charged.panels.areas[panel])
    first = int(np.clip(np.searchsorted(distance, rough), 1, LINE_POINTS // 3))
    share = distance[:first] / distance[first]
    strength[:first] = place.peak ** (1.0 - share) * max(strength[first], 1e-300) ** share
    strength[-1] = strength[-2]
    return distance, strength


def _shape(panels: Panels, place: PeakPlace) -> tuple[str, float | None]:
    """Shape and radius that stand for the surface in Peek's law."""
    if place.edge_radius is not None:
        return "parallel wires", place.edge_radius
    small, large = curvature_radii(panels, np.asarray(place.at), place.conductor)
    if not np.isfinite(small):
        return "sphere", None
    if small < WIRE * large:
        return "parallel wires", small
    return "sphere", 2.0 / (1.0 / small + 1.0 / large)


def curvature_radii(panels: Panels, point: FloatArray, conductor: int) -> tuple[float, float]:
    """Radii of curvature of a conductor at a point, by the normals of the panels around.

    Parameters
    ----------
    panels : Panels
    point : (3,) float, m
    conductor : int

    Returns
    -------
    smaller, larger : float, m
        Infinite where the surface is flat or hollow that way.
    """
    own = np.flatnonzero(panels.conductor == conductor)
    order = np.argsort(np.linalg.norm(panels.centroids[own] - point, axis=1), kind="stable")[: 3 * NORMALS]
    normal = panels.normals[own[order[0]]]
    near = own[order][panels.normals[own[order]] @ normal > LEAN][:NORMALS]
    one = np.cross(normal, [1.0, 0.0, 0.0] if abs(normal[0]) < 0.9 else [0.0, 1.0, 0.0])
    one /= np.linalg.norm(one)
    two = np.cross(normal, one)
    x = (panels.centroids[near] - panels.centroids[near[0]]) @ np.stack([one, two], axis=1)
    n = panels.normals[near] @ np.stack([one, two], axis=1)
    if len(near) < 4 or np.linalg.matrix_rank(x) < 2:
        return np.inf, np.inf
    # n = S x with S symmetric: three unknowns
    rows = np.concatenate([np.stack([x[:, 0], x[:, 1], 0 * x[:, 0]], 1), np.stack([0 * x[:, 0], x[:, 0], x[:, 1]], 1)])
    a, b, c = np.linalg.lstsq(rows, np.concatenate([n[:, 0], n[:, 1]]), rcond=None)[0]
    small, large = np.linalg.eigvalsh([[a, b], [b, c]])[::-1]
    size = float(np.linalg.norm(np.ptp(x, axis=0)))
    flat = 1e-3 / max(size, 1e-300)
    radii = [1.0 / value if value > flat else np.inf for value in (small, large)]
    return float(radii[0]), float(radii[1])


def gap_between(panels: Panels, one: int, other: int) -> float:
    """Shortest distance between two conductors.

    Parameters
    ----------
    panels : Panels
    one, other : int

    Returns
    -------
    float, m
        From corners and centroids of either to the panels of the other: exact where a corner is nearest.
    """
    sides = []
    for conductor in (one, other):
        rows = np.flatnonzero(panels.conductor == conductor)
        own = Panels(*(getattr(panels, name)[rows] for name in ("corners", "n_corners", "body", "conductor", "region")))
        sides.append((own, np.concatenate([own.corners.reshape(-1, 3), own.centroids])))
    best = np.inf
    for (_, points), (target, its) in (sides, sides[::-1]):
        distance, _ = cKDTree(its).query(points)
        for k in np.argsort(distance, kind="stable")[:_NEAREST]:
            best = min(best, nearest_on_panels(target, points[k])[2])
    return float(best)
