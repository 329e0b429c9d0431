"""The collocation on graded meshes that rectangles are compared with, and its table."""

import numpy as np
import pytest

from published import exact
from published.exact_rectangles import MODELS, VALUES, rectangles
from published.graded import graded, maxwell_matrix, richardson, sheet


def test_square_is_met_with_third_order():
    found = []
    for n in (8, 12):
        lines = graded(n, 0.0, 0.5, power=4.0, ends=(False, True))
        found.append(maxwell_matrix([sheet(0, (0, 0, 0), lines, lines)], (0, 1)))
    # observed: -2.2e-4 with 12 cells a side of the quarter
    assert abs(found[1][0, 0] / exact.PLATES[1.0] - 1.0) < 4e-4
    # the rest is of fourth order
    assert richardson(*found, 1.5)[0, 0] == pytest.approx(exact.PLATES[1.0], rel=3e-5)


def test_mirrors_give_what_the_whole_gives():
    half = graded(4, 0.0, 0.5, power=2.0, ends=(False, True))
    whole = np.concatenate([-half[:0:-1], half])
    full = maxwell_matrix([sheet(0, (0, 0, 0), whole, whole)])
    # the same equations, solved in another order
    assert maxwell_matrix([sheet(0, (0, 0, 0), half, half)], (0, 1)) == pytest.approx(full, rel=1e-10)


def test_parallel_squares_are_met():
    lines = graded(8, 0.0, 0.5, power=4.0, ends=(False, True))
    sheets = [sheet(k, (0, 0, 0.2 * k), lines, lines) for k in range(2)]
    # 64 cells a quarter, not extrapolated
    np.testing.assert_allclose(maxwell_matrix(sheets, (0, 1)), exact.parallel_squares(1.0, 0.2), rtol=2e-3)


def test_every_model_has_its_value():
    assert set(MODELS) == set(VALUES)
    for name, (matrix, spread) in VALUES.items():
        assert np.shape(matrix) == rectangles(name).shape
        # two extrapolations differ by little against the uncertainties that are compared with them
        assert spread < 5e-5


@pytest.mark.parametrize("name", ["coplanar", "bracket", "strips"])
def test_coarse_meshes_lead_to_the_table(name):
    coarse, fine = MODELS[name](4), MODELS[name](6)
    scale = np.sqrt(np.outer(np.diag(rectangles(name)), np.diag(rectangles(name))))
    # observed with 4, 6 and 8 cells: two extrapolations differ by 1e-4 to 4e-4
    assert np.abs((richardson(coarse, fine, 1.5) - rectangles(name)) / scale).max() < 1e-3
