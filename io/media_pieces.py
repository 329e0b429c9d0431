"""Surfaces of conductors and dielectrics cut where media meet, so that each shared area is there once.

Bodies have an order of precedence: conductors, then the dielectrics as they are listed. Where two overlap the later one
yields; where they touch its faces are first put a hair into the other one, and faces flush with the other's a hair
below them, so that the solids of the library never meet in a common plane. What is then cut (each body less all before
it, and the union of all) tells of every triangle which drawn surface it comes from and what lies before it. At last
vertices a hair apart are put together again.
"""

from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree

from daraf.bem.errors import InputError

from .bodies import Body
from .gaps import Shape, box_gap, first_contact, touch_tolerance
from .snapping import snap
from .solids import Solids
from .triangle_distance import winding_numbers
from .uniting import SAME_PLANE

if TYPE_CHECKING:
    from manifold3d import Manifold

__all__ = ["Drawn", "Piece", "cut_where_media_meet"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: A hair, per size of the scene: well above the rounding of the library's double precision.
_HAIR = 1e-9


@dataclass(frozen=True, eq=False)
class Drawn:
    """One drawn body: closed, with the walls of its cavities, or a sheet that has a medium on either side.

    Attributes
    ----------
    body : Body
    walls : tuple of Body
        Wound inwards.
    medium : int
        What fills it, from 1; 0 for the metal of a closed conductor and for sheets.
    solid : bool
        Whether it fills space.
    label : str
        What messages call it.
    """

    body: Body
    walls: tuple[Body, ...]
    medium: int
    solid: bool
    label: str


@dataclass(frozen=True, eq=False)
class Piece:
    """Part of one drawn surface with one medium on each side.

    Attributes
    ----------
    drawn : int
        Number of the drawn body.
    front, back : int
        Medium before it (0: what surrounds everything) and behind it; -1 for metal.
    vertices : (nv, 3) float, m
    triangles : (nt, 3) int
    """

    drawn: int
    front: int
    back: int
    vertices: FloatArray
    triangles: IntArray


@dataclass
class _Scene:
    """Solids in order of precedence, `number` telling which drawn body each is."""

    solids: Solids
    hair: float
    number: list[int] = field(default_factory=list)
    shapes: list[Shape] = field(default_factory=list)
    made: list["Manifold"] = field(default_factory=list)


def cut_where_media_meet(drawn: Sequence[Drawn]) -> tuple[list[Piece], list[tuple[int, float]]]:
    """Cut drawn surfaces into pieces with one medium on each side.

    Parameters
    ----------
    drawn : sequence of Drawn
        In order of precedence.

    Returns
    -------
    pieces : list of Piece
    yielded : list of (int, float)
        Dielectrics that overlap what comes before, and the share of their volume that they lost.

    Raises
    ------
    InputError
        If a solid cannot be cut, or a sheet meets the surface of a dielectric.
    """
    scene = _scene(drawn)
    pieces: list[Piece] = []
    yielded = []
    for k, own in enumerate(scene.made):
        number = scene.number[k]
        if drawn[number].medium == 0:
            continue
        left = own
        before = [scene.made[i] for i in range(k) if _near(scene, i, k)]
        if before:
            left = own - scene.solids.united(before)
            lost = own.volume() - left.volume()
            # faces put a hair into others are no overlap that was drawn
            if lost > 2.0 * scene.hair / scene.solids.size * own.surface_area():
                yielded.append((number, lost / own.volume()))
        for i, corners in _by_origin(scene, left).items():
            if i != k:
                pieces.append(_piece(scene, drawn, i, drawn[number].medium, corners[:, ::-1]))
    everything = _union(scene.made)
    for i, corners in _by_origin(scene, everything).items():
        pieces.append(_piece(scene, drawn, i, 0, corners))
    for number, one in enumerate(drawn):
        if not one.solid:
            medium = _medium_round(one, drawn, scene)
            pieces.append(Piece(number, medium, medium, one.body.vertices, one.body.triangles))
    return _put_together(pieces, 2.0 * scene.hair), yielded


def _scene(drawn: Sequence[Drawn]) -> _Scene:
    boxes = np.vstack([one.body.box for one in drawn])
    solids = Solids(boxes)
    hair = _HAIR * solids.size
    for one in drawn:
        hair = max(hair, touch_tolerance(one.body, one.body))
    scene = _Scene(solids, hair)
    for number, one in enumerate(drawn):
        if not one.solid:
            continue
        shape = Shape(one.body)
        reach = max(hair, SAME_PLANE * one.body.diagonal)
        near = [other for other in scene.shapes if box_gap(shape, other) <= reach]
        if near and one.medium > 0:
            moved, _ = snap(one.body, near, reach, hair, sunk=0.5 * hair)
            shape = Shape(moved)
        vertices, triangles = shape.body.vertices, shape.body.triangles
        for wall in one.walls:
            lining, _ = snap(wall, near, reach, hair, sunk=0.5 * hair) if near and one.medium > 0 else (wall, 0.0)
            triangles = np.vstack([triangles, lining.triangles + len(vertices)])
            vertices = np.vstack([vertices, lining.vertices])
        made = solids.solid(vertices, triangles)
        if made is None:
            raise InputError(
                f"{one.label}: its surface does not enclose a volume that could be cut: an edge has not just two "
                "triangles; close it in CAD, or allow mend = 'bold'"
            )
        scene.number.append(number)
        scene.shapes.append(Shape(Body(one.body.name, vertices, triangles)))
        scene.made.append(made.as_original())
    return scene


def _near(scene: _Scene, i: int, k: int) -> bool:
    return box_gap(scene.shapes[i], scene.shapes[k]) <= scene.hair


def _union(solids: list["Manifold"]) -> "Manifold":
    from manifold3d import Manifold, OpType

    return Manifold.batch_boolean(solids, OpType.Add)


def _by_origin(scene: _Scene, solid: "Manifold") -> dict[int, FloatArray]:
    """Triangles (n, 3, 3) m of a solid by the number of the solid whose surface they come from."""
    if solid.is_empty():
        return {}
    mesh = solid.to_mesh64()
    place = {made.original_id(): i for i, made in enumerate(scene.made)}
    vertices = np.asarray(mesh.vert_properties, dtype=np.float64)[:, :3] * scene.solids.size + scene.solids.middle
    corners = vertices[np.asarray(mesh.tri_verts).astype(np.int64)]
    ends = (np.asarray(mesh.run_index) // 3).astype(np.int64)
    found: dict[int, list[FloatArray]] = {}
    for run, origin in enumerate(np.asarray(mesh.run_original_id).tolist()):
        if ends[run + 1] > ends[run]:
            found.setdefault(place[int(origin)], []).append(corners[ends[run] : ends[run + 1]])
    return {i: np.concatenate(parts) for i, parts in found.items()}


def _piece(scene: _Scene, drawn: Sequence[Drawn], i: int, front: int, corners: FloatArray) -> Piece:
    number = scene.number[i]
    back = drawn[number].medium or -1
    flat = corners.reshape(-1, 3)
    return Piece(number, front, back, flat, np.arange(len(flat)).reshape(-1, 3))


def _medium_round(sheet: Drawn, drawn: Sequence[Drawn], scene: _Scene) -> int:
    """Medium that a sheet lies in."""
    shape = Shape(sheet.body)
    medium = 0
    for k in range(len(scene.made) - 1, -1, -1):
        one = drawn[scene.number[k]]
        if one.medium == 0 or box_gap(shape, scene.shapes[k]) > scene.hair:
            continue
        place = first_contact(shape, scene.shapes[k], 10.0 * scene.hair)
        if place is not None:
            raise InputError(
                f"{sheet.label}: the sheet meets the surface of {one.label}; sheets may lie in a medium or beside it: "
                "draw the conductor with its thickness"
            )
        if winding_numbers(shape.corners[:1].mean(axis=1), scene.shapes[k].corners)[0] > 0.5:
            medium = one.medium
    return medium


def _put_together(pieces: list[Piece], distance: float) -> list[Piece]:
    """Pieces whose vertices a hair apart are one, without triangles that have no area then."""
    points = np.vstack([piece.vertices for piece in pieces])
    pairs = cKDTree(points).query_pairs(distance, output_type="ndarray")
    graph = coo_matrix((np.ones(len(pairs)), (pairs[:, 0], pairs[:, 1])), shape=(len(points), len(points)))
    label = connected_components(graph, directed=False)[1]
    first = np.unique(label, return_index=True)[1]
    put, start = [], 0
    for piece in pieces:
        own = label[start : start + len(piece.vertices)]
        start += len(piece.vertices)
        triangles = own[piece.triangles]
        a, b, c = triangles.T
        triangles = triangles[(a != b) & (b != c) & (c != a)]
        if len(triangles) == 0:
            continue
        used, index = np.unique(triangles, return_inverse=True)
        vertices = points[first[used]]
        corners = vertices[index.reshape(-1, 3)]
        sides = np.linalg.norm(np.roll(corners, -1, axis=1) - corners, axis=2).max(axis=1)
        doubled = np.linalg.norm(np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]), axis=1)
        keep = doubled > distance * sides
        if keep.any():
            used, index = np.unique(index.reshape(-1, 3)[keep], return_inverse=True)
            put.append(Piece(piece.drawn, piece.front, piece.back, vertices[used], index.reshape(-1, 3)))
    return put
