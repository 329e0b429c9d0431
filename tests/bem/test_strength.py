"""Strength of gas gaps: printed values of the laws, and sphere gaps of the standard."""

import math

import numpy as np
import pytest
from scipy.integrate import quad

from daraf.bem.errors import InputError
from daraf.bem.strength import (
    CRITICAL_FIELD,
    STREAMER_CONSTANT,
    effective_ionisation,
    inception_factor,
    ionisation_integral,
    peek_field,
    relative_air_density,
    uniform_gap_voltage,
    utilisation,
)

#: Density at 20 C and 1 bar; and Peek's density 1 (25 C) as ours.
BAR = 1.0 / 1.01325
PEEKS = relative_air_density(101.325e3, 298.15)


# Surface gradients in kV/cm worked out by hand from Peek's printed forms (3rd ed. 1929), radius in cm.
@pytest.mark.parametrize(
    ("shape", "radius", "expected"),
    [
        ("parallel wires", 0.1, 58.5554),
        ("parallel wires", 0.5, 42.7703),
        ("parallel wires", 1.0, 39.0300),
        ("coaxial wire", 0.1, 61.1934),
        ("coaxial wire", 1.0, 40.5480),
        ("sphere", 1.0, 41.8880),
        ("sphere", 12.5, 31.3544),
    ],
)
def test_peek(shape, radius, expected):
    assert peek_field(0.01 * radius, PEEKS, shape=shape) == pytest.approx(expected * 1e5, rel=2e-6)


def test_density_is_one_at_the_standard_atmosphere():
    assert relative_air_density(101.325e3, 293.15) == 1.0
    # an alpine site: three quarters of the pressure, at freezing point
    assert relative_air_density(76e3, 273.15) == pytest.approx(0.805, abs=5e-4)


def test_critical_field_is_the_root_of_the_coefficient():
    assert effective_ionisation(CRITICAL_FIELD * 1.0001) > 0.0
    assert effective_ionisation(CRITICAL_FIELD * 0.9999) == 0.0
    assert pytest.approx(26.2e5, rel=2e-3) == CRITICAL_FIELD


def test_both_forms_of_the_coefficient_meet():
    join = 7.943e6 * 1.01325
    below, above = effective_ionisation([join * (1 - 1e-9), join * (1 + 1e-9)])
    assert below == pytest.approx(above, rel=2e-3)  # as printed, the two forms differ by 1e-3 where they meet


def test_uniform_gap_strength_of_the_criterion():
    # 30.3 kV/cm at 1 cm and 26.5 kV/cm at 10 cm and 1 bar follow from the coefficient (Petcharaks 1995)
    for gap, expected in ((0.01, 30.3e5), (0.10, 26.5e5)):
        factor = inception_factor([0.0, gap], [1e5, 1e5], BAR)
        assert factor * 1e5 == pytest.approx(expected, rel=1.5e-3)  # printed to three digits
    # and agree with the measured law of the uniform field within its own scatter of some per cent
    assert uniform_gap_voltage(0.01) == pytest.approx(30.3e3, rel=5e-3)


def test_integral_over_a_decaying_field_against_adaptive_quadrature():
    s = np.linspace(0.0, 0.02, 4001)
    field = 60e5 * (0.01 / (0.01 + s)) ** 2
    end = 0.01 * (math.sqrt(60e5 / CRITICAL_FIELD) - 1.0)
    exact, _ = quad(lambda x: float(effective_ionisation(60e5 * (0.01 / (0.01 + x)) ** 2)), 0.0, end, epsabs=1e-9)
    assert ionisation_integral(s, field) == pytest.approx(exact, rel=1e-5)


def sphere_gap(radius, gap):
    """Axis and field per volt between two spheres, one earthed, by image charges (Maxwell, 1873, art. 172)."""
    centre = 2.0 * radius + gap
    charges, at = [radius], [0.0]  # of the sphere at 1 V, in units of 4 pi eps0
    on_other, at_other = [], []
    for _ in range(4000):
        distance = centre - at[-1]
        on_other.append(-charges[-1] * radius / distance)
        at_other.append(centre - radius**2 / distance)
        distance = at_other[-1]
        charges.append(-on_other[-1] * radius / distance)
        at.append(radius**2 / distance)
        if charges[-1] < 1e-15 * radius:
            break
    s = gap * (1.0 - np.cos(np.linspace(0.0, math.pi, 1201))) / 2.0
    x = radius + s[:, None]
    first = np.array(charges) * np.sign(x - at) / (x - at) ** 2
    second = np.array(on_other) * np.sign(x - at_other) / (x - at_other) ** 2
    return s, first.sum(axis=1) + second.sum(axis=1)


# Diameter and gap in cm; kV peak: IEC 60052:2002 table 2 (from memory, uncertainty 3 % as the standard states), and
# the criterion evaluated on the exact field by another program.
SPHERE_GAPS = [
    (2.0, 0.5, 17.4, 16.615),
    (2.0, 1.0, 30.7, 28.841),
    (5.0, 1.0, 32.0, 30.467),
    (5.0, 2.0, 57.5, 54.687),
    (6.25, 2.0, 58.5, 56.123),
    (10.0, 2.0, 59.0, 57.186),
    (10.0, 5.0, 123.0, 117.54),
    (12.5, 5.0, 129.0, 124.54),
    (15.0, 5.0, 133.0, 128.58),
    (25.0, 5.0, 137.0, 134.66),
    (25.0, 10.0, 244.0, 235.21),
    (50.0, 10.0, 263.0, 259.25),
    (50.0, 25.0, 530.0, 509.66),
    (100.0, 10.0, 266.0, 266.93),
    (100.0, 30.0, 709.0, 704.52),
    (100.0, 50.0, 1010.0, 977.03),
]


@pytest.mark.parametrize(("diameter", "gap", "standard", "criterion"), SPHERE_GAPS)
def test_sphere_gaps_of_iec_60052(diameter, gap, standard, criterion):
    s, field = sphere_gap(0.5e-2 * diameter, 1e-2 * gap)
    voltage = inception_factor(s, field, 1.013 * BAR) * 1e-3  # as that program did
    # it agrees to 5e-5 where the whole gap is over the critical field, and to 6e-4 where its quadrature met a kink
    assert voltage == pytest.approx(criterion, rel=1e-3)
    # The criterion tells onset, the table breakdown: 3 % of the standard, and up to 4 % that the onset of small
    # spheres lies below breakdown (Petcharaks 1995 finds the same sign).
    assert -0.07 < voltage / standard - 1.0 < 0.03


def test_scales_with_density_as_the_similarity_law_says():
    s, field = sphere_gap(0.05, 0.02)
    # the same density times length: the same voltage
    half = inception_factor(2.0 * s, field / 2.0, 0.5)
    assert half == pytest.approx(inception_factor(s, field), rel=1e-9)


def test_raised_by_the_factor_the_integral_is_the_constant():
    s, field = sphere_gap(0.05, 0.02)
    factor = inception_factor(s, 3e4 * field)
    assert ionisation_integral(s, factor * 3e4 * field) == pytest.approx(STREAMER_CONSTANT, rel=1e-9)


def test_utilisation_of_spheres_by_their_exact_field():
    # Schwaiger's factor, one sphere earthed, gap one radius: 0.65920444 (exact series)
    _, field = sphere_gap(1.0, 1.0)
    assert utilisation(1.0, 1.0, float(field[0])) == pytest.approx(0.65920444, rel=1e-7)


@pytest.mark.parametrize(
    "call",
    [
        lambda: relative_air_density(-1.0, 293.0),
        lambda: relative_air_density(1e5, math.nan),
        lambda: peek_field(0.0),
        lambda: peek_field(0.01, shape="cube"),
        lambda: ionisation_integral([0.0, 1.0], [1.0]),
        lambda: ionisation_integral([0.0, 0.0], [1.0, 1.0]),
        lambda: inception_factor([0.0, 1e-12], [1.0, 1.0]),
        lambda: utilisation(1.0, 0.0, 1.0),
        lambda: uniform_gap_voltage(-0.1),
    ],
)
def test_refuses_nonsense(call):
    with pytest.raises(InputError, match="strength"):
        call()


def test_no_field_never_breaks_down():
    assert inception_factor([0.0, 1.0], [0.0, 0.0]) == math.inf
