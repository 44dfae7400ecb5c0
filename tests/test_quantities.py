"""Numbers with uncertainty as text, against the GUM's own examples and by property."""

from __future__ import annotations

import doctest
import math
import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from analyse.estimate_table import NUMBERS
from dashboard import quantities
from dashboard.quantities import (
    QUANTITIES,
    ascii_text,
    concise,
    decimals_for,
    percent,
    write,
    write_interval,
)

DENSITY = QUANTITIES["sheet_density_per_m2"]
MOBILITY = QUANTITIES["mobility_m2_per_V_s"]
TIME = QUANTITIES["scattering_time_s"]
SIZES = st.floats(1e-20, 1e25)


def test_the_examples_of_the_docstrings_are_true() -> None:
    assert doctest.testmod(quantities).failed == 0


@pytest.mark.parametrize(
    ("value", "uncertainty", "text"),
    [
        (100.02147, 0.00035, "100.02147(35)"),  # JCGM 100:2008, 7.2.2: the mass of a standard
        (9.10938291, 0.00000040, "9.10938291(40)"),
        (2.4013, 0.0052, "2.4013(52)"),
        (27.0412, 0.0995, "27.04(10)"),  # 0.0995 has the two digits 0.10
        (27.04, 1.23, "27.0(1.2)"),
        (27.04, 12.3, "27(12)"),
        (274.0, 123.0, "270(120)"),
        (-0.004, 0.05, "-0.004(50)"),
        (-0.0004, 0.05, "0.000(50)"),
        (1.5, 0.0, "1.5(0)"),
    ],
)
def test_a_value_is_written_with_two_digits_of_its_uncertainty(
    value: float, uncertainty: float, text: str
) -> None:
    assert concise(value, uncertainty) == text


@given(value=SIZES, share=st.floats(1e-9, 10.0), sign=st.sampled_from([-1, 1]))
def test_what_is_written_reads_back_within_its_last_digit(
    value: float, share: float, sign: int
) -> None:
    uncertainty = value * share
    found = re.fullmatch(r"(-?[\d.]+)\(([\d.]+)\)", concise(sign * value, uncertainty))
    assert found is not None
    last_digit = 10.0 ** -decimals_for(uncertainty)
    assert abs(float(found[1]) - sign * value) <= 0.51 * last_digit + 1e-12 * value
    spread = float(found[2])
    if "." not in found[2] and last_digit < 1:
        spread *= last_digit
    assert spread == pytest.approx(uncertainty, rel=0.06, abs=0.51 * last_digit)


def test_each_number_of_the_table_has_a_way_to_be_written() -> None:
    assert [(name, q.name) for name, q in QUANTITIES.items()] == [
        (column, text) for column, _, text in NUMBERS
    ]


@pytest.mark.parametrize(
    ("quantity", "value", "uncertainty", "texts"),
    [
        (DENSITY, 2.4013e15, 5.2e12, ("2.4013(52) × 10¹⁵ m⁻²", "2.4013(52) × 10¹¹ cm⁻²")),
        (DENSITY, 9.87e14, 3e12, ("0.9870(30) × 10¹⁵ m⁻²", "0.9870(30) × 10¹¹ cm⁻²")),
        (DENSITY, 3.5e19, 2e17, ("35.00(20) × 10¹⁸ m⁻²", "35.00(20) × 10¹⁴ cm⁻²")),
        (MOBILITY, 27.04, 0.12, ("27.04(12) m²/Vs", "27.04(12) × 10⁴ cm²/Vs")),
        (MOBILITY, 1500.0, 12.0, ("1500(12) m²/Vs", "1500(12) × 10⁴ cm²/Vs")),
        (MOBILITY, 0.00052, 0.00001, ("5.20(10) × 10⁻⁴ m²/Vs", "5.20(10) cm²/Vs")),
        (TIME, 1.0301e-11, 4e-14, ("10.301(40) ps",)),
        (TIME, 1.2e-14, 1e-16, ("0.01200(10) ps",)),
    ],
)
def test_a_number_is_written_in_each_of_its_units(
    quantity: quantities.Quantity, value: float, uncertainty: float, texts: tuple[str, ...]
) -> None:
    assert write(quantity, value, uncertainty).texts == texts


@given(value=SIZES, share=st.floats(1e-6, 0.9))
def test_an_interval_is_rounded_outwards(value: float, share: float) -> None:
    low, high = value * (1 - share), value * (1 + share)
    for quantity in QUANTITIES.values():
        factor = quantity.factor(quantity.power(value))
        shown = [float(text) for text in write_interval(quantity, value, low, high)]
        tiny = 1e-12 * value * factor
        assert shown[0] <= low * factor + tiny
        assert shown[1] >= high * factor - tiny
        width = (high - low) * factor
        assert shown[1] - shown[0] <= 1.2 * width + 10.0**-quantities.MOST_DECIMALS * 4


def test_a_number_keeps_its_power_of_ten_over_the_range_of_its_trade() -> None:
    assert {DENSITY.power(10.0**e) for e in range(13, 18)} == {15}
    assert {MOBILITY.power(10.0**e) for e in range(-1, 4)} == {0}
    assert {TIME.power(10.0**e) for e in range(-16, -8)} == {0}
    assert [DENSITY.power(odd) for odd in (0.0, math.inf)] == [12, 21]


@pytest.mark.parametrize(
    ("share", "text"),
    [(0.01, "1.0 %"), (0.00534, "0.53 %"), (0.123, "12 %"), (1.5, "150 %"), (0.0, "0.000 %")],
)
def test_a_share_has_two_digits(share: float, text: str) -> None:
    assert percent(share) == text


def test_a_number_can_be_told_in_ascii() -> None:
    text = write(DENSITY, 2.4013e15, 5.2e12).texts[0]
    assert ascii_text(text) == "2.4013(52) x 10^15 m^-2"
    assert ascii_text(write(MOBILITY, 27.04, 0.12).texts[1]) == "27.04(12) x 10^4 cm^2/Vs"
