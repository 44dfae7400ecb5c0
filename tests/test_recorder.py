from __future__ import annotations

import json
from typing import Any

import pytest

from acquire.config.reader import ReaderSection
from acquire.errors import JournalError, RunError
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
    assert desk.recorder.row("ok", "", (1.0, None), (4.0, 4.5)) == 0
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


def test_what_could_not_be_recorded_is_told_once_and_then_stands_in_the_journal() -> None:
    desk = Desk()
    desk.error = JournalError("no space")
    for _ in range(3):
        with pytest.raises(JournalError):
            desk.recorder.row("ok", "", (1.0, 2.0))
        desk.now += 1.0
    assert desk.recorder.lost
    assert len(desk.words) == 1
    with pytest.raises(JournalError):
        desk.recorder.try_again()
    desk.error = None
    desk.recorder.try_again()
    assert not desk.recorder.lost
    assert desk.rows == [
        (8.0, None, "no_answer", "not recorded from 5.000 s on: no space", None, None)
    ]
    assert desk.words[1:] == ["readings are recorded again"]


def test_notes_wait_for_their_file() -> None:
    desk = Desk()
    desk.error = RunError("instruments.json: no space")
    desk.recorder.settings("ME", {})
    desk.recorder.note()
    assert (len(desk.words), desk.notes) == (1, [])
    desk.error = None
    desk.recorder.note()
    assert desk.notes == []
    desk.now += RETRY_NOTE_S
    desk.recorder.note()
    assert [note["identity"] for note in desk.notes] == ["ME"]
