"""Who is held to hang, by what was heard of it."""

from __future__ import annotations

from collections.abc import Callable, Iterable

import pytest
from two_bars import rig

from acquire.bus import StreamHealth
from acquire.readings import stream_of
from dashboard.hangs import HUNG_S, Hangs

READERS = [reader.name for reader in rig().readers]
FIRST = stream_of(READERS[0])
Health = dict[str, StreamHealth]


@pytest.fixture
def hangs() -> Hangs:
    return Hangs(rig(), 0.0)


def health(heard: float | None, **other: StreamHealth) -> Health:
    """Of all streams, the last sign of life at ``heard``."""
    streams = [*map(stream_of, READERS), "estimates", "events"]
    return {**{name: StreamHealth(5, heard, 0, 0) for name in streams}, **other}


def look(
    hangs: Hangs, times: range, heard: Callable[[float], Health], news: Iterable[str] = READERS
) -> list[tuple[int, str, str]]:
    """Look at these times, the readers ``news`` having published each time; who hung, and when."""
    found = []
    for now in times:
        for name in news:
            hangs.news(stream_of(name), now)
        found += [(now, role, why) for role, why in hangs.look(heard(now), now)]
    return found


def test_whoever_publishes_does_not_hang(hangs: Hangs) -> None:
    assert look(hangs, range(1000), health) == []


def test_a_reader_that_publishes_nothing_hangs_though_its_publisher_answers(hangs: Hangs) -> None:
    found = look(hangs, range(150), health, READERS[1:])
    role, why = f"reader {READERS[0]}", "published nothing for 60.4 s"
    assert found == [(61, role, why), (122, role, why)], "its successor has a minute, too"


def test_a_reader_that_cannot_record_is_left_alone_while_it_says_so(hangs: Hangs) -> None:
    """What it has read waits in its memory."""

    def full(now: float) -> Health:
        return health(now, **{FIRST: StreamHealth(5, now - 1.0, 0, 0, 0, "disk full")})

    def frozen(now: float) -> Health:
        return health(now, **{FIRST: StreamHealth(5, 598.0, 0, 0, 0, "disk full")})

    assert look(hangs, range(600), full, READERS[1:]) == []
    found = look(hangs, range(600, 670), frozen, READERS[1:])
    assert [(now, role) for now, role, _ in found] == [(659, f"reader {READERS[0]}")]


def test_an_estimator_hangs_when_it_does_not_answer(hangs: Hangs) -> None:
    found = look(hangs, range(150), lambda now: health(min(now, 70.0)))
    assert found == [(131, "estimator", f"answered nothing for {HUNG_S:g} s")]


def test_nobody_hangs_before_a_minute_is_over(hangs: Hangs) -> None:
    found = look(hangs, range(65), lambda now: health(None), ())
    assert {now for now, _, _ in found} == {61}
    assert len(found) == len(READERS) + 1


def test_nobody_hangs_because_the_watch_itself_was_frozen(hangs: Hangs) -> None:
    assert look(hangs, range(50), health) == []
    found = look(hangs, range(900, 1000), lambda now: health(49.0), ())
    assert {now for now, _, _ in found} == {961}


def test_the_time_in_which_it_was_dead_does_not_count(hangs: Hangs) -> None:
    assert look(hangs, range(55), lambda now: health(0.0), READERS[1:]) == []
    hangs.begins_anew(f"reader {READERS[0]}", 55.0)
    hangs.begins_anew("estimator", 56.0)
    found = look(hangs, range(55, 130), lambda now: health(0.0), READERS[1:])
    assert [(now, role) for now, role, _ in found] == [
        (116, f"reader {READERS[0]}"), (117, "estimator"),
    ]  # fmt: skip
