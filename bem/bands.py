"""Bands of quadrilaterals along the outline of a plane polygon.

Each outline edge gets one quadrilateral between itself and an inset edge; the inset vertices lie on the
bisectors of the corners. The width follows the largest circle that touches the edge from inside, so bands
from opposite sides stay apart. Where many short edges make a round outline, every second inset vertex is
put on the line between its neighbours and drop out of the inner polygon, and further rings follow until few
vertices are left: no fan of needles remains for the inside.
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .outlines import Outline, last_of, next_of, signed_area
from .room import circle_radii

__all__ = ["bands_along", "divide_long_edges"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

#: Width of a band per radius of the largest circle touching the edge from inside.
WIDTH = 0.4
#: An inset edge keeps at least this share of its edge's length.
KEPT = 0.3
#: Edges along which the circle's radius varies by more than this factor are halved, so many times at most.
VARIATION, HALVINGS = 6.0, 3
#: Inset edges shorter than this many widths are merged in pairs if the outline turns by less than the angle.
SHORT, ROUND_TURN = 1.0, np.radians(35.0)
#: A loop of at most so many edges gets no further ring.
FEW_EDGES = 8
#: Band quadrilaterals have corner angles with sines above this.
LEAST_SINE = 0.05
#: Trials with narrower bands before giving up.
TRIALS = 24
#: Larger outlines are not banded (the width search is quadratic).
MOST_SAMPLES = 6000


@dataclass
class _Loop:
    """One loop while its ring is built; `merged` vertices drop out of the inner polygon."""

    points: FloatArray
    active: bool
    reach: FloatArray  # circle radius per edge
    heights: FloatArray  # band width per vertex
    merged: BoolArray

    def bisectors(self) -> tuple[FloatArray, FloatArray]:
        """Inset per unit width of each vertex (n, 2) and cotangent of half the corner angle."""
        p = self.points
        out = next_of(p) - p
        out = out / np.hypot(out[:, 0], out[:, 1])[:, None]
        into = last_of(out)
        cross = into[:, 0] * out[:, 1] - into[:, 1] * out[:, 0]
        dot = np.einsum("ij,ij->i", into, out)
        half = np.tan(0.5 * np.arctan2(cross, dot))
        normal = np.stack([-out[:, 1], out[:, 0]], axis=1)
        # The point at unit distance from both edges; sharp notches (a turn near -180 degrees) are capped.
        half = np.clip(half, -2.0, 50.0)
        return normal + half[:, None] * out, half

    def inset(self) -> FloatArray:
        """Inset vertices, (n, 2)."""
        q = self.points + self.heights[:, None] * self.bisectors()[0]
        middle = 0.5 * (last_of(q) + next_of(q))
        return np.where(self.merged[:, None], middle, q)

    def quads(self) -> FloatArray:
        """Quadrilaterals between outline and inset, (n, 4, 2)."""
        p, q = self.points, self.inset()
        return np.stack([p, next_of(p), next_of(q), q], axis=1)


def bands_along(outline: Outline, rings: int) -> Iterator[tuple[FloatArray, Outline, Outline]]:
    """Put bands of quadrilaterals along the outline of a polygon: one ring, then as many as are of use.

    Parameters
    ----------
    outline : Outline
    rings : int
        Most rings along a round loop; one along the others.

    Yields
    ------
    quads : (n, 4, 2) float, m
    divided : Outline
        The outline with the vertices at which long edges were divided.
    inner : Outline
        What the bands leave free.

    Raises
    ------
    ValueError
        If no valid bands were found.
    """
    divided = _divided(outline)
    current, active = divided, [True] * len(divided.loops)
    quads: list[FloatArray] = []
    for ring in range(rings):
        try:
            loops = _ring(current, active)
        except ValueError:
            if ring == 0:
                raise
            break
        quads.extend(loop.quads() for loop in loops if loop.active)
        inner = [loop.inset()[~loop.merged] if loop.active else loop.points for loop in loops]
        current = Outline.all_sharp(inner)
        active = [
            loop.active and 3 * loop.merged.sum() >= len(loop.points) and len(left) > FEW_EDGES
            for loop, left in zip(loops, inner, strict=True)
        ]
        if ring == 0:
            yield np.concatenate(quads), divided, current
        if not any(active):
            break
    if ring > 0:
        yield np.concatenate(quads), divided, current


def _samples(loops: list[FloatArray]) -> tuple[FloatArray, FloatArray, IntArray, FloatArray]:
    """Points along the edges: positions, inward normals, edge numbers, edge lengths."""
    start = np.concatenate(loops)
    step = np.concatenate([next_of(loop) - loop for loop in loops])
    length = np.hypot(step[:, 0], step[:, 1])
    count = np.clip(np.ceil(100 * length / length.sum()), 1, 24).astype(np.int64)
    # On a round outline only the middle of an edge tells the room: near its ends the next edge is close.
    count[np.concatenate([_is_round(loop) for loop in loops])] = 1
    edge = np.repeat(np.arange(len(start)), count)
    if len(edge) > MOST_SAMPLES:
        raise ValueError("outline too long for bands")
    place = (np.arange(len(edge)) - np.repeat(np.cumsum(count) - count, count) + 0.5) / count[edge]
    normal = np.stack([-step[:, 1], step[:, 0]], axis=1) / length[:, None]
    return start[edge] + place[:, None] * step[edge], normal[edge], edge, length


def _split(values: NDArray[Any], loops: list[FloatArray]) -> list[NDArray[Any]]:
    """Split values per vertex or edge by loop."""
    return np.split(values, np.cumsum([len(loop) for loop in loops])[:-1])


def _is_round(loop: FloatArray) -> BoolArray:
    """Edges of a loop with slight turns at both ends and neighbours of similar length."""
    step = next_of(loop) - loop
    length, last = np.hypot(step[:, 0], step[:, 1]), last_of(step)
    turn = np.arctan2(last[:, 0] * step[:, 1] - last[:, 1] * step[:, 0], (last * step).sum(axis=1))
    slight = np.abs(turn) < ROUND_TURN
    shortest = np.minimum(last_of(length), next_of(length))
    return np.asarray(slight & next_of(slight) & (length < 2.5 * shortest))


def _radii(loops: list[FloatArray]) -> tuple[FloatArray, IntArray]:
    """Radius of the largest circle inside that touches the outline at each sample; edge of each sample."""
    points, normals, edge, _ = _samples(loops)
    numbers = np.arange(sum(map(len, loops)))
    following = np.concatenate([next_of(part) for part in _split(numbers, loops)])
    preceding = np.empty_like(following)
    preceding[following] = numbers
    corners = np.concatenate(loops)
    after, before = _shielded(corners, following, preceding)
    near = np.column_stack([numbers, following, preceding])
    ends = np.column_stack([numbers, following, after, before])
    return circle_radii(points, normals, edge, near, corners, ends), edge


def _by_edge(values: FloatArray, edge: IntArray) -> list[FloatArray]:
    """Values of the samples of each edge."""
    return np.split(values, np.flatnonzero(np.diff(edge)) + 1)


def _shielded(corners: FloatArray, following: IntArray, preceding: IntArray) -> tuple[IntArray, IntArray]:
    """Far ends of the edges that continue each edge after a slight turn (-1 after a real corner).

    On a round outline these lie beside the edge and say nothing about the room inside.
    """
    step = corners[following] - corners
    last = step[preceding]
    turn = np.abs(np.arctan2(last[:, 0] * step[:, 1] - last[:, 1] * step[:, 0], (last * step).sum(axis=1)))
    slight = turn < ROUND_TURN
    after = np.where(slight[following], following[following], -1)
    return after, np.where(slight, preceding, -1)


def _divided(outline: Outline) -> Outline:
    """Halve edges along which the room inside varies much."""
    radii, edge = _radii(outline.loops)
    places = []
    for room, length in zip(_by_edge(radii, edge), _lengths(outline.loops).tolist(), strict=True):
        places.append(_halve(room, 0.0, 1.0, length, HALVINGS))
    return _with_pieces(outline, places)


def _lengths(loops: list[FloatArray]) -> FloatArray:
    """Lengths of all edges."""
    return np.concatenate([np.hypot(*(next_of(loop) - loop).T) for loop in loops])


def _with_pieces(outline: Outline, places: list[list[float]]) -> Outline:
    """Divide the edges of an outline at the given shares of their length (the first is 0)."""
    loops, sharp, first = [], [], 0
    for loop, flags in zip(outline.loops, outline.sharp, strict=True):
        own = places[first : first + len(loop)]
        count = [len(shares) for shares in own]
        step = np.repeat(next_of(loop) - loop, count, axis=0)
        loops.append(np.repeat(loop, count, axis=0) + np.concatenate(own)[:, None] * step)
        sharp.append(np.repeat(flags, count))
        first += len(loop)
    return Outline(loops, sharp)


def divide_long_edges(outline: Outline, factors: Sequence[float]) -> list[Outline]:
    """Divide edges longer than a factor times the radius of the largest circle that touches them from inside.

    Parameters
    ----------
    outline : Outline
    factors : sequence of float

    Returns
    -------
    list of Outline
        One for each factor.

    Raises
    ------
    ValueError
        If the outline has too many edges.
    """
    radii, edge = _radii(outline.loops)
    lengths = _lengths(outline.loops).tolist()
    room = _by_edge(radii, edge)
    return [
        _with_pieces(outline, [_cut(one * factor, a) for one, a in zip(room, lengths, strict=True)])
        for factor in factors
    ]


def _cut(allowed: FloatArray, length: float) -> list[float]:
    """Starts of the pieces of an edge (as shares of it), each about as long as allowed where it lies."""
    if length * float((1.0 / allowed).sum()) < 1.49 * len(allowed):  # most edges: below one and a half pieces
        return [0.0]
    wanted = np.cumsum(np.full(len(allowed), length / len(allowed)) / allowed)
    count = min(int(wanted[-1] + 0.5), 4 * len(allowed))
    if count < 2:
        return [0.0]
    share = np.arange(1, count) / count * wanted[-1]
    grid = np.arange(len(allowed) + 1) / len(allowed)
    return [0.0, *np.interp(share, np.r_[0.0, wanted], grid).tolist()]


def _halve(radii: FloatArray, low: float, high: float, length: float, left: int) -> list[float]:
    """Starts of the pieces of an edge (as shares of it) after halving where needed."""
    if left and len(radii) > 1 and radii.max() > VARIATION * radii.min() and length > 2 * radii.min():
        middle, half = 0.5 * (low + high), len(radii) // 2
        ahead = _halve(radii[: len(radii) - half], low, middle, length / 2, left - 1)
        return ahead + _halve(radii[half:], middle, high, length / 2, left - 1)
    return [low]


def _ring(outline: Outline, active: list[bool]) -> list[_Loop]:
    """Build one ring of bands along the active loops, narrowing it until it is valid."""
    radii, edge = _radii(outline.loops)
    reach = np.full(sum(map(len, outline.loops)), np.inf)
    np.minimum.at(reach, edge, radii)
    loops = []
    for points, part, on in zip(outline.loops, _split(reach, outline.loops), active, strict=True):
        loops.append(_start(points, part, on))
    for _ in range(TRIALS):
        fine = [_repair(loop) for loop in loops]
        if all(fine):
            if _is_valid(loops):
                return loops
            for loop in loops:
                loop.heights *= 0.7
    raise ValueError("no valid bands")


def _start(points: FloatArray, reach: FloatArray, active: bool) -> _Loop:
    """First widths of a loop's band and the vertices to merge."""
    loop = _Loop(points, active, reach, np.zeros(len(points)), np.zeros(len(points), bool))
    if not active:
        return loop
    widths = WIDTH * np.minimum(reach, last_of(reach))
    length = np.linalg.norm(next_of(points) - points, axis=1)
    cotangent = loop.bisectors()[1]
    widths = np.minimum(widths, 2 * np.minimum(length, last_of(length)) + 4 * length.sum() / len(length))
    for _ in range(4):  # each pass narrows the ends of edges whose mitres would meet
        used = widths * cotangent
        used = used + next_of(used)
        factor = np.minimum(1.0, (1 - KEPT) * length / np.maximum(used, 1e-300))
        factor[used <= 0] = 1.0
        widths = widths * np.minimum(factor, last_of(factor))
    loop.heights = widths
    loop.merged = _mergeable(loop)
    return loop


def _mergeable(loop: _Loop) -> BoolArray:
    """Every second vertex of round parts whose inset edges are short against the width."""
    q = loop.inset()
    short = np.linalg.norm(next_of(q) - q, axis=1)
    before = last_of(short)
    turn = 2 * np.abs(np.arctan(loop.bisectors()[1]))
    even = np.maximum(short, before) < 2.5 * np.minimum(short, before)
    fit = (turn < ROUND_TURN) & even & (np.maximum(short, before) < SHORT * loop.heights)
    fit &= last_of(turn) < ROUND_TURN
    merged = np.zeros(len(fit), bool)
    for k in range(len(fit)):
        merged[k] = fit[k] and not merged[k - 1] and not (k == len(fit) - 1 and merged[0])
    return merged


def _repair(loop: _Loop) -> bool:
    """Whether all quadrilaterals are convex; narrows the band at those that are not."""
    if not loop.active:
        return True
    quads = loop.quads()
    into, out = quads - quads[:, [3, 0, 1, 2]], quads[:, [1, 2, 3, 0]] - quads
    cross = into[..., 0] * out[..., 1] - into[..., 1] * out[..., 0]
    scale = np.linalg.norm(into, axis=2) * np.linalg.norm(out, axis=2)
    bad = (cross <= LEAST_SINE * scale).any(axis=1)
    if not bad.any():
        return True
    ends = bad | last_of(bad)
    loop.heights[ends & ~loop.merged] *= 0.7
    loop.merged &= ~ends
    return False


def _is_valid(loops: list[_Loop]) -> bool:
    """Whether the inner loops form a polygon with the same holes."""
    inner = [loop.inset()[~loop.merged] if loop.active else loop.points for loop in loops]
    if any(len(loop) < 3 for loop in inner):
        return False
    if any(signed_area(new) * signed_area(old.points) <= 0 for new, old in zip(inner, loops, strict=True)):
        return False
    return bool(Outline.all_sharp(inner).polygon().is_valid)
