"""The field behind a lock-in's stages against scipy's simulation of the same cascade."""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from scipy.signal import lsim

from analyse import LockinFilter
from analyse.field_track import CLOSEST_S, FieldTrack, advance_stages

# Corners (time in s, field in T) of ramps as they are; straight between them.
COURSES = {
    "ramp": [(0, 0), (60, 1.0)],
    "rest, then ramp": [(0, 0.1), (20, 0.1), (60, 1.3)],
    "there and back": [(0, -0.5), (25, 0.5), (60, -0.9)],
    "hold": [(0, 0), (20, 0.4), (40, 0.4), (60, 0.8)],
    "changes of rate": [(0, 0), (15, 0.15), (30, 1.5), (45, 1.7), (60, 0.2)],
    "step": [(0, 0.2), (20, 0.2), (20.5, 0.9), (60, 0.9)],
}
FILTERS = [(0.3, 4), (0.1, 2), (1.0, 1), (0.05, 3), (2.0, 8)]


def course(name: str, time_s: float) -> float:
    """The field of a course."""
    corners = np.array(COURSES[name], float)
    return float(np.interp(time_s, corners[:, 0], corners[:, 1]))


def simulated(name: str, stages: LockinFilter, times_s: np.ndarray) -> np.ndarray:
    """The course behind the cascade, by scipy.signal.lsim, from a state of rest.

    A chain of ``poles`` stages x' = (input - x) / T; exact for inputs that are straight between
    the times, as these are.
    """
    n, T = stages.poles, stages.time_constant_s
    chain = (np.eye(n, k=-1) - np.eye(n)) / T
    first, last = np.eye(n)[:, :1] / T, np.eye(n)[-1:]
    field = np.array([course(name, t) for t in times_s])
    _, out, _ = lsim((chain, first, last, np.zeros((1, 1))), field, times_s, np.full(n, field[0]))
    return np.asarray(out)


@pytest.mark.parametrize("name", COURSES)
@pytest.mark.parametrize(("T", "poles"), FILTERS)
def test_as_scipy_simulates_it(name: str, T: float, poles: int) -> None:
    stages = LockinFilter(T, poles)
    track = FieldTrack(stages, None)
    for time_s in np.arange(0.0, 60.01, 0.25):  # corners fall on it
        track.append(float(time_s), course(name, float(time_s)))
    times = np.linspace(0.0, 60.0, 1201)
    expected = simulated(name, stages, times)
    known = [track.at(float(time_s)) for time_s in times]
    settled = stages.settle_s(1e-3)
    assert [one is not None for one in known] == [bool(time_s >= settled) for time_s in times]
    found = np.array([one[0] for one in known if one is not None])
    assert found == pytest.approx(expected[-len(found) :], abs=1e-12)
    for one, time_s in zip(known, times):
        ahead, behind = course(name, time_s - 0.02), course(name, time_s - 0.03)
        if one is not None:
            assert one[1] == pytest.approx((ahead - behind) / 0.01, abs=1e-9)


@pytest.mark.parametrize(("T", "poles"), FILTERS)
def test_a_steady_ramp_lags_by_poles_times_time_constant(T: float, poles: int) -> None:
    stages = LockinFilter(T, poles)
    track = FieldTrack(stages, None)
    for k in range(400):
        track.append(0.5 * k, 0.01 * 0.5 * k)
    known = track.at(170.3)
    assert known is not None
    assert known == pytest.approx((0.01 * (170.3 - stages.delay_s), 0.01), rel=1e-9)


def test_readings_of_the_field_at_any_spacing_make_no_difference() -> None:
    stages = LockinFilter(0.3, 4)
    rng = np.random.default_rng(4)
    coarse, fine = FieldTrack(stages, None), FieldTrack(stages, None)
    for t in (0.0, 15.0, 30.0, 45.0, 60.0):
        coarse.append(t, course("changes of rate", t))
    for t in np.unique(np.concatenate([np.linspace(0, 60, 5), rng.uniform(0, 60, 700)])):
        fine.append(float(t), course("changes of rate", float(t)))
    for t in rng.uniform(10, 60, 50):
        one, two = coarse.at(float(t)), fine.at(float(t))
        assert one is not None
        assert two is not None
        assert one[0] == pytest.approx(two[0], abs=1e-12)


@pytest.mark.parametrize("poles", [1, 2, 3, 4, 8])
def test_advancing_in_two_steps_is_advancing_in_one(poles: int) -> None:
    state = tuple(0.1 * k - 0.2 for k in range(poles))
    once = advance_stages(state, 0.5, 0.02, 1.7, 0.3)
    half = advance_stages(state, 0.5, 0.02, 0.6, 0.3)
    twice = advance_stages(half, 0.5 + 0.02 * 0.6, 0.02, 1.1, 0.3)
    assert twice == pytest.approx(once, rel=1e-12)
    assert advance_stages(state, 0.5, 0.02, 0.0, 0.3) == pytest.approx(state, abs=1e-15)


@pytest.mark.parametrize("dt", [1.0, 210.0, 211.0, 1e9, 1e300])
def test_a_long_rest_ends_at_the_field_itself(dt: float) -> None:
    state = advance_stages((3.0, 2.0, 1.0, 0.0), 0.5, 0.0, dt, 0.3)
    assert all(map(math.isfinite, state))
    if dt > 100:
        assert state == pytest.approx((0.5,) * 4, abs=1e-12)


def test_without_a_filter_it_is_the_field_itself() -> None:
    track = FieldTrack(None, None)
    for k in range(5):
        track.append(float(k), k * k / 10)
    assert track.at(2.25) == pytest.approx((0.4 + 0.25 * 0.5, 0.5))
    assert track.at(3.0) == pytest.approx((0.9, 0.5))
    assert track.at(0.0) == (0.0, 0.0)
    assert track.last_time_s == 4.0


@pytest.mark.parametrize("stages", [None, LockinFilter(0.1, 2)])
def test_not_known_before_the_first_and_after_the_last_reading(
    stages: LockinFilter | None,
) -> None:
    track = FieldTrack(stages, None)
    assert (track.at(0.0), track.last_time_s) == (None, -math.inf)
    track.append(10.0, 0.5)
    assert track.at(9.99) is None
    assert track.at(10.01) is None
    track.append(12.0, 0.5)
    assert track.at(9.99) is None
    assert track.at(12.01) is None
    assert track.at(11.5) == pytest.approx((0.5, 0.0))


def test_not_known_until_the_stages_have_settled() -> None:
    stages = LockinFilter(0.3, 4)
    track = FieldTrack(stages, None)
    for k in range(100):
        track.append(0.1 * k, 0.7)
    settled = stages.settle_s(1e-3)
    assert track.at(settled - 0.01) is None
    assert track.at(settled + 0.01) is not None


@pytest.mark.parametrize("stages", [None, LockinFilter(0.1, 2)])
def test_over_too_long_a_gap_nothing_is_interpolated(stages: LockinFilter | None) -> None:
    track = FieldTrack(stages, 1.0)
    settled = 0.0 if stages is None else stages.settle_s(1e-3)
    for k in range(40):
        track.append(0.5 * k, 0.01 * k)
    for k in range(40):
        track.append(22.0 + 0.5 * k, 0.44 + 0.01 * k)
    assert track.at(19.4) is not None
    assert track.at(20.0) is None
    assert track.at(21.99) is None
    assert track.at(22.0 + settled + 0.01) == pytest.approx(
        (0.44 + 0.02 * (settled + 0.01) - (0.0 if stages is None else 0.02 * stages.delay_s), 0.02),
        abs=2e-5,
    )
    if stages is not None:
        assert track.at(22.0 + settled - 0.01) is None


def test_what_is_not_later_than_the_last_reading_is_passed_over() -> None:
    track, clean = FieldTrack(None, None), FieldTrack(None, None)
    rows = [(0.0, 0.0), (1.0, 0.1), (1.0, 9.0), (0.5, 7.0), (1.0 + CLOSEST_S / 2, 5.0), (2.0, 0.2)]
    for row in rows:
        track.append(*row)
    for row in (rows[0], rows[1], rows[5]):
        clean.append(*row)
    for t in (0.3, 1.0, 1.5, 2.0):
        assert track.at(t) == clean.at(t)


def test_readings_from_before_its_start_are_passed_over() -> None:
    track, clean = FieldTrack(LockinFilter(0.1, 1), None, 3.0), FieldTrack(LockinFilter(0.1, 1), None)
    for k in range(100):
        track.append(0.1 * k, 0.02 * k)
        if 0.1 * k >= 3.0:
            clean.append(0.1 * k, 0.02 * k)
    for t in (2.0, 3.05, 5.0, 9.0):
        assert track.at(t) == clean.at(t)
    assert track.at(5.0) is not None


@pytest.mark.parametrize("stages", [None, LockinFilter(0.1, 2)])
def test_what_is_forgotten_changes_nothing_from_then_on(stages: LockinFilter | None) -> None:
    """To the last bit, for every moment from the named one on, the moment of a reading included,
    and whether what follows is here already or comes later."""
    rng = np.random.default_rng(8)
    grid = [0.5 * k for k in range(60)]
    moments = sorted([*grid, *rng.uniform(0, 29, 60)])
    knots = [(t, float(x)) for t, x in zip(grid, rng.normal(size=60))]
    whole, short = FieldTrack(stages, 2.0), FieldTrack(stages, 2.0)
    for knot in knots:
        whole.append(*knot)
    coming = iter(knots)
    for before, moment in itertools.pairwise([0.0, *moments]):
        while short.last_time_s < moment:
            short.append(*next(coming))
        short.forget_before(before)
        assert short.at(moment) == whole.at(moment)
        short.forget_before(moment)
        assert short.at(moment) == whole.at(moment)


def test_memory_is_bounded_by_what_is_still_wanted() -> None:
    track = FieldTrack(LockinFilter(0.3, 4), 1.0)
    for k in range(20_000):
        track.append(0.1 * k, 1e-4 * k)
        track.forget_before(0.1 * k - 1.0)
    assert len(track._knots) < 20
