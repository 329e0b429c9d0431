"""Quantities at the border."""

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st

from daraf.bem.errors import InputError
from daraf.io import units
from daraf.io.units import decimals, engineering, parse_quantity, prefix_for, rounded, with_uncertainty


@pytest.mark.parametrize(
    ("text", "kind", "expected"),
    [
        ("5 mm", "length", 5e-3),
        ("5mm", "length", 5e-3),
        (" -2.5e1 um ", "length", -25e-6),
        ("1 in", "length", 0.0254),
        ("3 mil", "length", 76.2e-6),
        (0.25, "length", 0.25),
        ("20 kV", "voltage", 20e3),
        ("3 nC", "charge", 3e-9),
        ("3 µC", "charge", 3e-6),
        ("2 A*s", "charge", 2.0),
        ("30 deg", "angle", math.pi / 6),
        ("30°", "angle", math.pi / 6),
        ("0.25 turn", "angle", math.pi / 2),
        ("0.5 %", "ratio", 0.005),
        ("0.5%", "ratio", 0.005),
        ("0.005", "ratio", 0.005),
    ],
)
def test_known_units(text, kind, expected):
    assert parse_quantity(text, kind) == pytest.approx(expected, rel=1e-15)


@pytest.mark.parametrize(("kind", "unit"), [(kind, unit) for kind, table in units._COMMON.items() for unit in table])
def test_short_table_holds_what_pint_says(kind, unit):
    si, example = units.KINDS[kind]
    said = units._factor(f"1 {unit}", unit, kind, si, example)
    assert units._COMMON[kind][unit] == pytest.approx(said, rel=1e-15)  # one rounding of pint's products


@pytest.mark.parametrize(
    ("value", "kind", "words"),
    [
        ("5", "length", "has no unit"),
        ("5,2 mm", "length", "decimal comma"),
        ("5 kg", "length", "unknown unit 'kg'"),
        ("5 mV", "length", "is no length"),
        ("mm", "length", "does not start with a number"),
        ("5 mm; import os", "length", "is no unit"),
        ("5 mm 3 mm", "length", "is no unit"),
        ("1e400 mm", "length", "not finite"),
        (float("nan"), "voltage", "not finite"),
        (True, "voltage", "is no voltage"),
        ([5], "charge", "is no charge"),
        ("", "angle", "does not start with a number"),
    ],
)
def test_bad_quantities_say_what_to_write(value, kind, words):
    with pytest.raises(InputError, match=words):
        parse_quantity(value, kind)


@pytest.mark.parametrize(
    ("magnitude", "expected"),
    [
        (3.3e-12, (-12, "p")),
        (999.0, (0, "")),
        (1e3, (3, "k")),
        (1e-9, (-9, "n")),
        (0.0, (0, "")),
        (1e-40, (-24, "y")),
    ],
)
def test_engineering_prefix(magnitude, expected):
    assert prefix_for(magnitude) == expected


@pytest.mark.parametrize(
    ("value", "uncertainty", "expected"),
    [
        (12.3456e-12, 0.0123e-12, "12.346 ± 0.012 pF"),
        (12.3456e-12, 0.0996e-12, "12.35 ± 0.10 pF"),
        (-12.3456e-12, 4.56e-12, "-12.3 ± 4.6 pF"),
        (1e-18, 2e-14, "0 ± 20 fF"),
        (-1e-18, 2e-14, "0 ± 20 fF"),
        (123.4e-12, 56e-12, "123 ± 56 pF"),
        (5e-12, 0.0, "5 pF"),
        (0.0, 0.0, "0 F"),
    ],
)
def test_rounded_to_two_digits_of_the_uncertainty(value, uncertainty, expected):
    assert with_uncertainty(value, uncertainty, "F") == expected


@given(st.floats(-1e3, 1e3), st.floats(1e-6, 1e2))
def test_rounding_keeps_the_value_within_a_twentieth_of_the_uncertainty(value, uncertainty):
    text, spread = rounded(value, uncertainty, 0)
    # Half a unit of the second digit: at most 5 % of an uncertainty 1.0...; above 100 whole numbers are kept.
    assert abs(float(text) - value) <= 0.0501 * uncertainty
    assert float(spread) == pytest.approx(uncertainty, rel=0.0501)


@given(st.floats(1e-8, 1e4))
def test_decimals_show_two_digits(uncertainty):
    shown = f"{uncertainty:.{decimals(uncertainty)}f}"
    digits = shown.replace(".", "").lstrip("0")
    assert len(digits) == 2 or (float(shown) >= 100 and "." not in shown)


def test_engineering_of_a_length():
    assert engineering(0.00523, "m") == "5.23 mm"
    assert engineering(123e6, "B", 3) == "123 MB"
