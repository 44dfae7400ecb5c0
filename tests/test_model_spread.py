"""What a fit can't know of itself: a coarse last digit, against simulation; the tail of a peak."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from analyse.basis import CURVED, LEVEL, SLOPING, regressors
from analyse.model_spread import far_level, left_by_rounding
from analyse.segments import Pool, Segment


@pytest.mark.parametrize("noise", [0.0, 0.1, 0.2, 0.3, 0.4, 0.6])
def test_the_mean_of_rounded_readings_is_off_by_at_most_what_is_said(noise: float) -> None:
    """100 levels between two digits, 2e5 readings each (Monte Carlo error of a mean < 0.0015)."""
    rng = np.random.default_rng(8)
    worst = variance = 0.0
    for level in np.linspace(0.0, 0.99, 100):
        read = np.round(level + noise * rng.standard_normal(200_000))
        worst = max(worst, abs(float(read.mean()) - level))
        variance += float(read.var()) / 100
    said = left_by_rounding(max(variance, 1e-30), 1.0)
    assert worst <= said + 0.005 if noise else said == pytest.approx(0.5)
    assert said <= 0.51


def test_noise_of_a_digit_and_more_leaves_nothing() -> None:
    assert left_by_rounding(4.1, 1.0) == left_by_rounding(1.0, 0.0) == 0.0
    assert left_by_rounding(0.5, 1.0) < 1e-3


def pool_of(curve: Callable[[float], float], low_T: float, high_T: float) -> Pool:
    """400 readings of a longitudinal resistivity, evenly over a window."""
    pool = Pool()
    for fields in np.array_split(np.linspace(low_T, high_T, 400), 20):
        segment = Segment(0, 0.0, float(fields[0]), 1)
        for field_T in map(float, fields):
            row = regressors("longitudinal", field_T)
            segment.add(field_T, field_T, row, curve(field_T), 1.0)
        pool.take(segment)
    return pool


def test_a_curve_that_levels_off_tells_its_level() -> None:
    pool = pool_of(lambda b: 100 + 5 / (1 + (b / 0.1)), 0.0, 1.0)
    far = far_level(pool, CURVED, 1.0, reach=0.05)
    assert far == pytest.approx(100.4, abs=0.6)  # the fit is a parabola; rho at zero is 105


def test_a_straight_fall_is_looked_at_as_far_as_a_peak_could_reach() -> None:
    pool = pool_of(lambda b: 100 - 10 * b, 0.0, 1.0)
    assert far_level(pool, SLOPING, 1.0, reach=0.2) == pytest.approx(98.0)
    assert far_level(pool, SLOPING, 1.0, reach=5.0) == pytest.approx(90.0)


def test_a_window_that_does_not_come_near_zero_counts_to_its_end() -> None:
    pool = pool_of(lambda b: 100 - 10 * b, 0.5, 1.0)
    assert far_level(pool, SLOPING, 1.0, reach=0.2) == pytest.approx(90.0)


@pytest.mark.parametrize("size", [3.0, -3.0])
def test_a_smooth_magnetoresistance_is_no_tail(size: float) -> None:
    pool = pool_of(lambda b: 100 + size * b * b, 0.0, 1.0)
    assert far_level(pool, CURVED, 1.0, reach=0.2) is None
    assert far_level(pool, LEVEL, 1.0, reach=0.2) is None
