"""What was drawn as one surface and reached the solver in pieces: cut at a mirror plane, or where media meet.

Whether an edge is meant smooth, and how far the true surface lies outside a facet, is seen only on the whole. The
pieces are therefore joined again, with their mirror images, to find creases and facets; panels are made for the
pieces alone.
"""

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from .creases import GREATEST_TURN, Creases, find_creases
from .facets import Facets, find_facets
from .images import Images, mirrored
from .panels import Panels, polygon_geometry
from .regions import Regions, find_regions
from .start import side_decays
from .surface import Surface

__all__ = ["Drawn", "drawn_surface"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Vertices closer than this, per extent of the surface, are one.
_WELD = 1e-9
#: Directions in which the planes round a vertex say less than this share of the most are left alone.
_FLAT = 0.02


@dataclass(frozen=True, eq=False)
class Drawn:
    """The whole of which a surface holds pieces.

    Attributes
    ----------
    surface : Surface
        Its first triangles are those of the pieces.
    regions : Regions
    creases : Creases
    group : (n_bodies,) int
        The body of `surface` that each piece belongs to.
    """

    surface: Surface
    regions: Regions
    creases: Creases
    group: IntArray

    def side_decays(self, panels: Panels) -> FloatArray:
        """Decay of the gain of splits toward each side of panels, (n_panels, 4): see :mod:`daraf.bem.start`."""
        # touching surfaces are moved apart, so that each panel finds the edges of its own
        step = np.array([3.0 * float(np.ptp(self.surface.vertices, axis=0).max()), 0.0, 0.0])
        of_vertex = np.zeros(len(self.surface.vertices))
        of_vertex[self.surface.triangles] = self.surface.triangle_body[:, None]
        away = replace(self.surface, vertices=self.surface.vertices + of_vertex[:, None] * step)
        moved = replace(panels, corners=panels.corners + self.group[panels.body][:, None, None] * step)
        return side_decays(away, self.creases, moved)

    def closed(self, panels: Panels, moved: Panels) -> Panels:
        """Panels on moved facets, put together again at the corners so that no flux escapes between them.

        Each vertex moves to where the moved planes round it meet best, those of all surfaces that touch there: a
        panel whose corners are all vertices follows them, others stay as moved.

        Parameters
        ----------
        panels : Panels
            As they cover the flat regions.
        moved : Panels
            The same after :func:`daraf.bem.facets.move_facets`.
        """
        points = self.surface.vertices
        size = float(np.ptp(points, axis=0).max())
        place = _clusters(points, _WELD * size)
        step = self._vertex_steps(place)
        found = cKDTree(points).query(panels.corners.reshape(-1, 3))
        distance, nearest = (np.asarray(column).reshape(-1, 4) for column in found)
        corners = moved.corners.copy()
        rows = np.flatnonzero((distance < _WELD * size).all(axis=1))
        corners[rows] = panels.corners[rows] + step[place[nearest[rows]]]
        # quadrilaterals stay flat
        _, centroids, normals = polygon_geometry(corners[rows])
        height = np.einsum("pka,pa->pk", corners[rows] - centroids[:, None], normals)
        corners[rows] -= height[:, :, None] * normals[:, None]
        return replace(moved, corners=corners)

    def _vertex_steps(self, place: IntArray) -> FloatArray:
        """Displacement of each cluster of vertices that meets the offsets of the planes round it, (n, 3) m."""
        region = self.regions.triangle_region
        used = region >= 0
        pairs = np.column_stack([place[self.surface.triangles[used]].reshape(-1), np.repeat(region[used], 3)])
        vertex, of = np.unique(pairs, axis=0).T
        normals = self.regions.normals[of]
        offset = find_facets(self.surface, self.regions, self.creases).offset[of]
        n = int(place.max()) + 1
        gram, wanted = np.zeros((n, 3, 3)), np.zeros((n, 3))
        np.add.at(gram, vertex, normals[:, :, None] * normals[:, None, :])
        np.add.at(wanted, vertex, offset[:, None] * normals)
        return np.asarray(np.einsum("vab,vb->va", np.linalg.pinv(gram, rcond=_FLAT, hermitian=True), wanted))

    def facets_of(self, pieces: Surface, regions: Regions) -> Facets:
        """Facets of the regions of the pieces, as found on the whole."""
        whole = find_facets(self.surface, self.regions, self.creases)
        of_whole = self.regions.triangle_region[: len(pieces.triangles)]
        of_piece = regions.triangle_region
        used = (of_whole >= 0) & (of_piece >= 0)
        offset, doubt = np.zeros(len(regions)), np.zeros(len(regions))
        offset[of_piece[used]] = whole.offset[of_whole[used]]
        doubt[of_piece[used]] = whole.doubt[of_whole[used]]
        pairs = np.unique(np.column_stack([of_whole[used], of_piece[used]]), axis=0)
        start = np.searchsorted(pairs[:, 0], whole.edge_region, "left")
        count = np.searchsorted(pairs[:, 0], whole.edge_region, "right") - start
        edge = np.repeat(np.arange(len(count)), count)
        region = pairs[np.repeat(start, count) + np.arange(len(edge)) - np.repeat(np.cumsum(count) - count, count), 1]
        return Facets(
            offset,
            doubt,
            whole.edge_ends[edge],
            region,
            whole.edge_out[edge],
            whole.edge_offset[edge],
            whole.edge_rim[edge],
        )


def drawn_surface(
    surface: Surface, whole: IntArray, images: Images | None = None, *, greatest_turn: float = GREATEST_TURN
) -> Drawn:
    """Join pieces and their mirror images to the surfaces that were drawn.

    Parameters
    ----------
    surface : Surface
    whole : (n_bodies,) int
        Bodies with equal numbers are pieces of one surface.
    images : Images, optional
    greatest_turn : float, rad
        Edges that turn by more are sharp.

    Returns
    -------
    Drawn
    """
    vertices, triangles = surface.vertices, surface.triangles
    of_body = np.unique(whole, return_inverse=True)[1]
    group = of_body[surface.triangle_body]
    for plane in images.planes if images is not None else ():
        triangles = np.concatenate([triangles, triangles[:, ::-1] + len(vertices)])
        vertices = np.concatenate([vertices, mirrored(vertices, plane.point, plane.normal)])
        group = np.concatenate([group, group])
    # weld within each drawn surface only: contacts between different ones must not branch
    used, corner = np.unique(np.column_stack([triangles.reshape(-1), np.repeat(group, 3)]), axis=0, return_inverse=True)
    size = float(np.ptp(vertices, axis=0).max())
    apart = np.column_stack([vertices[used[:, 0]], 2.0 * size * used[:, 1]])
    number = _clusters(apart, _WELD * size)
    first = np.unique(number, return_index=True)[1]
    joined = Surface(
        vertices[used[first, 0]], number[corner.reshape(-1)].reshape(-1, 3), group, np.arange(int(group.max()) + 1)
    )
    regions, _ = find_regions(joined)
    return Drawn(joined, regions, find_creases(joined, regions, greatest_turn=greatest_turn), of_body)


def _clusters(points: FloatArray, distance: float) -> IntArray:
    """Number of the cluster that each point belongs to: the lowest index within the distance, counted from 0."""
    pairs = cKDTree(points).query_pairs(distance, output_type="ndarray")
    lowest = np.arange(len(points))
    if len(pairs):
        np.minimum.at(lowest, pairs[:, 1], pairs[:, 0])
        np.minimum.at(lowest, pairs[:, 0], pairs[:, 1])
        lowest = lowest[lowest]
    return np.asarray(np.unique(lowest, return_inverse=True)[1], dtype=np.int64)
