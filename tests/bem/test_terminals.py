"""Reductions of a network: by hand as circuits, and their uncertainty against brute force."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from test_network import maxwell_from_mutual, networks

from daraf.bem.errors import InputError
from daraf.bem.network import eliminate_floating
from daraf.bem.terminals import terminals

# a - b 1 F, a - c 2 F, b - c 3 F; to infinity 0.5, 0.25 and 0.125 F.
MUTUAL = np.array([[0.5, 1.0, 2.0], [1.0, 0.25, 3.0], [2.0, 3.0, 0.125]])
C = maxwell_from_mutual(MUTUAL)
NAMES = ("a", "b", "c")


def series(one, other):
    return one * other / (one + other)


@pytest.fixture
def net():
    return terminals(NAMES, C, np.zeros((3, 3)))


def test_guarded_measurement_is_the_mutual_capacitance(net):
    assert net.between("a", "b", others="guarded").value == pytest.approx(1.0, rel=1e-14)


def test_earthed_measurement_by_hand(net):
    # c is one with infinity: a - rest 2.5 F, b - rest 3.25 F in series, beside 1 F.
    assert net.between("a", "b", others="earthed").value == pytest.approx(1.0 + series(2.5, 3.25), rel=1e-14)


def test_floating_measurement_solves_the_bridge(net):
    # Nodal analysis of the four-node circuit with infinity as a node of its own, by the pseudo-inverse.
    full = np.zeros((4, 4))
    full[:3, :3] = C
    full[3, :3] = full[:3, 3] = -C.sum(axis=1)
    full[3, 3] = C.sum()
    P = np.linalg.pinv(full)
    expected = 1.0 / (P[0, 0] + P[1, 1] - 2.0 * P[0, 1])
    assert net.between("a", "b").value == pytest.approx(expected, rel=1e-12)


def test_shielded_pair_has_no_way_through_infinity():
    closed = maxwell_from_mutual(np.array([[0.0, 2.0], [2.0, 5.0]]))
    assert terminals(("in", "shell"), closed, np.zeros((2, 2))).between("in", "shell").value == pytest.approx(2.0)


def test_joined_terminals_add_in_parallel(net):
    joined = net.join({"ab": ["a", "b"]})
    assert joined.names == ("ab", "c")
    assert joined.maxwell == pytest.approx(maxwell_from_mutual([[0.75, 5.0], [5.0, 0.125]]), rel=1e-14)


def test_earthed_terminal_adds_to_the_ground_capacitances(net):
    left = net.earth(["c"])
    assert left.to_infinity == pytest.approx([2.5, 3.25], rel=1e-14)


def test_reference_joined_to_infinity_is_the_same_as_earthed(net):
    assert net.refer_to("c", infinity="joined").maxwell == pytest.approx(net.earth(["c"]).maxwell, rel=1e-14)


def test_floating_infinity_is_a_star_node(net):
    # Star of 0.5, 0.25, 0.125 F over the floating infinity becomes a triangle: c_i c_j / sum.
    referred = net.refer_to("c")
    to_c = np.array([2.0 + 0.5 * 0.125 / 0.875, 3.0 + 0.25 * 0.125 / 0.875])
    assert referred.to_infinity == pytest.approx(to_c, rel=1e-12)
    assert -referred.maxwell[0, 1] == pytest.approx(1.0 + 0.5 * 0.25 / 0.875, rel=1e-12)


def test_modes_of_a_balanced_pair_by_hand():
    pair = terminals(("p", "n"), maxwell_from_mutual([[3.0, 2.0], [2.0, 3.0]]), np.zeros((2, 2)))
    modes = pair.modes("p", "n")
    # Between the wires 2 F beside 3 F and 3 F in series; both together to earth 6 F; nothing converts.
    assert modes.differential.value == pytest.approx(2.0 + 1.5, rel=1e-14)
    assert modes.common.value == pytest.approx(6.0, rel=1e-14)
    assert modes.conversion.value == pytest.approx(0.0, abs=1e-14)


def test_an_unbalanced_pair_converts(net):
    # Half the difference of the two capacitances to everything else.
    assert net.modes("a", "b").conversion.value == pytest.approx(0.5 * (2.5 - 3.25), rel=1e-13)


def test_elastance_is_the_inverse(net):
    P, _ = net.elastance()
    assert pytest.approx(np.eye(3), abs=1e-13) == P @ C


@given(networks())
def test_floating_agrees_with_the_schur_complement(mutual_matrix):
    n = len(mutual_matrix)
    names = [f"k{i}" for i in range(n)]
    expected, _ = eliminate_floating(mutual_matrix, np.zeros((n, n)), np.arange(n) == n - 1)
    found = terminals(names, mutual_matrix, np.zeros((n, n))).let_float([names[-1]])
    assert found.maxwell == pytest.approx(expected, rel=1e-9, abs=1e-9)


def quantities(net):
    """Every kind of number a network gives, with its uncertainty."""
    modes = net.modes("a", "b", others="floating")
    yield net.between("a", "c")
    yield net.between("a", "c", others="earthed")
    yield net.between("b", "c", others="guarded")
    yield from (modes.differential, modes.common, modes.conversion)
    for reduced in (
        net.join({"ab": ["a", "b"]}),
        net.let_float(["b"]),
        net.refer_to("a"),
        net.let_float(["c"]).earth(["a"]),
    ):
        for value, spread in zip(reduced.maxwell.ravel(), reduced.uncertainty.ravel(), strict=True):
            yield type(modes.common)(value, spread)
        for value, spread in zip(reduced.to_infinity, reduced.to_infinity_uncertainty, strict=True):
            yield type(modes.common)(value, spread)
    for value, spread in zip(*(part.ravel() for part in net.elastance()), strict=True):
        yield type(modes.common)(value, spread)


@given(st.lists(st.sampled_from([-1.0, 1.0]), min_size=6, max_size=6))
def test_no_corner_of_the_uncertainties_lies_outside(signs):
    limits = 1e-5 * np.abs(C)
    step = np.zeros((3, 3))
    step[np.triu_indices(3)] = signs
    step = (np.triu(step) + np.triu(step, 1).T) * limits
    stated = quantities(terminals(NAMES, C, limits))
    for told, moved in zip(stated, quantities(terminals(NAMES, C + step, limits)), strict=True):
        # First order: the second one is some 1e-5 of it.
        assert abs(moved.value - told.value) <= told.uncertainty * (1.0 + 1e-3) + 1e-15


def test_worst_corner_is_reached():
    # The bound is no more than what some corner does: not a loose sum of sums.
    limits = 1e-5 * np.abs(C)
    told = terminals(NAMES, C, limits).between("a", "c").uncertainty
    moved = []
    for signs in np.ndindex(*(2,) * 6):
        step = np.zeros((3, 3))
        step[np.triu_indices(3)] = 2.0 * np.array(signs) - 1.0
        step = (np.triu(step) + np.triu(step, 1).T) * limits
        changed = terminals(NAMES, C + step, limits).between("a", "c").value
        moved.append(abs(changed - terminals(NAMES, C, limits).between("a", "c").value))
    assert max(moved) == pytest.approx(told, rel=1e-3)


def test_reducing_in_steps_does_not_inflate_the_uncertainty():
    limits = 1e-3 * np.abs(C)
    net = terminals(NAMES, C, limits)
    once, twice = net.join({"abc": ["a", "b", "c"]}), net.join({"ab": ["a", "b"]}).join({"abc": ["ab", "c"]})
    assert twice.uncertainty == pytest.approx(once.uncertainty, rel=1e-14)


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda net: net.between("a", "z"), "no terminal 'z'"),
        (lambda net: net.between("a", "a"), "same terminal"),
        (lambda net: net.between("a", "b", others="nailed"), "others is one of"),
        (lambda net: net.join({"x": ["a"], "y": ["a"]}), "joined twice"),
        (lambda net: net.join({"c": ["a", "b"]}), "name of another terminal"),
        (lambda net: net.earth(NAMES), "no terminal is left"),
        (lambda net: net.refer_to("a", infinity="near"), "infinity is"),
        (lambda net: net.modes("a", "b", others="guarded"), "floating or earthed"),
    ],
)
def test_refuses_nonsense(net, call, words):
    with pytest.raises(InputError, match=words):
        call(net)
