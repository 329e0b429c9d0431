"""The surface of a problem as triangles, bodies and conductors."""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from .errors import InputError

__all__ = ["Surface"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Surface:
    """Triangles of all bodies, with the conductor that each body belongs to.

    A *body* is one connected piece of mesh, a *conductor* is all bodies held at one potential. Closed
    bodies and open sheets may be mixed; a sheet carries the sum of the charge densities of its two sides.

    Parameters
    ----------
    vertices : (n_vertices, 3) float, m
    triangles : (n_triangles, 3) int
        Vertex indices, counter-clockwise seen from outside.
    triangle_body : (n_triangles,) int
    body_conductor : (n_bodies,) int
        Every conductor from 0 to ``n_conductors - 1`` owns at least one body.
    conductor_names, body_names : tuple of str, optional
    triangle_deviation : (n_triangles,) float, m, optional
        How far each triangle may lie from the drawing where round parts were coarsened.

    Raises
    ------
    InputError
        If shapes, index ranges or values do not fit.
    """

    vertices: FloatArray
    triangles: IntArray
    triangle_body: IntArray
    body_conductor: IntArray
    conductor_names: tuple[str, ...] = ()
    body_names: tuple[str, ...] = field(default=())
    triangle_deviation: FloatArray | None = None

    def __post_init__(self) -> None:
        put = object.__setattr__
        put(self, "vertices", np.ascontiguousarray(self.vertices, dtype=np.float64))
        for name in ("triangles", "triangle_body", "body_conductor"):
            put(self, name, np.ascontiguousarray(getattr(self, name), dtype=np.int64))
        self._check()
        if not self.conductor_names:
            put(self, "conductor_names", tuple(f"conductor-{i + 1}" for i in range(self.n_conductors)))
        if not self.body_names:
            put(self, "body_names", tuple(f"body-{i + 1}" for i in range(self.n_bodies)))
        deviation = self.triangle_deviation
        if deviation is not None and (deviation.shape != (len(self.triangles),) or not (deviation >= 0.0).all()):
            raise InputError("surface: triangle_deviation must hold one distance per triangle, none negative")
        if len(self.conductor_names) != self.n_conductors or len(self.body_names) != self.n_bodies:
            raise InputError("surface: one name per conductor and per body is needed")

    def _check(self) -> None:
        if self.vertices.ndim != 2 or self.vertices.shape[1] != 3:
            raise InputError(f"surface: vertices must have shape (n, 3), got {self.vertices.shape}")
        if self.triangles.ndim != 2 or self.triangles.shape[1:] != (3,) or len(self.triangles) == 0:
            raise InputError(f"surface: triangles must have shape (n, 3) with n > 0, got {self.triangles.shape}")
        if not np.isfinite(self.vertices).all():
            raise InputError("surface: vertices must be finite")
        if self.triangles.min() < 0 or self.triangles.max() >= len(self.vertices):
            raise InputError("surface: a triangle names a vertex that does not exist")
        if self.triangle_body.shape != (len(self.triangles),):
            raise InputError("surface: triangle_body must name one body per triangle")
        bodies = np.unique(self.triangle_body)
        if not np.array_equal(bodies, np.arange(len(self.body_conductor))):
            raise InputError("surface: bodies must be numbered 0, 1, ... and each own a triangle")
        conductors = np.unique(self.body_conductor)
        if not np.array_equal(conductors, np.arange(len(conductors))):
            raise InputError("surface: conductors must be numbered 0, 1, ... and each own a body")

    @property
    def n_bodies(self) -> int:
        """Number of bodies."""
        return len(self.body_conductor)

    @property
    def n_conductors(self) -> int:
        """Number of conductors."""
        return int(self.body_conductor.max()) + 1
