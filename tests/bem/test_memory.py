import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from daraf.bem.errors import InputError, MemoryRefused
from daraf.bem.memory import (
    dense_bytes,
    fast_bytes,
    free_memory,
    panels_that_fit,
    peak_memory,
    refuse_if_too_large,
)


@given(st.integers(1, 200_000))
def test_panels_that_fit_is_the_inverse_of_dense_bytes(n):
    # one panel of slack for the square root's rounding
    assert abs(panels_that_fit(dense_bytes(n), 1, fast=False) - n) <= 1


@given(st.integers(2**29, 2**42))
def test_what_fits_fits_and_one_more_does_not(limit):
    n = panels_that_fit(limit, 1, fast=False)
    # as above, a rounding of one panel
    assert dense_bytes(max(n - 1, 0)) <= limit < dense_bytes(n + 2)


def test_nothing_fits_into_less_than_the_libraries_take():
    assert panels_that_fit(0, 3, fast=True) == 0
    assert panels_that_fit(10**6, 1, fast=False) == 0


def test_known_panels_cost_their_matrix():
    assert dense_bytes(1000, 500) - dense_bytes(1000) == 8 * 500**2


def test_refusal_is_one_line_that_names_need_limit_and_what_fits():
    with pytest.raises(MemoryRefused) as caught:
        refuse_if_too_large(100_000, 2, 4 * 2**30, fast=False)
    text = str(caught.value)
    assert "\n" not in text
    need, free = re.findall(r"([\d.]+) GiB", text)
    # printed with one digit behind the point
    assert float(need) == pytest.approx(dense_bytes(100_000) / 2**30, abs=0.06)
    assert float(free) == 4.0
    assert str(panels_that_fit(4 * 2**30, 2, fast=False)) in text
    assert "export coarser" in text
    assert isinstance(caught.value, InputError)


def test_what_fits_is_not_refused():
    limit = 4 * 2**30
    refuse_if_too_large(panels_that_fit(limit, 2, fast=False) - 1, 2, limit, fast=False)
    refuse_if_too_large(panels_that_fit(limit, 2, fast=True) - 1, 2, limit, fast=True)


def test_the_fast_operator_fits_what_the_matrix_does_not():
    limit = 4 * 2**30
    refuse_if_too_large(100_000, 2, limit, fast=True)
    with pytest.raises(MemoryRefused):
        refuse_if_too_large(10_000_000, 2, limit, fast=True)
    assert fast_bytes(100_000, 2) < limit < dense_bytes(100_000)


def test_machine_figures_are_plausible():
    assert 2**20 < peak_memory() < 2**45
    assert 0 < free_memory() < 2**45
