"""What is left in a mean after rounding to a last digit, against simulation."""

from __future__ import annotations

import numpy as np
import pytest

from analyse.model_spread import left_by_rounding


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
