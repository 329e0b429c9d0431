"""Flat panels: triangles and convex quadrilaterals that carry the unknown charge density."""

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from .errors import InputError

__all__ = ["Panels", "polygon_geometry"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


def polygon_geometry(corners: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Areas, centroids and unit normals of flat triangles and quadrilaterals.

    Parameters
    ----------
    corners : (n, 4, 3) float, m
        A triangle repeats its third corner.

    Returns
    -------
    areas : (n,) float, m2
    centroids : (n, 3) float, m
    normals : (n, 3) float
        Zero where the area is zero.
    """
    a, b, c, d = (corners[:, k] for k in range(4))
    first = 0.5 * np.cross(b - a, c - a)
    second = 0.5 * np.cross(c - a, d - a)
    vector = first + second
    areas = np.linalg.norm(vector, axis=1)
    safe = np.where(areas > 0, areas, 1.0)
    normals = vector / safe[:, None]
    share = np.einsum("ij,ij->i", second, normals) / safe
    offset = (b + c - 2 * a) * (1 - share)[:, None] + (c + d - 2 * a) * share[:, None]
    return areas, a + offset / 3.0, normals


@dataclass(frozen=True, eq=False)
class Panels:
    """Flat panels with one constant charge density each.

    Parameters
    ----------
    corners : (n, 4, 3) float, m
        Counter-clockwise seen from outside; a triangle repeats its third corner as the fourth.
    n_corners : (n,) int
        3 or 4.
    body, conductor, region : (n,) int
        Body, conductor and flat region of the surface that each panel belongs to.
    """

    corners: FloatArray
    n_corners: IntArray
    body: IntArray
    conductor: IntArray
    region: IntArray

    def __post_init__(self) -> None:
        object.__setattr__(self, "corners", np.ascontiguousarray(self.corners, dtype=np.float64))
        for name in ("n_corners", "body", "conductor", "region"):
            value = np.ascontiguousarray(getattr(self, name), dtype=np.int64)
            object.__setattr__(self, name, value)
            if value.shape != (len(self.corners),):
                raise InputError(f"panels: {name} must hold one value per panel")
        if self.corners.ndim != 3 or self.corners.shape[1:] != (4, 3):
            raise InputError(f"panels: corners must have shape (n, 4, 3), got {self.corners.shape}")

    def __len__(self) -> int:
        return len(self.corners)

    @cached_property
    def _geometry(self) -> tuple[FloatArray, FloatArray, FloatArray]:
        return polygon_geometry(self.corners)

    @property
    def areas(self) -> FloatArray:
        """Areas, (n,) m2."""
        return self._geometry[0]

    @property
    def centroids(self) -> FloatArray:
        """Centroids, (n, 3) m."""
        return self._geometry[1]

    @property
    def normals(self) -> FloatArray:
        """Unit normals, (n, 3), out of the conductor."""
        return self._geometry[2]

    @property
    def n_conductors(self) -> int:
        """Number of conductors."""
        return int(self.conductor.max()) + 1

    @property
    def lengths(self) -> FloatArray:
        """Mean lengths along u (sides 0-1 and 3-2) and v (sides 1-2 and 0-3), (n, 2) m."""
        sides = np.linalg.norm(np.roll(self.corners, -1, axis=1) - self.corners, axis=2)
        return np.stack([0.5 * (sides[:, 0] + sides[:, 2]), 0.5 * (sides[:, 1] + sides[:, 3])], axis=1)
