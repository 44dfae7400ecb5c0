"""The bench's generator, noise and oracle against known numbers and against brute force.

Reference numbers of cascaded RC stages (equivalent noise bandwidth times T, settling to 99 %, and
autocorrelation of filtered white noise at one and three time constants) are the closed forms
1/4, 1/8, 3/32, 5/64; 4.605, 6.638, 8.406, 10.045; e^-s, e^-s (1+s), e^-s (1+s+s^2/3),
e^-s (1+s+2s^2/5+s^3/15), also found in tables of lock-in makers.
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from bench.generator import FieldMeter, LockIn, Rig, in_order, noise_free, simulate
from bench.noise import autocovariance, draw_noise, flicker, interpolated_readings
from bench.oracle import (
    best_estimate,
    hall_bound,
    measured_field,
    noise_autocovariance,
    reference,
    whiten,
)
from bench.profile import Profile, path, staircase
from bench.rc_stages import RCStages
from bench.sample import ELEMENTARY_CHARGE, PLANCK, Sample
from bench.scenarios import make, names
from bench.setting import TARGET

BANDWIDTH_TIMES_T = {1: 1 / 4, 2: 1 / 8, 3: 3 / 32, 4: 5 / 64}
SETTLED_99 = {1: 4.60517019, 2: 6.63835207, 3: 8.40594691, 4: 10.0451175}
AUTOCORRELATION = {
    1: (0.367879441171, 0.0497870683679),
    2: (0.735758882343, 0.199148273471),
    3: (0.858385362733, 0.348509478575),
    4: (0.907435954890, 0.467998442658),
}
POLES = (1, 2, 3, 4)


@pytest.fixture(name="rng")
def _rng() -> np.random.Generator:
    return np.random.default_rng(70)


def _rig(stages: RCStages, period_s: float, **more: float) -> Rig:
    lockin = LockIn(stages, period_s)
    return Rig(1e-7, 4.0, lockin, replace(lockin, offset_s=0.4 * period_s),
               FieldMeter(period_s), **more)


SAMPLE = Sample(3e15, 50.0)


@pytest.mark.parametrize("poles", POLES)
def test_variance_of_filtered_white_noise_is_its_density_times_the_noise_bandwidth(poles):
    stages, density = RCStages(0.3, poles), 5e-9
    variance = stages.covariance(density)[-1, -1]
    assert variance == pytest.approx(density**2 * BANDWIDTH_TIMES_T[poles] / 0.3, rel=1e-12)


@pytest.mark.parametrize("poles", POLES)
def test_autocorrelation_is_the_known_one(poles):
    r = RCStages(0.5, poles).white_autocovariance(1.0, 4, 0.5)
    assert (r[1] / r[0], r[3] / r[0]) == pytest.approx(AUTOCORRELATION[poles], rel=1e-10)


@pytest.mark.parametrize("poles", POLES)
@pytest.mark.parametrize("spacing", [0.2, 1.0, 5.0])
def test_drawn_noise_has_that_variance_and_autocorrelation(poles, spacing, rng):
    """From many short records, so that the start is tested as well; five standard errors."""
    stages, records, count = RCStages(1.0, poles), 1500, 12
    drawn = np.array([stages.white_noise(rng, 1.0, count, spacing) for _ in range(records)])
    r = stages.white_autocovariance(1.0, count, spacing)
    for first, lag in ((0, 0), (0, 1), (0, 3), (5, 0), (5, 2), (8, 3)):
        product = drawn[:, first] * drawn[:, first + lag]
        error = math.sqrt((r[0] ** 2 + r[lag] ** 2) / records)
        assert abs(product.mean() - r[lag]) < 5 * error
    assert abs(drawn.mean()) < 5 * math.sqrt(r[0] / records)


def test_short_steps_build_up_the_same_covariance_as_a_long_one():
    stages = RCStages(0.7, 4)
    q, f = stages.covariance(1.0, 0.1), stages.transition(0.1)
    grown = np.zeros((4, 4))
    for _ in range(25):
        grown = f @ grown @ f.T + q
    assert grown == pytest.approx(stages.covariance(1.0, 2.5), rel=1e-9)
    steady = stages.covariance(1.0)
    assert f @ steady @ f.T + q == pytest.approx(steady, rel=1e-10)


@pytest.mark.parametrize("poles", POLES)
def test_step_is_settled_to_99_percent_at_the_known_time(poles):
    stages = RCStages(0.2, poles)
    assert stages.step(np.array([0.2 * SETTLED_99[poles]]))[0] == pytest.approx(0.99, abs=1e-8)


@pytest.mark.parametrize("poles", POLES)
def test_field_behind_the_stages_solves_their_equations(poles):
    """Against plain Euler steps of x_k' = (x_(k-1) - x_k) / T, through holds, turns and a jump."""
    stages = RCStages(0.5, poles)
    profile = Profile((0, 1, 5, 6, 8, 8, 9), (0.2, 0.2, 1.0, 1.0, -0.5, -0.3, -0.3))
    dt, x = 1e-4, np.full(poles, 0.2)
    times = dt * np.arange(90_000)
    fields = profile.at(times + dt / 2)
    followed = np.empty(len(times))
    for k, field_T in enumerate(fields):
        followed[k] = x[-1]
        x = x + dt / 0.5 * (np.concatenate(([field_T], x[:-1])) - x)
    exact = profile.behind(stages, times[::500])
    assert np.abs(followed[::500] - exact).max() < 3e-4


@pytest.mark.parametrize("poles", POLES)
def test_a_settled_ramp_lags_by_n_time_constants_and_its_start_is_a_transient(poles):
    stages, rate = RCStages(0.3, poles), 0.01
    profile = path([0.0, 1.0], rate, wait_s=5.0)
    rig = _rig(stages, 0.2)
    times = 0.2 * np.arange(500)
    volts = noise_free("hall", SAMPLE, rig, profile, times)
    apparent = volts / (rig.current_A * SAMPLE.hall_slope)
    behind = profile.at(times) - apparent
    settled = times > 5.0 + 20 * 0.3 * math.sqrt(poles)
    assert behind[settled] == pytest.approx(poles * 0.3 * rate, rel=1e-5)
    assert np.all(behind[times <= 5.0] == 0.0)
    growing = behind[(times > 5.0) & (times < 5.0 + 0.3 * poles)]
    assert np.all(growing < poles * 0.3 * rate)


@pytest.mark.parametrize("period_s", [0.05, 0.3, 2.0])
def test_what_bends_goes_through_the_stages_as_well(period_s):
    """B^2 of a settled ramp comes out as (B - n T rate)^2 + n T^2 rate^2."""
    stages, rate = RCStages(0.4, 3), 0.02
    sample = Sample(3e15, 50.0, magnetoresistance=0.5, magnetoresistance_T=50.0)
    profile = path([0.0, 2.0], rate)
    rig = _rig(stages, period_s)
    times = period_s * np.arange(int(100 / period_s))
    rise = noise_free("longitudinal", sample, rig, profile, times)
    rise = rise / (rig.current_A * sample.rho_0 * rig.squares) - 1.0
    field_T = rate * times
    square = (field_T - 1.2 * rate) ** 2 + 3 * 0.4**2 * rate**2
    settled = times > 15.0
    assert rise[settled] == pytest.approx(0.5 * square[settled] / 2500, rel=1e-3, abs=1e-9)


def test_following_a_ramp_on_a_grid_is_the_closed_form():
    stages = RCStages(0.25, 4)
    profile = path([0.1, 1.0, 0.4], 0.1, wait_s=2.0)
    grid = 0.05 * np.arange(400)
    assert stages.follow(profile.at(grid), 0.05) == pytest.approx(
        profile.behind(stages, grid), abs=2e-12
    )


@pytest.mark.parametrize("name", names())
def test_every_scenario_gives_the_same_ramp_again_and_another_one_for_another_number(name):
    one, again, other = make(name, 3), make(name, 3), make(name, 4)
    assert in_order(one.streams) == in_order(again.streams)
    assert in_order(one.streams) != in_order(other.streams)
    assert one.sample == again.sample and one.rig == again.rig and one.profile == again.profile


@pytest.mark.parametrize("name", names())
def test_every_scenario_has_readings_of_sense(name):
    for index in range(3):
        case = make(name, index)
        rows = in_order(case.streams)
        assert [row[1] for row in rows] == sorted(row[1] for row in rows)
        assert {row[0] for row in rows} >= {"field", "longitudinal", "hall"}
        assert 500 <= len(case.streams["hall"].x) <= 8000
        assert all((row[2] is not None) == (row[4] == "ok") for row in rows)
        assert case.covered or case.forbidden
        assert case.covered is False or case.sample.second_density_per_m2 == 0.0


def test_field_readings_have_their_noise_resolution_and_delay(rng):
    meter = FieldMeter(0.1, noise_T=3e-5, resolution_T=1e-5, delay_s=0.35)
    rig = replace(_rig(RCStages(0.1, 2), 0.1), meter=meter)
    profile = path([0.0, 2.0], 0.01)
    stream = simulate(SAMPLE, rig, profile, rng)["field"]
    steps = stream.x / 1e-5
    assert np.abs(steps - np.round(steps)).max() < 1e-6
    error = stream.x - profile.at(stream.time_s - 0.35)
    expected = math.sqrt(3e-5**2 + 1e-5**2 / 12)
    count = len(error)
    assert abs(error.std() / expected - 1) < 5 / math.sqrt(2 * count)
    assert abs(error.mean()) < 5 * expected / math.sqrt(count)


def test_two_lock_ins_have_times_and_noise_of_their_own(rng):
    quiet = _rig(RCStages(0.3, 4), 0.2)
    rig = replace(
        quiet, hall=replace(quiet.hall, density_V_per_rtHz=1e-8),
        longitudinal=replace(quiet.longitudinal, density_V_per_rtHz=1e-8),
    )
    profile = path([0.0, 4.0], 0.01)
    noisy, clean = (simulate(SAMPLE, one, profile, rng) for one in (rig, quiet))
    one, two = (noisy[c].x - clean[c].x for c in ("hall", "longitudinal"))
    assert not set(noisy["hall"].time_s) & set(noisy["longitudinal"].time_s)
    shorter = min(len(one), len(two))
    independent = shorter / 9.6               # their autocorrelation leaves so many
    assert abs(np.corrcoef(one[:shorter], two[:shorter])[0, 1]) < 5 / math.sqrt(independent)


@pytest.mark.parametrize("period_s", [0.1, 1.5])
def test_flicker_noise_has_the_autocovariance_that_is_said(period_s, rng):
    stages = RCStages(0.2, 2)
    spectrum = flicker(1.0, 2.0, stages)
    count, records = 40, 3000
    drawn = np.array([draw_noise(rng, spectrum, count, period_s) for _ in range(records)])
    r = autocovariance(spectrum, count, period_s)
    for first, lag in ((0, 0), (3, 1), (0, 20), (7, 32)):
        product = drawn[:, first] * drawn[:, first + lag]
        error = math.sqrt((r[0] ** 2 + r[lag] ** 2) / records)
        assert abs(product.mean() - r[lag]) < 5 * error


def test_a_flat_spectrum_gives_the_closed_form_of_white_noise():
    stages = RCStages(0.3, 3)
    r = autocovariance(lambda f: 4.0 * stages.power_gain(f), 200, 0.2)
    assert r == pytest.approx(stages.white_autocovariance(2.0, 200, 0.2), rel=1e-6, abs=1e-7)


def test_joined_field_readings_have_the_spectrum_that_is_said(rng):
    stages, period_s, own_s = RCStages(0.2, 2), 0.25, 0.4
    count, records = 60, 1500
    grid = np.arange(0, count * period_s, 0.05)
    drawn = []
    for _ in range(records):
        known = own_s * (np.arange(-30, 42) + rng.random())
        joined = np.interp(np.arange(-10.0, grid[-1], 0.05), known, rng.standard_normal(72))
        drawn.append(stages.follow(joined, 0.05)[200::5][:count])
    r = autocovariance(interpolated_readings(1.0, own_s, stages), count, period_s)
    some = np.array([one[:50] for one in drawn])
    for lag in (0, 1, 2, 4):
        product = some[:, 10] * some[:, 10 + lag]
        error = math.sqrt((r[0] ** 2 + r[lag] ** 2) / records)
        assert abs(product.mean() - r[lag]) < 5 * error


@pytest.mark.parametrize("corner_Hz", [0.0, 0.5])
@pytest.mark.parametrize("spacing", [0.1, 2.0])
def test_whitening_undoes_the_covariance(spacing, corner_Hz):
    lockin = LockIn(RCStages(0.3, 4), spacing, density_V_per_rtHz=1.0, corner_Hz=corner_Hz,
                    resolution_V=0.1)
    r = noise_autocovariance(lockin, 150)
    dense = r[np.abs(np.subtract.outer(np.arange(150), np.arange(150)))]
    undone = whiten(r, np.eye(150))
    assert undone @ dense @ undone.T == pytest.approx(np.eye(150), abs=1e-6)


def test_bound_is_the_inverse_of_the_dense_information():
    case = make("fixed_ramp", 2)
    bound, _ = hall_bound(case)
    count = 300
    lockin = case.rig.hall
    times = lockin.offset_s + lockin.period_s * np.arange(count)
    x = np.stack([np.ones(count), case.profile.behind(lockin.stages, times)], axis=1)
    r = noise_autocovariance(lockin, len(bound.times_s))
    meter = case.rig.meter
    spectrum = interpolated_readings(meter.noise_T**2 + meter.resolution_T**2 / 12,
                                     meter.period_s, lockin.stages)
    per_T = case.rig.current_A * case.sample.hall_slope
    r = r + per_T**2 * autocovariance(spectrum, len(bound.times_s), lockin.period_s)
    dense = r[np.abs(np.subtract.outer(np.arange(count), np.arange(count)))]
    variance = np.linalg.inv(x.T @ np.linalg.solve(dense, x))[1, 1]
    assert bound.variance[count - 1] == pytest.approx(variance, rel=1e-4)


def test_the_best_estimate_meets_the_bound():
    scores = []
    for index in range(80):
        case = make("fixed_ramp", index)
        density, mobility = best_estimate(case)
        known = reference(case)
        scores.append(((density / case.sample.density_per_m2 - 1) / known.density_error,
                       (mobility / case.sample.mobility_m2_per_V_s - 1) / known.mobility_error))
    squares = np.square(scores).mean(axis=0)
    assert np.abs(squares - 1).max() < 4 * math.sqrt(2 / 80)
    assert np.abs(np.mean(scores, axis=0)).max() < 4 / math.sqrt(80)


def test_the_oracle_is_as_good_as_the_target_where_it_stops():
    case = make("fixed_ramp", 5)
    known = reference(case)
    assert 0 < known.precise < known.straight
    assert known.fair >= max(known.crossed, known.straight)
    assert known.density_error * 1.96 < TARGET
    assert known.crossed == pytest.approx(case.sample.crossing_T, rel=0.05)


def test_measured_field_is_the_field_where_the_meter_is_perfect():
    case = make("fixed_ramp", 1)
    perfect = replace(case.rig.meter, noise_T=0.0, resolution_T=0.0)
    rig = replace(case.rig, meter=perfect)
    case = replace(case, rig=rig, streams=simulate(case.sample, rig, case.profile,
                                                   np.random.default_rng(0)))
    times = case.streams["hall"].time_s[:-10]
    seen = measured_field(case, rig.hall, times)
    true = case.profile.behind(rig.hall.stages, times)
    assert np.abs(seen - true).max() < case.setting.rate_T_per_s * rig.hall.period_s


def test_two_sheets_agree_with_the_closed_form():
    """n1 = 3e15, mu1 = 10, n2 = 1e15, mu2 = 1 in SI, same sign: rho_xx, rho_xy at 0.2 and 10 T."""
    sample = Sample(3e15, 10.0, sign=1, second_density_per_m2=1e15,
                    second_mobility_m2_per_V_s=1.0)
    rho_xx, rho_xy = sample.rho(np.array([0.2, 10.0]))
    assert rho_xx == pytest.approx([220.431832679, 505.296964788], rel=1e-9)
    assert rho_xy == pytest.approx([386.060171045, 15627.3294282], rel=1e-9)


def test_one_sheet_is_drude_and_oscillates_in_one_over_field():
    """GaAs, n = 3e15: rho_0 = 41.61 ohm at 50 m^2/Vs, f = 6.2035 T; minima at f / N."""
    rho_xx, rho_xy = SAMPLE.rho(np.array([0.0, 1.0]))
    assert rho_xx == pytest.approx([41.6100604964] * 2)
    assert rho_xy == pytest.approx([0.0, -2080.50302482])
    waving = replace(SAMPLE, quantum_lifetime_s=1e-12, temperature_K=0.3)
    around = 6.20350154539 / 4 * np.array([0.97, 1.0, 1.03])
    low = waving.rho(around)[0]
    assert low[1] < low[0] and low[1] < low[2]
    plateau = waving.rho(np.array([6.20350154539 / 2]))[1][0]
    assert plateau == pytest.approx(-PLANCK / ELEMENTARY_CHARGE**2 / 4, rel=1e-9)


def test_the_peak_at_zero_is_even_and_gone_far_out():
    sample = Sample(1e16, 0.5, peak=0.05, peak_T=0.01)
    rho_xx, rho_xy = sample.rho(np.array([0.0, 0.01, -0.01, 9.0]))
    assert rho_xx[0] / sample.rho_0 == pytest.approx(1.05, abs=1e-3)
    assert rho_xx[1] == rho_xx[2]
    assert rho_xx[3] / sample.rho_0 == pytest.approx(1.0, abs=1e-3)
    assert rho_xy[3] == pytest.approx(sample.hall_slope * 9.0)


def test_profiles_know_their_path_and_what_was_swept():
    profile = path([0.0, 1.0, -1.0], [0.1, 0.2], wait_s=3.0, holds_s=[5.0])
    assert profile.turning_fields_T == (0.0, 1.0, -1.0)
    assert profile.start_s == 3.0
    assert profile.end_s == pytest.approx(3 + 10 + 5 + 10)
    assert profile.swept(np.array([3.0, 8.0, 15.0, 28.0])) == pytest.approx([0, 0.5, 1, 3])
    stairs = staircase(0.0, 1.0, 4, 1.0, 2.0)
    assert stairs.turning_fields_T == (0.0, 1.0)
    assert stairs.at(np.array([2.2 + 0.25])) == pytest.approx(0.25)
