"""Readers at a simulated laboratory by a clock made of nothing: a ramp in no time. For tests."""

from __future__ import annotations

import heapq
from collections.abc import Sequence
from typing import Any

from acquire.config import Rig
from acquire.laboratory.bench import Bench
from acquire.reader import Reader
from acquire.readings import Reading


class Clock:
    """What all readers of a laboratory share."""

    def __init__(self) -> None:
        self.now = 0.0

    def now_s(self) -> float:
        return self.now


class Line:
    """The line to one instrument of a laboratory; every exchange takes ``took_s``."""

    def __init__(self, clock: Clock, bench: Bench, name: str, took_s: float = 0.004) -> None:
        self.clock, self.bench, self.name, self.took_s = clock, bench, name, took_s
        self.reply_after_s = 0.0
        self.rows: list[tuple[Any, ...]] = []

    def open(self, known_identity: str | None = None) -> str:
        return self.ask("*IDN?")

    def ask(self, query: str) -> str:
        self.clock.now += self.took_s / 2
        (piece,) = self.bench.hear(self.name, query, self.clock.now).pieces
        self.clock.now += self.took_s / 2
        return piece.data.decode("latin-1").removesuffix("\n")

    def ask_block(self, query: str, block: object) -> bytes:
        data = self.ask(query).encode("latin-1")
        self.reply_after_s = 0.75 * self.took_s
        return data[2 + int(data[1:2]) :] if data.startswith(b"#") else data

    def next_block(self, block: object) -> bytes:
        raise NotImplementedError

    def tell(self, command: str) -> None:
        self.bench.hear(self.name, command, self.clock.now)

    def expect_silence(self, wait_s: float = 0.0) -> None:
        self.clock.now += wait_s

    def close(self) -> None:
        """Nothing to close."""

    def publish(self, *cells: Any) -> int:
        self.rows.append(cells)
        return len(self.rows) - 1


def read(
    rig: Rig, bench: Bench, seconds: float, told: Sequence[tuple[float, str, str]] = ()
) -> dict[str, list[Reading]]:
    """The rows of all readers, whose names are those of the instruments. ``told``: when a person
    turns a knob, at which instrument, and how (a command)."""
    clock, waiting = Clock(), sorted(told)
    lines = {one.name: Line(clock, bench, one.name) for one in rig.readers}
    readers = {
        name: Reader(rig.reader(name), line, line.publish, clock.now_s)
        for name, line in lines.items()
    }
    due = [(0.0, name) for name in readers]
    while clock.now < seconds:
        at_s, name = heapq.heappop(due)
        clock.now = max(clock.now, at_s)
        while waiting and waiting[0][0] <= clock.now:
            _, instrument, command = waiting.pop(0)
            lines[instrument].tell(command)
        heapq.heappush(due, (readers[name].step(), name))
    return {
        name: [Reading.from_row(name, (seq, *row)) for seq, row in enumerate(line.rows)]
        for name, line in lines.items()
    }
