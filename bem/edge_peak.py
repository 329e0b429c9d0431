"""Stress intensity at the sharp edges of every conductor, and the peak field once an edge has a radius."""

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from .charges import StatedCharges
from .edge_field import EdgeIntensity, SharpEdges, edge_intensity
from .panels import Panels
from .peak import sharp_edges, surface_sides
from .rounded_wedge import arc_factor
from .sides import two_sided_bodies

__all__ = ["EdgePeak", "edge_peaks", "rounded_peak"]

FloatArray = NDArray[np.float64]
_State = tuple[Panels, FloatArray, cKDTree]

#: Edges of a conductor whose intensity is looked at: those with the strongest field beside them.
CANDIDATES = 16
#: Places along an edge whose mean is taken, the middle one among them; and how far other edges count, in sizes.
PLACES, NEIGHBOURS = (0.35, 0.5, 0.65), 0.3
#: Share of the step from the pass before that counts as uncertain (expanded, k = 2).
PASS_SHARE = 1.0


@dataclass(frozen=True)
class EdgePeak:
    """The strongest edge of a conductor.

    Attributes
    ----------
    conductor : int
    edge : EdgeIntensity
        At the middle of the edge. Corners, where edges meet, are stronger still and not looked at.
    radius : float or None, m
        Of the edge, if one was stated.
    peak, uncertainty : float or None, V/m
        At the rounded edge; the uncertainty is expanded (k = 2).
    """

    conductor: int
    edge: EdgeIntensity
    radius: float | None = None
    peak: float | None = None
    uncertainty: float | None = None


def edge_peaks(charges: StatedCharges, radii: Sequence[float | None]) -> list[EdgePeak | None]:
    """Strongest edge of every conductor.

    Parameters
    ----------
    charges : StatedCharges
    radii : sequence of float or None, m
        Radius of the edges of each conductor, where it was stated: on a sheet, half of its thickness.

    Returns
    -------
    list of EdgePeak or None
        None for a conductor without sharp edges, or where too few panels lie beside them.
    """
    panels = charges.panels
    two_sided = two_sided_bodies(charges.surface, charges.creases)
    sharp = sharp_edges(charges, *surface_sides(charges, two_sided))
    rim = np.isclose(sharp.exponent, 0.5)
    moved, size = _as_solved(charges, sharp.ends)
    result: list[EdgePeak | None] = []
    for conductor in range(panels.n_conductors):
        usable = (sharp.conductor == conductor) & np.isfinite(sharp.exponent) & (size > 0.0)
        best: tuple[float, EdgePeak] | None = None
        for kind in (False, True):  # a sheet's field is that of one side, half of what its density says
            rows = np.flatnonzero(usable & (rim == kind))
            edges = SharpEdges(moved[rows], sharp.exponent[rows], size[rows])
            found = _strongest(charges, conductor, edges, 0.5 if kind else 1.0, radii[conductor])
            if found is not None and (best is None or found[0] > best[0]):
                best = found
        result.append(None if best is None else best[1])
    return result


def rounded_peak(edge: EdgeIntensity, radius: float, size: float) -> tuple[float, float]:
    """Peak at an edge of a given radius, by the exact solution of the rounded wedge.

    Parameters
    ----------
    edge : EdgeIntensity
    radius : float, m
    size : float, m
        Over which the edge runs on: the law of the sharp edge holds for radii far below it.

    Returns
    -------
    peak, uncertainty : float, V/m
        The uncertainty holds that of the intensity and ``(radius / size)^q``, q the next exponent at the edge.
    """
    p = edge.exponent
    metal_angle = float(np.clip(np.pi * (2.0 - 1.0 / (1.0 - p)), 0.0, np.pi))
    peak = arc_factor(metal_angle) * edge.intensity * radius**-p
    beyond = (radius / size) ** (2.0 * (1.0 - p))
    return float(peak), float(peak * np.hypot(edge.uncertainty / edge.intensity, beyond))


def _strongest(
    charges: StatedCharges, conductor: int, edges: SharpEdges, factor: float, radius: float | None
) -> tuple[float, EdgePeak] | None:
    """Strongest of some edges: by the field at the stated radius, or at a thousandth of their size."""
    if not len(edges.ends):
        return None
    passes = [charges.density] + ([] if charges.previous is None else [charges.previous])
    own = [_of_conductor(charges.panels, one, conductor, factor, charges.four_pi_epsilon) for one in passes]
    _, field, tree = own[0]
    middle = edges.ends.mean(axis=1)
    beside = field[tree.query(middle, k=1)[1]]
    best: tuple[float, EdgePeak] | None = None
    for k in np.argsort(-beside, kind="stable")[:CANDIDATES]:
        one = _around(own[0], edges, int(k))
        if one is None:
            continue
        strength = one.intensity * (radius or 1e-3 * edges.size[k]) ** -one.exponent
        if best is None or strength > best[0]:
            before = _around(own[1], edges, int(k)) if len(own) > 1 else None
            step = PASS_SHARE * abs(one.intensity - before.intensity) if before is not None else 0.5 * one.intensity
            one = replace(one, uncertainty=float(np.hypot(one.uncertainty, step)))
            stated = (None, None) if radius is None else rounded_peak(one, radius, float(edges.size[k]))
            best = (float(strength), EdgePeak(conductor, one, radius, *stated))
    return best


def _around(state: _State, edges: SharpEdges, k: int) -> EdgeIntensity | None:
    """Mean of some places along an edge, or of its neighbours on a round one: single panels scatter."""
    middle = edges.ends.mean(axis=1)
    near = np.flatnonzero(np.linalg.norm(middle - middle[k], axis=1) <= NEIGHBOURS * edges.size[k])
    near = near[(near != k) & (np.abs(edges.exponent[near] - edges.exponent[k]) < 0.02)]
    places = [(k, share) for share in PLACES] + [(int(j), 0.5) for j in near]
    found = [edge_intensity(*state, edges, j, share) for j, share in places]
    known = [one for one in found if one is not None]
    middle_one = found[len(PLACES) // 2]
    if middle_one is None:
        return None
    values = np.array([one.intensity for one in known])
    spread = float(np.hypot(np.mean([one.uncertainty for one in known]), np.max(np.abs(values - values.mean()))))
    return replace(known[0], intensity=float(values.mean()), uncertainty=spread, at=middle_one.at)


def _of_conductor(panels: Panels, density: FloatArray, conductor: int, factor: float, four_pi_epsilon: float) -> _State:
    rows = np.flatnonzero(panels.conductor == conductor)
    own = Panels(*(getattr(panels, name)[rows] for name in ("corners", "n_corners", "body", "conductor", "region")))
    return own, factor * 4.0 * np.pi * np.abs(density[rows]) / four_pi_epsilon, cKDTree(own.centroids)


def _as_solved(charges: StatedCharges, ends: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Edges where the panels have them, and the length over which each runs on.

    Edges that stand for a round one were moved outward by 2/3 of the sagitta ``c^2 / (8 R)`` of their chord c.
    """
    length = np.linalg.norm(ends[:, 1] - ends[:, 0], axis=1)
    moved, size, facets = ends.copy(), length.copy(), charges.facets
    if charges.facets_meant or not len(facets.edge_offset):
        return moved, size
    tree = cKDTree(facets.edge_ends.mean(axis=1))
    close = tree.query_ball_point(ends.mean(axis=1), 1e-9 * max(float(length.max()), 1e-300))
    for k, rows in enumerate(close):
        shift = np.sum(facets.edge_offset[rows, None] * facets.edge_out[rows], axis=0) if rows else np.zeros(3)
        bulge = float(np.linalg.norm(shift))
        if bulge > 0.0:
            moved[k] += shift
            size[k] = max(length[k], length[k] ** 2 / (12.0 * bulge))
    return moved, size
