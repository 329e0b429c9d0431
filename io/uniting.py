"""Bodies of one conductor that meet become one, so that no panel lies inside metal or on a face within it."""

from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components

from .bodies import Body
from .changes import Change, Mend, Place
from .contacts import cavity_walls, shapes_of
from .gaps import Shape, box_gap, encloses, first_contact, touch_tolerance
from .mending import flat_height, make_fit
from .self_contact import self_contacts
from .sheets import clip_sheet
from .snapping import snap
from .solids import Solids, pieces_of
from .topology import edges_of, signed_volume

__all__ = ["United", "unite", "untangle"]

IntArray = NDArray[np.int64]

#: Faces of one conductor this close, per diagonal of the smaller body, become one: what the panels take for one plane.
SAME_PLANE = 2e-6
#: Cuts tried to take a body apart that crosses itself.
_CUTS = 6
_LONGEST_NAME = 60


@dataclass
class United:
    """Bodies after uniting.

    Attributes
    ----------
    bodies : list of Body
    owner : list of int
        Conductor of each body.
    dropped : list of (int, Change)
        Surfaces that vanished as a whole, with their conductor.
    failed : list of (int, int)
        Pairs of bodies (numbers in `bodies`) that meet but could not be united.
    """

    bodies: list[Body] = field(default_factory=list)
    owner: list[int] = field(default_factory=list)
    dropped: list[tuple[int, Change]] = field(default_factory=list)
    failed: list[tuple[int, int]] = field(default_factory=list)


def unite(bodies: Sequence[Body], owner: Sequence[int], mend: Mend | None = None) -> United:
    """Unite what meets within each conductor and drop what carries no charge.

    Parameters
    ----------
    bodies : sequence of Body
        Mended, wound outwards, placed as they are to be solved.
    owner : sequence of int
        Conductor of each.
    mend : Mend, optional

    Returns
    -------
    United
        Bodies in the order of their first part.
    """
    mend = mend or Mend()
    result = United(list(bodies), list(owner))
    if not mend.changes:
        return result
    result.bodies = [untangle(body) for body in bodies]
    result = _united_solids(result, mend)
    result = _clipped_sheets(result)
    return _without_inner(result)


def _united_solids(given: United, mend: Mend) -> United:
    """Replace the closed bodies of each group that meet by their union."""
    shapes = shapes_of(given.bodies)
    walls = cavity_walls(shapes)
    solid = [k for k, shape in enumerate(shapes) if shape.volume is not None and k not in walls]
    pairs = [
        (i, j)
        for n, i in enumerate(solid)
        for j in solid[n + 1 :]
        if given.owner[i] == given.owner[j] and _meet(shapes[i], shapes[j], mend)
    ]
    if not pairs:
        return given
    n = len(shapes)
    links = np.array(pairs)
    graph = coo_matrix((np.ones(len(links)), (links[:, 0], links[:, 1])), shape=(n, n))
    label = connected_components(graph, directed=False)[1]
    result = United(dropped=given.dropped)
    done: dict[int, bool] = {}
    for k, body in enumerate(given.bodies):
        group = [m for m in solid if label[m] == label[k]] if k in solid else [k]
        hosts = [walls[k]] if k in walls else []
        if any(done.get(int(label[h])) for h in hosts) or done.get(int(label[k])):
            continue
        if len(group) > 1 and int(label[k]) not in done:
            linings = [w for w, host in walls.items() if host in group]
            whole = _union([shapes[m] for m in group], [shapes[w] for w in linings], mend)
            done[int(label[k])] = whole is not None
            if whole is not None:
                result.bodies += whole
                result.owner += [given.owner[k]] * len(whole)
                continue
        result.bodies.append(body)
        result.owner.append(given.owner[k])
    failed = [(i, j) for i, j in pairs if not done[int(label[i])]]
    where = {id(body): k for k, body in enumerate(result.bodies)}
    result.failed = [(where[id(given.bodies[i])], where[id(given.bodies[j])]) for i, j in failed]
    return result


def _reach(a: Body, b: Body, mend: Mend) -> float:
    """Gap that is closed between two bodies of one conductor, m."""
    if mend.within is not None:
        return max(mend.within, touch_tolerance(a, b))
    return max(touch_tolerance(a, b), SAME_PLANE * min(a.diagonal, b.diagonal))


def _meet(a: Shape, b: Shape, mend: Mend) -> bool:
    reach = _reach(a.body, b.body, mend)
    return box_gap(a, b) <= reach and first_contact(a, b, reach) is not None


def _union(group: list[Shape], linings: list[Shape], mend: Mend) -> list[Body] | None:
    """Union of closed bodies, with the walls of their cavities; None if the library refuses one of them."""
    fixed = [group[0]]
    longest = 0.0
    for shape in group[1:]:
        near = [other for other in fixed if box_gap(shape, other) <= _reach(shape.body, other.body, mend)]
        if near:
            reach = max(_reach(shape.body, other.body, mend) for other in near)
            overlap = max(touch_tolerance(shape.body, other.body) for other in near)
            moved, way = snap(shape.body, near, reach, overlap)
            longest = max(longest, way)
            shape = shape if moved is shape.body else Shape(moved)
        fixed.append(shape)
    solids = Solids(np.vstack([shape.box for shape in fixed]))
    made = []
    for shape in fixed:
        body = shape.body
        vertices, triangles = body.vertices, body.triangles
        for lining in linings:
            if encloses(shape, lining):
                triangles = np.vstack([triangles, lining.body.triangles + len(vertices)])
                vertices = np.vstack([vertices, lining.body.vertices])
        made.append(solids.solid(vertices, triangles))
    if any(one is None for one in made):
        return None
    # cuts through faces that lie upon each other leave slivers no wider than the overlap: none of the user's shape
    slivers = 2.0 * max(touch_tolerance(shape.body, shape.body) for shape in group)
    whole = solids.united([one for one in made if one is not None]).simplify(slivers / solids.size)
    vertices, triangles = solids.mesh(whole)
    before = sum(shape.volume or 0.0 for shape in [*group, *linings])
    text = (
        f"united {_names(group)} into one; the volume is {signed_volume(vertices, triangles) / before:.6g} "
        "of the sum of theirs"
    )
    note = Change("united", len(group), _first_meeting(fixed), text, longest or None)
    return _bodies([shape.body for shape in group], pieces_of(vertices, triangles), note)


def _bodies(group: list[Body], pieces: list[tuple[np.ndarray, IntArray]], note: Change) -> list[Body]:
    first = group[0]
    name = "+".join(body.name for body in group)
    name = name if len(name) <= _LONGEST_NAME else f"{first.name}+{len(group) - 1} more"[:_LONGEST_NAME]
    notes = [old for body in group for old in body.notes]
    spacing = max(body.spacing for body in group)
    made = []
    for k, (vertices, triangles) in enumerate(pieces, start=1):
        piece = replace(
            first,
            name=name if len(pieces) == 1 else f"{name}-{k}",
            vertices=vertices,
            triangles=triangles,
            spacing=spacing,
            faults=[],
            notes=[],
        )
        made.append(replace(_clean(piece), notes=[*dict.fromkeys(notes), note] if k == 1 else []))
    return made


def _clean(body: Body) -> Body:
    """The body without triangles that have no area, unless that would open it."""
    clean = make_fit(body)
    return clean if edges_of(clean.triangles).closed else body


def _names(group: list[Shape]) -> str:
    shown = [repr(shape.body.name) for shape in group[:4]]
    if len(group) > 4:
        return f"{', '.join(shown)} and {len(group) - 4} more"
    return f"{', '.join(shown[:-1])} and {shown[-1]}"


def _first_meeting(fixed: list[Shape]) -> Place | None:
    for n, a in enumerate(fixed):
        for b in fixed[n + 1 :]:
            if box_gap(a, b) <= 0.0 and (place := first_contact(a, b, 0.0)) is not None:
                return place
    return None


def untangle(body: Body) -> Body:
    """Unite the parts of a closed body that crosses itself.

    It is cut by planes through the crossings until no part crosses itself, and the parts are united.

    Parameters
    ----------
    body : Body
        Wound outwards.

    Returns
    -------
    Body
        The same object if it does not cross itself or cannot be untangled.
    """
    shape = Shape(body)
    if shape.volume is None or shape.volume <= 0.0:
        return body
    tolerance = 2.0 * flat_height(body)
    _, place, crossing = self_contacts(shape, tolerance)
    if not crossing.any():
        return body
    solids = Solids(body.box)
    solid = solids.solid(body.vertices, body.triangles)
    if solid is None:
        return body
    parts = _simple_parts(solid, solids, tolerance, _CUTS)
    if parts is None:
        return body
    vertices, triangles = solids.mesh(solids.united(parts))
    share = signed_volume(vertices, triangles) / shape.volume
    x, y, z = place[crossing][0]
    text = f"united the parts of the body that overlap; the volume is {share:.6g} of what it was"
    note = Change("untangled", int(crossing.sum()), (float(x), float(y), float(z)), text)
    clean = _clean(replace(body, vertices=vertices, triangles=triangles))
    return replace(clean, notes=[*body.notes, note])


def _simple_parts(solid, solids: Solids, tolerance: float, cuts: int):  # type: ignore[no-untyped-def]
    """Parts that do not cross themselves, or None if the cuts do not suffice."""
    parts = []
    for part in solid.decompose():
        vertices, triangles = solids.mesh(part)
        _, place, crossing = self_contacts(Shape(Body("part", vertices, triangles)), tolerance)
        if not crossing.any():
            parts.append(part)
            continue
        if cuts == 0:
            return None
        normal = np.eye(3)[cuts % 3]
        middle = float(normal @ (place[crossing].mean(axis=0) - solids.middle)) / solids.size
        for half in part.split_by_plane(normal.tolist(), middle):
            if half.is_empty():
                continue
            found = _simple_parts(half, solids, tolerance, cuts - 1)
            if found is None:
                return None
            parts += found
    return parts


def _clipped_sheets(given: United) -> United:
    """Cut away what lies inside or upon other bodies of the same conductor from open sheets."""
    shapes = shapes_of(given.bodies)
    walls = cavity_walls(shapes)
    result = United(dropped=given.dropped, failed=given.failed)
    for k, shape in enumerate(shapes):
        if shape.volume is not None:
            result.bodies.append(shape.body)
            result.owner.append(given.owner[k])
            continue
        others = [
            m
            for m, other in enumerate(shapes)
            if m != k
            and given.owner[m] == given.owner[k]
            and (other.volume is not None or m < k)
            and m not in walls
            and box_gap(shape, other) <= touch_tolerance(shape.body, other.body)
        ]
        linings = {m: [shapes[w] for w, host in walls.items() if host == m] for m in others}
        clipped = clip_sheet(shape, [(shapes[m], linings[m]) for m in others])
        if clipped is None:
            note = Change("dropped-sheet", 1, _corner(shape), f"the sheet {shape.body.name!r} lies inside metal")
            result.dropped.append((given.owner[k], note))
            continue
        result.bodies.append(clipped)
        result.owner.append(given.owner[k])
    return result


def _without_inner(given: United) -> United:
    """Drop surfaces inside a closed body of the same conductor, unless another conductor lies in there too."""
    shapes = shapes_of(given.bodies)
    walls = cavity_walls(shapes)
    inner: dict[int, int] = {}
    for m, outer in enumerate(shapes):
        if outer.volume is None or outer.volume <= 0.0 or m in walls:
            continue
        held = [k for k, shape in enumerate(shapes) if k != m and encloses(outer, shape)]
        if all(given.owner[k] == given.owner[m] for k in held):
            inner |= dict.fromkeys(held, m)
    result = United(dropped=given.dropped)
    place: dict[int, int] = {}
    for k, shape in enumerate(shapes):
        if k not in inner:
            place[k] = len(result.bodies)
            result.bodies.append(shape.body)
            result.owner.append(given.owner[k])
            continue
        host = given.bodies[inner[k]].name
        what = "wall of a closed cavity in" if k in walls else "surface inside"
        text = f"left out {shape.body.name!r}, a {what} {host!r}: it carries no charge"
        result.dropped.append((given.owner[k], Change("inner-surface", 1, _corner(shape), text)))
    result.failed = [(place[i], place[j]) for i, j in given.failed if i in place and j in place]
    return result


def _corner(shape: Shape) -> Place:
    x, y, z = shape.corners[0, 0]
    return float(x), float(y), float(z)
