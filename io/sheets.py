"""Open sheets that meet other bodies of the same conductor: what lies in or upon their metal is cut away."""

from collections.abc import Sequence
from dataclasses import replace
from functools import reduce

import numpy as np
import shapely
from numpy.typing import NDArray

from daraf.bem.regions import Regions

from .bodies import Body
from .changes import Change
from .flat_faces import flat_faces
from .gaps import Shape, encloses, touch_tolerance
from .solids import Solids

__all__ = ["clip_sheet"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


def clip_sheet(sheet: Shape, others: Sequence[tuple[Shape, Sequence[Shape]]]) -> Body | None:
    """Cut from an open sheet what lies inside closed bodies, upon their faces or upon earlier sheets.

    Parameters
    ----------
    sheet : Shape
    others : sequence of (Shape, sequence of Shape)
        Bodies of the same conductor, each with the walls of its cavities.

    Returns
    -------
    Body or None
        The same object if nothing is to be cut; None if nothing is left.
    """
    body = sheet.body
    if not others:
        return body
    cutters = [_Cutter(shape, walls, touch_tolerance(body, shape.body)) for shape, walls in others]
    regions = flat_faces(body)
    kept, fresh, removed, place = [], [], 0.0, None
    for region in range(len(regions)):
        rows = regions.triangles_of(region)
        low, high = sheet.corners[rows].min(axis=(0, 1)), sheet.corners[rows].max(axis=(0, 1))
        near = [one for one in cutters if one.near(low, high)]
        left = _left(sheet.corners[rows], regions, region, near) if near else None
        if left is None:
            kept.append(rows)
            continue
        removed += left[1]
        place = sheet.corners[rows[0]].mean(axis=0) if place is None else place
        fresh.append(left[0])
    if removed == 0.0:
        return body
    area = 0.5 * float(np.linalg.norm(np.cross(*np.moveaxis(np.diff(sheet.corners, axis=1), 1, 0)), axis=1).sum())
    whole = np.concatenate([sheet.corners[np.concatenate([*kept, np.zeros(0, np.int64)]).astype(np.int64)], *fresh])
    if len(whole) == 0:
        return None
    assert place is not None
    text = f"cut away {100.0 * removed / area:.3g} % of the sheet that lies in or upon metal of the same conductor"
    note = Change("clipped", 1, (float(place[0]), float(place[1]), float(place[2])), text)
    vertices, index = np.unique(whole.reshape(-1, 3), axis=0, return_inverse=True)
    triangles = np.ascontiguousarray(index.reshape(-1, 3), dtype=np.int64)
    return replace(body, vertices=vertices, triangles=triangles, notes=[*body.notes, note])


class _Cutter:
    """A body that cuts sheets."""

    def __init__(self, shape: Shape, walls: Sequence[Shape], tolerance: float) -> None:
        self.shape, self.tolerance = shape, tolerance
        self.solids = Solids(shape.box)
        self.solid = None
        if shape.volume is not None:
            vertices, triangles = shape.body.vertices, shape.body.triangles
            for wall in walls:
                if encloses(shape, wall):
                    triangles = np.vstack([triangles, wall.body.triangles + len(vertices)])
                    vertices = np.vstack([vertices, wall.body.vertices])
            self.solid = self.solids.solid(vertices, triangles)

    def near(self, low: FloatArray, high: FloatArray) -> bool:
        """Whether the box of a region meets that of the body."""
        box = self.shape.box
        return bool((low <= box[1] + self.tolerance).all() and (high >= box[0] - self.tolerance).all())

    def section(self, origin: FloatArray, axes: FloatArray) -> shapely.Geometry:
        """What the body covers of a plane, in the plane's own coordinates (m): axes (3, 3), the last one normal."""
        if self.solid is None:
            return self._coplanar(origin, axes)
        shift = (axes @ (self.solids.middle - origin)) / self.solids.size
        turned = self.solid.transform(np.column_stack([axes, shift]))
        areas = []
        for height in (-self.tolerance, self.tolerance):
            rings = turned.slice(height / self.solids.size).to_polygons()
            rings = [shapely.Polygon(ring * self.solids.size) for ring in rings if len(ring) > 2]
            areas.append(reduce(shapely.symmetric_difference, map(shapely.make_valid, rings), shapely.Polygon()))
        return shapely.union_all(areas)

    def _coplanar(self, origin: FloatArray, axes: FloatArray) -> shapely.Geometry:
        """Triangles of an open body that lie in the plane."""
        local = (self.shape.corners - origin) @ axes.T
        flat = local[(np.abs(local[:, :, 2]) <= self.tolerance).all(axis=1), :, :2]
        return shapely.union_all(shapely.polygons(flat)) if len(flat) else shapely.Polygon()


def _left(
    corners: FloatArray, regions: Regions, region: int, cutters: list[_Cutter]
) -> tuple[FloatArray, float] | None:
    """Triangles (n, 3, 3) left of a flat region and the area cut away; None if nothing is cut."""
    normal, origin = regions.normals[region], regions.origins[region]
    along = corners[0, 1] - corners[0, 0]
    along = along - (along @ normal) * normal
    along = along / np.linalg.norm(along)
    axes = np.stack([along, np.cross(normal, along), normal])
    tolerance = max(one.tolerance for one in cutters)
    face = shapely.union_all(shapely.polygons(((corners - origin) @ axes.T)[:, :, :2]))
    cut = shapely.intersection(face, shapely.union_all([one.section(origin, axes) for one in cutters]))
    if shapely.area(cut) <= tolerance * shapely.length(face):
        return None
    parts = shapely.get_parts(shapely.difference(face, cut))
    # what is no wider than the tolerance is rounding along the cut
    parts = [part for part in parts if part.geom_type == "Polygon" and part.area > 2.0 * tolerance * part.length]
    if not parts:
        return np.zeros((0, 3, 3)), float(shapely.area(face))
    rings = shapely.get_coordinates([t for part in parts for t in _triangles(part)])
    flat = rings.reshape(-1, 4, 2)[:, :3]
    a, b, c = np.moveaxis(flat, 1, 0)
    turned = (b - a)[:, 0] * (c - a)[:, 1] < (b - a)[:, 1] * (c - a)[:, 0]
    flat = np.where(turned[:, None, None], flat[:, ::-1], flat)
    return origin + flat @ axes[:2], float(shapely.area(cut))


def _triangles(polygon: shapely.Polygon) -> list[shapely.Polygon]:
    return list(shapely.get_parts(shapely.constrained_delaunay_triangles(polygon)))
