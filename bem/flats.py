"""Panels for flat regions: few convex quadrilaterals with sides along the region's edges.

The refinement later halves each quadrilateral in one of its two directions. That grades economically
toward a sharp edge or a rim if the quadrilateral has one full side on it, whatever its aspect ratio.
Panels need not match across their sides.
"""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from .creases import Creases, find_creases
from .mosaic import cover, is_triangle
from .outlines import Frame, Outline, clean_loop, group_loops, merge_flags, plane_frame, trace_loops
from .panels import Panels
from .regions import Regions, find_regions, position_noise
from .solution import Notice
from .surface import Surface

__all__ = ["make_panels", "panel_regions", "region_outlines"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

#: Cleaning an outline may change the area by this many tolerances times the length of the outline.
CLEANING_SLACK = 4.0
#: A quadrilateral of two triangles is convex if the sine of every corner angle exceeds this.
STRICTLY_CONVEX = 1e-3


@dataclass
class _Store:
    """Panels under construction."""

    corners: list[FloatArray] = field(default_factory=list)
    n_corners: list[IntArray] = field(default_factory=list)
    region: list[IntArray] = field(default_factory=list)

    def add(self, corners: FloatArray, n_corners: int | IntArray, region: int | IntArray) -> None:
        """Add panels (n, 4, 3)."""
        self.corners.append(corners)
        self.n_corners.append(np.broadcast_to(np.asarray(n_corners, np.int64), len(corners)))
        self.region.append(np.broadcast_to(np.asarray(region, np.int64), len(corners)))


def make_panels(surface: Surface, *, flat_tolerance: float = 2e-6) -> tuple[Panels, list[Notice]]:
    """Cover a surface with flat panels: few convex quadrilaterals on flat faces, triangles elsewhere.

    Parameters
    ----------
    surface : Surface
    flat_tolerance : float
        See `find_regions`.

    Returns
    -------
    panels : Panels
        ``panels.region`` counts the regions of ``find_regions(surface)``.
    notices : list of Notice
        Degenerate triangles left out; regions whose raw triangles had to be used.
    """
    regions, notices = find_regions(surface, flat_tolerance=flat_tolerance)
    panels, more = panel_regions(surface, regions, flat_tolerance=flat_tolerance)
    return panels, notices + more


def panel_regions(
    surface: Surface, regions: Regions, *, flat_tolerance: float = 2e-6, creases: Creases | None = None
) -> tuple[Panels, list[Notice]]:
    """Cover given flat regions with panels.

    Parameters
    ----------
    surface : Surface
    regions : Regions
        From `find_regions`.
    flat_tolerance : float
        Straight sides of an outline bend by no more than this, per diagonal of the body's bounding box.
    creases : Creases, optional
        From `find_creases` if known already. Edges meant smooth need no panels along them.

    Returns
    -------
    panels : Panels
        Sorted by region.
    notices : list of Notice
    """
    store = _Store()
    size = np.diff(regions.starts)
    _add_triangles(store, surface, regions, np.flatnonzero(size == 1))
    left = _add_pairs(store, surface, regions, np.flatnonzero(size == 2))
    noise, extent = position_noise(surface)
    tolerance = (flat_tolerance * extent + 2 * noise)[regions.body]
    many = np.sort(np.concatenate([left, np.flatnonzero(size > 2)])).tolist()
    raw: list[int] = []
    sharp = _sharp_sides(surface, regions, creases) if many else np.ones(surface.triangles.shape, bool)
    for region in many:
        if not _add_region(store, surface, regions, region, tolerance[region], sharp):
            raw.append(region)
            _add_raw(store, surface, regions, region)
    region = np.concatenate(store.region)
    order = np.argsort(region, kind="stable")
    region = region[order]
    body = regions.body[region]
    corners = np.concatenate(store.corners)[order]
    count = np.concatenate(store.n_corners)[order]
    panels = Panels(corners, count, body, surface.body_conductor[body], region)
    return panels, _raw_notices(surface, regions, raw)


def _sharp_sides(surface: Surface, regions: Regions, creases: Creases | None) -> BoolArray:
    """Which sides of the triangles are creases or rims, (n_triangles, 3)."""
    creases = find_creases(surface, regions) if creases is None else creases
    of = creases.edges.of_triangle
    return np.asarray((of < 0) | ~creases.smooth[of])


def _raw_notices(surface: Surface, regions: Regions, raw: list[int]) -> list[Notice]:
    if not raw:
        return []
    names = sorted({surface.body_names[regions.body[r]] for r in raw})
    shown = ", ".join(names[:4]) + (", ..." if len(names) > 4 else "")
    many = "1 flat face" if len(raw) == 1 else f"{len(raw)} flat faces"
    text = (
        f"{many} could not be divided into quadrilaterals; the triangles there are used as they "
        f"are (in {shown}; first at triangle {regions.triangles_of(raw[0])[0]})"
    )
    return [Notice("raw-triangles", text)]


def _triangle_corners(points: FloatArray) -> FloatArray:
    """Panel corners (n, 4, 3) of triangles (n, 3, 3)."""
    return points[:, [0, 1, 2, 2]]


def _add_triangles(store: _Store, surface: Surface, regions: Regions, which: IntArray) -> None:
    triangles = regions.order[regions.starts[which]]
    store.add(_triangle_corners(surface.vertices[surface.triangles[triangles]]), 3, which)


def _add_raw(store: _Store, surface: Surface, regions: Regions, region: int) -> None:
    points = surface.vertices[surface.triangles[regions.triangles_of(region)]]
    normal = regions.normals[region]
    points = points - ((points - regions.origins[region]) @ normal)[..., None] * normal
    vectors = np.cross(points[:, 1] - points[:, 0], points[:, 2] - points[:, 0])
    store.add(_triangle_corners(points[vectors @ normal > 0]), 3, region)


def _add_pairs(store: _Store, surface: Surface, regions: Regions, which: IntArray) -> IntArray:
    """Add regions of two triangles that form a convex quadrilateral; return the others."""
    first = surface.triangles[regions.order[regions.starts[which]]]
    second = surface.triangles[regions.order[regions.starts[which] + 1]]
    alone = ~(first[:, :, None] == second[:, None, :]).any(axis=2)
    fitting = alone.sum(axis=1) == 1
    which_fit, first, second, alone = which[fitting], first[fitting], second[fitting], alone[fitting]
    rows = np.arange(len(which_fit))
    tip = np.argmax(alone, axis=1)
    shared = first[rows, (tip + 1) % 3], first[rows, (tip + 2) % 3]
    other = second.sum(axis=1) - shared[0] - shared[1]
    points = surface.vertices[np.stack([first[rows, tip], shared[0], other, shared[1]], axis=1)]
    normal = regions.normals[which_fit]
    height = np.einsum("nki,ni->nk", points - regions.origins[which_fit][:, None], normal)
    points = points - height[:, :, None] * normal[:, None, :]
    into, out = points - points[:, [3, 0, 1, 2]], points[:, [1, 2, 3, 0]] - points
    length = np.linalg.norm(into, axis=2) * np.linalg.norm(out, axis=2)
    sine = np.einsum("nki,ni->nk", np.cross(into, out), normal) / np.maximum(length, 1e-300)
    good = sine.min(axis=1) > STRICTLY_CONVEX
    store.add(points[good], 4, which_fit[good])
    return np.concatenate([which[~fitting], which_fit[~good]])


def region_outlines(
    surface: Surface, regions: Regions, region: int, tolerance: float, sharp: BoolArray
) -> tuple[Frame, list[Outline]]:
    """Outline of a flat region.

    Parameters
    ----------
    surface : Surface
    regions : Regions
    region : int
    tolerance : float, m
        Vertices closer than this to the line between their neighbours are dropped.
    sharp : (n_triangles, 3) bool
        Whether each side of the triangles is a crease or a rim.

    Returns
    -------
    frame : Frame
    outlines : list of Outline
        In plane coordinates; several if the region hangs together in a vertex only.

    Raises
    ------
    ValueError
        If no valid outline with the region's area is found.
    """
    members = regions.triangles_of(region)
    vertices, local = np.unique(surface.triangles[members], return_inverse=True)
    points = surface.vertices[vertices]
    local = local.reshape(-1, 3).astype(np.int64)
    ahead = local[:, [1, 2, 0]]
    sides = (points[ahead] - points[local]).reshape(-1, 3)
    longest = sides[np.argmax((sides * sides).sum(axis=1))]
    frame = plane_frame(regions.normals[region], regions.origins[region], longest)
    flat = frame.flatten(points)
    halves = zip(local.ravel().tolist(), ahead.ravel().tolist(), strict=True)
    is_sharp = dict(zip(halves, sharp[members].ravel().tolist(), strict=True))
    loops, flags = [], []
    for traced in trace_loops(local, {k: (x, y) for k, (x, y) in enumerate(flat.tolist())}):
        kept = clean_loop(flat[traced], tolerance)
        if len(kept) > 2:
            loops.append(flat[traced][kept])
            steps = zip(traced, traced[1:] + traced[:1], strict=True)
            flags.append(merge_flags(np.array([is_sharp[step] for step in steps]), kept))
    outlines = group_loops(loops, flags)
    area = sum(outline.area for outline in outlines)
    length = sum(outline.length for outline in outlines)
    if abs(area - regions.areas[region]) > CLEANING_SLACK * tolerance * length:
        raise ValueError("outline and triangles differ in area")
    return frame, outlines


def _add_region(
    store: _Store, surface: Surface, regions: Regions, region: int, tolerance: float, sharp: BoolArray
) -> bool:
    """Add the panels of one region; False if its raw triangles have to serve."""
    try:
        frame, outlines = region_outlines(surface, regions, region, tolerance, sharp)
        pieces = [cover(outline, tolerance) for outline in outlines]
    except (ValueError, ArithmeticError, RuntimeError, IndexError, KeyError):
        # Whatever goes wrong in the plane geometry of one face must not end the job: the caller falls back.
        return False
    for corners in pieces:
        store.add(frame.lift(corners), 4 - is_triangle(corners), region)
    return True
