"""Numbers: interval and standard uncertainty made of their parts."""

from __future__ import annotations

import math
import pickle

import pytest

from analyse import Number
from analyse.numbers import make_number


def number(**more: float) -> Number:
    """3.0 in 2.9..3.2 with 1 % statistical, nothing else unless given."""
    parts = {
        "value": 3.0, "low": 2.9, "high": 3.2, "statistical": 0.01, "model": 0.0,
        "systematic": 0.0, "confidence": 0.95,
    }  # fmt: skip
    made = make_number(**{**parts, **more})
    assert made is not None
    return made


def test_without_further_parts_the_interval_is_the_statistical_one() -> None:
    one = number()
    assert one.interval == pytest.approx((2.9, 3.2), rel=1e-15)
    assert one.standard_uncertainty == pytest.approx(0.03, rel=1e-15)
    assert one.relative_half_width == pytest.approx(0.2 / 3, rel=1e-15)
    assert (one.statistical, one.model, one.systematic) == pytest.approx((0.03, 0.0, 0.0))


def test_parts_are_absolute_and_add_in_quadrature() -> None:
    # JCGM 100:2008, 5.1.2: independent parts add in quadrature.
    one = number(model=0.02, systematic=0.02)
    assert (one.model, one.systematic) == pytest.approx((0.06, 0.06))
    assert one.standard_uncertainty == pytest.approx(3.0 * math.sqrt(0.01**2 + 2 * 0.02**2))


def test_model_spread_widens_as_it_is_and_systematic_in_quadrature() -> None:
    assert number(model=0.02).interval == pytest.approx((2.84, 3.26), rel=1e-14)
    k = 1.959963984540054  # of the normal distribution, 95 %
    low, high = number(systematic=0.02).interval
    assert low == pytest.approx(3.0 - math.hypot(0.1, k * 0.06), rel=1e-14)
    assert high == pytest.approx(3.0 + math.hypot(0.2, k * 0.06), rel=1e-14)


def test_a_higher_confidence_expands_the_systematic_part_more() -> None:
    assert number(systematic=0.02, confidence=0.99).high > number(systematic=0.02).high
    assert number(confidence=0.99).high == number().high


@pytest.mark.parametrize(
    ("low", "value", "high"),
    [(-math.inf, 3.0, 3.2), (2.9, 3.0, math.inf), (2.9, math.nan, 3.2), (0.0, 3.0, 3.2),
     (-1.0, 3.0, 3.2), (3.1, 3.0, 3.2), (2.9, 3.3, 3.2)],
)  # fmt: skip
def test_an_interval_without_an_end_is_no_number(low: float, value: float, high: float) -> None:
    assert make_number(value, low, high, 0.01, 0.0, 0.0, 0.95) is None


@pytest.mark.parametrize("parts", [(0.6, 0.0), (0.0, 0.6), (0.9, 0.9)])
def test_a_part_as_large_as_the_value_leaves_no_number(parts: tuple[float, float]) -> None:
    assert make_number(3.0, 1.0, 5.0, 0.01, *parts, 0.95) is None


@pytest.mark.parametrize("scale", [10.0, 1e15, 1e-12])
def test_everything_scales_with_the_value(scale: float) -> None:
    one = number(model=0.01, systematic=0.02)
    other = make_number(3 * scale, 2.9 * scale, 3.2 * scale, 0.01, 0.01, 0.02, 0.95)
    assert other is not None
    assert other.interval == pytest.approx([scale * end for end in one.interval], rel=1e-14)
    assert other.standard_uncertainty == pytest.approx(scale * one.standard_uncertainty, rel=1e-14)
    assert other.relative_half_width == pytest.approx(one.relative_half_width, rel=1e-13)


def test_frozen_and_pickled() -> None:
    one = number()
    assert pickle.loads(pickle.dumps(one)) == one
    with pytest.raises(AttributeError):
        one.value = 4.0  # type: ignore[misc]
