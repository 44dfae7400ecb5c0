"""What a run has found, from rows of its tables, and the words for it."""

from __future__ import annotations

import pytest

from acquire.tables import Cell, Row
from analyse.estimate_table import ESTIMATES, EVENTS
from dashboard.summary import Summary
from dashboard.words import duration, fitting, told


def estimate(**cells: Cell) -> Row:
    """A row of the table of estimates; what is not named is not known."""
    assert set(cells) <= set(ESTIMATES.names)
    row = {"seq": 0, "time_s": 0.0, "hall_bar": "bar", "verdict": "converging"} | cells
    return tuple(row.get(name) for name in ESTIMATES.names)


def event(**cells: Cell) -> Row:
    """A row of the table of events."""
    assert set(cells) <= set(EVENTS.names)
    return tuple(cells.get(name) for name in EVENTS.names)


@pytest.fixture
def summary() -> Summary:
    """A run of two Hall bars, of which nothing has been heard."""
    return Summary("run", ["bar", "other"], 0.95)


def test_nothing_is_known_at_first(summary: Summary) -> None:
    text = told(summary)
    assert text.count("not known yet") == 8
    assert "bar: converging" in text
    assert summary.bars["bar"].verdict == "converging"


def test_numbers_with_two_digits_of_their_uncertainty(summary: Summary) -> None:
    summary.add_estimate(
        estimate(
            sheet_density_per_m2=2.4012e15,
            sheet_density_per_m2_u=0.0123e15,
            sheet_density_per_m2_low=2.371e15,
            sheet_density_per_m2_high=2.431e15,
            carriers="electrons",
            field_points=7,
        )
    )
    text = told(summary)
    assert "2.401(12) × 10¹⁵ m⁻² = 2.401(12) × 10¹¹ cm⁻²" in text
    assert "95 % interval 2.371 to 2.431" in text
    assert "2.401(12) x 10^15 m^-2" in fitting(text, "ascii")
    assert "electrons, 7 field points" in text


def test_stable_since_and_not_any_more(summary: Summary) -> None:
    bar = summary.bars["bar"]
    for time_s, verdict in ((1.0, "stable"), (2.0, "stable")):
        summary.add_estimate(estimate(time_s=time_s, field_T=0.1 * time_s, verdict=verdict))
    assert bar.stable_at == (1.0, 0.1)
    assert "stable since +0.1000 T, 1 s after the start" in told(summary)
    summary.add_estimate(estimate(time_s=3.0, waiting_for="an open caution"))
    assert bar.stable_at is None
    assert "converging: an open caution" in told(summary)


def test_without_times_the_rows_are_counted() -> None:
    summary = Summary("run", ["bar"], 0.95, timed=False)
    summary.add_estimate(estimate(time_s=129.0, field_T=0.05, verdict="stable"))
    assert "stable since +0.0500 T, at row 129" in told(summary)


def test_a_caution_is_told_while_it_is_open(summary: Summary) -> None:
    summary.add_event(event(kind="caution", hall_bar="bar", code="drift", text="It drifts."))
    summary.add_event(event(kind="process", code="died", text="reader x was killed"))
    summary.add_estimate(estimate(cautions="drift overload"))
    assert summary.bars["bar"].cautions == {"drift": "It drifts.", "overload": ""}
    assert "caution drift: It drifts." in told(summary)
    summary.add_estimate(estimate(cautions=None))
    assert "drift" not in told(summary)


def test_durations() -> None:
    shown = [duration(seconds) for seconds in (0.4, 59.4, 59.6, 3599.4, 3600.0, 7384.0)]
    assert shown == ["0 s", "59 s", "1 min 0 s", "59 min 59 s", "1 h 0 min", "2 h 3 min"]
