"""Conductors among dielectrics against exact solutions, within the uncertainty that each solve states."""

import numpy as np
import pytest

from daraf.bem.constants import FOUR_PI_EPSILON_0
from daraf.bem.media_solve import solve_media
from published.media_cases import MEDIA_CASES, media_case_named

QUICK = ("coated-coarse", "coated-80", "thin-coat-10000", "lossy-coat", "half-filled")


def check(name, accuracy):
    case = media_case_named(name)
    surface, media = case.make()
    solution = solve_media(surface, media, accuracy=accuracy)
    exact = FOUR_PI_EPSILON_0 * case.reference()
    known = np.isfinite(exact.real)
    error, spread = (solution.maxwell[0] - exact)[known], solution.maxwell_uncertainty[0][known]
    assert solution.reached
    assert np.all(np.abs(error.real) <= spread.real)
    if np.iscomplexobj(error):
        assert np.all(np.abs(error.imag) <= spread.imag)


@pytest.mark.parametrize("name", QUICK)
def test_exact_within_uncertainty(name):
    check(name, 0.02)


@pytest.mark.slow
@pytest.mark.parametrize("case", MEDIA_CASES, ids=lambda case: case.name)
@pytest.mark.parametrize("accuracy", [0.02, 0.005])
def test_exact_within_uncertainty_all(case, accuracy):
    check(case.name, accuracy)
