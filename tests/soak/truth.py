"""Each reading that was used beside what the instrument truly answered."""

from __future__ import annotations

import csv
from bisect import bisect_left
from collections import defaultdict
from dataclasses import dataclass
from pathlib import Path

from acquire.readings import stream_of
from acquire.run_folder import RunFolder
from dashboard.streams import reading_tables
from soak.rig import QUESTIONS

SLACK_S = 1e-3  # for the clock's own digits, and the order of two looks at it


@dataclass
class _Answered:
    """A reply to the question for a reading."""

    monotonic_s: float
    values: tuple[str, ...]
    spoiled: str
    used: bool = False


@dataclass
class Comparison:
    """``ok``: readings that were used; ``wrong``: those of them that are no true answer to their
    own question, with what is wrong; ``answers``, ``spoiled``: replies of the instruments to
    questions for a reading, and those of them that were none or did not leave as they were meant."""

    ok: int
    wrong: list[str]
    answers: int
    spoiled: int


def compare(run: RunFolder, monotonic_start: float, path: Path) -> Comparison:
    """Every reading with the status ok must have exactly the numbers of a reply that was given,
    unspoiled, between its question and its answer; each reply serves once."""
    truth = _truth(path)
    wrong: list[str] = []
    ok = 0
    for name in QUESTIONS:
        table = reading_tables(run.rig)[stream_of(name)]
        answers = truth[name]
        times = [answer.monotonic_s for answer in answers]
        for row in run.rows(table):
            seq, time_s, took_s, status = row[:4]
            if status != "ok":
                continue
            ok += 1
            assert isinstance(time_s, float) and isinstance(took_s, float)
            middle, half = monotonic_start + time_s, took_s / 2 + SLACK_S
            first = bisect_left(times, middle - half)
            near = [a for a in answers[first : first + 20] if a.monotonic_s <= middle + half]
            found = [a for a in near if _same(a, row[5:]) and not a.spoiled and not a.used]
            if found:
                found[0].used = True
            else:
                meant = [(a.values, a.spoiled, a.used) for a in near]
                wrong.append(f"{name} row {seq} at {time_s:.3f} s: {row[5:]}, answered {meant}")
    replies = [answer for name in QUESTIONS for answer in truth[name]]
    return Comparison(ok, wrong, len(replies), sum(bool(answer.spoiled) for answer in replies))


def _same(answer: _Answered, values: tuple[object, ...]) -> bool:
    return tuple(float(text) for text in answer.values[: len(values)]) == values


def _truth(path: Path) -> dict[str, list[_Answered]]:
    found: dict[str, list[_Answered]] = defaultdict(list)
    with open(path, newline="") as file:
        for row in csv.DictReader(file):
            if row["question"] == QUESTIONS[row["instrument"]]:
                values = tuple(row["reply"].split(","))
                one = _Answered(float(row["monotonic_s"]), values, row["spoiled"])
                found[row["instrument"]].append(one)
    return found
