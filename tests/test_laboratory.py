"""The simulated laboratory without its sockets: physics, commands, misbehaviour."""

from __future__ import annotations

import math
import time
from typing import Any

import numpy as np
import pytest
from scipy.constants import e, h

from acquire.laboratory.bench import Bench
from acquire.laboratory.cascade import Cascade, make_step
from acquire.laboratory.faults import garbled
from acquire.laboratory.field_course import FieldCourse
from acquire.laboratory.hall_bar import LOWEST_SHARE, HallBar
from acquire.laboratory.lockin import SimulatedLockin
from acquire.laboratory.magnet import SimulatedMagnet, State
from acquire.laboratory.scenario import Lockin, Magnet, Sample, Scenario
from acquire.laboratory.wire import Nonsense, Wire

# Settling of n equal RC stages to 90, 99, 99.9 and 99.99 %, in time constants: zeros of 1 - P(n, s),
# computed to ten digits apart from this project; the 99 % column agrees with a lock-in maker's table.
SETTLING = {
    1: (2.30258509, 4.60517019, 6.90775528, 9.21034037),
    2: (3.88972017, 6.63835207, 9.23341348, 11.7563712),
    3: (5.32232034, 8.40594691, 11.2288722, 13.9281706),
    4: (6.68078307, 10.0451175, 13.0622408, 15.913814),
}
# Equivalent noise bandwidth times time constant, Gamma(n - 1/2)/(4 sqrt(pi) Gamma(n)).
BANDWIDTH = {1: 1 / 4, 2: 1 / 8, 3: 3 / 32, 4: 5 / 64, 8: 429 / 8192}
# Autocorrelation of white noise behind the stages, 1 and 3 time constants apart.
CORRELATION = {
    1: (0.367879441171, 0.0497870683679),
    2: (0.735758882343, 0.199148273471),
    3: (0.858385362733, 0.348509478575),
    4: (0.907435954890, 0.467998442658),
}

SAMPLE = Sample(
    sheet_density_per_m2=3e15, mobility_m2_per_V_s=50.0, quantum_lifetime_s=1e-12,
    temperature_K=1.5, misalignment_squares=0.02,
)  # fmt: skip


def scenario(**keys: Any) -> Scenario:
    """A small laboratory without noise: 1 T/min from 0 to 0.1 T and back, 20 time constants a leg."""
    plain: dict[str, Any] = {
        "current_A": 1e-7,
        "sample": {"sheet_density_per_m2": 3e15, "mobility_m2_per_V_s": 50.0,
                   "quantum_lifetime_s": 1e-15},
        "magnet": {"path_T": [0.0, 0.1, 0.0], "rate_T_per_min": 1.0, "wait_s": 2.0,
                   "resolution_T": 0.0},
        "lockins": [
            {"name": "xx", "measures": "longitudinal", "noise_V_per_rtHz": 0.0},
            {"name": "xy", "measures": "hall", "noise_V_per_rtHz": 0.0, "time_constant_s": 0.3},
        ],
    }  # fmt: skip
    return Scenario.model_validate({**plain, **keys})


def still() -> np.random.Generator:
    return np.random.default_rng(1)


def lockin(signal: float = 0.0, seed: int = 1, **keys: Any) -> SimulatedLockin:
    """A lock-in at a constant voltage."""
    section = Lockin.model_validate(
        {"name": "one", "measures": "hall", "noise_V_per_rtHz": 0.0, "time_constant_s": 0.1, **keys}
    )
    return SimulatedLockin(section, lambda times: np.full(len(times), signal), seed)


class Talk:
    """Lines to one instrument of a bench, at a time that goes on as told."""

    def __init__(self, bench: Bench, name: str) -> None:
        self.bench, self.name, self.time_s = bench, name, 0.0

    def pieces(self, line: str) -> list[tuple[float, bytes]]:
        outcome = self.bench.hear(self.name, line, self.time_s)
        assert not outcome.cut
        return [(piece.after_s, piece.data) for piece in outcome.pieces]

    def __call__(self, line: str) -> str | None:
        data = b"".join(data for _, data in self.pieces(line))
        assert data == b"" or data.endswith(b"\n")
        return data.decode().rstrip("\r\n") or None


# ---------------------------------------------------------------------------------- filter


@pytest.mark.parametrize("poles", SETTLING)
@pytest.mark.parametrize("steps", [1, 7])
def test_a_step_comes_through_the_stages_as_the_table_says(poles: int, steps: int) -> None:
    for settled, remainder in zip(SETTLING[poles], (0.1, 0.01, 1e-3, 1e-4), strict=True):
        cascade = Cascade(poles, 0.25, 0.0, np.zeros(1), still())
        cascade.advance(settled * 0.25 / steps, np.ones((steps + 1, 1)))
        assert 1 - cascade.output[0] == pytest.approx(remainder, rel=1e-7)


@pytest.mark.parametrize("poles", [1, 2, 4, 8])
def test_a_steady_ramp_lags_by_one_time_constant_a_stage(poles: int) -> None:
    cascade = Cascade(poles, 0.1, 0.0, np.zeros(1), still())
    cascade.advance(0.5, 3.0 * np.linspace(0, 10, 21)[:, None])
    assert cascade.output[0] == pytest.approx(3.0 * (10 - poles * 0.1), rel=1e-12)


@pytest.mark.parametrize("poles", [1, 3, 4, 8])
@pytest.mark.parametrize("length", [1e-6, 0.01, 1.0, 100.0])
def test_two_half_steps_are_one_step_in_signal_and_in_noise(poles: int, length: float) -> None:
    whole, half = make_step(poles, 1.0, length), make_step(poles, 1.0, length / 2)
    np.testing.assert_allclose(half.transition @ half.transition, whole.transition, rtol=1e-12)
    start = half.transition @ (half.start + 0.5 * half.end) + 0.5 * half.start
    end = half.transition @ (0.5 * half.end) + 0.5 * half.start + half.end
    np.testing.assert_allclose(start, whole.start, atol=1e-9)
    np.testing.assert_allclose(end, whole.end, atol=1e-9)
    covariance = half.noise @ half.noise.T
    twice = half.transition @ covariance @ half.transition.T + covariance
    np.testing.assert_allclose(twice, whole.noise @ whole.noise.T, rtol=1e-9)


@pytest.mark.parametrize("poles", BANDWIDTH)
def test_the_noise_has_the_variance_of_its_bandwidth(poles: int) -> None:
    root = make_step(poles, 0.3, 60.0).noise
    assert (root @ root.T)[-1, -1] == pytest.approx(BANDWIDTH[poles] / 0.3, rel=1e-12)


@pytest.mark.parametrize("poles", CORRELATION)
@pytest.mark.parametrize("steps", [1, 4])
def test_the_noise_is_correlated_as_behind_rc_stages(poles: int, steps: int) -> None:
    """400 records of 250 time constants. The estimate of a correlation has a standard error below
    (2 * integral time / length of all records)^(1/2), here 0.012 for four stages."""
    cascade = Cascade(poles, 1.0, 1.0, np.zeros(400), np.random.default_rng(20310514))
    cascade.advance(30.0, np.zeros((2, 400)))
    record = []
    for _ in range(250):
        cascade.advance(1.0 / steps, np.zeros((steps + 1, 400)))
        record.append(cascade.output)
    noise = np.array(record)
    variance = float(np.mean(noise**2))
    assert variance == pytest.approx(BANDWIDTH[poles], rel=0.05)
    for lag, expected in zip((1, 3), CORRELATION[poles], strict=True):
        found = float(np.mean(noise[:-lag] * noise[lag:])) / variance
        assert found == pytest.approx(expected, abs=0.02)
    assert abs(float(np.mean(noise))) < 5 * math.sqrt(0.5 / (400 * 250))


# --------------------------------------------------------------------------------- lock-in


def test_x_and_y_are_the_signal_seen_at_its_phase() -> None:
    shown = lockin(1e-3, phase_deg=30.0).shown(5.0)
    assert shown.x_V == pytest.approx(1e-3 * math.cos(math.radians(30)))
    assert shown.y_V == pytest.approx(1e-3 * math.sin(math.radians(30)))
    assert not shown.overload


def test_noise_is_that_of_the_input_through_the_filter_and_x_and_y_have_their_own() -> None:
    one = lockin(noise_V_per_rtHz=1e-8)
    shown = [one.shown(2.0 * i) for i in range(4000)]  # 20 time constants apart: independent
    x, y = np.array([s.x_V for s in shown]), np.array([s.y_V for s in shown])
    expected = 1e-8 * math.sqrt(BANDWIDTH[4] / 0.1)
    assert x.std() == pytest.approx(expected, rel=0.05)  # 4.5 standard errors
    assert y.std() == pytest.approx(expected, rel=0.05)
    assert abs(np.corrcoef(x, y)[0, 1]) < 0.07


def test_the_same_seed_and_times_give_the_same_noise_and_nothing_else_does() -> None:
    def record(step: float = 0.1, **keys: Any) -> list[float]:
        one = lockin(noise_V_per_rtHz=1e-8, **keys)
        return [one.shown(step * i).x_V for i in range(50)]

    assert record() == record()
    assert record() != record(seed=2)
    assert record() != record(name="two")
    assert record() != record(step=0.11)


def test_asking_twice_at_one_moment_shows_the_same() -> None:
    one = lockin(noise_V_per_rtHz=1e-8)
    assert one.shown(3.0) == one.shown(3.0) == one.shown(2.9)
    assert one.shown(3.0) != one.shown(3.001)


def test_how_often_it_is_asked_does_not_change_what_a_moving_signal_looks_like() -> None:
    section = Lockin(name="one", measures="hall", noise_V_per_rtHz=0.0, time_constant_s=0.1)

    def shown(times: list[float]) -> float:
        one = SimulatedLockin(section, lambda t: 1e-3 * np.maximum(t - 10.0, 0.0), 1)
        return [one.shown(time_s).x_V for time_s in times][-1]

    often = shown([0.013 * i for i in range(1000)] + [13.3])
    assert shown([0.0, 13.3]) == pytest.approx(often, rel=1e-6)
    assert shown([13.3]) == pytest.approx(often, rel=1e-6)
    assert often == pytest.approx(1e-3 * (3.3 - 0.4), rel=1e-6)


def test_after_a_night_unasked_it_answers_at_once_and_right() -> None:
    one = lockin(1e-3, noise_V_per_rtHz=1e-9)
    one.shown(0.0)
    began = time.process_time()
    assert one.shown(40_000.0).x_V == pytest.approx(1e-3, abs=1e-8)
    assert time.process_time() - began < 0.2


def test_it_is_cut_at_full_scale_and_says_so() -> None:
    assert lockin(2.0, sensitivity_V=1e-3).shown(1.0).x_V == 1e-3
    shown = lockin(-2.0, sensitivity_V=1e-3).shown(1.0)
    assert shown.x_V == -1e-3
    assert shown.overload


def test_a_changed_filter_goes_on_from_what_was_shown() -> None:
    one = lockin(1e-3)
    one.shown(1.0)
    one.set_filter(1.0, 10.0, 2)
    assert one.shown(1.0).x_V == pytest.approx(1e-3)
    assert (one.time_constant_s, one.poles) == (10.0, 2)


# ---------------------------------------------------------------------- field and Hall bar


def test_the_field_goes_up_and_down_at_its_rate_and_then_stands() -> None:
    course = FieldCourse([-0.1, 0.9, -0.1], 0.02, wait_s=5.0)
    times = np.array([-3.0, 0.0, 5.0, 10.0, 55.0, 60.0, 105.0, 1000.0])
    expected = [-0.1, -0.1, -0.1, 0.0, 0.9, 0.8, -0.1, -0.1]
    np.testing.assert_allclose(course.field_T(times), expected, atol=1e-12)
    assert [course.has_begun(t) for t in (4.9, 5.1)] == [False, True]
    assert [course.is_over(t) for t in (104.9, 105.1)] == [False, True]
    assert [course.target_T(t) for t in (0.0, 54.9, 55.1, 200.0)] == [0.9, 0.9, -0.1, -0.1]


def test_a_held_field_stands_and_goes_on_from_there_and_the_past_stays() -> None:
    course = FieldCourse([0.0, 1.0], 0.1)
    course.hold(3.0)
    course.hold(4.0)
    assert course.field_T(3.0) == course.field_T(500.0) == pytest.approx(0.3)
    assert course.field_T(1.0) == pytest.approx(0.1)
    course.go_on(600.0)
    course.go_on(700.0)
    assert course.field_T(601.0) == pytest.approx(0.4)
    np.testing.assert_allclose(course.field_T([1.0, 300.0, 602.0]), [0.1, 0.3, 0.5])


def test_the_supply_tells_the_field_with_noise_in_steps() -> None:
    section = Magnet(path_T=(0.5, 1.0), rate_T_per_min=1.0, wait_s=1e6,
                     noise_T=1e-3, resolution_T=1e-5)  # fmt: skip
    magnet = SimulatedMagnet(section, seed=3)
    told = np.array([magnet.reading_T(0.1 * i) for i in range(4000)])
    assert told.mean() == pytest.approx(0.5, abs=5e-3 / math.sqrt(4000))
    assert told.std() == pytest.approx(1e-3, rel=0.06)
    np.testing.assert_allclose(told / 1e-5, np.round(told / 1e-5), atol=1e-6)


def test_drude_in_numbers() -> None:
    """n = 3e15 m^-2, mobility 50 m^2/Vs; 1/(n e) = 2080.5 Ohm/T."""
    bar = HallBar(SAMPLE)
    assert bar.rho_0_ohm == pytest.approx(41.6100604964, rel=1e-10)
    assert bar.rho_xy_ohm(1.0) == pytest.approx(-2080.50302482, rel=1e-10)
    holes = HallBar(SAMPLE.model_copy(update={"carriers": "holes"}))
    assert holes.rho_xy_ohm(-2.0) == pytest.approx(-2 * 2080.50302482, rel=1e-10)
    assert bar.longitudinal_ohm(0.0) == pytest.approx(4 * 41.6100604964, rel=1e-10)


def test_misaligned_contacts_mix_the_two_resistivities() -> None:
    """2 % of a square at 0.5 T, as worked out by hand for holes without oscillations."""
    plain = SAMPLE.model_copy(update={"carriers": "holes", "quantum_lifetime_s": 1e-15})
    bar = HallBar(plain)
    assert bar.hall_ohm(0.5) == pytest.approx(1041.08371362, rel=1e-10)
    assert bar.hall_ohm(-0.5) == pytest.approx(-1039.4193112, rel=1e-10)


@pytest.mark.parametrize(
    ("field_T", "temperature_K", "relative"),
    [(0.5, 1.5, 0.0941240016026), (1.0, 1.5, -0.247749649241), (1.0, 0.3, -0.343119673088),
     (-1.0, 0.3, -0.343119673088), (2.0, 4.2, -0.938110402448)],
)  # fmt: skip
def test_oscillations_in_numbers(field_T: float, temperature_K: float, relative: float) -> None:
    """4 X/sinh X exp(-pi/omega_c tau_q) cos(2 pi f/B - pi) for m = 0.067, computed apart."""
    bar = HallBar(SAMPLE.model_copy(update={"temperature_K": temperature_K}))
    assert bar.rho_xx_ohm(field_T) / bar.rho_0_ohm - 1 == pytest.approx(relative, rel=1e-7)


def test_oscillations_have_the_period_of_the_density_and_their_minima_at_whole_fillings() -> None:
    bar = HallBar(SAMPLE.model_copy(update={"quantum_lifetime_s": 3e-13}))
    assert bar.oscillation_frequency_T == pytest.approx(6.20350154539, rel=1e-10)
    for minimum in (1.550875386, 1.240700309):  # four and five Landau levels filled
        assert 3e15 * h / (e * minimum) / 2 == pytest.approx(round(6.20350154539 / minimum))
        near = bar.rho_xx_ohm(minimum + np.array([-0.05, 0.0, 0.05]))
        assert near[1] < 0.99 * near[0]
        assert near[1] < 0.99 * near[2]
    four_valleys = HallBar(SAMPLE.model_copy(update={"degeneracy": 4}))
    assert four_valleys.oscillation_frequency_T == pytest.approx(6.20350154539 / 2, rel=1e-10)


def test_the_longitudinal_resistivity_is_positive_and_finite_at_every_field() -> None:
    wild = SAMPLE.model_copy(update={"quantum_lifetime_s": 1e-9, "temperature_K": 1e-3})
    fields = np.concatenate([-np.logspace(-300, 3, 5000), [0.0], np.logspace(-300, 3, 5000)])
    for sample in (SAMPLE, wild):
        bar = HallBar(sample)
        rho = bar.rho_xx_ohm(fields)
        assert np.all(np.isfinite(rho))
        assert np.all(rho >= LOWEST_SHARE * bar.rho_0_ohm)
        assert np.all(rho <= 5 * bar.rho_0_ohm)
        assert bar.rho_xx_ohm(0.0) == bar.rho_0_ohm


# ----------------------------------------------------------------------------------- bench


def test_a_reading_in_mid_ramp_stands_for_the_field_that_was_when_the_filter_began() -> None:
    magnet = {"path_T": [0.0, 1.0], "rate_T_per_min": 1.0, "wait_s": 2.0, "remanent_T": 5e-3}
    bench = Bench(scenario(magnet=magnet))
    xx, xy = Talk(bench, "xx"), Talk(bench, "xy")
    xx.time_s = xy.time_s = 22.0
    field = (22.0 - 2.0 - 4 * 0.3) / 60 + 5e-3
    assert float(xy("X?") or "") == pytest.approx(-1e-7 * 2080.50302482 * field, rel=1e-6)
    assert float(xx("X?") or "") == pytest.approx(1e-7 * 4 * 41.6100604964, rel=1e-6)
    assert Talk(bench, "magnet")("FIELD?") == "+0.000000000"
    assert float(Talk(bench, "xx")("SIMULATE:FIELD?") or "") == pytest.approx(5e-3)


def test_a_pause_really_holds_the_field_and_what_is_measured_follows() -> None:
    bench = Bench(scenario())
    magnet, xy = Talk(bench, "magnet"), Talk(bench, "xy")
    assert magnet("STATE?") == str(int(State.WAITING))
    magnet.time_s = 5.0
    assert magnet("STATE?;TARGET?;RATE?") == "1;+0.100000000;+1.000000000"
    assert magnet("PAUSE") is None
    assert magnet("STATE?") == str(int(State.HELD))
    magnet.time_s = xy.time_s = 30.0
    assert magnet("FIELD?") == "+0.050000000"
    assert float(xy("X?") or "") == pytest.approx(-1e-7 * 2080.50302482 * 0.05, rel=1e-6)
    assert magnet("RESUME;STATE?") == str(int(State.RAMPING))
    magnet.time_s = 60.0
    assert magnet("STATE?;FIELD?") == f"{int(State.AT_TARGET)};+0.000000000"
    assert magnet("PAUSE;STATE?") == str(int(State.AT_TARGET))


def test_a_supply_that_waits_for_a_question_misses_no_reader() -> None:
    section = Magnet(path_T=(0.0, 1.0), rate_T_per_min=6.0, wait_s=2.0, waits_for_question=True)
    magnet = SimulatedMagnet(section, seed=3)
    assert magnet.state(100.0) == State.WAITING
    assert [magnet.reading_T(t) for t in (100.0, 102.0, 103.0)] == pytest.approx([0.0, 0.0, 0.1])
    assert magnet.state(103.0) == State.RAMPING
    held = SimulatedMagnet(section, seed=3)
    held.hold(5.0)
    assert held.reading_T(50.0) == 0.0
    assert held.state(50.0) == State.HELD
    held.go_on(50.0)
    assert held.reading_T(53.0) == pytest.approx(0.1)


def test_a_laboratory_costs_little() -> None:
    bench = Bench(scenario())
    talks = [Talk(bench, name) for name in ("xx", "xy", "magnet")]
    began = time.process_time()
    for i in range(600):  # a minute of readings every 0.1 s
        for talk, line in zip(talks, ("XYS?", "XYS?", "FIELD?"), strict=True):
            talk.time_s = 0.1 * i
            assert talk(line)
    assert time.process_time() - began < 0.05 * 60


# -------------------------------------------------------------------------------- commands


@pytest.fixture
def xx() -> Talk:
    return Talk(Bench(scenario()), "xx")


def test_an_instrument_says_who_it_is(xx: Talk) -> None:
    assert (xx("*IDN?") or "").startswith("RAMPSIDE,SIMULATED LOCK-IN,xx,")
    assert (Talk(xx.bench, "magnet")("*idn?") or "").startswith("RAMPSIDE,SIMULATED MAGNET SUPPLY,")
    assert len((xx("*IDN?") or "").split(",")) == 4


def test_numbers_come_alone_together_and_with_the_status_word(xx: Talk) -> None:
    assert xx("X?") == "+1.664402E-05"
    assert xx("Y?") == "+0.000000E+00"
    assert xx("R?") == "+1.664402E-05"
    assert xx("XY?") == "+1.664402E-05,+0.000000E+00"
    assert xx("XYS?") == "+1.664402E-05,+0.000000E+00,0"
    assert xx("STATUS?") == "0"


def test_a_line_may_hold_several_commands_in_small_letters_with_blanks(xx: Talk) -> None:
    assert xx(" x? ;; status? ;") == "+1.664402E-05;0"
    assert xx("") is None
    assert xx("PHASE 90; X?;PHASE?") == "+1.664402E-05;+90.000"  # the filter has yet to follow


def test_settings_are_codes_that_can_be_set_or_numbers() -> None:
    section = {"name": "xy", "measures": "hall", "answers": "numbers", "sensitivity_V": 1e-3}
    coded = {"name": "xx", "measures": "longitudinal", "sensitivity_V": 1e-3,
             "noise_V_per_rtHz": 0.0}  # fmt: skip
    bench = Bench(scenario(lockins=[coded, section]))
    xx, xy = Talk(bench, "xx"), Talk(bench, "xy")
    assert xx("TIMECONSTANT?;SLOPE?;SENSITIVITY?") == "5;3;8"
    assert xy("TIMECONSTANT?;SLOPE?;SENSITIVITY?") == "+3.000000E-01;24;+1.000000E-03"
    assert xx("TIMECONSTANT 6;SLOPE 1;SENSITIVITY 0") is None
    assert xx("TIMECONSTANT?;SLOPE?;SENSITIVITY?;STATUS?") == "6;1;0;4"
    assert xx("XYS?") == "+1.000000E-07,+0.000000E+00,4"


@pytest.mark.parametrize(
    ("line", "error"),
    [("NONSENSE?", '-113,"Undefined header"'), ("XY", '-113,"Undefined header"'),
     ("X? 1", '-108,"Parameter not allowed"'), ("SLOPE", '-109,"Missing parameter"'),
     ("SLOPE x", '-104,"Data type error"'), ("SLOPE 8", '-222,"Data out of range"'),
     ("SLOPE 1.5", '-222,"Data out of range"'), ("PHASE inf", '-222,"Data out of range"')],
)  # fmt: skip
def test_what_is_not_understood_is_answered_and_remembered(
    xx: Talk, line: str, error: str
) -> None:
    assert xx(line) == f"ERROR {error}"
    assert xx("SYSTEM:ERROR?") == error
    assert xx("SYSTEM:ERROR?") == '0,"No error"'
    assert xx("*ESR?") == ("16" if "-222" in error else "32")
    assert xx("*ESR?;*OPC?") == "0;1"
    xx(line)
    assert xx("*CLS;SYSTEM:ERROR?") == '0,"No error"'


# ---------------------------------------------------------------------------- misbehaviour


def test_a_delayed_and_a_split_reply(xx: Talk) -> None:
    assert xx("SIMULATE:BEGIN delay,delay_s=0.7,replies=1") == "OK"
    assert xx.pieces("STATUS?") == [(0.7, b"0\n")]
    assert xx.pieces("STATUS?") == [(0.0, b"0\n")]
    xx("SIMULATE:BEGIN split,delay_s=2,replies=1")
    assert xx.pieces("X?;STATUS?") == [(0.0, b"+1.66440"), (2.0, b"2E-05;0\n")]


def test_a_dropped_reply_and_a_deaf_instrument(xx: Talk) -> None:
    xx("SIMULATE:BEGIN drop,replies=1")
    assert xx("PHASE 5;PHASE?") is None
    assert xx("PHASE?") == "+5.000"
    xx("SIMULATE:BEGIN silence,lasts_s=3")
    assert xx("PHASE 6;PHASE?") is None
    xx.time_s = 2.9
    assert xx("PHASE?") is None
    xx.time_s = 3.1
    assert xx("PHASE?") == "+5.000"


def test_a_supply_that_ignores_commands_answers_questions() -> None:
    magnet = Talk(Bench(scenario()), "magnet")
    magnet("SIMULATE:BEGIN ignore")
    magnet.time_s = 5.0
    assert magnet("PAUSE;STATE?") == str(int(State.RAMPING))
    assert magnet("SIMULATE:END") == "OK"
    assert magnet("PAUSE;STATE?") == str(int(State.HELD))


def test_an_overload_on_request(xx: Talk) -> None:
    xx("SIMULATE:BEGIN overload,replies=2")
    assert xx("XYS?") == "+1.000000E+00,+1.000000E+00,4"
    assert xx("STATUS?") == "4"
    assert xx("STATUS?") == "0"
    magnet = Talk(xx.bench, "magnet")
    assert magnet("SIMULATE:BEGIN overload") == "OK"
    assert magnet("FIELD?") == "+9.900000E+37"


def test_a_cut_connection(xx: Talk) -> None:
    xx("SIMULATE:BEGIN disconnect,replies=1")
    assert xx.bench.hear("xx", "PHASE 1", 0.0).cut is False  # nothing was asked
    assert xx.bench.hear("xx", "X?", 0.0).cut is True
    assert xx("X?") is not None


def test_a_garbled_reply_is_never_a_good_one(xx: Talk) -> None:
    xx("SIMULATE:BEGIN garble")
    for _ in range(200):
        ((_, data),) = xx.pieces("XY?")
        assert data.endswith(b"\n")
        assert data.count(b"\n") == 1
        assert not data.isascii()
        assert len(data) == len("+1.664402E-05,+0.000000E+00\n")
    assert garbled(b"\r\n", still()) == b"\r\n"


def test_misbehaviour_by_chance_is_the_same_for_the_same_seed() -> None:
    def lost(seed: int) -> list[int]:
        xx = Talk(Bench(scenario()), "xx")
        assert xx(f"SIMULATE:BEGIN drop,probability=0.25,seed={seed}") == "OK"
        return [i for i in range(400) if xx("X?") is None]

    assert lost(1) == lost(1)
    assert lost(1) != lost(2)
    assert 100 - 45 < len(lost(1)) < 100 + 45  # five standard deviations


def test_misbehaviour_of_the_scenario_acts_in_its_time_on_its_instrument() -> None:
    faults = [{"instrument": "xy", "what": "drop", "from_s": 10.0, "lasts_s": 5.0}]
    bench = Bench(scenario(misbehaviours=faults))
    xx, xy = Talk(bench, "xx"), Talk(bench, "xy")
    for time_s, answers in ((9.9, True), (10.1, False), (14.9, False), (15.1, True)):
        xx.time_s = xy.time_s = time_s
        assert xx("X?") is not None
        assert (xy("X?") is not None) is answers


def test_the_laboratory_can_always_be_told_to_behave(xx: Talk) -> None:
    magnet = Talk(xx.bench, "magnet")
    for what in ("delay", "split", "drop", "garble", "disconnect", "silence", "ignore", "off"):
        assert magnet(f"SIMULATE:BEGIN {what},instrument=xx") == "OK"
    assert xx("SIMULATE:STATE?") == "delay,split,drop,garble,disconnect,silence,ignore,off"
    assert xx.bench.is_off("xx", 5.0)
    assert not xx.bench.is_off("magnet", 5.0)
    assert magnet("SIMULATE:END xx") == "OK"
    assert xx("SIMULATE:STATE?") == "none"
    xx.time_s = 1.5
    assert xx("simulate:time?") == "1.500000"


@pytest.mark.parametrize(
    ("line", "words"),
    [("BEGIN nonsense", "what: "), ("BEGIN", "what: "), ("BEGIN drop,replies=0", "replies: "),
     ("BEGIN drop,how=1", "how: "), ("BEGIN drop,instrument=zz", "No instrument zz"),
     ("END zz", "No instrument zz"), ("OFF", "Undefined header"),
     ("BEGIN off,replies=2", "not about replies")],
)  # fmt: skip
def test_a_request_that_makes_no_sense_is_refused(xx: Talk, line: str, words: str) -> None:
    reply = xx(f"SIMULATE:{line}") or ""
    assert reply.startswith("ERROR ")
    assert words in reply
    assert xx("SIMULATE:STATE?") == "none"


# ------------------------------------------------------------------------------------ wire


def test_bytes_become_lines_however_they_are_cut() -> None:
    wire = Wire()
    assert wire.lines(b"X") == []
    assert wire.lines(b"?\r\nY?\n\nST") == ["X?", "Y?", ""]
    assert wire.lines(b"ATUS?\n") == ["STATUS?"]
    with pytest.raises(Nonsense):
        wire.lines(b"x" * 5000)


def test_a_late_reply_holds_up_those_behind_it(xx: Talk) -> None:
    wire = Wire()
    xx("SIMULATE:BEGIN delay,delay_s=1,replies=1")
    for line in ("SLOPE?", "TIMECONSTANT?"):
        wire.add(xx.bench.hear("xx", line, 0.0), 0.0)
    assert (wire.ready(0.9), wire.next_s()) == (b"", 1.0)
    assert wire.ready(1.0) == b"3\n"
    wire.sent(1)
    assert wire.ready(1.0) == b"\n"
    wire.sent(1)
    assert wire.ready(1.0) == b"5\n"
