"""Given charge and external fields: what they do to panels, as loads beside the conductors.

A load is a distribution of free charge (points, lines, surfaces, uniformly charged bodies) or a uniform external
field. All but the uniform field lie in one named medium, whose bound charge weakens them by its permittivity. What
the equations need of a load is the integral of its potential over every panel, and the flux of its field through it.
"""

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .constants import FOUR_PI_EPSILON_0
from .errors import InputError
from .field import polygon_field
from .flux import flux_integral
from .frames import AREA, NORMAL, POINTS, panel_frames
from .jit import parallel_kernel, prange
from .pairs import pair_integral
from .polygon import polygon_potential
from .polyhedron import polyhedron_frames, polyhedron_potential

__all__ = ["ChargedBody", "ChargedSurface", "LineCharge", "Load", "PointCharges", "UniformField"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Gauss points of a line charge, and the pieces that it is cut into.
_LINE_POINTS, _LINE_PIECES = 16, 8
_RULE = 5


class Load(Protocol):
    """A given charge or field."""

    @property
    def medium(self) -> int | None:
        """Index of the medium that it lies in; None for an external field, which is that of the outermost one."""

    def moments(self, frames: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Integral of the vacuum potential over panels, V m2, and flux of the vacuum field through them, V m."""

    def potential(self, points: FloatArray) -> FloatArray:
        """Vacuum potential at points, V."""


@parallel_kernel
def _point_moments(points, charges, frames, potential, flux):
    for p in prange(len(frames)):
        potential[p], flux[p] = 0.0, 0.0
        if frames[p, AREA] == 0.0:
            continue
        for q in range(len(points)):
            x, y, z = points[q, 0], points[q, 1], points[q, 2]
            potential[p] += charges[q] * polygon_potential(frames[p], x, y, z)
            fx, fy, fz = polygon_field(frames[p], x, y, z)
            normal = fx * frames[p, NORMAL] + fy * frames[p, NORMAL + 1] + fz * frames[p, NORMAL + 2]
            flux[p] -= charges[q] * normal


@parallel_kernel
def _surface_moments(sources, density, frames, potential, flux):
    for p in prange(len(frames)):
        potential[p], flux[p] = 0.0, 0.0
        if frames[p, AREA] == 0.0:
            continue
        for s in range(len(sources)):
            potential[p] += density[s] * pair_integral(frames[p], sources[s])
            flux[p] += density[s] * flux_integral(frames[p], sources[s])


@parallel_kernel
def _surface_potential(sources, density, points, potential):
    for p in prange(len(points)):
        potential[p] = 0.0
        for s in range(len(sources)):
            potential[p] += density[s] * polygon_potential(sources[s], points[p, 0], points[p, 1], points[p, 2])


def _numbers(value: ArrayLike, shape: tuple[int | None, ...], what: str) -> FloatArray:
    array = np.ascontiguousarray(value, dtype=np.float64)
    fits = array.ndim == len(shape) and all(want in (None, got) for want, got in zip(shape, array.shape, strict=True))
    if not fits or not np.isfinite(array).all():
        raise InputError(f"{what} must be finite numbers of shape {shape}, got shape {array.shape}")
    return array


@dataclass(frozen=True, eq=False)
class PointCharges:
    """Point charges.

    Parameters
    ----------
    positions : (k, 3) float, m
    charges : (k,) float, C
    medium : int
        Index of the medium that they lie in.
    """

    positions: FloatArray
    charges: FloatArray
    medium: int | None = 0

    def __post_init__(self) -> None:
        object.__setattr__(self, "positions", _numbers(self.positions, (None, 3), "positions of point charges"))
        object.__setattr__(self, "charges", _numbers(self.charges, (len(self.positions),), "point charges"))

    def moments(self, frames: FloatArray) -> tuple[FloatArray, FloatArray]:
        """In closed form: the potential and the solid angle of a panel seen from the charge."""
        potential, flux = np.empty(len(frames)), np.empty(len(frames))
        _point_moments(self.positions, self.charges / FOUR_PI_EPSILON_0, frames, potential, flux)
        return potential, flux

    def potential(self, points: FloatArray) -> FloatArray:
        """Vacuum potential, V."""
        distance = np.linalg.norm(points[:, None] - self.positions[None], axis=2)
        return np.asarray((1.0 / distance) @ self.charges / FOUR_PI_EPSILON_0)


@dataclass(frozen=True, eq=False)
class LineCharge:
    """A straight charged line, taken as 128 point charges: exact to 1e-6 beyond a twentieth of its length.

    Parameters
    ----------
    start, end : (3,) float, m
    density : float, C/m
    medium : int
        Index of the medium that it lies in.
    """

    start: FloatArray
    end: FloatArray
    density: float
    medium: int | None = 0

    def _points(self) -> PointCharges:
        start, end = _numbers(self.start, (3,), "start of a line charge"), _numbers(self.end, (3,), "its end")
        node, weight = np.polynomial.legendre.leggauss(_LINE_POINTS)
        t = ((np.arange(_LINE_PIECES)[:, None] + 0.5 * (node + 1.0)) / _LINE_PIECES).reshape(-1)
        share = np.tile(0.5 * weight / _LINE_PIECES, _LINE_PIECES)
        length = float(np.linalg.norm(end - start))
        return PointCharges(start + t[:, None] * (end - start), self.density * length * share, self.medium)

    def moments(self, frames: FloatArray) -> tuple[FloatArray, FloatArray]:
        """As its point charges."""
        return self._points().moments(frames)

    def potential(self, points: FloatArray) -> FloatArray:
        """Vacuum potential, V."""
        return self._points().potential(points)


@dataclass(frozen=True, eq=False)
class ChargedSurface:
    """An open or closed surface with given charge.

    Parameters
    ----------
    corners : (m, 4, 3) float, m
        Flat panels; a triangle repeats its third corner.
    density : (m,) float, C/m2
    medium : int
        Index of the medium that it lies in.
    """

    corners: FloatArray
    density: FloatArray
    medium: int | None = 0

    def __post_init__(self) -> None:
        object.__setattr__(self, "corners", _numbers(self.corners, (None, 4, 3), "corners of a charged surface"))
        object.__setattr__(self, "density", _numbers(self.density, (len(self.corners),), "its density"))

    def moments(self, frames: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Integrals over pairs of panels."""
        potential, flux = np.empty(len(frames)), np.empty(len(frames))
        _surface_moments(panel_frames(self.corners), self.density / FOUR_PI_EPSILON_0, frames, potential, flux)
        return potential, flux

    def potential(self, points: FloatArray) -> FloatArray:
        """Vacuum potential, V."""
        found = np.empty(len(points))
        _surface_potential(panel_frames(self.corners), self.density / FOUR_PI_EPSILON_0, points, found)
        return found


@dataclass(frozen=True, eq=False)
class ChargedBody:
    """A closed body with the same charge density all through it; its facets are taken as they are.

    Parameters
    ----------
    vertices : (nv, 3) float, m
    triangles : (nt, 3) int
        Outward oriented.
    density : float, C/m3
    medium : int
        Index of the medium that it lies in.
    """

    vertices: FloatArray
    triangles: IntArray
    density: float
    medium: int | None = 0

    def _at(self, points: FloatArray) -> tuple[FloatArray, FloatArray]:
        frames = polyhedron_frames(np.asarray(self.vertices, dtype=np.float64), np.asarray(self.triangles))
        potential, field = np.empty(len(points)), np.empty((len(points), 3))
        polyhedron_potential(points, frames, potential, field)
        factor = self.density / FOUR_PI_EPSILON_0
        return factor * potential, factor * field

    def moments(self, frames: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Gauss points on the panels, the closed form at each."""
        points, weights = _gauss(frames)
        potential, field = self._at(points.reshape(-1, 3))
        normals = frames[:, NORMAL : NORMAL + 3]
        flux = np.einsum("pqa,pa,pq->p", field.reshape(points.shape), normals, weights)
        return np.asarray((potential.reshape(weights.shape) * weights).sum(axis=1)), np.asarray(flux)

    def potential(self, points: FloatArray) -> FloatArray:
        """Vacuum potential, V."""
        return self._at(points)[0]


@dataclass(frozen=True, eq=False)
class UniformField:
    """A uniform external field in the outermost medium; its potential is zero at the origin.

    Parameters
    ----------
    field : (3,) float, V/m
    medium : None
        The outermost one.
    """

    field: FloatArray
    medium: int | None = None

    def __post_init__(self) -> None:
        object.__setattr__(self, "field", _numbers(self.field, (3,), "the external field"))

    def moments(self, frames: FloatArray) -> tuple[FloatArray, FloatArray]:
        """The potential at the centroid and the field through the area."""
        points, weights = _gauss(frames)
        potential = -np.einsum("pqa,a,pq->p", points, self.field, weights)
        return np.asarray(potential), np.asarray(frames[:, AREA] * (frames[:, NORMAL : NORMAL + 3] @ self.field))

    def potential(self, points: FloatArray) -> FloatArray:
        """Potential, V."""
        return np.asarray(-points @ self.field)


def _gauss(frames: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Gauss points and weights of panels, (n, 25, 3) and (n, 25)."""
    start, count = POINTS[_RULE], _RULE * _RULE
    table = frames[:, start : start + 4 * count].reshape(len(frames), 4, count)
    return np.ascontiguousarray(table[:, :3].transpose(0, 2, 1)), table[:, 3]
