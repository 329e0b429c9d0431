"""Dense twins for the iterative solvers: matrices that are known entry by entry, on meshes worth a test."""

import functools

import numpy as np

from daraf.bem.galerkin import galerkin_matrix
from daraf.bem.panels import polygon_geometry
from daraf.bem.patches import StoredEntries


class DenseOperator:
    """A matrix, as the solvers see one; counts the columns it multiplies."""

    def __init__(self, matrix):
        self.matrix, self.columns = matrix, 0

    def apply(self, density):
        self.columns += density.shape[1]
        return self.matrix @ density


def sheet(n, z=0.0, grade=1.0):
    """Unit square in n x n panels, crowded toward the rim as t**grade, (n * n, 4, 3)."""
    t = np.linspace(0.0, 1.0, n // 2 + 1) ** grade
    x = np.concatenate([0.5 * t, 1.0 - 0.5 * t[-2::-1]])
    low, high = x[:-1], x[1:]
    corners = np.zeros((n, n, 4, 3))
    corners[..., 2] = z
    for k, (u, v) in enumerate(((low, low), (high, low), (high, high), (low, high))):
        corners[:, :, k, 0], corners[:, :, k, 1] = u[:, None], v[None]
    return corners.reshape(-1, 4, 3)


@functools.cache
def sheets(n, count=2, gap=0.01, grade=4.0):
    """Corners, full matrix, right-hand sides and exact bare capacitances of a stack of sheets."""
    corners = np.concatenate([sheet(n, gap * k, grade) for k in range(count)])
    lower = galerkin_matrix(corners)
    matrix = lower + np.tril(lower, -1).T
    areas = polygon_geometry(corners)[0]
    right = areas[:, None] * (np.repeat(np.arange(count), n * n)[:, None] == np.arange(count))
    density = np.linalg.solve(matrix, right)
    for array in (corners, matrix, right, density):
        array.setflags(write=False)
    return corners, matrix, right, density


def leaves_of(points, size):
    """Halve the longest side until no more than `size` points are left, list of index arrays."""
    if len(points) <= size:
        return [np.arange(len(points))]
    order = np.argsort(points[:, np.argmax(np.ptp(points, axis=0))], kind="stable")
    halves = order[: len(order) // 2], order[len(order) // 2 :]
    return [half[leaf] for half in halves for leaf in leaves_of(points[half], size)]


def stored_entries(corners, matrix, *, size=100, theta=0.0, unit=1.0, real=np.float64):
    """Blocks of a matrix for pairs of leaves the sum of whose radii exceeds theta times their distance."""
    areas = polygon_geometry(corners)[0]
    middles = corners.mean(axis=1)
    leaves = leaves_of(middles, size)
    centres = [middles[leaf].mean(axis=0) for leaf in leaves]
    radii = [np.linalg.norm(corners[leaf] - c, axis=2).max() for leaf, c in zip(leaves, centres, strict=True)]
    means = matrix / np.outer(areas, areas) * unit
    pairs, blocks = [], []
    for a, leaf in enumerate(leaves):
        for b in range(a, len(leaves)):
            if radii[a] + radii[b] > theta * np.linalg.norm(centres[a] - centres[b]):
                pairs.append((a, b))
                blocks.append(means[np.ix_(leaf, leaves[b])].ravel().astype(real))
    return StoredEntries(
        order=np.concatenate(leaves),
        leaf_start=np.concatenate([[0], np.cumsum([len(leaf) for leaf in leaves])]),
        pairs=np.array(pairs),
        start=np.cumsum([0, *[len(block) for block in blocks[:-1]]]),
        stride=np.array([len(leaves[b]) for _, b in pairs]),
        values=np.concatenate(blocks),
        corners=corners,
        areas=areas,
        unit=unit,
    )
