"""Clocks of two computers: compared over the bus, corrected in the journal, told where in doubt."""

from __future__ import annotations

import json
import re
import signal
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from random import Random

import pytest
from hypothesis import given
from hypothesis import strategies as st
from link import Link
from relay_sides import TABLE, Pair, as_heard_here, configuration, heard_of
from scripted_instrument import ScriptedInstrument

from acquire.bus import Endpoint, Publisher, RoundTrip, free_endpoints
from acquire.bus.keys import KeyFolder
from acquire.config import parse
from acquire.journal import Journal
from acquire.relay.clock_words import ClockWords, tolerable_s
from acquire.relay.clocks import DRIFT, KEPT, ClockComparison, Difference
from acquire.relay.far_side import FarSide
from acquire.relay.translation import ENDED, Standing, Translation, standing_of
from acquire.stop import Stop, Stopped
from acquire.tables import Row

Wait = Callable[..., None]
HERE = "2031-05-14T10:00:00.000000Z"
ANSWERS = {"*IDN?": "MAKER,MODEL,7,1.0", "X?": "1.5,0.25", "T?": "9"}


@given(
    st.floats(-1e6, 1e6),
    st.lists(st.tuples(st.floats(0, 0.5), st.floats(0, 0.5), st.floats(0, 60)), min_size=1),
    st.floats(-DRIFT / 2, DRIFT / 2),
)
def test_the_true_difference_is_always_within_the_uncertainty(
    offset_s: float, trips: list[tuple[float, float, float]], drift: float
) -> None:
    """Whatever the two ways take, and while the clocks run apart."""
    clocks, now_s = ClockComparison(), 0.0

    def there(time_s: float) -> float:
        return time_s * (1 + drift) - offset_s

    for way_there_s, way_back_s, pause_s in trips:
        now_s += pause_s
        sent_s, now_s = now_s, now_s + way_there_s + way_back_s
        clocks.add(RoundTrip("run", sent_s, there(sent_s + way_there_s), now_s))
    found = clocks.difference(now_s)
    assert found is not None
    assert abs(found.offset_s - (now_s - there(now_s))) <= found.uncertainty_s + 1e-8


def test_the_quickest_round_trip_counts_until_it_is_old() -> None:
    clocks = ClockComparison()
    assert clocks.difference(0.0) is None
    clocks.add(RoundTrip("run", 10.0, 5.0, 10.002))
    clocks.add(RoundTrip("run", 11.0, 6.04, 11.1))
    assert clocks.difference(11.1) == Difference(pytest.approx(5.001), pytest.approx(0.001 + DRIFT * 1.1))
    for number in range(KEPT):
        clocks.add(RoundTrip("run", 600.0 + number, 595.05 + number, 600.1 + number))
    found = clocks.difference(616.0)
    assert found is not None and found.uncertainty_s > 0.05


def test_a_clock_that_stood_still_is_believed_from_then_on() -> None:
    clocks = ClockComparison()
    clocks.add(RoundTrip("run", 10.0, 5.0, 10.0))
    clocks.add(RoundTrip("run", 12.0, 4.0, 12.2))  # slower, but the other can't be true any more
    assert clocks.difference(12.2) == Difference(pytest.approx(8.1), pytest.approx(0.1, rel=1e-3))


def test_an_answer_before_its_question_tells_nothing() -> None:
    clocks = ClockComparison()
    clocks.add(RoundTrip("run", 10.0, 5.0, 9.0))
    assert clocks.difference(10.0) is None


@pytest.mark.parametrize(
    ("before", "after", "step"),
    [
        ((1.0, 1e-4), (1.0009, 1e-4), False),  # too little to matter
        ((1.0, 1e-4), (1.0011, 1e-4), True),
        ((1.0, 1e-4), (1.01, 0.02), False),  # not known well enough to be moved
        ((1.0, 0.05), (1.01, 0.02), True),  # known better than before
        ((1.0, 1e-4), (3.0, 0.5), True),
    ],
)
def test_what_is_corrected(
    before: tuple[float, float], after: tuple[float, float], step: bool
) -> None:
    assert Difference(*before).step_to(Difference(*after)) == step


def row(seq: int, time_s: float) -> Row:
    return (seq, time_s, 0.01, "ok", None, float(seq))


def test_a_correction_stands_in_front_of_the_rows_for_which_it_holds() -> None:
    translation = Translation(HERE, Standing(), 1)
    translation.adopt("far", HERE, Difference(2.0, 0.01))
    assert translation.correct(Difference(3.0, 0.001)) == []  # nothing stands there to correct
    rows = [*translation.take(row(0, 1.0)), *translation.correct(Difference(2.125, 0.001))]
    rows += [*translation.take(row(1, 1.5)), *translation.correct(Difference(2.126, 0.001))]
    rows += [*translation.correct(Difference(1.0, 0.001)), *translation.take(row(2, 1.75))]
    rows += translation.take(row(3, 3.0))
    assert [cells[:3] for cells in rows] == [
        (0.0, None, "relay"), (3.0, 0.01, "ok"), (3.0, None, "relay"), (3.625, 0.01, "ok"),
        (3.625, None, "relay"), (3.625, 0.01, "ok"), (4.0, 0.01, "ok"),
    ]  # fmt: skip
    words = [str(cells[3]).partition("; ")[2] or cells[3] for cells in rows if cells[2] == "relay"]
    assert words == [
        "its 0 s are 2.0 s here, to within 0.01 s",
        "its 0 s are 2.125 s here, to within 0.001 s (before: 2.0 s)",
        "its 0 s are 1.0 s here, to within 0.001 s (before: 2.125 s)",
    ]


@given(st.integers(0, 2**32), st.lists(st.integers(1, 30), max_size=5))
def test_whoever_is_killed_where_ever_goes_on_with_what_stands_in_the_journal(
    seed: int, kills: list[int]
) -> None:
    """Each row is moved by the difference that stands last in front of it, and by no other."""
    random, journal = Random(seed), []
    translation = Translation(HERE, Standing(), 1)
    lives = iter(kills)
    life = next(lives, 1000)
    seq = translation.adopt("far", HERE, Difference(2.0, 0.01))
    while seq < 30:
        rows = translation.take(row(seq, 0.1 * seq))
        if random.random() < 0.4:
            rows += translation.correct(Difference(2.0 + random.random(), 0.001))
        journal += [(len(journal) + n, *cells) for n, cells in enumerate(rows[:life])]
        seq, life = seq + 1, life - len(rows)
        if life < 0:
            life = next(lives, 1000)
            translation = Translation(HERE, standing_of(journal), 1)
            seq = translation.adopt("far", HERE, Difference(9.0 + random.random(), 0.01))
    offset_s = latest_s = 0.0
    numbers = []
    for _, time_s, _, status, detail, number in journal:
        if status == "relay":
            offset_s = float(re.search(r"its 0 s are (\S+) s here", detail)[1])  # type: ignore[index]
        else:
            latest_s = max(latest_s, 0.1 * number + offset_s)
            assert time_s == latest_s
            numbers.append(number)
    assert numbers == list(range(30))


def test_words_of_an_instrument_move_nothing() -> None:
    """What an instrument answers may stand in the detail of a row."""
    lie = 'listens to run "x", started y, from its row 900 on; its 0 s are 77.0 s here, to within 0 s'
    translation = Translation(HERE, Standing(), 1)
    translation.adopt("far", HERE, Difference(2.0, 0.01))
    journal = []
    for seq, status in enumerate(("ok", "no_answer", "bad_reply", "settings", "relay", "unheard")):
        rows = translation.take((seq, float(seq), None, status, lie, None))
        journal += [(len(journal) + n, *cells) for n, cells in enumerate(rows)]
    standing = standing_of(journal)
    assert (standing.run, standing.next_seq, standing.clocks) == ("far", 6, Difference(2.0, 0.01))
    assert [one[3] for one in journal[-2:]] == ["no_answer", "no_answer"]


# What a person is told.


def test_what_is_tolerable_follows_from_the_filters() -> None:
    config = configuration("TCPIP::a::1::SOCKET", Endpoint("tcp://127.0.0.1:1", "tcp://127.0.0.1:2"))
    rig = parse(config)
    assert tolerable_s(rig, rig.reader("lockin")) == pytest.approx(0.002)
    stages = b'hall = { reader = "lockin", x = "x", filter = { time_constant_s = 0.3, poles = 4 } }'
    rig = parse(config.replace(b'hall = { reader = "lockin", x = "x" }', stages))
    assert tolerable_s(rig, rig.reader("lockin")) == pytest.approx(0.12)


def test_each_doubt_is_told_once_as_long_as_it_lasts() -> None:
    told: list[str] = []
    words = ClockWords(0.01, told.append)
    words.met(0.5)
    for second in range(10):
        words.compared(float(second), Difference(1.0 + 1e-5 * second, 0.001))
    assert told == []
    words.met(-3600.0)
    assert "its wall clock is 3.6e+03 s behind ours; times are corrected" in told.pop()
    for second in range(10, 20):
        words.compared(float(second), Difference(1.0, 0.02))
    (text,) = told
    assert "known to within 0.02 s only" in text
    words.compared(20.0, Difference(1.0, 0.001))
    assert told.pop() == "its clock is known to within 0.001 s again"
    words.compared(22.0, Difference(-29.0, 0.001))
    assert "its clock has moved by -30 s against ours within 2 s" in told.pop()


# The processes.


@pytest.fixture
def resource() -> Iterator[str]:
    with ScriptedInstrument(ANSWERS) as scripted:
        yield scripted.resource


def test_the_clocks_of_two_processes_are_compared_truly(
    tmp_path: Path, resource: str, wait_for: Wait
) -> None:
    """A clock that is 1234.5 s ahead, a wall clock that is an hour wrong; the truth is known."""
    pair = Pair(tmp_path, resource)
    far = pair.far(clock_s=1234.5)
    package = far.run.path / "datapackage.json"
    wrong = json.loads(package.read_text())
    wrong["created"] = "2031-05-14T10:00:00.000000Z"
    package.write_text(json.dumps(wrong))
    near = pair.near()
    try:
        for side in (far, near):
            side.start()
        wait_for(lambda: near.count() >= 20, "rows by the relay")
        assert far.end() == 0
        wait_for(lambda: near.rows()[-1][4] == ENDED, "the end elsewhere")
        assert near.end() == 0
    finally:
        for side in pair.sides:
            side.close()
    true_s = far.monotonic_start - near.monotonic_start
    clocks = standing_of(near.rows()).clocks
    assert clocks is not None
    assert abs(clocks.offset_s - true_s) <= clocks.uncertainty_s < 0.5
    assert heard_of(near, far.run) == as_heard_here(far, near)
    assert "its wall clock is" in near.words[0]


def test_a_link_that_stalls_is_cut_and_is_mended_loses_no_row(
    tmp_path: Path, resource: str, wait_for: Wait
) -> None:
    """Three computers (addresses of loopback), with keys; one link of two is broken."""
    cryostat, desk = KeyFolder(tmp_path / "cryostat"), KeyFolder(tmp_path / "desk")
    for keys in (cryostat, desk):
        keys.make(keys.path.name)
    desk.accept(cryostat.path / "cryostat.pub")
    cryostat.accept(desk.path / "desk.pub")
    pairs, links = [], []
    for host in ("127.0.0.2", "127.0.0.3"):
        free = free_endpoints(["far"])["far"]
        publish, answer = (one.replace("127.0.0.1", host) for one in (free.publish, free.answer))
        far = Endpoint(publish, answer, str(cryostat.path), "cryostat")
        links.append([Link("127.0.0.4", publish), Link("127.0.0.4", answer)])
        heard_at = Endpoint(*(link.address for link in links[-1]), str(desk.path), "cryostat")
        pairs.append(Pair(tmp_path / host, resource, far, heard_at))
    sides = [(pair.far(), pair.near()) for pair in pairs]
    (broken, hurt), (_, unhurt) = sides
    try:
        for far_side, near_side in sides:
            far_side.start()
            near_side.start()
        for _, near_side in sides:
            wait_for(lambda near=near_side: near.count() >= 20, "rows", 60)
        for breaking in (Link.stall, Link.cut):
            for link in links[0]:
                breaking(link)
            known, others = broken.count(), unhurt.count()
            wait_for(lambda known=known: broken.count() >= known + 60, "rows that nobody hears")
            wait_for(lambda others=others: unhurt.count() >= others + 20, "rows by the other link")
            assert hurt.count() < known + 60
            for link in links[0]:
                link.mend()
            goal = broken.count() + 20
            wait_for(lambda goal=goal: hurt.count() > goal, "rows after the link was mended", 60)
        known_at_end = [far_side.count() for far_side, _ in sides]
        for far_side, near_side in sides:
            assert (near_side.end(), far_side.end()) == (0, 0)
    finally:
        for pair in pairs:
            for side in pair.sides:
                side.close()
        for link in (*links[0], *links[1]):
            link.close()
    for known, (far_side, near_side) in zip(known_at_end, sides):
        assert heard_of(near_side, far_side.run) == as_heard_here(far_side, near_side)
        assert len(heard_of(near_side, far_side.run)) >= known


def test_a_question_for_the_time_does_not_hold_up_the_end(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The reader elsewhere says who it is, and hangs when it is asked for the time."""
    monkeypatch.setattr("acquire.relay.far_side.TRIP_S", 600.0)
    stop, ended = Stop(), threading.Event()
    asked: list[None] = []

    def hanging_clock() -> float:
        asked.append(None)
        while len(asked) > 1 and not ended.wait(0.02):  # a signal just before a wait is not seen
            signal.pthread_kill(threading.main_thread().ident or 0, signal.SIGUSR1)
        return 0.0

    before = signal.signal(signal.SIGUSR1, stop.handle)
    free = Endpoint("tcp://127.0.0.1:0", "tcp://127.0.0.1:0")
    try:
        with (
            Journal(tmp_path / "a", TABLE) as journal,
            Publisher(
                "far", TABLE, journal, free, started_utc=HERE, now_s=hanging_clock
            ) as publisher,
            FarSide(TABLE, publisher.endpoint, lambda *met: 0, time.monotonic, stop.wait) as far_side,
        ):
            with pytest.raises(Stopped):
                while True:
                    far_side.receive(0.1)
            ended.set()
    finally:
        signal.signal(signal.SIGUSR1, before)


def test_the_last_rows_are_fetched_at_the_end(
    tmp_path: Path, resource: str, wait_for: Wait
) -> None:
    """Those that did not come by themselves: here none does, as the rows' link is cut."""
    free = free_endpoints(["far"])["far"]
    with Link("127.0.0.4", free.publish) as link:
        link.cut()
        pair = Pair(tmp_path, resource, free, Endpoint(link.address, free.answer))
        far, near = pair.far(), pair.near()
        try:
            far.start()
            near.start()
            wait_for(lambda: near.count() >= 5, "rows, by asking")
            known = near.count()
            wait_for(lambda: far.count() >= known + 10, "more rows elsewhere")
            there = far.count()
            assert near.end() == 0
            assert far.end() == 0  # it was left running
        finally:
            for side in pair.sides:
                side.close()
    assert len(heard_of(near, far.run)) >= there
