"""Plane polygons covered with few convex quadrilaterals and triangles.

Three ways, the simplest that serves wins: a convex quadrilateral is one panel; an outline with edges in two
perpendicular directions is cut into rectangles; anything else is triangulated and the triangles paired, with
or without bands of quadrilaterals along the outline (`bands`), whichever costs less in the refinement that
follows: a panel on the outline that cannot be halved parallel to it is dear.
"""

import numpy as np
import shapely
from numpy.typing import NDArray

from .bands import bands_along, divide_long_edges
from .outlines import Outline, next_of

__all__ = ["cover", "pair_triangles", "rectangles", "thirds", "triangulate"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

#: Two triangles make a quadrilateral if the sine of every corner angle exceeds this (about 6 degrees).
LEAST_SINE = 0.1
#: Panels and outline must agree in area to this relative difference.
SAME_AREA = 1e-9
#: A quadrilateral serves an outline edge well if both its angles there have a sine above this (40 degrees).
GOOD_SINE = 0.64
#: Cost, in panels, of each sharp edge that no quadrilateral serves, and of a whole outline like that.
POOR_EDGE, POOR_LENGTH = 5.0, 40.0
#: Inner edges longer than this many radii of the largest circle touching them are divided.
LONG_EDGE = 2.5
#: Most rings along round outlines.
RINGS = 6
#: Grids of more cells than this are not tried for rectangles.
MOST_CELLS = 100_000

_NEXT, _LAST = [1, 2, 3, 0], [3, 0, 1, 2]


def corner_sines(corners: FloatArray) -> FloatArray:
    """Sines of the corner angles of quadrilaterals (n, 4, 2); all positive if convex."""
    out = corners[:, _NEXT] - corners
    x, y = out[..., 0], out[..., 1]
    length = np.maximum(np.hypot(x, y), 1e-150)  # the square of it is still a number
    x, y = x / length, y / length
    return np.asarray(x[:, _LAST] * y - y[:, _LAST] * x)


def panel_areas(corners: FloatArray) -> FloatArray:
    """Signed areas of panels (n, 4, 2)."""
    p, q = corners[:, 2] - corners[:, 0], corners[:, 3] - corners[:, 1]
    return np.asarray(0.5 * (p[:, 0] * q[:, 1] - p[:, 1] * q[:, 0]))


def is_triangle(corners: FloatArray) -> BoolArray:
    """Whether panels (n, 4, 2) repeat their third corner."""
    return np.asarray((corners[:, 2] == corners[:, 3]).all(axis=1))


def triangulate(outline: Outline) -> tuple[FloatArray, IntArray]:
    """Constrained Delaunay triangles of a polygon, without new vertices.

    Returns
    -------
    points : (n, 2) float
    triangles : (m, 3) int
        Counter-clockwise.
    """
    points = np.concatenate(outline.loops)
    index = {(x, y): k for k, (x, y) in enumerate(points.tolist())}
    pieces = shapely.get_parts(shapely.constrained_delaunay_triangles(outline.polygon()))
    rings = shapely.get_coordinates(pieces).reshape(-1, 4, 2)[:, :3]
    triangles = np.array([[index[x, y] for x, y in ring] for ring in rings.tolist()], np.int64).reshape(-1, 3)
    a, b, c = (points[triangles[:, k]] for k in range(3))
    turned = (b - a)[:, 0] * (c - a)[:, 1] < (b - a)[:, 1] * (c - a)[:, 0]
    triangles[turned] = triangles[turned][:, ::-1]
    return points, triangles


def pair_triangles(points: FloatArray, triangles: IntArray) -> IntArray:
    """Merge triangles to convex quadrilaterals, best shaped first.

    Parameters
    ----------
    points : (n, 2) float
    triangles : (m, 3) int
        Counter-clockwise.

    Returns
    -------
    (k, 4) int
        Triangles repeat their third corner.
    """
    m = len(triangles)
    start, end = triangles.reshape(-1), triangles[:, [1, 2, 0]].reshape(-1)
    tip = triangles[:, [2, 0, 1]].reshape(-1)
    base = np.int64(len(points))
    order = np.argsort(start * base + end)
    keys = (start * base + end)[order]
    place = np.searchsorted(keys, end * base + start)
    place[place == len(keys)] = 0
    half = np.flatnonzero((keys[place] == end * base + start) & (start < end))
    twin = order[place[half]]
    quads = np.stack([start[half], tip[twin], end[half], tip[half]], axis=1)
    quality = corner_sines(points[quads]).min(axis=1) if len(quads) else np.zeros(0)
    free = np.ones(m, bool)
    chosen = []
    for k in np.argsort(-quality, kind="stable").tolist():
        one, two = half[k] // 3, twin[k] // 3
        if quality[k] > LEAST_SINE and free[one] and free[two]:
            free[one] = free[two] = False
            chosen.append(k)
    return np.concatenate([quads[chosen].reshape(-1, 4), triangles[free][:, [0, 1, 2, 2]]])


def _plain(outline: Outline) -> FloatArray:
    """Cover a polygon without new vertices: paired triangles, or itself if it is convex with four corners."""
    rim = outline.loops[0]
    if len(outline.loops) == 1 and len(rim) == 3:
        return rim[None, [0, 1, 2, 2]]
    if len(outline.loops) == 1 and len(rim) == 4 and corner_sines(rim[None]).min() > 0:
        return rim[None]
    points, triangles = triangulate(outline)
    return np.asarray(points[pair_triangles(points, triangles)])


def cover(outline: Outline, tolerance: float) -> FloatArray:
    """Cover a polygon once with convex quadrilaterals and triangles.

    Parameters
    ----------
    outline : Outline
    tolerance : float, m
        Accuracy of the outline's vertices; the edges of a rectilinear outline are squared within it.

    Returns
    -------
    (n, 4, 2) float, m
        Counter-clockwise corners of the panels; triangles repeat their third corner.

    Raises
    ------
    ValueError
        If no cover with the right area was found.
    """
    if len(outline.loops) == 1 and len(outline.loops[0]) <= 4:
        return _checked(outline, _plain(outline), 0.0)
    cut = rectangles(outline, tolerance)
    if cut is not None:
        return _checked(outline, cut, tolerance)
    choices = [_without_poor_triangles(_plain(outline), outline)]
    n_edges = sum(len(loop) for loop in outline.loops)
    if choices[0][0] > n_edges + 1:  # bands alone are one panel per edge
        try:
            for bands, divided, inner in bands_along(outline, RINGS):
                panels = np.concatenate([bands, _interior(inner)])
                choices.append(_without_poor_triangles(_checked(outline, panels, 0.0), divided))
        except ValueError:
            pass  # no bands fit: the paired triangles serve
    return _checked(outline, min(choices, key=lambda choice: choice[0])[1], 0.0)


def _without_poor_triangles(panels: FloatArray, outline: Outline) -> tuple[float, FloatArray]:
    """Cut triangles on sharp edges into quadrilaterals; return the cost and the panels."""
    poor = is_triangle(panels) & _on_sharp(panels, outline)[:, :3].any(axis=1)
    panels = np.concatenate([panels[~poor], thirds(panels[poor])])
    return _shape_cost(panels) + _poverty(panels, outline), panels


def thirds(triangles: FloatArray) -> FloatArray:
    """Cut triangles into three convex quadrilaterals each, between a corner and the centroid.

    Parameters
    ----------
    triangles : (n, 4, d) float, m
        The fourth corner is ignored.

    Returns
    -------
    (3 n, 4, d) float, m
    """
    corner = triangles[:, :3]
    after = 0.5 * (corner + corner[:, [1, 2, 0]])
    before = after[:, [2, 0, 1]]
    centre = np.broadcast_to(corner.mean(axis=1, keepdims=True), corner.shape)
    return np.stack([corner, after, centre, before], axis=2).reshape(-1, 4, triangles.shape[2])


def _interior(inner: Outline) -> FloatArray:
    """Cover what the bands leave free; its edges may be divided, as panels need not match."""
    choices = [_plain(inner)]
    for divided in divide_long_edges(inner, (LONG_EDGE, 2 * LONG_EDGE)):
        if sum(map(len, divided.loops)) > sum(map(len, inner.loops)):
            choices.append(_plain(divided))
    return min(choices, key=_shape_cost)


def _shape_cost(corners: FloatArray) -> float:
    """Number of panels and a surcharge for triangles, needles and skew quadrilaterals."""
    sines = corner_sines(corners)
    triangle = is_triangle(corners)
    three = np.stack([corners[triangle][:, [0, 1, 2]], corners[triangle][:, [1, 2, 0]]], axis=2)
    side = three[:, :, 1] - three[:, :, 0]
    length = np.linalg.norm(side, axis=2)
    needle = 2 * panel_areas(corners[triangle]) / np.maximum(length.max(axis=1), 1e-300) ** 2
    skew = np.minimum(1.0, sines[~triangle].min(axis=1) / 0.5) if (~triangle).any() else np.ones(0)
    return float(len(corners) + np.minimum(4.0, 0.25 / needle).sum() + (1 - skew).sum())


def _checked(outline: Outline, corners: FloatArray, tolerance: float) -> FloatArray:
    """Refuse panels that are not convex or differ from the outline in area.

    Panels of positive orientation whose common boundary is the outline cover it exactly once: at every point
    their number is the winding number of the outline.
    """
    areas = panel_areas(corners)
    allowed = SAME_AREA * outline.area + tolerance * outline.length
    if areas.min() <= 0 or abs(areas.sum() - outline.area) > allowed:
        raise ValueError("panels do not cover the outline")
    quads = corners[~is_triangle(corners)]
    if len(quads) and corner_sines(quads).min() <= 0:
        raise ValueError("a panel is not convex")
    return corners


def _sides(corners: FloatArray) -> list[tuple[float, ...]]:
    """Sides of polygons (n, k, 2) as tuples x0, y0, x1, y1."""
    ends = np.concatenate([corners, corners[:, _NEXT]], axis=2)
    return list(map(tuple, ends.reshape(-1, 4).tolist()))


def _on_sharp(corners: FloatArray, outline: Outline) -> BoolArray:
    """Which sides of panels (n, 4, 2) are sharp edges of the outline."""
    edges: set[tuple[float, ...]] = set()
    for loop, sharp in zip(outline.loops, outline.sharp, strict=True):
        start, end = loop[sharp], next_of(loop)[sharp]
        middle = 0.5 * (start + end)
        for pair in ((start, end), (start, middle), (middle, end)):  # halves: of triangles cut into thirds
            edges.update(map(tuple, np.concatenate(pair, axis=1).tolist()))
    return np.array([side in edges for side in _sides(corners)], bool).reshape(-1, 4)


def _poverty(corners: FloatArray, outline: Outline) -> float:
    """Surcharge for sharp outline edges without a well placed quadrilateral on them."""
    sharp = _on_sharp(corners, outline)
    sines = corner_sines(corners)
    quality = np.clip(np.minimum(sines, sines[:, _NEXT]) / GOOD_SINE, 0.0, 1.0)
    quality[is_triangle(corners)] = 0.0
    poor = (1.0 - quality)[sharp]
    side = corners[:, _NEXT] - corners
    length = np.hypot(side[..., 0], side[..., 1])[sharp]
    mean = outline.length / sum(len(loop) for loop in outline.loops)
    short = poor @ np.minimum(1.0, length / mean)  # short edges among long ones matter little
    return float(POOR_EDGE * short + POOR_LENGTH * (poor @ length) / outline.length)


def rectangles(outline: Outline, tolerance: float) -> FloatArray | None:
    """Cut an outline whose edges have two perpendicular directions into rectangles.

    Parameters
    ----------
    outline : Outline
    tolerance : float, m
        Edges may be out of square by twice this; coordinates within it are made equal.

    Returns
    -------
    (n, 4, 2) float, m, or None
        None if the outline is not rectilinear.
    """
    edges = np.concatenate([next_of(loop) - loop for loop in outline.loops])
    along = edges[np.argmax((edges**2).sum(axis=1))]
    along = along / np.hypot(*along)
    turn = np.array([along, [-along[1], along[0]]])
    if np.abs(edges @ turn.T).min(axis=1).max() > 2 * tolerance:
        return None
    turned = [loop @ turn.T for loop in outline.loops]
    points = np.concatenate(turned)
    xs, ys = (_merge_close(points[:, k], 4 * tolerance) for k in (0, 1))
    if len(xs) * len(ys) > MOST_CELLS:
        return None
    polygon = shapely.Polygon(turned[0], turned[1:])
    middle = np.meshgrid(0.5 * (xs[1:] + xs[:-1]), 0.5 * (ys[1:] + ys[:-1]), indexing="ij")
    inside = shapely.contains_xy(polygon, *middle)
    boxes = [_slabs(inside), _slabs(inside.T)[:, [2, 3, 0, 1]]]
    ranked = []
    for box in boxes:
        x0, x1, y0, y1 = xs[box[:, 0]], xs[box[:, 1]], ys[box[:, 2]], ys[box[:, 3]]
        wide, high = x1 - x0, y1 - y0
        slender = np.maximum(wide / high, high / wide)
        corners = np.stack([x0, y0, x1, y0, x1, y1, x0, y1], axis=1).reshape(-1, 4, 2)
        ranked.append((len(box) + 0.5 * float(np.log10(slender).sum()), corners))
    return np.asarray(min(ranked, key=lambda pair: pair[0])[1] @ turn)


def _merge_close(values: FloatArray, tolerance: float) -> FloatArray:
    """Sorted values with runs of neighbours closer than the tolerance replaced by their mean."""
    values = np.sort(values)
    group = np.cumsum(np.r_[0, np.diff(values) > tolerance])
    return np.asarray(np.bincount(group, values) / np.bincount(group))


def _slabs(inside: BoolArray) -> IntArray:
    """Rectangles (first x, end x, first y, end y) of the cells: runs along y, equal runs joined along x."""
    done: list[tuple[int, int, int, int]] = []
    running: dict[tuple[int, int], int] = {}
    for i in range(len(inside) + 1):
        column = inside[i] if i < len(inside) else np.zeros(inside.shape[1], bool)
        steps = np.flatnonzero(np.diff(np.r_[False, column, False].astype(np.int8)))
        runs = {(int(a), int(b)) for a, b in steps.reshape(-1, 2)}
        for run in [r for r in running if r not in runs]:
            done.append((running.pop(run), i, *run))
        for run in runs:
            running.setdefault(run, i)
    return np.array(sorted(done), np.int64).reshape(-1, 4)
