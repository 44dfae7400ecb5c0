"""Readers elsewhere on record in a run: each row once, in this run's time, whoever was killed."""

from __future__ import annotations

import re
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from datetime import datetime, timedelta
from itertools import pairwise
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from relay_sides import ADDRESS, TABLE, Pair, as_heard_here, configuration, heard_of
from scripted_instrument import ScriptedInstrument

from acquire.bus import Endpoint, Introducer, Publisher, free_endpoints
from acquire.clock import utc_text
from acquire.config import parse
from acquire.errors import JournalError, RowError, RunError
from acquire.journal import Journal
from acquire.readings import reading_table
from acquire.relay.clocks import Difference
from acquire.relay.far_side import FarSide
from acquire.relay.relaying import Relaying
from acquire.relay.translation import ENDED, Standing, Translation, standing_of
from acquire.tables import Row

Wait = Callable[..., None]
START = datetime.fromisoformat("2031-05-14T10:00:00Z")
HERE = utc_text(START)
FREE = Endpoint("tcp://127.0.0.1:0", "tcp://127.0.0.1:0")
SETTINGS = '{"identity": "MAKER,MODEL", "settings": {}}'


def there(seconds: float) -> str:
    """The start of a run elsewhere, so many seconds after the start here."""
    return utc_text(START + timedelta(seconds=seconds))


def apart(seconds: float) -> Difference:
    """Clocks that were found to be so far apart."""
    return Difference(float(seconds), 0.001)


def row(seq: int, time_s: float, status: str = "ok", detail: str | None = None) -> Row:
    """A row of the reader elsewhere, with one value."""
    return (seq, time_s, 0.01, status, detail, float(seq) if status == "ok" else None)


# The translation.


def test_a_row_comes_out_at_the_same_moment_of_this_run() -> None:
    translation = Translation(HERE, Standing(), 1)
    assert translation.adopt("far", there(2.5), apart(2.5)) == 0
    begin, first = translation.take(row(0, 1.25))
    assert begin[:3] == (0.0, None, "relay")
    assert begin[3] == (
        f'listens to run "far", started {there(2.5)}, from its row 0 on; '
        "its 0 s are 2.5 s here, to within 0.001 s"
    )
    assert first == (3.75, 0.01, "ok", None, 0.0)
    assert translation.take(row(1, 1.5, "overload", "X")) == [(4.0, 0.01, "overload", "X", None)]


def test_what_was_read_before_this_run_is_left_out_but_for_the_last_settings() -> None:
    translation = Translation(HERE, Standing(), 1)
    translation.adopt("far", there(-10), apart(-10))
    old = [row(0, 0.0, "settings", "old"), row(1, 5.0), row(2, 9.0, "settings", SETTINGS)]
    assert [translation.take(one) for one in old] == [[], [], []]
    known, begin, first = translation.take(row(3, 10.5))
    marked = '{"identity": "MAKER,MODEL", "settings": {}, "from_before_row": 3}'
    assert known == (0.0, None, "settings", marked, None)
    assert "from its row 3 on" in str(begin[3])
    assert first[0] == 0.5
    assert translation.take(row(4, 11.0)) == [(1.0, 0.01, "ok", None, 4.0)]


def test_the_end_of_the_run_elsewhere_is_not_the_end_here() -> None:
    translation = Translation(HERE, Standing(), 1)
    translation.adopt("far", HERE, apart(0))
    translation.take(row(0, 1.0))
    assert translation.take(row(1, 2.0, "end")) == [(2.0, 0.01, "no_answer", ENDED, None)]
    assert translation.adopt("next", there(60), apart(60)) == 0
    begin, first = translation.take(row(0, 0.0, "settings", SETTINGS))
    assert str(begin[3]).startswith("listens to run")
    assert begin[0] == 2.0
    assert first == (60.0, 0.01, "settings", SETTINGS, None)


def test_a_run_that_broke_off_is_said() -> None:
    translation = Translation(HERE, Standing(), 1)
    translation.adopt("far", HERE, apart(0))
    translation.take(row(0, 1.0))
    translation.adopt("next", there(60), apart(60))
    begin, _ = translation.take(row(0, 0.0))
    assert str(begin[3]).startswith("run 'far' was heard up to its row 0, not to its end; listens")


@pytest.mark.parametrize("text", ["", "yesterday", "2031-05-14T10:00:00"])
def test_a_start_that_is_not_known_is_refused(text: str) -> None:
    with pytest.raises(RunError, match="start of the run 'far' elsewhere is not known"):
        Translation(HERE, Standing(), 1).adopt("far", text, apart(0))


RUN_IDS = st.text(st.characters(codec="utf-8"), min_size=1).filter(str.strip)


@settings(deadline=None)
@given(
    st.lists(
        st.tuples(RUN_IDS, st.integers(-20, 20), st.integers(1, 8)),
        max_size=4,
        unique_by=lambda run: run[0],
    ),
    st.lists(st.integers(0, 40), max_size=5),
)
def test_a_relay_killed_anywhere_goes_on_from_its_journal_as_if_nothing_had_been(
    runs: list[tuple[str, int, int]], kills: list[int]
) -> None:
    """``kills``: how many rows each relay lives for. One that is killed between the settings from
    before and the beginning is followed by one that gives these settings again."""
    journal = relayed(runs, kills)
    again = [one for one, next_one in pairwise(journal) if one[1:] == next_one[1:]]
    assert {one[3] for one in again} <= {"settings"}
    for one in again:
        journal.remove(one)
    assert [one[1:] for one in journal] == [one[1:] for one in relayed(runs, [])]


def relayed(runs: list[tuple[str, int, int]], kills: list[int]) -> list[Row]:
    """The journal of relays, the first few of which live for so many rows only, of runs that give
    so many rows each, 5 s apart, until the next one begins."""
    journal: list[Row] = []
    lives = iter(kills)
    translation, life = Translation(HERE, Standing(), 1), next(lives, 10_000)
    for name, start, count in runs:
        seq = translation.adopt(name, there(start), apart(start))
        while seq < count:
            status = "settings" if seq == 0 else "end" if seq == count - 1 else "ok"
            rows = translation.take(row(seq, 5.0 * seq, status, SETTINGS))
            journal += [(len(journal) + n, *cells) for n, cells in enumerate(rows[:life])]
            seq, life = seq + 1, life - len(rows)
            if life < 0:
                translation, life = Translation(HERE, standing_of(journal), 1), next(lives, 10_000)
                seq = translation.adopt(name, there(start), apart(start))
    return journal


def test_the_end_of_a_relay_is_not_counted_as_a_row_elsewhere() -> None:
    translation = Translation(HERE, Standing(), 1)
    translation.adopt("far", HERE, apart(0))
    rows = [(0, *cells) for cells in translation.take(row(0, 1.0))]
    found = standing_of([*rows, (2, 5.0, None, "end", None, None)])
    assert found == Standing("far", 1, 1.0, clocks=apart(0))


# What is done with rows.


class Desk:
    """What a relay writes to."""

    def __init__(self) -> None:
        self.rows: list[Row] = []
        self.notes: list[dict[str, Any]] = []
        self.complaints: list[str] = []
        self.full = self.locked = False
        self.now = 0.0
        translation = Translation(HERE, Standing(), 1)
        translation.adopt("far", HERE, apart(0))
        self.translation = translation
        self.relaying = Relaying(
            translation, HERE, 1, self.publish, self.note, self.complaints.append, lambda: self.now
        )

    def publish(self, *cells: Any) -> int:
        if self.full:
            raise JournalError("no space left")
        self.rows.append(cells)
        return len(self.rows) - 1

    def note(self, entry: dict[str, Any]) -> None:
        if self.locked:
            raise RunError("locked")
        self.notes.append(entry)


def test_a_row_that_no_journal_takes_does_not_hold_up_the_others() -> None:
    desk = Desk()
    taken = desk.publish

    def publish(*cells: Any) -> int:
        if cells[4] == 0.0:
            raise RowError("a row is too long")
        return taken(*cells)

    desk.relaying._publish = publish
    desk.relaying.take([row(0, 0.0), row(1, 0.1)])
    desk.relaying.step()
    assert not desk.relaying.behind
    assert [cells[2] for cells in desk.rows] == ["relay", "bad_reply", "ok"]
    assert desk.rows[1][3] == "a row is too long"


def test_a_full_disk_delays_rows_and_loses_none() -> None:
    desk = Desk()
    desk.full = True
    desk.relaying.take([row(0, 0.0), row(1, 0.1)])
    desk.relaying.step()
    assert desk.relaying.behind
    desk.now = 0.5
    desk.full = False
    desk.relaying.step()
    assert desk.rows == []  # not before its time
    desk.now = 1.0
    desk.relaying.step()
    assert not desk.relaying.behind
    assert [cells[4] for cells in desk.rows] == [None, 0.0, 1.0]
    assert len(desk.complaints) == 2
    assert "no space left" in desk.complaints[0]
    assert desk.complaints[1] == "rows are recorded again"


def test_settings_are_noted_when_they_can_be() -> None:
    desk = Desk()
    desk.locked = True
    desk.now = 2.0
    desk.relaying.take([row(0, 1.5, "settings", SETTINGS), row(1, 1.6, "settings", "strange")])
    desk.relaying.step()
    assert (desk.notes, len(desk.complaints)) == ([], 1)
    desk.locked = False
    desk.now = 12.0
    desk.relaying.step()
    assert desk.notes == [
        {"seq": 1, "time_s": 1.5, "utc": "2031-05-14T10:00:01.500000Z", "identity": "MAKER,MODEL",
         "settings": {}},
        {"seq": 2, "time_s": 1.6, "utc": "2031-05-14T10:00:01.600000Z", "identity": None,
         "settings": None},
    ]  # fmt: skip


def test_why_nobody_is_heard_stands_in_the_run_and_is_said_once() -> None:
    desk = Desk()
    desk.relaying.take([row(0, 1.0)])
    for trouble in ("", "refused", "refused", "", "refused", "hangs up", "refused"):
        desk.relaying.heed(trouble)
    desk.relaying.step()
    assert desk.complaints == ["refused", "hangs up"]
    assert [cells[2:4] for cells in desk.rows[2:]] == [
        ("unheard", "refused"), ("unheard", "hangs up")
    ]  # fmt: skip
    assert {cells[0] for cells in desk.rows[2:]} == {1.0}  # what is read now may still come
    desk.relaying.take([row(1, 1.5)])
    desk.relaying.step()
    assert desk.rows[-1] == (1.5, 0.01, "ok", None, 1.0)
    desk.relaying.heed("refused")
    assert len(desk.complaints) == 3


def test_the_end_is_the_last_row() -> None:
    desk = Desk()
    desk.relaying.take([row(0, 0.0)])
    desk.now = 3.0
    desk.relaying.end()
    assert desk.rows[-1] == (3.0, None, "end", None, None)
    assert len(desk.rows) == 3


# Finding out who is there.

def test_a_publisher_introduces_itself(tmp_path: Path, wait_for: Wait) -> None:
    with (
        Journal(tmp_path / "a", TABLE) as journal,
        Publisher("far", TABLE, journal, FREE, started_utc=HERE) as publisher,
        Introducer(publisher.endpoint) as introducer,
    ):
        found: list[Any] = []
        wait_for(lambda: found.append(introducer.ask(0.1)) or found[-1])
        assert (found[-1].run, found[-1].stream) == ("far", TABLE.stream)
        assert found[-1].started_utc == HERE
        assert found[-1].columns[1] == ("time_s", "number", "s", TABLE.columns[1].description)
        assert publisher.refused == 0


def test_nobody_there_is_no_error_and_who_comes_later_is_found(
    tmp_path: Path, wait_for: Wait
) -> None:
    far = free_endpoints(["far"])["far"]
    with Introducer(far) as introducer:
        assert introducer.ask(0.05) is None
        assert introducer.ask(0.0) is None
        with (
            Journal(tmp_path / "a", TABLE) as journal,
            Publisher("far", TABLE, journal, far) as publisher,
        ):
            assert publisher.endpoint == far
            wait_for(lambda: introducer.ask(0.1) is not None)


@pytest.mark.parametrize("what", ["stream", "columns"])
def test_somebody_else_there_is_told_in_one_sentence(tmp_path: Path, what: str) -> None:
    other = reading_table("other" if what == "stream" else "lockin", parse(
        configuration("TCPIP::a::1::SOCKET", ADDRESS)
        .replace(b'name = "x", position = 1', b'name = "x", position = 1, scale = 10.0')
    ).reader("lockin"))  # fmt: skip
    message = "publishes 'readings/other', not" if what == "stream" else "has other columns .*10.0"
    with (
        Journal(tmp_path / "a", other) as journal,
        Publisher("far", other, journal, FREE, started_utc=HERE, now_s=lambda: 0.0) as publisher,
        FarSide(TABLE, publisher.endpoint, lambda *met: 0, time.monotonic) as far_side,
        pytest.raises(RunError, match=message),
    ):
        for _ in range(200):
            far_side.receive(0.1)


@pytest.mark.parametrize(
    "changes", [{"run": "x" * 201}, {"started_utc": "2" * 101}, {"time_s": None}]
)
def test_a_run_that_no_rampside_would_make_is_refused(
    tmp_path: Path, changes: dict[str, Any]
) -> None:
    given: dict[str, Any] = {"run": "far", "started_utc": HERE, "time_s": 0.0, **changes}
    now_s = None if given["time_s"] is None else lambda: 0.0
    with (
        Journal(tmp_path / "a", TABLE) as journal,
        Publisher(
            given["run"], TABLE, journal, FREE, started_utc=given["started_utc"], now_s=now_s
        ) as publisher,
        FarSide(TABLE, publisher.endpoint, lambda *met: 0, time.monotonic) as far_side,
        pytest.raises(RunError, match=r"is it started by rampside read\?"),
    ):
        for _ in range(200):
            far_side.receive(0.1)


# The processes.


@pytest.fixture
def pair(tmp_path: Path) -> Iterator[Pair]:
    answers = {"*IDN?": "MAKER,MODEL,7,1.0", "X?": "1.5,0.25", "T?": "9"}
    with ScriptedInstrument(answers) as scripted:
        pair = Pair(tmp_path, scripted.resource)
        yield pair
        for side in pair.sides:
            side.close()


def test_whoever_is_killed_no_row_is_lost_or_doubled(pair: Pair, wait_for: Wait) -> None:
    far, near = pair.far(), pair.near()
    near.start()
    far.start()
    wait_for(lambda: near.count() >= 10, "rows by the relay")
    far.end(signal.SIGKILL)
    known = far.count()
    far.start()
    wait_for(lambda: near.count() >= known + 20, "rows after the reader was killed")
    near.end(signal.SIGKILL)
    missed = far.count()
    wait_for(lambda: far.count() >= missed + 20, "rows that the relay does not hear")
    near.start()
    wait_for(lambda: near.count() >= missed + 25, "rows after the relay was killed")
    assert far.end() == 0
    wait_for(lambda: near.rows()[-1][4] == ENDED, "the end elsewhere")
    assert near.end() == 0
    assert heard_of(near, far.run) == as_heard_here(far, near)
    assert len(heard_of(near, far.run)) == far.count()
    assert near.rows()[-1][3] == "end"
    notes, own = near.run.instruments(), far.run.instruments()
    assert [note["identity"] for note in notes] == ["MAKER,MODEL,7,1.0"] * 2
    assert [note["settings"] for note in notes] == [note["settings"] for note in own]
    assert {note["resource"] for note in notes} == {far.endpoint.publish}
    assert [near.rows()[note["seq"]][3] for note in notes] == ["settings"] * 2
    assert near.words == ["", ""]


def test_a_run_that_began_late_hears_what_holds_and_nothing_older(
    pair: Pair, wait_for: Wait
) -> None:
    far = pair.far()
    far.start()
    wait_for(lambda: far.count() >= 5)
    near = pair.near()
    near.start()
    wait_for(lambda: near.count() >= 5)
    assert (far.end(), near.end()) == (0, 0)
    known, begin, *_ = near.rows()
    assert (known[1], known[3]) == (0.0, "settings")
    assert near.run.instruments()[0]["identity"] == "MAKER,MODEL,7,1.0"
    first = int(str(begin[4]).rpartition("row ")[2].split()[0])
    assert first >= 5
    clock = re.search(r"its 0 s are (\S+) s here", str(begin[4]))
    assert clock is not None
    last, next_one = (float(str(far.rows()[seq][1])) + float(clock[1]) for seq in (first - 1, first))
    assert last < 0 <= next_one
    assert heard_of(near, far.run) == as_heard_here(far, near)


def test_another_run_elsewhere_is_taken_up_where_the_first_ended(
    pair: Pair, wait_for: Wait
) -> None:
    first, near = pair.far(), pair.near()
    first.start()
    near.start()
    wait_for(lambda: near.count() >= 5)
    assert first.end() == 0
    wait_for(lambda: near.rows()[-1][4] == ENDED)
    second = pair.far()
    second.start()
    wait_for(lambda: f'listens to run "{second.run.run_id}"' in str(near.rows()))
    count = near.count()
    near.end(signal.SIGKILL)
    near.start()
    wait_for(lambda: near.count() >= count + 5)
    assert second.end() == 0
    wait_for(lambda: near.rows()[-1][4] == ENDED)
    assert near.end() == 0
    assert heard_of(near, first.run) == as_heard_here(first, near)
    assert heard_of(near, second.run) == as_heard_here(second, near)
    times = [one[1] for one in near.rows()]
    assert times == sorted(times)  # type: ignore[type-var]


def test_a_relay_that_hears_nobody_ends_in_order(pair: Pair, wait_for: Wait) -> None:
    near = pair.near()
    near.start()
    with Introducer(near.endpoint) as introducer:
        wait_for(lambda: introducer.ask(0.1) is not None, "the relay")
    assert near.end() == 0
    assert [one[3] for one in near.rows()] == ["end"]


def test_a_relay_ends_when_its_parent_is_gone(pair: Pair) -> None:
    near = pair.near()
    near.start("--parent", "1")
    assert near.process is not None
    near.words.append(near.process.communicate(timeout=10)[1])
    assert near.process.returncode == 0
    near.process = None
    assert [one[3] for one in near.rows()] == ["end"]


@pytest.mark.parametrize(
    ("reader", "message"),
    [("lokin", "has no reader 'lokin' elsewhere; it has lockin."),
     ("lockin", "listens to 'lockin' itself, so that no relay is needed.")],
)  # fmt: skip
def test_what_a_relay_can_t_do_is_told_in_one_sentence(
    pair: Pair, reader: str, message: str
) -> None:
    pair.addresses["near"] = pair.addresses["far"]
    command = [sys.executable, "-m", "acquire.relay", str(pair.near().run.path), reader]
    done = subprocess.run(command, capture_output=True, text=True, timeout=30, check=False)
    assert done.returncode == 1
    assert message in done.stderr
    assert len(done.stderr.splitlines()) == 1


def test_a_run_that_has_ended_takes_no_relay(pair: Pair) -> None:
    near = pair.near()
    near.run.end_live()
    near.start()
    assert near.process is not None
    words = near.process.communicate(timeout=30)[1]
    assert "does not wait for 'lockin'" in words
    near.process = None
