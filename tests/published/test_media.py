"""Conductors among dielectrics against exact solutions, within the uncertainty that each solve states."""

import numpy as np
import pytest

from daraf.bem.constants import FOUR_PI_EPSILON_0
from daraf.bem.media import METAL, Media
from daraf.bem.media_solve import solve_media
from published import shapes as S  # noqa: N812
from published.media_cases import MEDIA_CASES, media_case_named, split_faces

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


def sheet_on_a_cube(ratio):
    """A metal sheet on the top face of a dielectric unit cube: one panel each, air before and dielectric behind."""
    top, rest = split_faces(S.cube(1.0), lambda n: bool(n[2] > 0.9))
    return S.surface([top, rest]), Media(np.array([1.0, ratio]), [0, 0], [1, 1], 1)


def coated_cube(ratio):
    return S.surface([S.cube(0.5), S.cube(1.0)]), Media(np.array([1.0, ratio]), [1, 0], [METAL, 1], 1)


@pytest.mark.parametrize("make", [sheet_on_a_cube, coated_cube])
def test_dielectric_of_ratio_10000_is_nearly_metal(make):
    """Sharp edges, a contact line, ratio 1e4: the limit is the metal cube, 0.66067815409957 (published value)."""
    solution = solve_media(*make(1e4), accuracy=0.005)
    value = solution.maxwell[0, 0, 0] / FOUR_PI_EPSILON_0
    spread = solution.maxwell_uncertainty[0, 0, 0] / FOUR_PI_EPSILON_0
    assert solution.reached
    # voltage lost inside: charge over ratio times a capacitance of order 1 inside, a few parts in 1e4
    assert abs(value - 0.66067815409957) <= spread + 3e-4
