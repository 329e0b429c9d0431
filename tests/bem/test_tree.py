import naive
import numpy as np
import pytest

from daraf.bem.multipole_lists import cell_pairs
from daraf.bem.tree import LARGEST, OWN, build_tree


def grid(x, y):
    """Rectangles between lines at x and y in the plane z = 0."""
    pairs = [(i, j) for i in range(len(x) - 1) for j in range(len(y) - 1)]
    return np.array([naive.rectangle(x[i + 1] - x[i], y[j + 1] - y[j], at=(x[i], y[j], 0.0)) for i, j in pairs])


def graded():
    """Lines that crowd toward one side: panels of aspect up to 1e5, next to each other."""
    return grid(np.concatenate([[0.0], 0.5 ** np.arange(20)[::-1]]), np.linspace(0.0, 1.0, 9))


CASES = {
    "one panel": lambda: grid(np.array([0.0, 2.0]), np.array([0.0, 1.0])),
    "flat": lambda: grid(np.linspace(0, 1, 21), np.linspace(0, 1, 21)) + np.array([3.0, 0.0, -5.0]),
    "line": lambda: grid(np.linspace(0, 100, 401), np.array([0.0, 0.25])),
    "graded": graded,
    "same place": lambda: np.repeat(grid(np.array([0.0, 1.0]), np.array([0.0, 1.0])), 50, axis=0),
}


@pytest.fixture(params=CASES)
def corners(request):
    return CASES[request.param]()


def test_every_panel_lies_in_one_leaf_and_in_its_ball(corners):
    tree = build_tree(corners, 10)
    np.testing.assert_array_equal(np.sort(tree.order), np.arange(len(corners)))
    assert tree.leaf_start[0] == 0
    assert (np.diff(tree.leaf_start) > 0).all()
    np.testing.assert_array_equal(tree.last[tree.leaves], tree.leaf_start[1:])
    unit = (corners - tree.origin) / tree.scale
    for c in range(len(tree.level)):
        inside = unit[tree.order[tree.first[c] : tree.last[c]]]
        far = np.linalg.norm(inside - tree.centre[c], axis=2).max()
        assert far == pytest.approx(tree.radius[c], rel=1e-12)
        centroids = inside.mean(axis=1)
        assert np.abs(centroids - tree.centre[c]).max() <= 0.5 * 0.5 ** tree.level[c] * (1 + 1e-6)


def test_children_share_the_panels_of_their_cell(corners):
    tree = build_tree(corners, 10)
    for c in np.nonzero(tree.n_children)[0]:
        children = tree.child[c] + np.arange(tree.n_children[c])
        assert (tree.parent[children] == c).all()
        assert tree.first[children[0]] == tree.first[c]
        assert tree.last[children[-1]] == tree.last[c]
        np.testing.assert_array_equal(tree.first[children[1:]], tree.last[children[:-1]])
        own = tree.octant[children] == OWN
        np.testing.assert_array_equal(tree.level[children], tree.level[c] + ~own)


def test_leaves_are_bounded_but_for_large_panels(corners):
    tree = build_tree(corners, 10)
    radii = np.linalg.norm(corners - corners.mean(axis=1, keepdims=True), axis=2).max(axis=1) / tree.scale
    for leaf, cell in enumerate(tree.leaves):
        panels = tree.order[tree.leaf_start[leaf] : tree.leaf_start[leaf + 1]]
        movable = radii[panels] * 2 <= LARGEST * 0.5 ** tree.level[cell]
        assert movable.sum() <= 10 or tree.octant[cell] == OWN


def test_each_pair_of_panels_is_near_or_far_once(corners):
    tree = build_tree(corners, 10)
    pairs = cell_pairs(tree, 0.75)
    count = np.zeros((len(corners), len(corners)), dtype=int)

    def add(a, b):
        for one, other in {(a, b), (b, a)}:
            count[np.ix_(tree.order[one[0] : one[1]], tree.order[other[0] : other[1]])] += 1

    for a, b in pairs.near:
        add(tuple(tree.leaf_start[a : a + 2]), tuple(tree.leaf_start[b : b + 2]))
    for a, b in pairs.far:
        add((tree.first[a], tree.last[a]), (tree.first[b], tree.last[b]))
    assert (count == 1).all()


def test_far_pairs_are_separated_and_their_offsets_right(corners):
    tree = build_tree(corners, 10)
    pairs = cell_pairs(tree, 0.75)
    a, b = pairs.far.T
    apart = tree.centre[a] - tree.centre[b]
    assert (tree.radius[a] + tree.radius[b] <= 0.75 * np.linalg.norm(apart, axis=1) * (1 + 1e-12)).all()
    np.testing.assert_allclose(pairs.offsets[pairs.translation], apart * 2.0 ** tree.level[b][:, None], atol=1e-9)
    np.testing.assert_array_equal(pairs.levels_apart[pairs.translation], tree.level[b] - tree.level[a])
