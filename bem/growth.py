"""How the panels of a body move when its surface is offset outward by the same distance everywhere.

At a sharp edge the moved faces are extended until they meet, so that a cube stays a cube: a vertex moves by the
vector v with ``n . v = 1`` for every face (or smooth group of facets) that meets there. Between vertices the motion is
linear on every triangle. A flat face moves by the offset; a facet of a round part by the mean of what the smooth
surface over it moves along the facet's normal, ``1 - <theta^2> / 2`` where its normals lean by theta.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .creases import Creases, corner_normals
from .facets import Facets
from .panels import Panels
from .regions import Regions
from .surface import Surface

__all__ = ["Growth", "growth", "vertex_growth"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: A vertex may move by so many times the offset, at most: the point of a needle would run away.
LARGEST_MOTION = 8.0
#: Corners per block of the search for their triangles.
_BLOCK = 2_000_000


@dataclass(frozen=True, eq=False)
class Growth:
    """What is needed to move any panels on the same surface.

    Attributes
    ----------
    triangles : (n, 3, 3) float, m
        Corners of the triangles as drawn.
    motion : (n, 3, 3) float
        Motion of these corners per offset.
    region : (n,) int
    facet_offset : (n_regions,) float, m
        How far panels were moved from their region outward.
    """

    triangles: FloatArray
    motion: FloatArray
    region: IntArray
    facet_offset: FloatArray

    def of(self, panels: Panels) -> FloatArray:
        """Motion of the corners of panels per offset, (n_panels, 4, 3)."""
        drawn = panels.corners - (self.facet_offset[panels.region][:, None] * panels.normals)[:, None, :]
        result = np.zeros_like(panels.corners)
        for region in np.unique(panels.region):
            rows = np.flatnonzero(panels.region == region)
            own = np.flatnonzero(self.region == region)
            result[rows] = _linear(self.triangles[own], self.motion[own], drawn[rows].reshape(-1, 3)).reshape(-1, 4, 3)
        return result


def growth(surface: Surface, regions: Regions, creases: Creases, facets: Facets | None) -> Growth:
    """Motion of a surface that is offset outward.

    Parameters
    ----------
    surface : Surface
    regions : Regions
    creases : Creases
    facets : Facets or None
        None where the facets are the part.

    Returns
    -------
    Growth
    """
    used = regions.triangle_region >= 0
    normals = corner_normals(surface, regions, creases)
    motion = vertex_growth(surface, normals)
    offset = np.zeros(len(regions)) if facets is None else facets.offset
    triangles = surface.triangles[used]
    points, moved, region = surface.vertices[triangles], motion[triangles], regions.triangle_region[used]
    area = 0.5 * np.linalg.norm(np.cross(points[:, 1] - points[:, 0], points[:, 2] - points[:, 0]), axis=1)
    along = np.einsum("tki,ti->t", moved, regions.normals[region]) / 3.0
    lean = normals[used] - regions.normals[region][:, None, :]
    theta2 = (np.einsum("tki,tki->t", lean, lean) + np.einsum("ti,ti->t", lean.sum(axis=1), lean.sum(axis=1))) / 12.0
    total = np.maximum(np.bincount(region, area, len(regions)), 1e-300)
    missing = np.bincount(region, area * (1.0 - 0.5 * theta2 - along), len(regions)) / total
    moved = moved + (missing[:, None] * regions.normals)[region][:, None, :]
    return Growth(points, moved, region, offset)


def vertex_growth(surface: Surface, normals: FloatArray) -> FloatArray:
    """Motion of every vertex per offset.

    Parameters
    ----------
    surface : Surface
    normals : (n_triangles, 3, 3) float
        Of the surface meant, at every corner of every triangle.

    Returns
    -------
    (n_vertices, 3) float
        The shortest v with ``n . v = 1`` for all normals at the vertex; where more than three faces meet, the best
        that there is.
    """
    vertex = surface.triangles.reshape(-1)
    n = normals.reshape(-1, 3)
    # parallel normals of one face count once: equal ones are merged by rounding
    key = np.column_stack([vertex, np.round(n * 1e6).astype(np.int64)])
    _, first = np.unique(key, axis=0, return_index=True)
    vertex, n = vertex[first], n[first]
    matrix = np.zeros((len(surface.vertices), 3, 3))
    right = np.zeros((len(surface.vertices), 3))
    np.add.at(matrix, vertex, n[:, :, None] * n[:, None, :])
    np.add.at(right, vertex, n)
    # eigenvalues near zero: directions in which nothing holds the vertex, and it stays
    value, base = np.linalg.eigh(matrix)
    safe = np.where(value > 1e-4 * np.maximum(value[:, -1:], 1e-300), value, np.inf)
    motion = np.einsum("vij,vj->vi", base, np.einsum("vij,vi->vj", base, right) / safe)
    length = np.linalg.norm(motion, axis=1)
    return np.asarray(motion * np.minimum(1.0, LARGEST_MOTION / np.maximum(length, 1e-300))[:, None])


def _linear(triangles: FloatArray, motion: FloatArray, points: FloatArray) -> FloatArray:
    """Motion at points in the plane of triangles: of the triangle that holds each, or is nearest to doing so."""
    a = triangles[:, 0]
    u, v = triangles[:, 1] - a, triangles[:, 2] - a
    uu, uv, vv = (np.einsum("ij,ij->i", p, q) for p, q in ((u, u), (u, v), (v, v)))
    det = np.maximum(uu * vv - uv * uv, 1e-300)
    result = np.empty_like(points)
    for first in range(0, len(points), max(1, _BLOCK // len(triangles))):
        here = slice(first, first + max(1, _BLOCK // len(triangles)))
        w = points[here, None, :] - a
        pu, pv = np.einsum("pti,ti->pt", w, u), np.einsum("pti,ti->pt", w, v)
        one, two = (vv * pu - uv * pv) / det, (uu * pv - uv * pu) / det
        share = np.stack([1.0 - one - two, one, two], axis=2)
        best = np.argmax(share.min(axis=2), axis=1)
        chosen = np.clip(share[np.arange(len(best)), best], 0.0, 1.0)
        chosen /= chosen.sum(axis=1)[:, None]
        result[here] = np.einsum("pk,pki->pi", chosen, motion[best])
    return result
