"""Who is held to hang, by what was heard of it."""

from __future__ import annotations

import pytest
from two_bars import rig

from acquire.bus import StreamHealth
from acquire.readings import stream_of
from dashboard.hangs import HUNG_S, Hangs

READERS = [reader.name for reader in rig().readers]


def health(heard: float | None, **other: StreamHealth) -> dict[str, StreamHealth]:
    """Of all streams, the last sign of life at ``heard``."""
    streams = [*map(stream_of, READERS), "estimates", "events"]
    return {**{name: StreamHealth(5, heard, 0, 0) for name in streams}, **other}


@pytest.fixture
def hangs() -> Hangs:
    return Hangs(rig(), 0.0)


def publish(hangs: Hangs, now: float, *names: str) -> None:
    for name in names:
        hangs.news(stream_of(name), now)


def test_whoever_publishes_does_not_hang(hangs: Hangs) -> None:
    for now in range(0, 1000, 10):
        publish(hangs, now, *READERS)
        assert hangs.look(health(now), now) == []


def test_a_reader_that_publishes_nothing_hangs_though_its_publisher_answers(hangs: Hangs) -> None:
    publish(hangs, 60.0, *READERS[1:])
    assert hangs.look(health(60.0), 60.0) == []
    assert hangs.look(health(61.0), 61.0) == [
        (f"reader {READERS[0]}", "published nothing for 60.4 s")
    ]
    assert hangs.look(health(62.0), 62.0) == [], "its successor has a minute, too"


def test_a_reader_that_cannot_record_is_left_alone_while_it_says_so(hangs: Hangs) -> None:
    """What it has read waits in its memory."""
    stream = stream_of(READERS[0])
    for now in range(0, 600, 10):
        publish(hangs, now, *READERS[1:])
        full = StreamHealth(5, now - 1.0, 0, 0, 0, "disk full")
        assert hangs.look(health(now, **{stream: full}), now) == []
    frozen = StreamHealth(5, 589.0, 0, 0, 0, "disk full")
    publish(hangs, 651.0, *READERS[1:])
    assert [role for role, _ in hangs.look(health(651.0, **{stream: frozen}), 651.0)] == [
        f"reader {READERS[0]}"
    ]


def test_an_estimator_hangs_when_it_does_not_answer(hangs: Hangs) -> None:
    for now in (50.0, 100.0, 130.0):
        publish(hangs, now, *READERS)
        assert hangs.look(health(min(now, 70.0)), now) == []
    publish(hangs, 131.0, *READERS)
    assert hangs.look(health(70.0), 131.0) == [("estimator", f"answered nothing for {HUNG_S:g} s")]
    assert hangs.look(health(70.0), 132.0) == []


def test_nobody_hangs_before_a_minute_is_over(hangs: Hangs) -> None:
    assert hangs.look(health(None), 59.0) == []
    assert len(hangs.look(health(None), 62.0)) == len(READERS) + 1
