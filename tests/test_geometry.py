"""Finite length and reciprocity: what the shape of the bar and its contacts do to the answer."""

from __future__ import annotations

import pytest
from scipy.constants import e

from analyse import Estimate, Estimator, Excitation, HallBar, Ramp, Signal
from analyse.hall_bar import finite_length_factor

# Recomputed from Laplace's equation (small Hall angle, contacts over the full width).
FACTORS = [
    (1.0, 0.6753144833), (1.5, 0.8475622327), (2.0, 0.9300602698), (3.0, 0.9854378817),
    (4.0, 0.9969726253), (5.0, 0.9993706688), (6.0, 0.9998691749),
]


@pytest.mark.parametrize(("squares", "factor"), FACTORS)
def test_finite_length_factor(squares: float, factor: float) -> None:
    assert finite_length_factor(squares) == pytest.approx(factor, abs=1e-6)


def test_it_is_positive_and_grows_to_one() -> None:
    assert 0 < finite_length_factor(0.05) < finite_length_factor(0.5) < 1
    assert finite_length_factor(1e6) == 1.0
    with pytest.raises(ValueError, match="squares"):
        finite_length_factor(0.0)


@pytest.mark.parametrize(("squares", "said"), [(2.0, True), (3.0, True), (4.0, False), (20.0, False)])
def test_a_short_bar_is_told(squares: float, said: bool) -> None:
    excitation = Excitation(source_V=1.0, series_ohm=1e7, source_to_drain_squares=squares)
    last = _ramp(Excitation(current_A=1e-7), excitation)
    found = [one for one in last.cautions if one.code == "short_bar"]
    assert len(found) == said
    assert not any(one.touches_answer for one in found)


def _ramp(true: Excitation, told: Excitation, misaligned: float = 0.0) -> Estimate:
    """-0.5 T to 0.5 T, n = 3e15 m^-2, mobility 50 m^2/Vs, L/W = 4, 100 nA; no noise but the digits."""
    density, mobility, squares, current = 3e15, 50.0, 4.0, true.current_A or 0.0
    bar = HallBar(squares, effective_mass=0.067, effective_mass_source="given")
    estimator = Estimator(bar, longitudinal=Signal(), hall=Signal(), excitation=told,
                          ramp=Ramp((-0.5, 0.5), 0.5))
    rho_0 = 1 / (density * e * mobility)
    last = None
    for k in range(601):
        time_s, field_T = 0.2 * k, -0.5 + k / 600
        last = estimator.update("field", time_s, field_T) or last
        jitter = 1e-9 * ((k * 7919) % 101 - 50)
        xx, xy = rho_0 * squares, misaligned * rho_0 - field_T / (density * e)
        last = estimator.update("longitudinal", time_s, current * xx * (1 + jitter)) or last
        last = estimator.update("hall", time_s, current * (xy + rho_0 * jitter)) or last
    ended = estimator.end()
    last = ended[-1] if ended else last
    assert last is not None
    return last


def test_reciprocity_takes_the_misalignment_out() -> None:
    """Hall contacts misaligned by 2 % of a square: at +-0.5 T the Hall resistance reads 1041.08 and
    -1039.42 ohm (recomputed), its antisymmetric part is 1040.2515 ohm at n = 3e15 m^-2."""
    current = Excitation(current_A=1e-7)
    last = _ramp(current, current, misaligned=0.02)
    assert last.sheet_density is not None
    assert last.mobility is not None
    assert last.rho_0 is not None
    assert last.hall_slope is not None
    assert last.hall_offset_ohm is not None
    assert abs(last.hall_slope.value) * 0.5 == pytest.approx(1040.25151241, rel=1e-6)
    assert last.hall_offset_ohm == pytest.approx(0.02 * 1.66440241986e-05 / 4 / 1e-7, rel=1e-4)
    assert last.rho_0.value * 4 * 1e-7 == pytest.approx(1.66440241986e-05, rel=1e-6)
    assert last.sheet_density.value == pytest.approx(3e15, rel=1e-5)
    assert last.mobility.value == pytest.approx(50.0, rel=1e-5)
