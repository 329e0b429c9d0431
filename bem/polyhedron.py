"""Potential of a uniformly charged closed polyhedron in closed form.

    Phi(x) = 1/2 sum_faces h_f V_f(x),   h_f the signed height of the face's plane over x,

with V_f the potential of the face with unit surface charge: the divergence theorem applied to the gradient of the
distance, div (r / |r|) = 2 / |r|. It is the sum over faces that R. A. Werner and D. J. Scheeres, Celest. Mech. Dyn.
Astron. 65 (1996) 313, eq. 13, write with edges and solid angles. The field follows from the divergence theorem too:

    E(x) = int (x - y) / r^3 dV = sum_faces n_f V_f(x)
"""

import numpy as np
from numpy.typing import NDArray

from .errors import InputError
from .frames import NORMAL, panel_frames
from .jit import parallel_kernel, prange
from .polygon import polygon_potential

__all__ = ["polyhedron_frames", "polyhedron_potential", "polyhedron_volume"]

FloatArray = NDArray[np.float64]


@parallel_kernel
def polyhedron_potential(points, frames, potential, field):
    """Potential and field of a polyhedron with unit charge density, over 1/(4 pi eps).

    Parameters
    ----------
    points : (m, 3) float, m
        Anywhere.
    frames : (n, FRAME_SIZE) float
        Faces, normals outward, from :func:`polyhedron_frames`.
    potential : (m,) float, m2
        Written: ``int dV / r``.
    field : (m, 3) float, m
        Written: ``int (x - y) / r^3 dV``.
    """
    for p in prange(len(points)):
        potential[p] = 0.0
        field[p] = 0.0
        x, y, z = points[p, 0], points[p, 1], points[p, 2]
        for f in range(len(frames)):
            value = polygon_potential(frames[f], x, y, z)
            nx, ny, nz = frames[f, NORMAL], frames[f, NORMAL + 1], frames[f, NORMAL + 2]
            height = (frames[f, 0] - x) * nx + (frames[f, 1] - y) * ny + (frames[f, 2] - z) * nz
            potential[p] += 0.5 * height * value
            field[p, 0] += nx * value
            field[p, 1] += ny * value
            field[p, 2] += nz * value


def polyhedron_frames(vertices: FloatArray, triangles: NDArray[np.int64]) -> FloatArray:
    """Faces of a closed mesh for the kernel.

    Raises
    ------
    InputError
        If the mesh is not closed or inside out.
    """
    ends = np.concatenate([triangles[:, [0, 1]], triangles[:, [1, 2]], triangles[:, [2, 0]]])
    forward = {tuple(edge) for edge in ends.tolist()}
    if len(forward) != len(ends) or any((b, a) not in forward for a, b in forward):
        raise InputError("a uniformly charged body needs a closed surface: some edge has not two triangles")
    if polyhedron_volume(vertices, triangles) <= 0.0:
        raise InputError("a uniformly charged body needs outward normals: the surface is inside out")
    return panel_frames(vertices[triangles][:, [0, 1, 2, 2]], largest_rule=0)


def polyhedron_volume(vertices: FloatArray, triangles: NDArray[np.int64]) -> float:
    """Volume enclosed by a closed mesh, m3; negative if it is inside out."""
    a, b, c = (vertices[triangles[:, k]] - vertices.mean(axis=0) for k in range(3))
    return float(np.einsum("ij,ij->", a, np.cross(b, c)) / 6.0)
