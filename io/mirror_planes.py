"""Mirror planes and the half-space of a case: images for the solver, and surfaces that reach to the planes."""

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from daraf.bem.errors import InputError
from daraf.bem.solution import Notice

from .case import Case
from .media_pieces import Drawn, Piece

if TYPE_CHECKING:
    from daraf.bem.images import Images

__all__ = ["cut_at_plane", "images_of", "plane_notices", "without_mirror_faces"]

FloatArray = NDArray[np.float64]

_Split = tuple[FloatArray, NDArray[np.int64], NDArray[np.bool_]]

#: Vertices this close to a plane, per extent of the surface, are in it; faces that were put onto others lie a hair off.
_IN_PLANE = 5e-7


def images_of(case: Case) -> "Images":
    """Mirror planes and half-space of a case, for the solver.

    Raises
    ------
    InputError
        If planes are not orthogonal, or too many.
    """
    from daraf.bem.images import HalfSpace, Images, MirrorPlane

    content = case.content
    planes = tuple(
        MirrorPlane(np.array(one.point), np.array(one.normal), one.kind == "electric") for one in content.plane
    )
    half = content.half_space
    below = None
    if half is not None:
        above = content.medium.relative_permittivity
        below = HalfSpace(np.array(half.point), np.array(half.normal), above, half.relative_permittivity)
    try:
        return Images(planes, below)
    except InputError as error:
        raise InputError(f"{case.label}: {error}") from None


def plane_notices(case: Case) -> list[Notice]:
    """What the numbers stand for where only a part is modelled."""
    magnetic = sum(plane.kind == "magnetic" for plane in case.content.plane)
    if not magnetic:
        return []
    text = (
        "capacitances, conductances and charges are those of the modelled part: if the magnetic planes stand for "
        f"symmetry, the whole has {2**magnetic} times as much"
    )
    return [Notice("modelled-part", text)]


def without_mirror_faces(
    pieces: Sequence[Piece], drawn: Sequence[Drawn], point: FloatArray, normal: FloatArray
) -> list[Piece]:
    """Pieces without the faces of solids that lie in a mirror plane: the solid goes on beyond it.

    Parameters
    ----------
    pieces : sequence of Piece
    drawn : sequence of Drawn
    point : (3,) float, m
    normal : (3,) float
        Of unit length.

    Returns
    -------
    list of Piece
        Vertices next to the plane lie in it.
    """
    size = float(np.ptp(np.vstack([piece.vertices for piece in pieces]), axis=0).max())
    kept = []
    for piece in pieces:
        height = (piece.vertices - point) @ normal
        near = np.abs(height) <= _IN_PLANE * size
        vertices = piece.vertices - np.where(near, height, 0.0)[:, None] * normal
        triangles = piece.triangles
        if drawn[piece.drawn].solid:
            triangles = triangles[~near[triangles].all(axis=1)]
        if len(triangles):
            kept.append(_compacted(piece, vertices, triangles))
    return kept


def cut_at_plane(pieces: Sequence[Piece], point: FloatArray, normal: FloatArray) -> list[Piece]:
    """Pieces cut in two where they cross a plane.

    Parameters
    ----------
    pieces : sequence of Piece
    point : (3,) float, m
    normal : (3,) float
        Of unit length.

    Returns
    -------
    list of Piece
    """
    size = float(np.ptp(np.vstack([piece.vertices for piece in pieces]), axis=0).max())
    cut = []
    for piece in pieces:
        height = (piece.vertices - point) @ normal
        height[np.abs(height) <= _IN_PLANE * size] = 0.0
        if not ((height > 0.0).any() and (height < 0.0).any()):
            cut.append(piece)
            continue
        vertices, triangles, above = _split(piece.vertices, piece.triangles, height)
        for side in (above, ~above):
            cut.append(_compacted(piece, vertices, triangles[side]))
    return cut


def _split(vertices: FloatArray, triangles: NDArray[np.int64], height: FloatArray) -> _Split:
    """Vertices with those on cut edges, triangles with the parts of cut ones, and whether each lies above."""
    points, heights, made = list(vertices), list(height), {}

    def crossing(a: int, b: int) -> int:
        key = (min(a, b), max(a, b))
        if key not in made:
            share = heights[key[0]] / (heights[key[0]] - heights[key[1]])
            points.append(points[key[0]] + share * (points[key[1]] - points[key[0]]))
            heights.append(0.0)
            made[key] = len(points) - 1
        return made[key]

    parts, above = [], []
    for corners in triangles.tolist():
        signs = np.sign([heights[c] for c in corners])
        if not ((signs > 0).any() and (signs < 0).any()):
            parts.append(corners)
            above.append(bool(signs.sum() > 0))
            continue
        ring: list[tuple[int, float]] = []
        for k in range(3):
            a, b = corners[k], corners[(k + 1) % 3]
            ring.append((a, signs[k]))
            if signs[k] * signs[(k + 1) % 3] < 0:
                ring.append((crossing(a, b), 0.0))
        for side in (1.0, -1.0):
            own = [c for c, sign in ring if sign * side >= 0.0]
            parts += [[own[0], own[k], own[k + 1]] for k in range(1, len(own) - 1)]
            above += [side > 0.0] * (len(own) - 2)
    return np.array(points), np.array(parts, dtype=np.int64), np.array(above)


def _compacted(piece: Piece, vertices: FloatArray, triangles: NDArray[np.int64]) -> Piece:
    used, index = np.unique(triangles, return_inverse=True)
    return Piece(piece.drawn, piece.front, piece.back, vertices[used], index.reshape(-1, 3))
