"""Outlines of flat regions in a plane frame of their own."""

from collections import defaultdict
from dataclasses import dataclass
from typing import Any

import numpy as np
import shapely
from numpy.typing import NDArray

__all__ = [
    "Frame",
    "Outline",
    "clean_loop",
    "group_loops",
    "last_of",
    "merge_flags",
    "next_of",
    "plane_frame",
    "signed_area",
    "trace_loops",
]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class Frame:
    """Right-handed frame of a plane: origin (3,), axes (2, 3) and normal (3,)."""

    origin: FloatArray
    axes: FloatArray
    normal: FloatArray

    def flatten(self, points: FloatArray) -> FloatArray:
        """Plane coordinates (n, 2) of points (n, 3)."""
        return np.asarray((points - self.origin) @ self.axes.T)

    def lift(self, flat: FloatArray) -> FloatArray:
        """Points (..., 3) exactly in the plane from coordinates (..., 2)."""
        return np.asarray(self.origin + flat @ self.axes)


@dataclass(frozen=True, eq=False)
class Outline:
    """A connected polygon.

    Attributes
    ----------
    loops : list of (n, 2) float, m
        The first is the rim (counter-clockwise), the others are holes (clockwise).
    sharp : list of (n,) bool
        Edges, from each vertex to the next, along which the charge density may be singular: creases and
        rims of sheets, but not edges between facets of a smooth surface.
    """

    loops: list[FloatArray]
    sharp: list[BoolArray]

    @classmethod
    def all_sharp(cls, loops: list[FloatArray]) -> "Outline":
        """Outline of loops that have sharp edges only."""
        return cls(loops, [np.ones(len(loop), bool) for loop in loops])

    @property
    def area(self) -> float:
        """Enclosed area, m2."""
        return float(sum(signed_area(loop) for loop in self.loops))

    @property
    def length(self) -> float:
        """Length of all loops, m."""
        return float(sum(np.hypot(*(loop - last_of(loop)).T).sum() for loop in self.loops))

    def polygon(self) -> shapely.Polygon:
        """Convert to a shapely polygon."""
        return shapely.Polygon(self.loops[0], self.loops[1:])


def plane_frame(normal: FloatArray, origin: FloatArray, along: FloatArray) -> Frame:
    """Frame of a plane with its first axis along a given direction.

    Parameters
    ----------
    normal, origin, along : (3,) float

    Returns
    -------
    Frame
    """
    first = along - (along @ normal) * normal
    first = first / np.linalg.norm(first)
    return Frame(origin, np.stack([first, np.cross(normal, first)]), normal)


def next_of(values: NDArray[Any]) -> NDArray[Any]:
    """Values of the next place around a loop (`np.roll` by -1 along the first axis, ten times as fast)."""
    return np.concatenate((values[1:], values[:1]))


def last_of(values: NDArray[Any]) -> NDArray[Any]:
    """Values of the last place around a loop."""
    return np.concatenate((values[-1:], values[:-1]))


def signed_area(loop: FloatArray) -> float:
    """Area of a loop (n, 2), positive if counter-clockwise."""
    x, y = (loop - loop[0]).T
    return 0.5 * float(x @ next_of(y) - y @ next_of(x))


def trace_loops(triangles: IntArray, flat: dict[int, tuple[float, float]]) -> list[list[int]]:
    """Boundary loops of a set of triangles, the interior on the left.

    Edges that the set passes in both directions cancel, slits included. A loop that meets itself in a
    vertex is split there.

    Parameters
    ----------
    triangles : (n, 3) int
        Vertex numbers.
    flat : dict
        Plane coordinates of the vertices.

    Returns
    -------
    list of list of int
        Vertex numbers of each loop.

    Raises
    ------
    ValueError
        If the edges do not close.
    """
    halves = np.stack([triangles, triangles[:, [1, 2, 0]]], axis=2).reshape(-1, 2)
    base = np.int64(triangles.max()) + 1
    forward, backward = halves @ [base, 1], halves @ [1, base]
    rim = halves[~np.isin(forward, backward)].tolist()
    leaving: dict[int, list[int]] = defaultdict(list)
    for a, b in rim:
        leaving[a].append(b)
    loops: list[list[int]] = []
    while leaving:
        start = next(iter(leaving))
        path, place = [start], {start: 0}
        while path:
            here = path[-1]
            step = _leave(leaving, here, path[-2] if len(path) > 1 else None, flat)
            if step in place:
                cut = place[step]
                loops.append(path[cut:])
                for v in path[cut + 1 :]:
                    del place[v]
                path = path[: cut + 1]
                if cut == 0 and step not in leaving:
                    break
            else:
                place[step] = len(path)
                path.append(step)
    return [loop for loop in loops if len(loop) > 2]


def _leave(
    leaving: dict[int, list[int]], here: int, came_from: int | None, flat: dict[int, tuple[float, float]]
) -> int:
    """Take an edge away from a vertex: where several leave, the next one clockwise from where we came."""
    if here not in leaving:
        raise ValueError("outline does not close")
    choices = leaving[here]
    pick = 0
    if len(choices) > 1 and came_from is not None:
        x, y = flat[here]
        back = np.arctan2(flat[came_from][1] - y, flat[came_from][0] - x)
        turns = [(back - np.arctan2(flat[c][1] - y, flat[c][0] - x)) % (2 * np.pi) for c in choices]
        pick = int(np.argmin([t if t > 0 else 2 * np.pi for t in turns]))
    step = choices.pop(pick)
    if not choices:
        del leaving[here]
    return step


def clean_loop(loop: FloatArray, tolerance: float) -> IntArray:
    """Choose the vertices of a loop that are not repeated and not on the line between their neighbours.

    No dropped vertex is farther than the tolerance from the loop that remains, so many small turns of the
    same sense are not straightened.

    Parameters
    ----------
    loop : (n, 2) float, m
    tolerance : float, m

    Returns
    -------
    (m,) int
        Numbers of the vertices that stay, in order around the loop (not always from the smallest); fewer
        than three if nothing is left.
    """
    step = np.hypot(*(loop - last_of(loop)).T)
    numbers = np.flatnonzero(step > tolerance)
    if len(numbers) < 3:
        return numbers
    loop = loop[numbers]
    before, after = last_of(loop), next_of(loop)
    chord = after - before
    offset = np.abs(chord[:, 0] * (loop - before)[:, 1] - chord[:, 1] * (loop - before)[:, 0])
    offset /= np.maximum(np.hypot(*chord.T), 1e-300)
    if offset.min() > tolerance:
        return numbers
    begin = int(np.argmax(offset))  # a vertex that surely stays
    loop, numbers = np.roll(loop, -begin, axis=0), np.roll(numbers, -begin)
    closed = np.concatenate([loop, loop[:1]])
    keep = [0]
    for k in range(1, len(loop)):
        a = closed[keep[-1]]
        direction = closed[k + 1] - a
        length = np.hypot(*direction)
        passed = closed[keep[-1] + 1 : k + 1] - a
        off = np.abs(direction[0] * passed[:, 1] - direction[1] * passed[:, 0]) / max(length, 1e-300)
        beyond = (passed @ direction).max() > length * length * (1 + 1e-9)
        if length <= tolerance or off.max() > tolerance or beyond:
            keep.append(k)
    return np.asarray(numbers[keep])


def merge_flags(flags: BoolArray, kept: IntArray) -> BoolArray:
    """Flags of the edges between kept vertices of a loop: true if any edge in between has one.

    Parameters
    ----------
    flags : (n,) bool
        Flag of the edge from each vertex to the next.
    kept : (m,) int
        From `clean_loop`.
    """
    n = len(flags)
    count = np.concatenate([[0], np.cumsum(np.concatenate([flags, flags]))])
    span = (next_of(kept) - kept) % n
    return np.asarray(count[kept + np.where(span > 0, span, n)] > count[kept])


def group_loops(loops: list[FloatArray], sharp: list[BoolArray]) -> list[Outline]:
    """Assign holes (clockwise loops) to the smallest rim around them.

    Raises
    ------
    ValueError
        If a loop crosses itself or a hole lies in no rim.
    """
    areas = [signed_area(loop) for loop in loops]
    rims = sorted((k for k, area in enumerate(areas) if area > 0), key=lambda k: areas[k])
    groups = {k: [k] for k in rims}
    polygons = {k: shapely.Polygon(loops[k]) for k in rims}
    for k, area in enumerate(areas):
        if area >= 0:
            continue
        point = shapely.Polygon(loops[k]).representative_point()
        for rim in rims:
            if areas[rim] > -area and polygons[rim].contains(point):
                groups[rim].append(k)
                break
        else:
            raise ValueError("a hole lies in no rim")
    outlines = [Outline([loops[k] for k in group], [sharp[k] for k in group]) for group in groups.values()]
    if not outlines or not all(outline.polygon().is_valid for outline in outlines):
        raise ValueError("outline crosses itself")
    return outlines
