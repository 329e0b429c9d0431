"""Tetrahedra for the bench against finite elements: made by hand for the cube and the two plates, as well as we can.

Around the cube: shells of its own shape, layers crowded toward the faces and, on each face, toward the edges, growing
outward with the distance. Around the plates: a tensor grid crowded toward the rims and the plates from both sides.
Each cell is cut into six tetrahedra along its diagonal, mirror images alike, so that everything conforms. Crowding
is ``1 - (1 - t)^p`` toward an edge and ``t^p`` away from it; the powers, the proportions of the layers and the size
of the outer boundary are those that reach 1e-3 with the fewest unknowns, found by trying some hundred of them.
"""

import itertools
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from skfem import MeshTet

__all__ = ["Domain", "cube_shells", "plate_grid"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
Place = Callable[[FloatArray], NDArray[np.bool_]]

#: Lengths that differ by less are the same, m; the shapes are of size 1.
SAME = 1e-9


@dataclass(frozen=True)
class Domain:
    """The space around conductors.

    Attributes
    ----------
    mesh : MeshTet
    fixed : list of (callable, float)
        Which facets, by their midpoints (3, n), are held at which potential, V.
    outer : callable
        Which facets are the outer boundary.
    decay : float
        Power of the distance with which the potential falls there: 1 for a total charge, 2 for a dipole.
    share : float
        The part of the whole space that is meshed.
    """

    mesh: MeshTet
    fixed: list[tuple[Place, float]]
    outer: Place
    decay: float
    share: float


def _toward(n: int, power: float) -> FloatArray:
    """0 to 1 in n steps that shrink toward 1."""
    return np.asarray(1.0 - (1.0 - np.arange(n + 1) / n) ** power)


def _away(n: int, power: float) -> FloatArray:
    """0 to 1 in n steps that grow from 0."""
    return np.asarray((np.arange(n + 1) / n) ** power)


def _tetrahedra(a: int, b: int, c: int) -> IntArray:
    """Six tetrahedra of each cell of an a x b x c grid, all along the diagonal from its low to its high corner."""
    number = np.arange((a + 1) * (b + 1) * (c + 1)).reshape(a + 1, b + 1, c + 1)
    parts = []
    for order in itertools.permutations(range(3)):
        at, corners = [0, 0, 0], []
        for axis in (None, *order):
            if axis is not None:
                at[axis] = 1
            i, j, k = at
            corners.append(number[i : i + a, j : j + b, k : k + c].ravel())
        parts.append(np.stack(corners, axis=1))
    return np.concatenate(parts)


def _mesh(points: list[FloatArray], cells: IntArray) -> MeshTet:
    """Weld copies of one block."""
    stacked = np.concatenate(points)
    cells = np.concatenate([cells + k * len(points[0]) for k in range(len(points))])
    _, first, place = np.unique(
        np.round(stacked / SAME).astype(np.int64), axis=0, return_index=True, return_inverse=True
    )
    return MeshTet(np.ascontiguousarray(stacked[first].T), np.ascontiguousarray(place.ravel()[cells].T))


def cube_shells(n: int, *, whole: bool, power: float = 2.5, outside: float = 2.5) -> Domain:
    """Around the unit cube at 1 V: n cells along half an edge, 3 n / 2 shells out to `outside` times its size."""
    u, s = _toward(n, power), 1.0 + (outside - 1.0) * _away(round(1.5 * n), power)
    a, b, s = np.meshgrid(u, u, s, indexing="ij")
    block = 0.5 * np.stack([s * a, s * b, s], axis=-1).reshape(-1, 3)
    turns = ((0, 1, 2), (2, 0, 1), (1, 2, 0))
    signs = list(itertools.product((1.0, -1.0), repeat=3)) if whole else [(1.0, 1.0, 1.0)]
    points = [block[:, turn] * np.array(sign) for turn in turns for sign in signs]

    def at(half: float) -> Place:
        return lambda x: np.abs(np.abs(x).max(axis=0) - half) < SAME

    mesh = _mesh(points, _tetrahedra(*(k - 1 for k in a.shape)))
    return Domain(mesh, [(at(0.5), 1.0)], at(0.5 * outside), 1.0, 1.0 if whole else 0.125)


def plate_grid(n: int, gap: float, *, whole: bool, power: float = 2.5, outside: float = 1.3) -> Domain:
    """Around two unit plates at +-1/2 V: n cells along half a side, the rest in proportion, out to +-`outside` m."""
    x = np.append(0.5 * _toward(n, power), 0.5 + (outside - 0.5) * _away(round(1.6 * n), 4.0)[1:])
    half = 0.5 * gap
    z = np.append(half * _toward(round(0.6 * n), 2.0), half + (outside - half) * _away(round(1.6 * n), 3.5)[1:])
    if whole:
        x, z = (np.append(-one[:0:-1], one) for one in (x, z))
    points = np.stack(np.meshgrid(x, x, z, indexing="ij"), axis=-1).reshape(-1, 3)

    def plate(height: float) -> Place:
        return lambda p: (np.abs(p[2] - height) < SAME) & (np.abs(p[:2]).max(axis=0) < 0.5)

    fixed = [(plate(half), 0.5), (plate(-half), -0.5) if whole else (lambda p: np.abs(p[2]) < SAME, 0.0)]
    mesh = _mesh([points], _tetrahedra(len(x) - 1, len(x) - 1, len(z) - 1))
    # the middle of a facet on the outer boundary has one coordinate there
    return Domain(mesh, fixed, lambda p: np.abs(p).max(axis=0) > outside - SAME, 2.0, 1.0 if whole else 0.125)
