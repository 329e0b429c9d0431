"""How the capacitances move when a body is shifted, turned or grows: all from the one solve.

Moved as a rigid body: the exact derivative of the discrete energy is the Coulomb interaction with the panels of all
other bodies. With the force F(V) on a body at the potentials V, ``F = 1/2 V^T dC V`` for every V, so that the
derivative of entry (i, j) is ``F(e_i + e_j) - F(e_i) - F(e_j)``.

Grown by a uniform offset of its surface (plating, machining, wear): the derivative of the discrete energy with the
charges of the panels held, :mod:`daraf.bem.offset_energy`. It has no value for sheets, whose rims carry infinitely
much of it. Which face matters is told by Hadamard's formula, ``dC_ij = (1/eps) int sigma_i sigma_j dn dS``
(J. Hadamard, Mem. Acad. Sci. 33 (1908), as in P. R. Garabedian, Partial Differential Equations, 1964, section 15.1).
"""

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from .charges import filled_density
from .errors import InputError
from .force import INTEGRATION, PASS_SHARE, PLACE_SHARE, interaction
from .growth import Growth
from .offset_energy import offset_forms
from .panels import Panels

__all__ = ["Sensitivities", "sensitivities", "surface_product"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

#: Shares (expanded, k = 2) of what changes an offset that count as uncertain: the charge that was filled in, the last
#: step of refinement. Measured on cubes, spheres and pairs of them.
OFFSET_FILLED_SHARE, OFFSET_PASS_SHARE = 0.5, 0.5
#: Error of the difference and of how far facets follow the round surface, per offset; likewise measured.
OFFSET_FLOOR = 2e-3


@dataclass(frozen=True, eq=False)
class Sensitivities:
    """Derivatives of the Maxwell matrix; all uncertainties are expanded (k = 2).

    Attributes
    ----------
    shift : (n_bodies, 3, n, n) float, F/m
        Per shift of a body along x, y, z.
    shift_uncertainty : (n_bodies, n, n) float, F/m
        Of the length of the error over x, y, z.
    rotation : (n_bodies, 3, n, n) float, F/rad
        Per right-handed turn of a body about axes along x, y, z through `about`.
    rotation_uncertainty : (n_bodies, n, n) float, F/rad
    about : (n_bodies, 3) float, m
        Centre of each body's box.
    offset : (n_bodies, n, n) float, F/m
        Per outward offset of a body's surface; NaN for sheets.
    offset_uncertainty : (n_bodies, n, n) float, F/m
        NaN for sheets.
    """

    shift: FloatArray
    shift_uncertainty: FloatArray
    rotation: FloatArray
    rotation_uncertainty: FloatArray
    about: FloatArray
    offset: FloatArray
    offset_uncertainty: FloatArray


def sensitivities(
    panels: Panels,
    densities: FloatArray,
    maxwell: FloatArray,
    four_pi_epsilon: float,
    *,
    one_sided: BoolArray,
    previous: FloatArray | None = None,
    grown: Growth | None = None,
    progress: Callable[..., None] | None = None,
) -> Sensitivities:
    """Derivatives of all entries of the Maxwell matrix.

    Parameters
    ----------
    panels : Panels
    densities : (n, n_panels) float, C/m2 per V
        With conductor i at 1 V and all others at 0 V.
    maxwell : (n, n) float, F
        Extrapolated; what the densities lack of its charges is added where the field is strong.
    four_pi_epsilon : float, F/m
    one_sided : (n_bodies,) bool
        Bodies with the field on their outer side alone: closed ones.
    previous : (n, n_panels) float, C/m2 per V, optional
        Of the pass before: the difference enters the uncertainty, which is wide without it.
    grown : Growth, optional
        How the surface moves when it is offset; without it no offsets are given. It also knows how far the facets of
        round parts were moved outward before the solve; moved as far again, they tell how much hangs on where they lie.
    progress : callable, optional
        Called with (stage, done, total, note).

    Returns
    -------
    Sensitivities

    Raises
    ------
    InputError
        If shapes do not fit.
    """
    n, n_bodies = len(maxwell), int(panels.body.max()) + 1
    if densities.shape != (n, len(panels)) or maxwell.shape != (n, n) or len(one_sided) != n_bodies:
        raise InputError("sensitivities: densities, matrix, panels and bodies do not belong together")

    def told(done: float, total: float) -> None:
        if progress is not None:
            progress("sensitivities", done, total, "")

    filled = np.array([filled_density(panels, row, column) for row, column in zip(densities, maxwell.T, strict=True)])
    both = _rigid(panels, np.concatenate([filled, densities]), four_pi_epsilon, told)
    value, raw = both[:, :, :n, :n], both[:, :, n:, n:]
    before = None if previous is None else _rigid(panels, previous, four_pi_epsilon, None)
    about, size = _boxes(panels, n_bodies)
    shift, turn = value[:, :3], _turned_about(value, about)
    parts = [raw - value, raw - value if before is None else PASS_SHARE * (raw - before)]
    if grown is not None and np.any(grown.facet_offset):
        corners = panels.corners + (grown.facet_offset[panels.region][:, None] * panels.normals)[:, None, :]
        parts.append(PLACE_SHARE * (_rigid(replace(panels, corners=corners), filled, four_pi_epsilon, None) - value))
    shift_spread = _lengths([part[:, :3] for part in parts], shift)
    turn_spread = _lengths([_turned_about(part, about) for part in parts], turn)
    offset, offset_spread = np.full((2, n_bodies, n, n), np.nan)
    if grown is not None:
        for body in np.flatnonzero(one_sided):
            told(float(body), n_bodies)
            one = _offset(panels, filled, densities, previous, grown, int(body))
            offset[body], offset_spread[body] = (part / four_pi_epsilon for part in one)
    floor = INTEGRATION * size[:, None, None] * np.abs(shift).max(axis=1)
    return Sensitivities(shift, shift_spread, turn, np.hypot(turn_spread, floor), about, offset, offset_spread)


def surface_product(density_i: FloatArray, density_j: FloatArray, epsilon: float) -> FloatArray:
    """Which face's tolerance moves a capacitance: ``sigma_i sigma_j / eps`` on every panel.

    Parameters
    ----------
    density_i, density_j : (n_panels,) float, C/m2 per V
    epsilon : float, F/m

    Returns
    -------
    (n_panels,) float, F/m3
        Change of C_ij per area and outward offset.
    """
    return density_i * density_j / epsilon


def _rigid(
    panels: Panels,
    densities: FloatArray,
    four_pi_epsilon: float,
    told: Callable[[float, float], None] | None,
) -> FloatArray:
    """Derivatives per shift and per turn about the origin, (n_bodies, 6, n, n)."""
    n = len(densities)
    first, second = np.triu_indices(n)
    columns = np.where((first == second)[:, None], densities[first], densities[first] + densities[second]).T
    acting = interaction(panels, columns, owner=panels.body, progress=told).sum(axis=2) / four_pi_epsilon
    alone = acting[first == second]
    n_bodies = acting.shape[1]
    result = np.empty((n_bodies, 6, n, n))
    for force, i, j in zip(acting, first, second, strict=True):
        result[:, :, i, j] = 2.0 * force if i == j else force - alone[i] - alone[j]
        result[:, :, j, i] = result[:, :, i, j]
    return result


def _turned_about(rigid: FloatArray, about: FloatArray) -> FloatArray:
    """Derivatives per turn about a point of each body: T - c x F."""
    moved = np.cross(about[:, :, None, None], rigid[:, :3], axis=1)
    return np.asarray(rigid[:, 3:] - moved)


def _lengths(parts: list[FloatArray], value: FloatArray) -> FloatArray:
    squares = sum((part**2).sum(axis=1) for part in parts)
    return np.asarray(np.sqrt(squares + INTEGRATION**2 * (value**2).sum(axis=1)))


def _boxes(panels: Panels, n_bodies: int) -> tuple[FloatArray, FloatArray]:
    """Centre and half diagonal of each body's box."""
    centre, size = np.zeros((n_bodies, 3)), np.zeros(n_bodies)
    for body in range(n_bodies):
        points = panels.corners[panels.body == body].reshape(-1, 3)
        if len(points):
            low, high = points.min(axis=0), points.max(axis=0)
            centre[body], size[body] = 0.5 * (low + high), 0.5 * np.linalg.norm(high - low)
    return centre, size


def _offset(
    panels: Panels,
    filled: FloatArray,
    densities: FloatArray,
    previous: FloatArray | None,
    grown: Growth,
    body: int,
) -> tuple[FloatArray, FloatArray]:
    """Derivative per offset of one body and its uncertainty, bare, (n, n).

    The mixed form of solved and filled densities has the error of the square of theirs: on a cube, where an offset
    is a scaling, it returns the extrapolated capacitance itself.
    """
    n = len(filled)
    before = densities if previous is None else previous
    left, right = np.concatenate([densities, before]), np.concatenate([filled, densities, before])
    forms = offset_forms(panels, grown.of(panels), left, right, body)
    mixed, raw, last = 0.5 * (forms[:n, :n] + forms[:n, :n].T), forms[:n, n : 2 * n], forms[n:, 2 * n :]
    spread = np.hypot(OFFSET_FILLED_SHARE * (mixed - raw), OFFSET_PASS_SHARE * (raw - last))
    scale = np.sqrt(np.outer(np.abs(np.diag(mixed)), np.abs(np.diag(mixed))))
    return mixed, spread + OFFSET_FLOOR * np.maximum(np.abs(mixed), 0.1 * scale)
