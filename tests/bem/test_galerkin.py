import os
import subprocess
import sys
from itertools import pairwise

import naive
import numpy as np
import pytest

from daraf.bem.frames import panel_frames
from daraf.bem.galerkin import galerkin_matrix
from daraf.bem.jit import set_threads
from daraf.bem.near import self_integral
from daraf.bem.pairs import pair_integral


def frame(corners):
    return panel_frames(np.ascontiguousarray(corners)[None])[0]


def box_panels(n, lid=0.7):
    """Two faces of a box in n x n quadrilaterals each, and a triangle over them."""
    steps = np.linspace(0.0, 1.0, n + 1)
    cells = [naive.rectangle(1.0 / n, 1.0 / n, at=(x, y, 0.0)) for x in steps[:-1] for y in steps[:-1]]
    walls = [np.stack([np.zeros(4), cell[:, 0], cell[:, 1]], axis=1) for cell in cells]
    top = naive.triangle((0.0, 0.0, lid), (1.0, 0.2, lid), (0.4, 0.8, lid + 0.2))
    return np.stack([*cells, *walls, top])


def test_matrix_equals_plain_loops():
    corners = box_panels(3)
    centred = corners - corners.reshape(-1, 3).mean(axis=0)
    expected = naive.matrix(centred, lambda a, b: pair_integral(frame(a), frame(b)), lambda a: self_integral(frame(a)))
    # the same kernels, compiled once as a part of a larger one: contraction may differ in the last digits
    np.testing.assert_allclose(galerkin_matrix(corners), expected, rtol=1e-12, atol=0)


def test_entries_equal_independent_quadrature():
    corners = box_panels(2)
    expected = naive.matrix(corners, naive.pair_integral, lambda c: naive.pair_integral(c, c))
    # the budget's line "integration"
    np.testing.assert_allclose(galerkin_matrix(corners), expected, rtol=1e-6, atol=0)


def test_upper_triangle_is_empty_and_the_input_unchanged():
    corners = box_panels(2)
    copy = corners.copy()
    matrix = galerkin_matrix(corners)
    assert np.count_nonzero(np.triu(matrix, 1)) == 0
    np.testing.assert_array_equal(corners, copy)


def test_known_block_is_taken_over_as_it_is():
    corners = box_panels(3)
    known = np.tril(np.arange(25.0).reshape(5, 5))
    matrix = galerkin_matrix(corners, known=known)
    np.testing.assert_array_equal(matrix[:5, :5], known)
    np.testing.assert_array_equal(matrix[5:], galerkin_matrix(corners)[5:])


@pytest.mark.slow
def test_result_does_not_depend_on_the_number_of_threads():
    corners = box_panels(8)
    try:
        set_threads(1)
        one = galerkin_matrix(corners)
        set_threads(None)
        np.testing.assert_array_equal(galerkin_matrix(corners), one)
    finally:
        set_threads(None)


def test_matrix_is_positive_definite():
    lower = galerkin_matrix(box_panels(4))
    full = lower + np.tril(lower, -1).T
    values = np.linalg.eigvalsh(full)
    # the least eigenvalue of uniform panels of size h is about h^3, the largest about 1
    assert values[0] > 0.1 * np.diag(full).min()


def test_progress_ends_with_all_entries():
    told = []
    galerkin_matrix(box_panels(3), progress=lambda done, total: told.append((done, total)))
    assert told[-1] == (190.0, 190.0)
    assert all(a[0] < b[0] for a, b in pairwise(told))


INTERPRETED = """
import numpy as np
from daraf.bem.galerkin import galerkin_matrix
square = np.array([(0.0, 0, 0), (1, 0, 0), (1, 1, 0), (0, 1, 0)])
triangle = np.array([(0.0, 0, 0), (1, 0, 0), (0.3, 0, 0.8), (0.3, 0, 0.8)])
corners = np.stack([square, square + [0, 1, 0], triangle, square + [0, 0, 3], square + [40, 0, 0], square * 0.1 + 2])
print(galerkin_matrix(corners).tobytes().hex())
"""


def test_interpreted_kernels_give_the_compiled_entries():
    """All regimes once; index errors that compiled code hides show here."""
    found = []
    for switch in ("0", "1"):
        done = subprocess.run(
            [sys.executable, "-W", "error", "-c", INTERPRETED],
            capture_output=True,
            text=True,
            env=os.environ | {"NUMBA_DISABLE_JIT": switch},
            timeout=120,
        )
        assert done.returncode == 0, done.stderr
        found.append(np.frombuffer(bytes.fromhex(done.stdout.strip())))
    # the compiler may contract and reorder: rounding only
    np.testing.assert_allclose(found[0], found[1], rtol=1e-11, atol=0)
