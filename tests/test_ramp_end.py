"""When a ramp counts as over."""

from __future__ import annotations

from collections.abc import Callable
from itertools import pairwise

from dashboard.ramp_end import RampEnd


def over_at(end: RampEnd, field_T: Callable[[float], float], until_s: float) -> float | None:
    """The time of the reading (5 a second) at which the ramp was over, or None."""
    for step in range(int(until_s * 5)):
        end.add(step / 5, field_T(step / 5))
        if end.over:
            return step / 5
    return None


def path(*corners: tuple[float, float]) -> Callable[[float], float]:
    """Straight lines between (time, field) corners, standing before and after."""

    def field_T(time_s: float) -> float:
        for (t0, b0), (t1, b1) in pairwise(corners):
            if time_s < t0:
                return b0
            if time_s < t1:
                return b0 + (b1 - b0) * (time_s - t0) / (t1 - t0)
        return corners[-1][1]

    return field_T


def test_over_when_it_has_stood_for_five_seconds_at_the_last_field() -> None:
    when = over_at(RampEnd((0.0, 1.0), 60.0), path((3.0, 0.0), (63.0, 1.0)), 100.0)
    assert when is not None
    assert 67.0 <= when <= 68.2


def test_a_path_that_returns_is_not_over_where_it_began() -> None:
    there_and_back = path((30.0, 0.0), (60.0, 1.0), (90.0, 0.0))
    when = over_at(RampEnd((0.0, 1.0, 0.0), 60.0), there_and_back, 120.0)
    assert when is not None
    assert 94.0 <= when <= 96.0


def test_a_hold_on_the_way_is_not_the_end() -> None:
    held = path((0.0, 0.0), (50.0, 0.9), (200.0, 0.9))
    assert over_at(RampEnd((0.0, 1.0), 60.0), held, 200.0) is None


def test_a_field_that_never_moves_is_not_over() -> None:
    assert over_at(RampEnd((0.0, 1.0), 10.0), lambda time_s: 0.0, 60.0) is None
    assert over_at(RampEnd((0.0, 1.0, 0.0), 10.0), lambda time_s: 0.0, 60.0) is None


def test_a_ramp_that_was_over_before_the_first_reading() -> None:
    assert over_at(RampEnd((0.0, 1.0), 20.0), lambda time_s: 1.0, 60.0) == 18.0


def test_noise_below_a_percent_of_the_span_does_not_matter() -> None:
    ramp = path((3.0, 0.0), (63.0, 1.0))
    noisy = over_at(
        RampEnd((0.0, 1.0), 60.0), lambda t: ramp(t) + (0.003 if int(t * 5) % 2 else -0.003), 100.0
    )
    assert noisy is not None


def test_a_slow_ramp_must_stand_for_longer() -> None:
    when = over_at(RampEnd((0.0, 9.0), 3600.0), path((0.0, 0.0), (3600.0, 9.0)), 4000.0)
    assert when is not None
    assert when >= 3600.0


def test_joined_in_the_middle_of_the_ramp() -> None:
    when = over_at(RampEnd((0.0, 1.0), 60.0), path((-30.0, 0.0), (30.0, 1.0)), 100.0)
    assert when is not None
    assert 54.0 <= when <= 57.0
