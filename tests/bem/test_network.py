"""Networks of conductors: by hand, by identity, by brute force."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daraf.bem.errors import InputError, NumericalError
from daraf.bem.network import eliminate_floating, excite, mutual_capacitance


def maxwell_from_mutual(mutual):
    """Slow obvious twin: two-terminal capacitances (diagonal: to infinity) to Maxwell matrix."""
    mutual = np.asarray(mutual, dtype=float)
    n = len(mutual)
    C = np.zeros((n, n))
    for i in range(n):
        C[i, i] = mutual[i, i] + sum(mutual[i, j] for j in range(n) if j != i)
        for j in range(n):
            if j != i:
                C[i, j] = -mutual[i, j]
    return C


@st.composite
def networks(draw, largest=6):
    n = draw(st.integers(2, largest))
    values = st.floats(0.01, 10.0)
    mutual = np.zeros((n, n))
    for i in range(n):
        mutual[i, i] = draw(values)
        for j in range(i):
            mutual[i, j] = mutual[j, i] = draw(values)
    return maxwell_from_mutual(mutual)


# Two plates of 3 pF between them through a floating one (2 pF and 6 pF in series: 1.5 pF) plus 0.5 pF direct.
THREE = maxwell_from_mutual(np.array([[0.0, 0.5, 2.0], [0.5, 0.0, 6.0], [2.0, 6.0, 0.0]]))


def test_three_conductors_one_floating_by_hand():
    state = excite(THREE, np.zeros((3, 3)), [True, True, False], [8.0, 0.0, 0.0])
    # Capacitive divider: 8 V times 2/(2 + 6).
    assert state.potential == pytest.approx([8.0, 0.0, 2.0], rel=1e-14)
    assert state.charge == pytest.approx([16.0, -16.0, 0.0], rel=1e-14)
    assert state.energy == pytest.approx(0.5 * 2.0 * 8.0**2, rel=1e-14)
    reduced, _ = eliminate_floating(THREE, np.zeros((3, 3)), [False, False, True])
    assert reduced == pytest.approx(np.array([[2.0, -2.0], [-2.0, 2.0]]), rel=1e-14)


def test_charge_on_the_floating_conductor_by_hand():
    # 4 C on the middle conductor, both others grounded: 4/(2 + 6) V.
    state = excite(THREE, np.zeros((3, 3)), [True, True, False], [0.0, 0.0, 4.0])
    assert state.potential == pytest.approx([0.0, 0.0, 0.5], abs=1e-15)
    assert state.charge == pytest.approx([-1.0, -3.0, 4.0], rel=1e-14)


def test_uncertainty_of_two_conductors_by_hand():
    C = np.array([[3.0, -2.0], [-2.0, 5.0]])
    limits = np.array([[0.1, 0.02], [0.02, 0.3]])
    state = excite(C, limits, [True, True], [10.0, 1.0])
    assert state.charge_uncertainty == pytest.approx([10 * 0.1 + 1 * 0.02, 10 * 0.02 + 1 * 0.3])
    # W = (C11 V1^2 + 2 C12 V1 V2 + C22 V2^2)/2
    assert state.energy_uncertainty == pytest.approx(0.5 * (100 * 0.1 + 2 * 10 * 0.02 + 0.3))
    floating = excite(C, limits, [True, False], [10.0, 0.0])
    # V2 = -C12 V1/C22
    assert floating.potential_uncertainty == pytest.approx([0.0, 10 * (0.02 / 5 + 2 * 0.3 / 25)])
    assert floating.charge_uncertainty[1] == 0.0


def test_row_sums_sharpen_the_charge_of_conductors_at_one_potential():
    C = np.array([[3.0, -2.9], [-2.9, 5.0]])
    limits = np.full((2, 2), 0.1)
    plain = excite(C, limits, [True, True], [1.0, 1.0])
    sharp = excite(C, limits, [True, True], [1.0, 1.0], to_infinity_uncertainty=[0.01, 0.02])
    assert plain.charge_uncertainty == pytest.approx([0.2, 0.2])
    assert sharp.charge_uncertainty == pytest.approx([0.01, 0.02])
    assert sharp.energy_uncertainty == pytest.approx(0.015)


def test_mutual_capacitance_keeps_better_row_sums():
    mutual = mutual_capacitance(THREE, np.full((3, 3), 0.1), to_infinity_uncertainty=[0.0, 0.01, 0.02])
    assert mutual.value[0, 1] == pytest.approx(0.5)
    assert mutual.value[0, 0] == pytest.approx(0.0, abs=1e-15)
    assert np.diag(mutual.uncertainty) == pytest.approx([0.0, 0.01, 0.02])
    plain = mutual_capacitance(THREE, np.full((3, 3), 0.1))
    assert np.diag(plain.uncertainty) == pytest.approx([0.3] * 3)


@settings(max_examples=60, deadline=None)
@given(networks(), st.data())
def test_charge_balance_and_given_values(C, data):
    n = len(C)
    held = np.array(data.draw(st.lists(st.booleans(), min_size=n, max_size=n)))
    values = np.array(data.draw(st.lists(st.floats(-5, 5), min_size=n, max_size=n)))
    state = excite(C, np.zeros_like(C), held, values)
    # A few roundings of numbers up to 50 (row sums of up to six entries below 10).
    assert state.charge == pytest.approx(C @ state.potential, abs=1e-10)
    assert np.array_equal(np.where(held, state.potential, state.charge), values)
    # What leaves the conductors ends at infinity: sum Q = row sums . V.
    assert state.charge.sum() == pytest.approx(C.sum(axis=1) @ state.potential, abs=1e-10)
    assert state.energy >= -1e-12


@settings(max_examples=60, deadline=None)
@given(networks(), st.data())
def test_reciprocity_of_the_reduced_matrix(C, data):
    n = len(C)
    floating = np.array(data.draw(st.lists(st.booleans(), min_size=n, max_size=n)))
    reduced, _ = eliminate_floating(C, np.zeros_like(C), floating)
    kept = np.flatnonzero(~floating)
    for a, i in enumerate(kept):
        values = np.zeros(n)
        values[i] = 1.0
        state = excite(C, np.zeros_like(C), ~floating, values)
        assert state.charge[kept] == pytest.approx(reduced[:, a], abs=1e-10)
    assert np.array_equal(reduced, reduced.T)
    assert (reduced - np.diag(np.diag(reduced)) <= 1e-12).all()
    assert (reduced.sum(axis=1) >= -1e-12).all()


@settings(max_examples=40, deadline=None)
@given(networks(largest=4), st.data(), st.integers(0, 2**32 - 1))
def test_uncertainty_covers_every_small_symmetric_change(C, data, seed):
    n = len(C)
    held = np.array(data.draw(st.lists(st.booleans(), min_size=n, max_size=n)))
    values = np.array(data.draw(st.lists(st.floats(-5, 5), min_size=n, max_size=n)))
    rng = np.random.default_rng(seed)
    limits = 1e-7 * rng.random((n, n))
    limits = limits + limits.T
    base = excite(C, limits, held, values)
    change = limits * rng.choice([-1.0, 1.0], size=(n, n))
    change = np.tril(change) + np.tril(change, -1).T
    moved = excite(C + change, limits, held, values)
    # 2 % and 1e-9: second order and rounding of the change itself.
    assert (np.abs(moved.charge - base.charge) <= 1.02 * base.charge_uncertainty + 1e-9).all()
    assert (np.abs(moved.potential - base.potential) <= 1.02 * base.potential_uncertainty + 1e-9).all()
    assert abs(moved.energy - base.energy) <= 1.02 * base.energy_uncertainty + 1e-9


def test_reduced_uncertainty_against_differences():
    limits = 1e-6 * np.array([[1.0, 2.0, 3.0], [2.0, 4.0, 5.0], [3.0, 5.0, 6.0]])
    reduced, spread = eliminate_floating(THREE, limits, [False, False, True])
    total = np.zeros((2, 2))
    for j in range(3):
        for k in range(j + 1):
            bumped = THREE.copy()
            bumped[j, k] += limits[j, k]
            if j != k:
                bumped[k, j] += limits[j, k]
            total += np.abs(eliminate_floating(bumped, limits, [False, False, True])[0] - reduced)
    # Second order of the differences: about 1e-6 relative.
    assert spread == pytest.approx(total, rel=1e-5)


@pytest.mark.parametrize(
    ("C", "limits", "held", "values"),
    [
        ([[1.0]], [[0.0, 0.0]], [True], [1.0]),
        ([[1.0]], [[0.0]], [1], [1.0]),
        ([[1.0]], [[0.0]], [True], [np.nan]),
        ([[np.inf]], [[0.0]], [True], [1.0]),
        ([[1.0]], [[-1.0]], [True], [1.0]),
    ],
)
def test_bad_input_is_refused(C, limits, held, values):
    with pytest.raises(InputError, match="network:"):
        excite(C, limits, held, values)


def test_indefinite_floating_block_is_a_numerical_error():
    with pytest.raises(NumericalError, match="positive definite"):
        excite([[1.0, -2.0], [-2.0, 1.0]], np.zeros((2, 2)), [False, False], [0.0, 0.0])
