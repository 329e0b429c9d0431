"""Placing, measuring and joining meshes, and the step from meshes to a `daraf.bem` surface."""

from collections.abc import Sequence
from typing import TypeAlias

import numpy as np
from numpy.typing import ArrayLike, NDArray

from daraf.bem.surface import Surface

__all__ = [
    "Mesh",
    "area",
    "extent",
    "flipped",
    "is_closed",
    "joined",
    "moved",
    "scaled",
    "surface",
    "turned",
    "volume",
]

#: Vertices (n, 3) m and triangles (m, 3).
Mesh: TypeAlias = tuple[NDArray[np.float64], NDArray[np.int64]]


def moved(mesh: Mesh, x: float = 0.0, y: float = 0.0, z: float = 0.0) -> Mesh:
    """Shift by (x, y, z), m."""
    return mesh[0] + np.array([x, y, z]), mesh[1]


def scaled(mesh: Mesh, factors: float | ArrayLike) -> Mesh:
    """Stretch by one positive factor, or by one for each axis."""
    return mesh[0] * np.asarray(factors, dtype=np.float64), mesh[1]


def turned(mesh: Mesh, angle: float, axis: ArrayLike = (0.0, 0.0, 1.0)) -> Mesh:
    """Rotate about an axis through the origin; angle in rad (Rodrigues' formula)."""
    ux, uy, uz = np.asarray(axis, dtype=np.float64) / np.linalg.norm(axis)
    spin = np.array([[0.0, -uz, uy], [uz, 0.0, -ux], [-uy, ux, 0.0]])
    rotation = np.eye(3) + np.sin(angle) * spin + (1.0 - np.cos(angle)) * spin @ spin
    return mesh[0] @ rotation.T, mesh[1]


def flipped(mesh: Mesh) -> Mesh:
    """Turn the normals round, as for the inner face of a shell: out of the metal, into the cavity."""
    return mesh[0], np.ascontiguousarray(mesh[1][:, ::-1])


def joined(*meshes: Mesh) -> Mesh:
    """One vertex list and one triangle list; nothing is welded."""
    starts = np.cumsum([0] + [len(v) for v, _ in meshes[:-1]])
    triangles = [t + start for (_, t), start in zip(meshes, starts, strict=True)]
    return np.concatenate([v for v, _ in meshes]), np.concatenate(triangles)


def area(mesh: Mesh) -> float:
    """Area of one side, m2."""
    a, b, c = (mesh[0][mesh[1][:, k]] for k in range(3))
    return float(0.5 * np.linalg.norm(np.cross(b - a, c - a), axis=1).sum())


def volume(mesh: Mesh) -> float:
    """Enclosed volume, m3; negative if the normals point inwards."""
    a, b, c = (mesh[0][mesh[1][:, k]] for k in range(3))
    return float(np.einsum("ij,ij->", a, np.cross(b, c)) / 6.0)


def extent(mesh: Mesh) -> NDArray[np.float64]:
    """Sizes of the bounding box, (3,) m."""
    used = mesh[0][np.unique(mesh[1])]
    return np.asarray(np.ptp(used, axis=0), dtype=np.float64)


def is_closed(mesh: Mesh) -> bool:
    """Whether every edge is run through once each way: closed and consistently wound."""
    t = mesh[1]
    edges = np.concatenate([t[:, [0, 1]], t[:, [1, 2]], t[:, [2, 0]]])
    forth, back = {tuple(e) for e in edges.tolist()}, {tuple(e) for e in edges[:, ::-1].tolist()}
    return len(forth) == len(edges) and forth == back


def surface(conductors: Sequence[Mesh | Sequence[Mesh]], names: Sequence[str] = ()) -> Surface:
    """Surface of a problem.

    Parameters
    ----------
    conductors : sequence
        One entry per conductor: a mesh, or a list of meshes, one per body.
    names : sequence of str, optional
        Conductor names.

    Returns
    -------
    Surface
    """
    bodies: list[Mesh] = []
    owner: list[int] = []
    for i, entry in enumerate(conductors):
        # A mesh is a tuple that starts with an array, a list of bodies one that starts with a mesh.
        parts = [entry] if isinstance(entry[0], np.ndarray) else list(entry)
        bodies += parts  # type: ignore[arg-type]
        owner += [i] * len(parts)
    vertices, triangles = joined(*bodies)
    triangle_body = np.repeat(np.arange(len(bodies)), [len(t) for _, t in bodies])
    return Surface(vertices, triangles, triangle_body, np.array(owner), conductor_names=tuple(names))
