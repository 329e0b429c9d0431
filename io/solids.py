"""Closed bodies as solids of the library manifold3d, which unites them exactly."""

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from .topology import connected_pieces, edges_of

if TYPE_CHECKING:
    from manifold3d import Manifold

__all__ = ["Solids", "pieces_of"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


class Solids:
    """Turns meshes into solids about a common middle and of size one, and back.

    Parameters
    ----------
    points : (n, 3) float, m
        Everything lies in their box, or near it.
    """

    def __init__(self, points: FloatArray) -> None:
        low, high = points.min(axis=0), points.max(axis=0)
        self.middle = 0.5 * (low + high)
        self.size = float(np.linalg.norm(high - low)) or 1.0

    def solid(self, vertices: FloatArray, triangles: IntArray) -> "Manifold | None":
        """Solid of a closed mesh, or None if some edge has not just two triangles of opposite winding."""
        from manifold3d import Error, Manifold, Mesh64

        edges = edges_of(triangles)
        if (edges.count != 2).any():
            return None
        used, index = np.unique(triangles, return_inverse=True)
        scaled = (vertices[used] - self.middle) / self.size
        mesh = Mesh64(np.ascontiguousarray(scaled), np.ascontiguousarray(index.reshape(-1, 3), dtype=np.uint64))
        solid = Manifold(mesh)
        return solid if solid.status() == Error.NoError and not solid.is_empty() else None

    def united(self, solids: Sequence["Manifold"]) -> "Manifold":
        """Union of solids; the parts of each that hang together are united too."""
        from manifold3d import Manifold, OpType

        return Manifold.batch_boolean([part for solid in solids for part in _parts(solid)], OpType.Add)

    def mesh(self, solid: "Manifold") -> tuple[FloatArray, IntArray]:
        """Vertices (m) and triangles of a solid."""
        mesh = solid.to_mesh64()
        vertices = np.asarray(mesh.vert_properties, dtype=np.float64)[:, :3] * self.size + self.middle
        triangles = np.asarray(mesh.tri_verts).astype(np.int64)
        origin, target = np.asarray(mesh.merge_from_vert), np.asarray(mesh.merge_to_vert)
        into = np.arange(len(vertices))
        into[origin.astype(np.int64)] = target.astype(np.int64)
        return vertices, into[triangles]


def _parts(solid: "Manifold") -> list["Manifold"]:
    """Solids without a common edge, the walls of cavities kept with what they are a cavity of."""
    parts = solid.decompose()
    return [solid] if len(parts) == 1 or any(part.volume() < 0.0 for part in parts) else parts


def pieces_of(vertices: FloatArray, triangles: IntArray) -> list[tuple[FloatArray, IntArray]]:
    """Connected pieces of a mesh, each with its own vertices.

    Parameters
    ----------
    vertices : (nv, 3) float, m
    triangles : (nt, 3) int

    Returns
    -------
    list of (vertices, triangles)
        The largest first.
    """
    n_pieces, piece = connected_pieces(triangles)
    found = []
    for k in range(n_pieces):
        used, index = np.unique(triangles[piece == k], return_inverse=True)
        found.append((np.ascontiguousarray(vertices[used]), np.ascontiguousarray(index.reshape(-1, 3), np.int64)))
    return sorted(found, key=lambda one: -float(np.linalg.norm(np.ptp(one[0], axis=0))))
