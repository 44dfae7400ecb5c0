from __future__ import annotations

import json
import math
from typing import Any

import pytest

from acquire.cells import RowCodec
from acquire.config.reader import ReaderSection
from acquire.errors import JournalError, RunError
from acquire.readings import reading_table
from acquire.recorder import RETRY_NOTE_S, Recorder

SECTION = ReaderSection.model_validate(
    {
        "name": "meter",
        "resource": "ASRL1::INSTR",
        "write_termination": "\n",
        "read_termination": "\n",
        "queries": ["B?"],
        "fields": 2,
        "values": [{"name": "B", "position": 1, "unit": "T"}, {"name": "I", "position": 2}],
    }
)


class Desk:
    """Where a recorder's rows, notes and words go."""

    def __init__(self) -> None:
        self.now = 5.0
        self.rows: list[tuple[Any, ...]] = []
        self.notes: list[dict[str, Any]] = []
        self.words: list[str] = []
        self.error: Exception | None = None
        self.recorder = Recorder(
            SECTION, self.publish, lambda: self.now, self.note, self.words.append
        )

    def publish(self, *cells: Any) -> int:
        if isinstance(self.error, JournalError):
            raise self.error
        self.rows.append(cells)
        return len(self.rows) - 1

    def note(self, entry: dict[str, Any]) -> None:
        if isinstance(self.error, RunError):
            raise self.error
        self.notes.append(entry)


def test_a_reading_stands_for_the_middle_of_question_and_answer() -> None:
    desk = Desk()
    desk.recorder.row("ok", "", (1.0, None), (4.0, 4.5))
    assert desk.rows == [(4.25, 0.5, "ok", "", 1.0, None)]


def test_a_row_without_values_has_as_many_empty_cells() -> None:
    desk = Desk()
    desk.recorder.row("no_answer", "gone")
    assert desk.rows == [(5.0, None, "no_answer", "gone", None, None)]


def test_settings_stand_in_a_row_and_in_the_notes() -> None:
    desk = Desk()
    desk.recorder.settings("ME", {"rate": {"raw": "1", "value": 1.0}})
    assert json.loads(desk.rows[0][3]) == {
        "identity": "ME",
        "settings": {"rate": {"raw": "1", "value": 1.0}},
    }
    assert desk.notes[0]["seq"] == 0
    assert desk.notes[0]["identity"] == "ME"


def test_what_can_not_be_recorded_waits_in_its_turn_and_is_told_once() -> None:
    desk = Desk()
    desk.error = JournalError("no space", "disk full")
    for x in range(3):
        desk.recorder.row("ok", "", (float(x), 2.0))
        desk.now += 0.25
    assert (desk.rows, len(desk.words)) == ([], 1)
    assert desk.recorder.retry_at == 6.0
    desk.error = None
    desk.recorder.step()
    assert desk.rows == [], "not before its time"
    desk.now = 6.0
    desk.recorder.step()
    assert desk.rows == [(5.0 + x / 4, None, "ok", "", float(x), 2.0) for x in range(3)]
    assert desk.words[1:] == ["readings are recorded again"]
    assert desk.recorder.retry_at == math.inf


def test_no_more_rows_wait_than_memory_is_meant_for(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("acquire.recorder.MOST_WAITING", 3)
    desk = Desk()
    desk.error = JournalError("no space", "disk full")
    for _ in range(3):
        assert not desk.recorder.full
        desk.recorder.row("ok", "", (1.0, 2.0))
    assert desk.recorder.full
    desk.now, desk.error = 25.0, None
    desk.recorder.step()
    assert not desk.recorder.full
    assert [row[2] for row in desk.rows] == ["ok", "ok", "ok", "no_answer"]
    assert desk.rows[-1][3] == (
        "no readings were taken from 5.000 to 25.000 s, 100 were due: no space"
    )


def test_a_row_that_no_journal_takes_does_not_keep_the_others_waiting() -> None:
    desk = Desk()
    codec = RowCodec(reading_table("meter", SECTION))

    def publish(*cells: Any) -> int:
        codec.line((0, *codec.canonical(cells)))
        return desk.publish(*cells)

    desk.recorder = Recorder(SECTION, publish, lambda: desk.now, desk.note, desk.words.append)
    desk.recorder.row("ok", "x" * 70_000, (1.0, 2.0))
    desk.recorder.row("ok", "", (3.0, 4.0))
    assert [row[2] for row in desk.rows] == ["bad_reply", "ok"]
    assert "too long" in desk.rows[0][3]


def test_the_end_tries_a_last_time_and_tells_what_is_lost() -> None:
    desk = Desk()
    desk.error = JournalError("no space", "disk full")
    desk.recorder.row("ok", "", (1.0, 2.0))
    desk.error = None
    desk.recorder.end()
    assert [row[2] for row in desk.rows] == ["ok", "end"]
    desk.error = JournalError("no space", "disk full")
    desk.recorder.end()
    assert desk.words[-1] == "1 rows could never be recorded: no space"


def test_notes_wait_for_their_file() -> None:
    desk = Desk()
    desk.error = RunError("instruments.json: no space")
    desk.recorder.settings("ME", {})
    for _ in range(3):
        desk.recorder.step()
        assert (len(desk.words), desk.notes) == (1, [])
        desk.now += RETRY_NOTE_S
    desk.error = None
    desk.recorder.step()
    assert [(note["identity"], note["seq"], note["time_s"]) for note in desk.notes] == [
        ("ME", 0, 5.0)
    ]
