import numpy as np
import pytest
from dense_operator import DenseOperator, sheet, sheets, stored_entries

from daraf.bem import patches as patching
from daraf.bem.block_krylov import solve_block
from daraf.bem.galerkin import galerkin_matrix
from daraf.bem.jit import set_threads
from daraf.bem.patches import make_patches
from daraf.bem.preconditioner import factored_inverse, last_inverse_rows


def dense_twin(stored, matrix, patches):
    """The factored inverse by the book: one dense factorisation per cluster, (n, n)."""
    n = len(matrix)
    root = 1.0 / np.sqrt(np.diag(matrix))
    scaled = matrix * np.outer(root, root)
    members = [
        stored.order[patches.places[a:b]]
        for a, b in zip(patches.cluster_start[:-1], patches.cluster_start[1:], strict=True)
    ]
    factor = np.zeros((n, n))
    for c, own in enumerate(members):
        patch = np.concatenate([*(members[k] for k in patches.neighbours[c] if k >= 0), own])
        inverse = np.linalg.inv(np.linalg.cholesky(scaled[np.ix_(patch, patch)]))
        factor[np.ix_(own, patch)] = inverse[len(patch) - len(own) :]
    return root[:, None] * (factor.T @ factor) * root


def test_rows_of_the_inverse_factor():
    rng = np.random.default_rng(5)
    a = rng.standard_normal((12, 12))
    matrix = a @ a.T + 12 * np.eye(12)
    expected = np.linalg.inv(np.linalg.cholesky(matrix))[-4:]
    # rounding of a well conditioned matrix
    np.testing.assert_allclose(last_inverse_rows(np.tril(matrix), 4, 0.0), expected.T, rtol=0, atol=1e-13)


def test_equals_dense_factorisations_of_the_patches():
    corners, matrix, _, _ = sheets(14)
    stored = stored_entries(corners, matrix, size=50, unit=2.5)
    patches = make_patches(stored)
    found = factored_inverse(stored).apply(np.eye(len(matrix)))
    expected = dense_twin(stored, matrix, patches)
    scale = np.sqrt(np.outer(np.diag(expected), np.diag(expected)))
    # the factor is stored in single precision
    np.testing.assert_allclose(found / scale, expected / scale, rtol=0, atol=1e-5)


def test_clusters_cover_the_places_once_and_patches_hold_earlier_neighbours_only():
    corners, matrix, _, _ = sheets(14)
    patches = make_patches(stored_entries(corners, matrix, size=50))
    np.testing.assert_array_equal(np.sort(patches.places), np.arange(len(corners)))
    size = np.diff(patches.cluster_start)
    assert size.min() > 0
    assert size.max() <= patching.CLUSTER_SIZE
    follows = {(c, k) for c, row in enumerate(patches.neighbours) for k in row if k >= 0}
    assert len(follows) > len(size)
    assert not {(k, c) for c, k in follows} & follows
    for c, row in enumerate(patches.neighbours):
        assert size[row[row >= 0]].sum() <= patching.PATCH_SIZE
        assert c not in row


def test_is_the_inverse_where_one_patch_holds_all():
    corners = sheet(4)
    lower = galerkin_matrix(corners)
    matrix = lower + np.tril(lower, -1).T
    inverse = factored_inverse(stored_entries(corners, matrix)).apply(matrix)
    np.testing.assert_allclose(inverse, np.eye(16), rtol=0, atol=1e-5)  # single precision


def test_is_symmetric_and_positive_definite():
    corners, matrix, _, _ = sheets(14)
    inverse = factored_inverse(stored_entries(corners, matrix, size=50, real=np.float32)).apply(np.eye(len(matrix)))
    root = np.sqrt(np.diag(inverse))
    scaled = inverse / np.outer(root, root)
    np.testing.assert_allclose(scaled, scaled.T, rtol=0, atol=1e-12)  # sums in another order
    assert np.linalg.eigvalsh(scaled).min() > 0.0


@pytest.mark.parametrize("theta", [0.5, 0.8])
def test_pairs_that_are_not_stored_do_little_harm(theta):
    corners, matrix, right, _ = sheets(20)
    counts = []
    for stored in (stored_entries(corners, matrix, size=30), stored_entries(corners, matrix, size=30, theta=theta)):
        found = solve_block(DenseOperator(matrix), right, factored_inverse(stored), tolerance=1e-8)
        assert found.converged
        counts.append(found.iterations)
    assert counts[1] <= counts[0] + 2


def test_panels_that_coincide_stay_finite():
    corners = np.concatenate([sheet(6), sheet(6)])
    lower = galerkin_matrix(corners)
    matrix = lower + np.tril(lower, -1).T
    applied = factored_inverse(stored_entries(corners, matrix, real=np.float32)).apply(np.eye(72))
    assert np.isfinite(applied).all()
    # of two equal panels the second one's share is bounded by the least pivot
    assert applied.max() < 1e7 * np.min(1.0 / np.diag(matrix))


def test_result_does_not_depend_on_the_number_of_threads_and_leaves_its_input_alone():
    corners, matrix, right, _ = sheets(14)
    stored = stored_entries(corners, matrix, size=50)
    try:
        set_threads(1)
        one = factored_inverse(stored).apply(right)
        set_threads(None)
        np.testing.assert_array_equal(factored_inverse(stored).apply(right), one)
    finally:
        set_threads(None)


def test_memory_is_counted_and_progress_told():
    corners, matrix, _, _ = sheets(14)
    told = []
    inverse = factored_inverse(stored_entries(corners, matrix, size=50), lambda done, total: told.append((done, total)))
    assert told[-1][0] == told[-1][1] > 0
    per_panel = inverse.bytes / len(corners)
    # at least its values; less than two kilobytes a panel
    assert 4 * inverse.mean_patch < per_panel < 2000


@pytest.mark.slow
@pytest.mark.parametrize("grade", [1.0, 4.0])
def test_counts_of_iterations_stay_flat(grade):
    """Panels from 200 to 3200, gap 1 %, aspect up to 3e4: the count to 1e-8 grows by two at most."""
    counts = []
    for n in (10, 20, 40):
        corners, matrix, right, _ = sheets(n, grade=grade)
        inverse = factored_inverse(stored_entries(corners, matrix, real=np.float32))
        counts.append(solve_block(DenseOperator(matrix), right, inverse, tolerance=1e-8).iterations)
    assert counts[-1] <= counts[0] + 2
    assert max(counts) <= 8
