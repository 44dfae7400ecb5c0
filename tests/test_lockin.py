"""The lock-in's filter against its table: n equal RC stages, times in units of T.

Bandwidth and settling to 1 % were checked against a published table of such filters (0.25, 0.125,
0.09375, 0.078125; 4.605, 6.638, 8.406, 10.045 T); all figures here were recomputed symbolically
and by quadrature.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass, replace

import pytest
from scipy.integrate import quad
from scipy.special import gammainc

from analyse import LockinFilter
from analyse.field_track import FieldTrack

SPACINGS = (1.0, 0.5, 3.0, 5.0)


@dataclass(frozen=True)
class Row:
    """One number of poles. ``settled``: to 90, 99, 99.9 and 99.99 %; ``rho``: at lags 1 and 3;
    ``below``: lags beyond which rho is below 0.05 and 0.01; ``inflation``: at SPACINGS."""

    poles: int
    bandwidth: float
    f_3dB: float
    settled: tuple[float, float, float, float]
    rho: tuple[float, float]
    integral: float
    below: tuple[float, float]
    inflation: tuple[float, float, float, float]


TABLE = [
    Row(
        1, 1 / 4, 0.159154943092,
        (2.30258509, 4.60517019, 6.90775528, 9.21034037),
        (0.367879441171, 0.0497870683679), 2.0, (2.996, 4.605),
        (2.163953414, 4.082988165, 1.104791393, 1.013567310),
    ),
    Row(
        2, 1 / 8, 0.102431206695,
        (3.88972017, 6.63835207, 9.23341348, 11.7563712),
        (0.735758882343, 0.199148273471), 4.0, (4.744, 6.638),
        (4.005300602, 8.000686254, 1.435637426, 1.081864039),
    ),
    Row(
        3, 3 / 32, 0.0811410938257,
        (5.32232034, 8.40594691, 11.2288722, 13.9281706),
        (0.858385362733, 0.348509478575), 16 / 3, (5.919, 8.022),
        (5.333497114, 10.666672076, 1.801153276, 1.197236258),
    ),
    Row(
        4, 5 / 64, 0.0692291283450,
        (6.68078307, 10.0451175, 13.0622408, 15.913814),
        (0.907435954890, 0.467998442658), 32 / 5, (6.877, 9.158),
        (6.400004789, 12.800000040, 2.138439524, 1.338803026),
    ),
]  # fmt: skip
ROWS = pytest.mark.parametrize("row", TABLE, ids=lambda row: f"{row.poles} poles")
T_S = pytest.mark.parametrize("T", [1.0, 0.3, 1e-3, 30.0])


@ROWS
@T_S
def test_bandwidth_delay_and_integral_time(row: Row, T: float) -> None:
    stages = LockinFilter(T, row.poles)
    assert stages.noise_bandwidth_Hz == pytest.approx(row.bandwidth / T, rel=1e-14)
    assert stages.delay_s == pytest.approx(row.poles * T, rel=1e-15)
    assert stages.integral_time_s == pytest.approx(row.integral * T, rel=1e-14)
    assert stages.integral_time_s == pytest.approx(1 / (2 * stages.noise_bandwidth_Hz), rel=1e-15)


@pytest.mark.parametrize(
    ("poles", "bandwidth"), [(5, 35 / 512), (6, 63 / 1024), (7, 231 / 4096), (8, 429 / 8192)]
)
def test_bandwidth_of_steeper_filters(poles: int, bandwidth: float) -> None:
    assert LockinFilter(1.0, poles).noise_bandwidth_Hz == pytest.approx(bandwidth, rel=1e-13)


@ROWS
@T_S
def test_settling(row: Row, T: float) -> None:
    stages = LockinFilter(T, row.poles)
    for remainder, settled in zip((0.1, 0.01, 0.001, 0.0001), row.settled):
        assert stages.settle_s(remainder) == pytest.approx(settled * T, rel=1e-8)
        assert gammainc(row.poles, stages.settle_s(remainder) / T) == pytest.approx(1 - remainder)
    assert stages.settle_s() == stages.settle_s(1e-3)


@ROWS
@T_S
def test_autocorrelation_of_filtered_white_noise(row: Row, T: float) -> None:
    stages = LockinFilter(T, row.poles)
    assert stages.autocorrelation(0.0) == 1.0
    assert stages.autocorrelation(T) == pytest.approx(row.rho[0], rel=1e-11)
    assert stages.autocorrelation(-3 * T) == pytest.approx(row.rho[1], rel=1e-11)
    for level, lag in zip((0.05, 0.01), row.below):
        assert stages.autocorrelation((lag + 5e-4) * T) < level
        assert stages.autocorrelation((lag - 6e-4) * T) > level
    whole, _ = quad(lambda s: stages.autocorrelation(s * T), 0, 80, epsabs=1e-12)
    assert 2 * whole * T == pytest.approx(stages.integral_time_s, rel=1e-8)
    assert stages.autocorrelation(1e6 * T) == 0.0


@pytest.mark.parametrize(
    ("poles", "polynomial"),
    [(1, (1,)), (2, (1, 1)), (3, (1, 1, 1 / 3)), (4, (1, 1, 2 / 5, 1 / 15))],
)
def test_autocorrelation_is_the_known_polynomial(
    poles: int, polynomial: tuple[float, ...]
) -> None:
    stages = LockinFilter(1.0, poles)
    for s in (0.2, 1.0, 2.7, 11.0):
        expected = math.exp(-s) * sum(a * s**k for k, a in enumerate(polynomial))
        assert stages.autocorrelation(s) == pytest.approx(expected, rel=1e-13)


@ROWS
@T_S
def test_inflation_of_the_variance_of_a_mean(row: Row, T: float) -> None:
    stages = LockinFilter(T, row.poles)
    for spacing, inflation in zip(SPACINGS, row.inflation):
        assert stages.inflation(spacing * T) == pytest.approx(inflation, rel=1e-9)
    assert stages.inflation(1e4 * T) == 1.0


@ROWS
def test_inflation_of_dense_readings_is_the_integral_time(row: Row) -> None:
    stages = LockinFilter(0.3, row.poles)
    for spacing in (0.02, 0.015, 0.0149, 1e-3, 1e-6):
        expected = stages.integral_time_s / spacing
        assert stages.inflation(spacing) == pytest.approx(expected, rel=2e-3 / row.poles)
    assert stages.inflation(0.0149) > stages.inflation(0.0151)


@ROWS
def test_a_sine_at_the_3_dB_frequency_comes_through_at_half_its_power(row: Row) -> None:
    """Of the stages that the field passes; from a dense sine after all transients."""
    stages = LockinFilter(1.0, row.poles)
    track, omega = FieldTrack(stages, None), 2 * math.pi * row.f_3dB
    step = 0.01
    for k in range(9000):
        track.append(k * step, math.sin(omega * k * step))
        track.forget_before(k * step - 50)
    found = [known[0] for k in range(4001, 8999) if (known := track.at(k * step)) is not None]
    assert max(abs(x) for x in found) == pytest.approx(math.sqrt(0.5), rel=1e-3)
    # Its closed form, and the slope far above it: 6 dB an octave and pole.
    assert math.sqrt(2 ** (1 / row.poles) - 1) / (2 * math.pi) == pytest.approx(row.f_3dB, rel=1e-11)


@pytest.mark.parametrize("time_constant_s", [0.0, -1.0, math.nan, math.inf])
def test_refuses_a_time_constant_that_is_none(time_constant_s: float) -> None:
    with pytest.raises(ValueError, match="time_constant_s must be positive"):
        LockinFilter(time_constant_s, 2)


@pytest.mark.parametrize("poles", [0, 9, -1, 2.0, "4"])
def test_refuses_poles_that_are_none(poles: object) -> None:
    with pytest.raises(ValueError, match="whole number from 1 to 8"):
        LockinFilter(0.1, poles)  # type: ignore[arg-type]


@pytest.mark.parametrize("spacing_s", [0.0, -0.1, math.nan])
def test_inflation_refuses_a_spacing_that_is_none(spacing_s: float) -> None:
    with pytest.raises(ValueError, match="spacing_s must be positive"):
        LockinFilter(0.1, 2).inflation(spacing_s)


def test_filters_are_values() -> None:
    one = LockinFilter(0.3, 4)
    assert one == LockinFilter(0.3, 4) != replace(one, poles=2)
    assert len({one, LockinFilter(0.3, 4)}) == 1
    rising = [LockinFilter(1.0, n).integral_time_s for n in range(1, 9)]
    assert all(a < b for a, b in itertools.pairwise(rising))
