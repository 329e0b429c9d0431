"""Identities that capacitance matrices obey whatever the shape."""

import functools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daraf.bem import InputError, MemoryRefused, solve_capacitance
from daraf.bem.constants import EPSILON_0, FOUR_PI_EPSILON_0
from published import shapes
from published.exact_tables import CUBE

SMALL = settings(max_examples=6)


def trio():
    """A block, a plate and a tetrahedron, all different."""
    return [
        shapes.block(1.0, 0.8, 0.6),
        shapes.moved(shapes.plate(1.2, 0.7), z=0.6),
        shapes.moved(shapes.regular_solid("tetrahedron", 0.7), x=1.5),
    ]


@functools.cache
def plain_solution():
    return solve_capacitance(shapes.surface(trio()), accuracy=0.05)


@pytest.fixture
def plain():
    return plain_solution()


def check_agreement(solution, maxwell, uncertainty):
    """Rounding may cut a flat region differently or tip a mark of the refinement: other panels, same promise."""
    excess = np.abs(solution.maxwell - maxwell) / np.hypot(solution.maxwell_uncertainty, uncertainty)
    assert excess.max() <= 1.0, excess


def test_matrix_is_symmetric_with_maxwell_signs(plain):
    np.testing.assert_array_equal(plain.maxwell, plain.maxwell.T)
    np.testing.assert_array_equal(plain.maxwell_uncertainty, plain.maxwell_uncertainty.T)
    assert np.all(np.diag(plain.maxwell) > 0)
    assert np.all(plain.maxwell[~np.eye(3, dtype=bool)] < 0)
    assert np.all(plain.to_infinity > 0)
    assert np.all(np.linalg.eigvalsh(plain.maxwell) > 0)
    # sums of three numbers
    np.testing.assert_allclose(plain.maxwell.sum(axis=1), plain.to_infinity, rtol=1e-10)


def test_densities_hold_the_raw_value_and_reciprocity(plain):
    """Charge on conductor j with i at 1 V, from the densities: symmetric, and the Galerkin value of the last pass."""
    owner = plain.panels.conductor
    charges = np.stack([np.bincount(owner, row * plain.panels.areas) for row in plain.densities])
    # the Cholesky solve leaves about 1e-13 of the largest entry
    np.testing.assert_allclose(charges, charges.T, atol=1e-11 * charges.max())
    np.testing.assert_allclose(charges, plain.passes[-1].maxwell, atol=1e-11 * charges.max())


def test_accuracy_asked_is_met_and_the_budget_adds_up(plain):
    assert plain.reached
    total = np.sqrt(sum(line**2 for line in plain.budget.values()))
    # lines add in quadrature
    np.testing.assert_allclose(total, plain.maxwell_uncertainty, rtol=1e-10)


@given(st.tuples(*[st.floats(-100.0, 100.0)] * 3), st.floats(0.0, 6.28), st.sampled_from([(0, 0, 1), (1, 2, 3)]))
@SMALL
@pytest.mark.slow
def test_place_and_orientation_do_not_matter(shift, angle, axis):
    moved = [shapes.moved(shapes.turned(mesh, angle, axis), *shift) for mesh in trio()]
    solution = solve_capacitance(shapes.surface(moved), accuracy=0.05)
    check_agreement(solution, plain_solution().maxwell, plain_solution().maxwell_uncertainty)


@given(st.floats(-7.0, 4.0))
@SMALL
@pytest.mark.slow
def test_capacitance_grows_as_length(exponent):
    size = 10.0**exponent
    solution = solve_capacitance(shapes.surface([shapes.scaled(mesh, size) for mesh in trio()]), accuracy=0.05)
    check_agreement(solution, size * plain_solution().maxwell, size * plain_solution().maxwell_uncertainty)


def test_a_power_of_two_in_length_changes_no_digit_of_the_mesh(plain):
    solution = solve_capacitance(shapes.surface([shapes.scaled(mesh, 0.5) for mesh in trio()]), accuracy=0.05)
    assert len(solution.panels) == len(plain.panels)
    # sums in another order at most
    np.testing.assert_allclose(solution.maxwell, 0.5 * plain.maxwell, rtol=1e-9)


@given(st.permutations(range(3)))
@SMALL
@pytest.mark.slow
def test_order_of_conductors_only_permutes(order):
    meshes = trio()
    solution = solve_capacitance(shapes.surface([meshes[k] for k in order]), accuracy=0.05)
    plain, index = plain_solution(), np.ix_(order, order)
    check_agreement(solution, plain.maxwell[index], plain.maxwell_uncertainty[index])


def test_permittivity_scales_everything(plain):
    solution = solve_capacitance(shapes.surface(trio()), accuracy=0.05, relative_permittivity=80.0)
    # one multiplication more
    np.testing.assert_allclose(solution.maxwell, 80.0 * plain.maxwell, rtol=1e-13)
    np.testing.assert_allclose(solution.maxwell_uncertainty, 80.0 * plain.maxwell_uncertainty, rtol=1e-12)


def test_galerkin_diagonal_rises_from_pass_to_pass():
    solution = solve_capacitance(shapes.surface(trio()), accuracy=0.005)
    diagonals = np.array([np.diag(p.maxwell) for p in solution.passes])
    assert len(diagonals) > 2
    # nested spaces: no step down but by the error of the integrals
    assert np.all(np.diff(diagonals, axis=0) > -1e-6 * diagonals[-1])
    assert np.all(np.diff([p.panels for p in solution.passes]) > 0)
    assert np.all(diagonals[-1] < np.diag(solution.maxwell) + np.diag(solution.maxwell_uncertainty))


def test_splitting_a_conductor_keeps_the_sums():
    """Two bodies as one conductor: C_11 + 2 C_12 + C_22 of the pair."""
    meshes = trio()
    apart = solve_capacitance(shapes.surface(meshes), accuracy=0.02)
    joined = solve_capacitance(shapes.surface([meshes[:2], meshes[2]]), accuracy=0.02)
    expected = apart.maxwell[:2, :2].sum()
    # both within their uncertainty, entries of the first in the worst case together
    allowed = apart.maxwell_uncertainty[:2, :2].sum() + joined.maxwell_uncertainty[0, 0]
    assert abs(joined.maxwell[0, 0] - expected) < allowed


@pytest.mark.slow
def test_a_closed_shell_shields():
    """Coupling from inside to outside a closed box is zero; floating rounding and the estimate bound it."""
    inside, outside = shapes.cube(0.3), shapes.moved(shapes.cube(0.5), x=1.5)
    solution = solve_capacitance(shapes.surface([inside, shapes.cube(1.0), outside]), accuracy=0.02)
    assert abs(solution.maxwell[0, 2]) <= solution.maxwell_uncertainty[0, 2]
    assert abs(solution.to_infinity[0]) <= solution.to_infinity_uncertainty[0]
    # the accuracy asked holds for the weak coupling as a share of the geometric mean
    floor = 1e-3 * 0.02 * np.sqrt(solution.maxwell[0, 0] * solution.maxwell[2, 2])
    assert solution.maxwell_uncertainty[0, 2] <= floor or not solution.reached


@pytest.mark.parametrize("accuracy", [0.03, 0.003])
def test_cube_lies_within_its_uncertainty(accuracy):
    solution = solve_capacitance(shapes.surface([shapes.cube()]), accuracy=accuracy)
    assert solution.reached
    assert abs(solution.maxwell[0, 0] - FOUR_PI_EPSILON_0 * CUBE) < solution.maxwell_uncertainty[0, 0]


def test_parallel_plates_approach_the_ideal_value_from_above():
    gap = 0.02
    solution = solve_capacitance(shapes.surface([shapes.plate(), shapes.moved(shapes.plate(), z=gap)]), accuracy=0.02)
    ideal = EPSILON_0 / gap
    assert -solution.maxwell[0, 1] > ideal
    # the fringe adds (gap / pi)(1 + ln(2 pi / gap)) to each side, Kirchhoff's term for an edge (from memory): 9 %
    assert -solution.maxwell[0, 1] < 1.15 * ideal


def test_interruption_keeps_the_finished_passes():
    def stop(stage, done, total, note=""):
        if stage == "pass" and done >= 2:
            raise KeyboardInterrupt

    solution = solve_capacitance(shapes.surface([shapes.cube()]), accuracy=1e-5, progress=stop)
    assert solution.interrupted
    assert not solution.reached
    assert np.isfinite(solution.maxwell).all()


def test_interruption_before_the_first_pass_is_passed_on():
    def stop(stage, done, total, note=""):
        raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        solve_capacitance(shapes.surface([shapes.cube()]), progress=stop)


@pytest.mark.parametrize(
    ("settings_", "text"),
    [
        ({"accuracy": 0.0}, "accuracy"),
        ({"accuracy": 1.0}, "accuracy"),
        ({"accuracy": float("nan")}, "accuracy"),
        ({"relative_permittivity": 0.5}, "permittivity"),
        ({"relative_permittivity": float("nan")}, "permittivity"),
        ({"facets": "smooth"}, "facets"),
    ],
)
def test_bad_settings_are_named(settings_, text):
    with pytest.raises(InputError, match=text):
        solve_capacitance(shapes.surface([shapes.cube()]), **settings_)


def test_too_little_memory_is_refused():
    with pytest.raises(MemoryRefused, match="would fit"):
        solve_capacitance(shapes.surface([shapes.cube()]), memory_limit=10**6)


def test_memory_limit_ends_the_refinement_honestly():
    solution = solve_capacitance(shapes.surface([shapes.cube()]), accuracy=1e-5, memory_limit=310 * 2**20)
    assert not solution.reached
    assert any(notice.code == "accuracy-not-reached" for notice in solution.warnings)
    assert abs(solution.maxwell[0, 0] - FOUR_PI_EPSILON_0 * CUBE) < solution.maxwell_uncertainty[0, 0]


def test_wanted_entries_alone_are_refined():
    """Only the coupling asked must be accurate: fewer panels, and the other entries say what they are worth."""
    surface = shapes.surface(
        [shapes.plate(), shapes.moved(shapes.plate(), 0.0, 0.0, 0.5), shapes.moved(shapes.cube(), 9.0)]
    )
    everything = solve_capacitance(surface, accuracy=0.003)
    one = solve_capacitance(surface, accuracy=0.003, want=[(0, 1)])
    assert one.reached
    assert one.maxwell_uncertainty[0, 1] <= 0.003 * abs(one.maxwell[0, 1])
    assert len(one.panels) < len(everything.panels)
    assert (
        abs(one.maxwell - everything.maxwell).max() <= (one.maxwell_uncertainty + everything.maxwell_uncertainty).max()
    )
    with pytest.raises(InputError, match="want"):
        solve_capacitance(surface, want=[(0, 3)])


def test_a_far_body_of_complicated_shape_gets_few_panels_where_only_the_pair_is_wanted():
    """A comb of five blocks far away costs most of the panels unless the case says what it wants."""
    comb = [shapes.moved(shapes.block(0.2, 2.0, 2.0), 40.0 + 0.4 * k) for k in range(5)]
    surface = shapes.surface([[shapes.plate()], [shapes.moved(shapes.plate(), z=0.2)], comb])
    pair = solve_capacitance(surface, accuracy=0.002, want=[(0, 1)])
    everything = solve_capacitance(surface, accuracy=0.002)
    assert pair.reached
    spent, needed = (np.count_nonzero(s.panels.conductor == 2) for s in (pair, everything))
    fewest = solve_capacitance(surface, accuracy=0.5).panels
    # hardly more than the comb starts with, which is what any accuracy costs
    assert spent <= 1.1 * np.count_nonzero(fewest.conductor == 2)
    assert spent < 0.6 * needed
    # the uncertainty of what was not wanted is told all the same, and holds
    excess = np.abs(pair.maxwell - everything.maxwell)
    assert (excess <= pair.maxwell_uncertainty + everything.maxwell_uncertainty).all()


def test_an_edge_over_a_panel_near_its_own_edge_is_not_missed():
    """Three sheets, the middle one 1 mm wider all round: charge crowds under the outer rims and at its own rim alike.

    The halves of a panel over both are equal by chance, and the estimate of the error vanishes there.
    """

    def sheet(side, height):
        return shapes.moved(shapes.plate(side, side), 0.0, 0.0, height)

    surface = shapes.surface([sheet(20e-3, 0.0), sheet(22e-3, 1e-3), sheet(20e-3, 2e-3)])
    quick = solve_capacitance(surface, accuracy=0.01)
    fine = solve_capacitance(surface, accuracy=0.001)
    allowed = quick.maxwell_uncertainty + fine.maxwell_uncertainty
    assert (np.abs(quick.maxwell - fine.maxwell) <= allowed).all()
    # graded collocation of another code, extrapolated: 8.4548 and -0.0998 pF, good to about 3 in the last place
    assert fine.maxwell[1, 1] == pytest.approx(8.4548e-12, rel=2e-3, abs=0.0)
    assert fine.maxwell[0, 2] == pytest.approx(-0.0998e-12, rel=5e-3, abs=0.0)
