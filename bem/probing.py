"""Potential and field at points, each with its uncertainty, for one state of charge.

What a value hangs on is put back together from what the solve left: the charge that the panels lack and that was
filled in, the last step of refinement, the uncertain charge of every conductor, and where round surfaces lie. Each of
them changes potential and field at a point by an amount that is computed, not guessed; shares of the changes, measured
on exact potentials, make the uncertainty.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .charges import filled_density
from .errors import InputError
from .frames import panel_frames
from .network import Excitation
from .off_surface import off_surface, winding
from .panels import Panels
from .roughness import near_steps, roughness

__all__ = ["ChargedPanels", "Probed", "charged_panels", "probe"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Shares (expanded, k = 2) of what changes a value that count as uncertain: the charge that was filled in, the last
#: step of refinement, moving the facets outward as far again. Measured on the exact potentials of
#: ``tests/published/test_potentials.py``.
FILLED_SHARE, PASS_SHARE, PLACE_SHARE = 1.0, 1.0, 0.5
#: Shares of what the steps from panel to panel do close by, in potential and in field; likewise measured.
STEP_SHARE = (0.25, 0.9)
#: Relative error of the sums: of the shares of far panels, and of rounding.
SUMMATION = 3e-6


@dataclass(frozen=True, eq=False)
class ChargedPanels:
    """Panels with the charges of one state.

    Attributes
    ----------
    panels : Panels
    density : (n, 4) float, C/m2
        Columns: with the whole charge of each conductor, as solved, with each charge larger by its uncertainty, and
        as solved in the pass before (as in the last one if there was only one).
    potential : (n_conductors,) float, V
    fill : (n_bodies,) int
        As in :class:`daraf.bem.meaning.SurfaceMeaning`.
    facet_offset : (n,) float, m
    four_pi_epsilon : float, F/m
    """

    panels: Panels
    density: FloatArray
    potential: FloatArray
    fill: IntArray
    facet_offset: FloatArray
    four_pi_epsilon: float


@dataclass(frozen=True, eq=False)
class Probed:
    """Potential and field at points; uncertainties are expanded (k = 2).

    Attributes
    ----------
    potential, potential_uncertainty : (m,) float, V
    field : (m, 3) float, V/m
    field_uncertainty : (m,) float, V/m
        Of the length of the error.
    inside : (m,) int
        Conductor in whose metal a point lies, or -1. There the potential is the conductor's and the field zero.
    """

    potential: FloatArray
    potential_uncertainty: FloatArray
    field: FloatArray
    field_uncertainty: FloatArray
    inside: IntArray

    @property
    def strength(self) -> FloatArray:
        """Length of the field, (m,) V/m."""
        return np.asarray(np.linalg.norm(self.field, axis=1))


def charged_panels(
    panels: Panels,
    densities: FloatArray,
    state: Excitation,
    four_pi_epsilon: float,
    *,
    fill: IntArray,
    facet_offset: FloatArray | None = None,
    previous: FloatArray | None = None,
) -> ChargedPanels:
    """Charge the panels of a solve.

    Parameters
    ----------
    panels : Panels
    densities : (n_conductors, n) float, C/m2 per V
        With one conductor at 1 V and all others at 0 V.
    state : Excitation
        Its charges are those of the Maxwell matrix, which knows more than the densities.
    four_pi_epsilon : float, F/m
    fill : (n_bodies,) int
    facet_offset : (n,) float, m, optional
    previous : (n_conductors, n) float, C/m2 per V, optional
        Of the pass before, on the same panels.

    Returns
    -------
    ChargedPanels

    Raises
    ------
    InputError
        If shapes do not fit.
    """
    n, potential, charge = panels.n_conductors, state.potential, state.charge
    if densities.shape != (n, len(panels)) or potential.shape != (n,):
        raise InputError("field: densities, potentials and panels do not belong together")
    raw = np.asarray(potential @ densities)
    filled = filled_density(panels, raw, charge)
    sign = np.sign(np.bincount(panels.conductor, filled * panels.areas, n))
    margin = filled_density(panels, filled, charge + sign * state.charge_uncertainty)
    return ChargedPanels(
        panels=panels,
        density=np.stack([filled, raw, margin, raw if previous is None else potential @ previous], axis=1),
        potential=potential,
        fill=fill,
        facet_offset=np.zeros(len(panels)) if facet_offset is None else facet_offset,
        four_pi_epsilon=four_pi_epsilon,
    )


def probe(
    charged: ChargedPanels, points: ArrayLike, *, progress: Callable[[float, float], None] | None = None
) -> Probed:
    """Potential and field at points.

    Parameters
    ----------
    charged : ChargedPanels
    points : (m, 3) float, m
    progress : callable, optional
        Told (share done, 1).

    Returns
    -------
    Probed

    Raises
    ------
    InputError
        If the points are not finite or not of this shape.
    """
    panels, value = charged.panels, charged.density[:, :1]
    work = [(panels.corners, charged.density)]
    if np.any(charged.facet_offset):
        step = charged.facet_offset[:, None] * panels.normals
        work.append((panels.corners + step[:, None, :], value))
    pairs = np.cumsum([0] + [len(corners) for corners, _ in work])
    found = []
    for k, (corners, density) in enumerate(work):

        def told(done: float, total: float, k: int = k) -> None:
            if progress is not None:
                progress((pairs[k] + (pairs[k + 1] - pairs[k]) * done / total) / pairs[-1], 1.0)

        bare = off_surface(points, corners, density, progress=told)
        found.append(np.concatenate([bare.potential[:, None], bare.field], axis=1) / charged.four_pi_epsilon)
    columns = found[0]
    at = columns[:, :, 0]
    parts = [FILLED_SHARE * (columns[:, :, 1] - at), columns[:, :, 2] - at]
    parts.append(PASS_SHARE * (columns[:, :, 1] - columns[:, :, 3]))
    if len(found) > 1:
        parts.append(PLACE_SHARE * (found[1][:, :, 0] - at))
    squares = np.sum(np.square(parts), axis=0)
    near = _steps(charged, np.asarray(points, dtype=np.float64))
    squares[:, 0] += (STEP_SHARE[0] * near[0]) ** 2
    squares[:, 1] += (STEP_SHARE[1] * near[1]) ** 2
    strength = np.linalg.norm(at[:, 1:], axis=1)
    scale = float(np.max(np.abs(charged.potential)))
    volts = np.sqrt(squares[:, 0]) + SUMMATION * scale
    gradient = np.sqrt(squares[:, 1:].sum(axis=1)) + SUMMATION * strength
    return _metal_filled(charged, np.asarray(points, dtype=np.float64), at, volts, gradient)


def _steps(charged: ChargedPanels, points: FloatArray) -> tuple[FloatArray, FloatArray]:
    """What the steps from panel to panel do at points: V, V/m."""
    panels = charged.panels
    centre = panels.corners.reshape(-1, 3).mean(axis=0)
    frames = panel_frames(panels.corners - centre, largest_rule=0)
    volts, gradient = np.empty(len(points)), np.empty(len(points))
    near_steps(np.ascontiguousarray(points - centre), frames, roughness(panels, charged.density[:, 0]), volts, gradient)
    return volts / charged.four_pi_epsilon, gradient / charged.four_pi_epsilon


def _metal_filled(
    charged: ChargedPanels, points: FloatArray, at: FloatArray, volts: FloatArray, gradient: FloatArray
) -> Probed:
    """Put the known potential and no field where points lie in metal."""
    inside = _conductor_at(charged, points)
    metal = inside >= 0
    potential, field = at[:, 0].copy(), at[:, 1:].copy()
    potential[metal], field[metal] = charged.potential[inside[metal]], 0.0
    volts[metal], gradient[metal] = 0.0, 0.0
    return Probed(potential, volts, field, gradient, inside)


def _conductor_at(charged: ChargedPanels, points: FloatArray) -> IntArray:
    """Conductor in whose metal each point lies, or -1."""
    panels = charged.panels
    solid = np.flatnonzero(charged.fill)
    owner = np.zeros(len(charged.fill), np.int64)
    owner[panels.body] = panels.conductor
    inside = np.full(len(points), -1, np.int64)
    for conductor in np.unique(owner[solid]):
        turns = winding(points, panels.corners, panels.body, solid[owner[solid] == conductor])
        inside[turns > 0.5] = conductor
    return inside
