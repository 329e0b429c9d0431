"""Forces and torques on conductors, by Coulomb's law between the charges of different conductors.

The sum over pairs of panels on different conductors is the exact derivative of the discrete energy with respect to
moving one of them as a rigid body; it needs no self term and holds for sheets and at sharp edges, where the
surface pressure sigma^2 / (2 eps) does not.
"""

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from .charges import StatedCharges
from .frames import panel_frames
from .pair_force import interaction_rows
from .panels import Panels

__all__ = ["Forces", "conductor_forces", "interaction"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
Progress = Callable[..., None]

#: Pairs of panels per call of the kernel, so that progress moves and Ctrl-C answers.
_PAIRS_PER_BLOCK = 200_000
#: Shares of what changes the force that count as uncertain (expanded, k = 2): the charge that was filled in; the
#: charge that the facets cost; moving the charged facets as far again as they were moved; the last step of
#: refinement. Measured on the exact cases of ``tests/published/test_forces.py`` and more of their kind.
FILLED_SHARE, FACETS_SHARE, PLACE_SHARE, PASS_SHARE = 1.0, 0.03, 0.5, 0.5
#: How far the line of action may be off beside that, as a share of half the diagonal of the conductor's box.
LEVER_SHARE = 0.1
#: Error of the integrals per sum of the sizes of all forces on a conductor: by the other conductors, and on its
#: panels, so that a force that is zero by symmetry has an uncertainty too.
INTEGRATION = 2e-6


@dataclass(frozen=True, eq=False)
class Forces:
    """Forces and torques on conductors.

    Attributes
    ----------
    force : (n, 3) float, N
    force_uncertainty : (n,) float, N
        Expanded (k = 2), of the length of the error of each force.
    torque : (n, 3) float, N m
    torque_uncertainty : (n,) float, N m
    about : (n, 3) float, m
        Points that the torques refer to: the centre of each conductor's box.
    """

    force: FloatArray
    force_uncertainty: FloatArray
    torque: FloatArray
    torque_uncertainty: FloatArray
    about: FloatArray


def conductor_forces(charges: StatedCharges, *, progress: Progress | None = None) -> Forces:
    """Force and torque on every conductor.

    Parameters
    ----------
    charges : StatedCharges
        From :func:`daraf.bem.charges.stated_charges`.
    progress : callable, optional
        Called with (stage, done, total, note).

    Returns
    -------
    Forces
    """

    def told(done: float, total: float) -> None:
        if progress is not None:
            progress("forces", done, total, "")

    columns = [charges.density, charges.margin, charges.faceted, charges.galerkin]
    columns.append(charges.galerkin if charges.previous is None else charges.previous)
    between = interaction(charges.panels, np.stack(columns, axis=1), progress=told) / charges.four_pi_epsilon
    value, margin, faceted, galerkin, previous = between.sum(axis=2)
    parts = [margin - value, FILLED_SHARE * (galerkin - value), PASS_SHARE * (galerkin - previous)]
    if np.any(charges.offset):
        parts += [FACETS_SHARE * (faceted - value), PLACE_SHARE * (_moved_again(charges) - value)]
    about, size = _boxes(charges.panels)
    pressure = _pressures(charges)
    spread = _lengths([part[:, :3] for part in parts], between[0, :, :, :3], pressure)
    turning = _lengths([_about(part, about) for part in parts], _about(between[0], about[:, None, :]), size * pressure)
    turning = np.hypot(turning, LEVER_SHARE * size * spread)
    return Forces(value[:, :3], spread, _about(value, about), turning, about)


def _boxes(panels: Panels) -> tuple[FloatArray, FloatArray]:
    """Centre (n, 3) and half the diagonal (n,) of each conductor's box, m."""
    low = np.full((panels.n_conductors, 3), np.inf)
    high = -low
    owner = np.repeat(panels.conductor, 4)
    np.minimum.at(low, owner, panels.corners.reshape(-1, 3))
    np.maximum.at(high, owner, panels.corners.reshape(-1, 3))
    return 0.5 * (low + high), 0.5 * np.linalg.norm(high - low, axis=1)


def _moved_again(charges: StatedCharges) -> FloatArray:
    """Forces with the same charges on facets moved outward once more: how much they hang on where the facets lie."""
    panels = charges.panels
    corners = panels.corners + (charges.offset[:, None] * panels.normals)[:, None, :]
    between = interaction(replace(panels, corners=corners), charges.density[:, None])[0]
    return np.asarray(between.sum(axis=1) / charges.four_pi_epsilon)


def _about(six: FloatArray, about: FloatArray) -> FloatArray:
    """Torque about other points: T - c x F."""
    return np.asarray(six[..., 3:] - np.cross(about, six[..., :3]))


def _pressures(charges: StatedCharges) -> FloatArray:
    """Sum of the sizes of the forces on all panels of each conductor, (n,) N: what cancels where a force is zero."""
    panels = charges.panels
    square = 2.0 * np.pi / charges.four_pi_epsilon * charges.density**2 * panels.areas
    total = np.zeros(panels.n_conductors)
    np.add.at(total, panels.conductor, square)
    return total


def _lengths(parts: list[FloatArray], between: FloatArray, pressure: FloatArray) -> FloatArray:
    """Root sum of squares of all parts, and of the error of the integrals."""
    squares = sum(np.einsum("ak,ak->a", part, part) for part in parts)
    scale = np.linalg.norm(between, axis=2).sum(axis=1) + pressure
    return np.asarray(np.sqrt(squares + (INTEGRATION * scale) ** 2))


def interaction(
    panels: Panels,
    density: FloatArray,
    *,
    owner: IntArray | None = None,
    progress: Callable[[float, float], None] | None = None,
) -> FloatArray:
    """Bare force and torque on every conductor by every other one.

    Parameters
    ----------
    panels : Panels
    density : (n_panels, n_columns) float, C/m2
        Several distributions of charge; each acts on itself only.
    owner : (n_panels,) int, optional
        What each panel moves with, if not its conductor: its body, say.
    progress : callable, optional
        Told (pairs done, pairs in all).

    Returns
    -------
    (n_columns, n_owners, n_owners, 6) float
        Entry [k, a, b]: force (x, y, z) in C2/m2 and torque about the origin in C2/m on conductor a by b; divide
        by 4 pi eps for newtons. Swapping a and b changes the sign exactly.
    """
    centre = panels.corners.reshape(-1, 3).mean(axis=0)
    frames = panel_frames(panels.corners - centre)
    density = np.ascontiguousarray(density)
    owner = panels.conductor if owner is None else np.ascontiguousarray(owner)
    n, n_owners, n_columns = len(panels), int(owner.max()) + 1, density.shape[1]
    total = np.zeros((n_owners, n_owners, n_columns, 6))
    first, done = 0, 0.0
    while first < n:
        last = min(n, first + max(8, _PAIRS_PER_BLOCK // (first + 1)))
        rows = np.empty((last - first, n_owners, n_columns, 6))
        interaction_rows(frames, owner, density, rows, first, last)
        np.add.at(total, owner[first:last], rows)
        done += 0.5 * (last * (last + 1.0) - first * (first + 1.0))
        first = last
        if progress is not None:
            progress(done, 0.5 * n * (n + 1.0))
    total = (total - total.swapaxes(0, 1)).transpose(2, 0, 1, 3)
    total[..., 3:] += np.cross(centre, total[..., :3])
    return np.ascontiguousarray(total)
