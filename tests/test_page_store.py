"""What the page knows: streams that stop, the field, marks, and runs read from disk."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest
from made_run import MadeRun, config, estimates, ramp

from acquire.bus import StreamHealth
from acquire.config import parse
from acquire.errors import JournalError
from acquire.journal import Journal
from acquire.readings import Reading, stream_of
from acquire.tables import SEQ, TIME, Column, Row, Table
from analyse.estimate_table import ESTIMATES
from dashboard.page import store as store_module
from dashboard.page.curves import CurveKeeper
from dashboard.page.feed import Feed, last_rows
from dashboard.page.presence import Presence
from dashboard.page.store import RunStore

RIG = parse(config())


def reading(
    time_s: float, status: str = "ok", detail: str = "", value: float | None = 1.0
) -> Reading:
    return Reading("magnet", int(10 * time_s), time_s, 0.01, status, detail, (value,))


def state(presence: Presence, now_s: float | None) -> tuple[str, str]:
    line = presence.line(now_s)
    return line.level, line.state


def numbered(rows: list[Row]) -> list[Row]:
    return [(seq, *cells) for seq, cells in enumerate(rows)]


def test_a_stream_is_stopped_after_three_seconds_or_five_periods() -> None:
    quick, slow = Presence("a", 0.2), Presence("b", 10.0)
    for presence in (quick, slow):
        presence.take_reading(reading(100.0), 100.0)
    assert state(quick, 102.9) == ("good", "running")
    assert state(quick, 103.1) == ("warning", "stopped")
    assert quick.line(110.0).age_s == pytest.approx(10.0)
    assert state(slow, 149.9) == ("good", "running")
    assert state(slow, 150.1) == ("warning", "stopped")
    slow.take_reading(reading(151.0), 151.0)
    assert state(slow, 151.0) == ("good", "running")


def test_a_stream_that_never_began_is_late_after_a_while() -> None:
    presence = Presence("a", 0.2)
    assert state(presence, 9.0) == ("waiting", "nothing yet")
    assert state(presence, 11.0) == ("warning", "nothing yet")


def test_rows_without_a_reading_do_not_make_it_young() -> None:
    presence = Presence("a", 0.2)
    presence.take_reading(reading(1.0, "settings", "{}", None), 1.0)
    assert state(presence, 1.0) == ("waiting", "no reading yet")
    presence.take_reading(reading(2.0), 2.0)
    presence.take_reading(reading(6.0, "no_answer", "nobody there", None), 6.0)
    line = presence.line(6.0)
    assert (line.level, line.state, line.age_s, line.note) == (
        "warning", "no answer", 4.0, "nobody there",
    )  # fmt: skip
    presence.take_reading(reading(7.0), 7.0)
    assert presence.line(7.0).note == ""


def test_a_reader_that_has_ended_in_order_is_no_alarm() -> None:
    presence = Presence("a", 0.2)
    presence.take_reading(reading(1.0), 1.0)
    presence.take_reading(reading(2.0, "end", "", None), 2.0)
    assert state(presence, 100.0) == ("ended", "ended")
    assert presence.line(100.0).age_s is None
    presence.take_reading(reading(101.0), 101.0)  # started again
    assert state(presence, 101.0) == ("good", "running")


def test_the_clock_of_another_computer_is_not_compared_with_ours() -> None:
    presence = Presence("a", 0.2, own_clock=True)
    presence.take_reading(reading(5000.0), 10.0)
    assert presence.line(12.0).age_s == pytest.approx(2.0)


def test_a_reader_elsewhere_that_is_not_heard_says_why_and_its_clock_is_shown() -> None:
    presence = Presence("a", 0.2, own_clock=True)
    words = "listens to run ...; its 0 s are 2.5 s here, to within 0.00015 s"
    presence.take_reading(reading(1.0, "relay", words, None), 1.0)
    presence.take_reading(reading(1.0), 1.0)
    assert presence.line(1.5).note == "its clock is known to within 0.15 ms"
    presence.take_reading(reading(1.0, "unheard", "'cryostat' refused our key", None), 2.0)
    for now_s in (2.0, 200.0):
        line = presence.line(now_s)
        assert (line.level, line.state) == ("warning", "not heard")
        assert line.note == "'cryostat' refused our key"
    presence.take_reading(reading(201.0), 201.0)
    assert state(presence, 201.0) == ("good", "running")


def test_a_publisher_that_has_nothing_new_still_lives() -> None:
    presence = Presence("events", 0.2)
    presence.take((0, 1.0), 1.0)
    presence.heard(60.0)
    assert state(presence, 61.0) == ("good", "running")
    assert state(presence, 64.0) == ("warning", "stopped")


def test_the_field_is_the_newest_usable_one_with_its_rate() -> None:
    store = RunStore("run", RIG)
    assert store.run().field is None
    for seq in range(60):
        store.take("readings/magnet", (seq, 0.2 * seq, 0.01, "ok", None, 0.002 * seq))
    store.take("readings/magnet", (60, 12.0, 0.01, "overload", None, 9.0))
    field = store.run().field
    assert field is not None
    assert field.field_T == pytest.approx(0.118)
    assert field.rate_T_per_min == pytest.approx(0.6)


def test_a_quick_reading_stands_on_the_side_of_field_where_it_was_read() -> None:
    keeper = CurveKeeper()
    fields = [*ramp(3.0, 400), *ramp(-3.0, 800, 3.0)]
    for row in numbered(list(estimates([-field for field in fields]))):
        keeper.add(row)
    marks = {mark.kind: mark.field_T for mark in keeper.curves().marks}
    assert marks == {
        "density": pytest.approx(-2.4, rel=0.01),
        "mobility": pytest.approx(-1 / 27.27),
    }


def test_curves_are_made_anew_only_when_there_is_something_new() -> None:
    keeper = CurveKeeper()
    rows = numbered(list(estimates(ramp(1.0, 10))))
    keeper.add(rows[0])
    first = keeper.curves()
    assert keeper.curves() is first
    keeper.add(rows[1])
    assert keeper.curves() is not first
    assert first.xx.shape == (2, 1)  # not changed behind the back of who has it


def test_cells_that_are_not_known_are_no_points() -> None:
    keeper = CurveKeeper()
    cells = dict.fromkeys(ESTIMATES.names)
    cells |= {"seq": 0, "time_s": 0.0, "hall_bar": "bar3"}
    keeper.add(tuple(cells.values()))
    cells |= {"seq": 1, "field_T": 1.0, "rho_xx_ohm": 5.0}
    keeper.add(tuple(cells.values()))
    curves = keeper.curves()
    assert (curves.xx.shape, curves.xy.shape) == ((2, 1), (2, 0))
    assert curves.number("mobility_m2_per_V_s") is None
    assert curves.text("verdict") == ""


def test_a_stream_that_cannot_be_recorded_says_why() -> None:
    store = RunStore("run", RIG)
    store.begin("live", lambda: 5.0)
    names = [line.name for line in store.run().streams]
    heard = StreamHealth(3, 4.0, 0, 0)
    health = dict.fromkeys((*map(stream_of, names[:-2]), "estimates", "events"), heard)
    health[stream_of("magnet")] = StreamHealth(3, 4.0, 0, 0, 0, "disk full")
    store.hear(health, 4.0)
    lines = {line.name: line for line in store.run().streams}
    assert (lines["magnet"].level, lines["magnet"].state) == ("warning", "cannot record: disk full")
    for now, said in ((20.0, health), (4.0, dict.fromkeys(health, heard))):  # silent; recorded
        store.hear(said, now)
        lines = {line.name: line for line in store.run().streams}
        assert lines["magnet"].state != "cannot record: disk full"


def test_events_are_kept_newest_first_and_bounded() -> None:
    store = RunStore("run", RIG)
    for seq in range(store_module.EVENTS_KEPT + 5):
        store.take("events", (seq, 1.0 * seq, "note", None, "note", f"note {seq}", 0, None))
    events = store.run().events
    assert len(events) == store_module.EVENTS_KEPT
    assert events[0].text == f"note {store_module.EVENTS_KEPT + 4}"


def test_a_caution_of_a_hall_bar_nobody_knows_is_an_event_and_harms_nothing() -> None:
    store = RunStore("run", RIG)
    store.take("events", (0, 1.0, "caution", "gone", "overload", "what", 0, None))
    assert store.run().events[0].hall_bar == "gone"


def test_a_finished_run_is_read_from_its_folder(
    tmp_path: Path, wait_for: Callable[..., None]
) -> None:
    made = MadeRun(tmp_path, live=False)
    made.estimate(*estimates(ramp(1.0, 50)))
    made.event("caution", "oscillations", "a wave")
    made.readings(1.0)
    made.identify("magnet", "a supply")
    made.end()
    store = RunStore(made.run.run_id, made.run.rig)
    feed = Feed(made.run, store)
    feed.start()
    wait_for(lambda: store.run().phase == "ended", "all is read")
    feed.close()
    run, bar = store.run(), store.bar("bar3")
    assert (run.phase, run.now_s, run.failures) == ("ended", None, 0)
    assert bar.curves.number("field_points") == 50
    assert {line.name: line.identity for line in run.streams}["magnet"] == "a supply"


def test_what_fails_is_counted_and_tried_again(
    tmp_path: Path, wait_for: Callable[..., None], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("dashboard.page.feed.AFTER_FAILURE_S", 0.01)
    made = MadeRun(tmp_path, live=False)
    made.estimate(*estimates(ramp(1.0, 10)))
    made.end()
    estimates_csv = made.run.journal_path(ESTIMATES)
    whole = estimates_csv.read_bytes()
    estimates_csv.write_bytes(b"something else\n")
    store = RunStore(made.run.run_id, made.run.rig)
    feed = Feed(made.run, store)
    feed.start()
    wait_for(lambda: store.run().failures >= 2, "it is tried again")
    assert "Following the run: " in store.run().failure
    assert "is it another's?" in store.run().failure
    (tmp_path / "whole").write_bytes(whole)
    (tmp_path / "whole").replace(estimates_csv)
    wait_for(lambda: store.run().phase == "ended", "it is mended")
    assert store.bar("bar3").curves.number("field_points") == 10
    feed.close()


@pytest.mark.parametrize("name", ["estimates.csv", "readings/magnet.csv", "instruments.json"])
def test_nothing_outside_of_the_run_is_read(
    name: str, tmp_path: Path, wait_for: Callable[..., None]
) -> None:
    with MadeRun(tmp_path / "runs", live=False) as made:
        made.estimate(*estimates(ramp(1.0, 10)))
        made.readings(1.0)
        made.identify("magnet", "of another run")
    (made.path / name).rename(tmp_path / "outside")
    (made.path / name).symlink_to(tmp_path / "outside")
    store = RunStore(made.run.run_id, made.run.rig)
    feed = Feed(made.run, store)
    feed.start()
    wait_for(lambda: store.run().failures > 0, "it is told")
    feed.close()
    assert "is outside the run" in store.run().failure
    assert all(line.identity == "" for line in store.run().streams)


TABLE = Table("a", "a.csv", "", (SEQ, TIME, Column("text", "string")))


@pytest.mark.parametrize("count", [0, 1, 3, 30_000])
def test_the_last_rows_of_a_long_table_are_found_without_reading_it_all(
    tmp_path: Path, count: int
) -> None:
    path = tmp_path / "a.csv"
    with Journal(path, TABLE) as journal:
        for seq in range(count):
            journal.append((1.0 * seq, 'quoted, "text"'))
    with open(path, "ab") as file:
        file.write(b"99,torn")
    rows = list(last_rows(path, TABLE))
    assert len(rows) == min(count, len(rows))
    assert [row[0] for row in rows[-1:]] == [count - 1][:count]
    assert len(rows) < 10_000


def test_a_table_that_is_none_is_told(tmp_path: Path) -> None:
    path = tmp_path / "a.csv"
    path.write_bytes(b"seq,time_s,text\n0,x,y\n")
    with pytest.raises(JournalError):
        list(last_rows(path, TABLE))
