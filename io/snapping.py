"""Hair gaps between bodies of one conductor: faces that nearly meet are put onto each other."""

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import shapely
from numpy.typing import NDArray

from .bodies import Body
from .flat_faces import flat_faces
from .gaps import Shape
from .triangle_boxes import near_pairs

__all__ = ["snap"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

#: Faces are parallel if the cosine of their angle differs from one by less: half a milliradian.
_PARALLEL = 1e-7
#: Faces that share less than this share of the smaller triangle meet along an edge only.
_SHARED = 1e-6


def snap(body: Body, fixed: Sequence[Shape], reach: float, overlap: float) -> tuple[Body, float]:
    """Move flat faces of a body onto parallel faces of other bodies that are no farther than a reach.

    A face that looks at the other one is put the overlap below its surface, so that a union joins both; a face
    that looks the same way becomes flush with it. A vertex of several such faces moves as all of them ask.

    Parameters
    ----------
    body : Body
        Closed, wound outwards.
    fixed : sequence of Shape
        Not moved.
    reach, overlap : float, m

    Returns
    -------
    body : Body
    moved : float, m
        Longest way of a vertex.
    """
    shape = Shape(body)
    regions = flat_faces(body)
    wishes: dict[int, list[tuple[FloatArray, float]]] = {}
    for other in fixed:
        for region, normal, origin, depth in _meeting_faces(shape, other, regions.triangle_region, reach, overlap):
            corners = np.unique(body.triangles[regions.triangles_of(region)])
            height = (body.vertices[corners] - origin) @ normal
            if np.abs(height).max() > reach:
                continue
            for vertex, h in zip(corners.tolist(), height.tolist(), strict=True):
                wishes.setdefault(vertex, []).append((normal, -depth - h))
    if not wishes:
        return body, 0.0
    vertices = body.vertices.copy()
    longest = 0.0
    for vertex, asked in wishes.items():
        normals = np.array([normal for normal, _ in asked])
        step = np.linalg.lstsq(normals, np.array([distance for _, distance in asked]), rcond=1e-3)[0]
        way = float(np.linalg.norm(step))
        if way <= reach + overlap:  # planes that meet at a small angle may ask for more
            vertices[vertex] += step
            longest = max(longest, way)
    return replace(body, vertices=vertices), longest


def _meeting_faces(
    shape: Shape, other: Shape, region: IntArray, reach: float, overlap: float
) -> list[tuple[int, FloatArray, FloatArray, float]]:
    """Regions of a body, the plane of the face of the other body that each meets, and the depth below it."""
    found: dict[tuple[int, int], tuple[int, FloatArray, FloatArray, float]] = {}
    for i, j, _ in near_pairs(shape.tree, other.tree, [reach]):
        cosine = np.einsum("ij,ij->i", shape.normals[i], other.normals[j])
        height = np.einsum("ij,ij->i", shape.corners[i].mean(axis=1) - other.corners[j, 0], other.normals[j])
        keep = (np.abs(cosine) > 1.0 - _PARALLEL) & (np.abs(height) <= reach) & (region[i] >= 0)
        i, j, cosine = i[keep], j[keep], cosine[keep]
        if len(i) == 0:
            continue
        facing = _overlapping(shape.corners[i], other.corners[j], other.normals[j], reach) | (cosine > 0.0)
        for a, b, c in zip(i[facing].tolist(), j[facing].tolist(), cosine[facing].tolist(), strict=True):
            key = (int(region[a]), b)
            found.setdefault(key, (key[0], other.normals[b], other.corners[b, 0], overlap if c < 0.0 else 0.0))
    return _one_per_plane(list(found.values()))


def _one_per_plane(
    found: list[tuple[int, FloatArray, FloatArray, float]],
) -> list[tuple[int, FloatArray, FloatArray, float]]:
    """One face for each region and direction: triangles of one flat face say the same."""
    kept: dict[tuple[int, tuple[float, ...]], tuple[int, FloatArray, FloatArray, float]] = {}
    for one in found:
        kept.setdefault((one[0], tuple(np.round(one[1], 3).tolist())), one)
    return list(kept.values())


def _overlapping(a: FloatArray, b: FloatArray, normal: FloatArray, reach: float) -> NDArray[np.bool_]:
    """Whether triangles share area when seen along the normals, (n,) bool."""
    first = b[:, 1] - b[:, 0]
    first = first / np.linalg.norm(first, axis=1, keepdims=True)
    second = np.cross(normal, first)
    axes = np.stack([first, second], axis=1)
    flat = [shapely.polygons(np.einsum("nki,nji->nkj", x - b[:, :1], axes)) for x in (a, b)]
    shared = shapely.area(shapely.intersection(*flat))
    return np.asarray(shared > _SHARED * np.minimum(*(shapely.area(one) for one in flat)))
