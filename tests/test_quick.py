"""The two quick readings of the trade: when they are read, and how far they are from exact."""

from __future__ import annotations

import numpy as np
import pytest

from analyse.quick import Crossing, QuickReading, QuickReadings

E = 1.602176634e-19


def ramp(
    density: float, mobility: float, noise_ohm: float = 0.0, seed: int = 1, **course: float
) -> QuickReadings:
    """A ramp over a sample of straight lines."""
    rng = np.random.default_rng(seed)
    slope = 1 / (density * E)
    readings = QuickReadings()
    first, last, count = course.get("first", 0.0), course.get("last", 8.0), 1600
    for field_T in np.linspace(first, last, count):
        xx, xy = slope / mobility, slope * field_T
        readings.add(
            float(field_T), xx + noise_ohm * rng.normal(), xy + noise_ohm * rng.normal()
        )
    return readings


@pytest.mark.parametrize("density", [0.4e15, 1e15, 3.7e15])
@pytest.mark.parametrize("sign", [1, -1])
def test_density_is_the_field_at_6250_ohm(density: float, sign: int) -> None:
    """Common practice; exactly it would be 6241.5 Ohm, so that the reading is 0.14 % high."""
    reading = ramp(sign * density, sign * 5.0).density
    assert reading is not None
    assert reading.density_per_m2 == pytest.approx(density * 6250.0 / 6241.509, rel=1e-5)
    assert reading.density_per_m2 == pytest.approx(density, rel=2e-3)


@pytest.mark.parametrize("mobility", [0.2, 1.0, 7.5])
def test_mobility_is_one_over_the_field_of_equal_resistivities(mobility: float) -> None:
    """Common practice."""
    reading = ramp(3e15, mobility).mobility
    assert reading is not None
    assert reading.mobility_m2_per_V_s == pytest.approx(mobility, rel=1e-5)


def test_negative_fields_read_the_same() -> None:
    one, other = ramp(1e15, 5.0), ramp(1e15, 5.0, last=-8.0)
    assert one.density == other.density
    assert one.mobility == other.mobility


def test_not_read_before_the_mark_is_reached() -> None:
    readings = ramp(4e15, 0.1, last=3.9)
    assert (readings.density, readings.mobility) == (None, None)


@pytest.mark.parametrize("seed", range(10))
def test_the_uncertainty_tells_the_scatter(seed: int) -> None:
    reading = ramp(1e15, 5.0, noise_ohm=3.0, seed=seed).density
    assert reading is not None
    assert reading.uncertainty_T == pytest.approx(3.0 / 6241.5, rel=0.75)
    assert abs(reading.field_T - 6250 / 6241.509) < 4 * reading.uncertainty_T
    assert reading.relative_uncertainty == reading.uncertainty_T / reading.field_T


def test_noise_about_zero_is_no_crossing() -> None:
    for seed in range(50):
        rng, crossing = np.random.default_rng(seed), Crossing()
        for k in range(400):
            crossing.add(0.01 * k, float(rng.normal()))
        assert crossing.reading is None


def test_the_first_crossing_stays() -> None:
    crossing = Crossing()
    for k in range(40):
        crossing.add(0.1 * k, 0.1 * k - 1.0)
    first = crossing.reading
    assert first is not None
    assert first.field_T == pytest.approx(1.0)
    for k in range(40):
        crossing.add(0.1 * k, 0.1 * k - 2.0)
    assert crossing.reading == first


@pytest.mark.parametrize(
    "points",
    [
        [(1.0, -1.0)] * 5 + [(1.0, 1.0)] * 5,  # the field stands
        [(0.1 * k, 1.0 - 0.1 * k) for k in range(30)],  # falls through zero
        [(0.1 * k, 0.0) for k in range(30)],  # is zero everywhere
    ],
)
def test_what_is_no_rising_line_is_not_read(points: list[tuple[float, float]]) -> None:
    crossing = Crossing()
    for point in points:
        crossing.add(*point)
    assert crossing.reading is None


def test_units() -> None:
    reading = QuickReading(2.4, 0.012)
    assert reading.density_per_m2 == 2.4e15
    assert reading.mobility_m2_per_V_s == pytest.approx(1 / 2.4)
    assert reading.relative_uncertainty == pytest.approx(0.005)
