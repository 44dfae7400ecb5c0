"""Runs made by formula for tests of the page: rows as an estimator and readers would write them.

Nothing here is measured or simulated: the numbers only have the shapes that a page must show,
intervals that narrow, a window that ends, marks that appear, a verdict that changes.
"""

from __future__ import annotations

import json
import math
import os
import queue
import random
import signal
import subprocess
import sys
import threading
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from pathlib import Path
from types import TracebackType
from typing import IO, Self

from acquire.bus import Publisher, free_address, free_endpoints
from acquire.clock import RunClock
from acquire.config import parse
from acquire.journal import Journal
from acquire.run_folder import RunFolder, create_run
from acquire.tables import Cell, Row, Table
from analyse.estimate_table import ESTIMATES, EVENTS
from dashboard.quantities import QUANTITIES
from dashboard.streams import run_tables

READY_S = 30.0

_BAR = """
[[hall_bars]]
name = "{name}"
squares = 4.0
material = "GaAs"
longitudinal = {{reader = "lockin_xx", x = "X"}}
hall = {{reader = "lockin_xy", x = "X"}}
excitation = {{current_A = 1e-7}}
"""
_READER = """
[[readers]]
name = "{name}"
resource = "TCPIP::127.0.0.1::{port}::SOCKET"
write_termination = "\\n"
read_termination = "\\n"
queries = ["?"]
period_s = 0.2
values = [{{name = "{value}", position = 1, unit = "{unit}"}}]
"""


def config(bars: tuple[str, ...] = ("bar3",), sample: str = "R0417") -> bytes:
    """A configuration with these Hall bars, all on the same readers."""
    text = f"""
[run]
title = "R0417"
sample = {json.dumps(sample)}
operator = "somebody"
[ramp]
path_T = [0.0, 4.0]
rate_T_per_min = 0.6
[field]
reader = "magnet"
value = "B"
"""
    text += _READER.format(name="magnet", port=5001, value="B", unit="T")
    text += _READER.format(name="lockin_xx", port=5002, value="X", unit="V")
    text += _READER.format(name="lockin_xy", port=5003, value="X", unit="V")
    return (text + "".join(_BAR.format(name=name) for name in bars)).encode()


def estimates(
    fields: list[float],
    bar: str = "bar3",
    density: float = 2.4e15,
    mobility: float = 27.0,
    seconds_per_point: float = 0.4,
    seed: int = 1,
) -> Iterator[Row]:
    """Rows of the table of estimates without their seq, for a ramp through these fields in T."""
    chance = random.Random(seed)
    slope, rho_0 = 1 / (density * 1.602176634e-19), 1 / (density * 1.602176634e-19 * mobility)
    end_T, reached = 0.45 * max(map(abs, fields)) + 1.0, 0.0
    for index, field in enumerate(fields):
        size = abs(field)
        reached = max(reached, size)
        wave = math.sin(math.pi * density * 4.1357e-15 / max(size, 1e-9)) * 40 * size
        wave *= math.exp(-3.0 / max(size, 1e-3))
        along = rho_0 + chance.gauss(0, 0.02 * rho_0) + wave * rho_0 / 40
        across = slope * field + 6.0 + chance.gauss(0, 2.0) + wave / 4
        share = 3.0 / (1 + index) ** 0.5 / max(reached * 20, 1e-3) + 0.002
        known = index >= 5 and share < 0.9
        tremble = chance.gauss(0, 0.03 * share)
        cells: dict[str, Cell] = {
            "time_s": seconds_per_point * index,
            "hall_bar": bar,
            "field_T": field,
            "rho_xx_ohm": along,
            "rho_xy_ohm": across,
            "field_points": index + 1,
            "used": int(size < end_T),
            "verdict": "converging",
            "waiting_for": "sheet density known to 3 %, wanted 1 %",
            "cautions": "oscillations" if reached > end_T else None,
        }
        if slope * reached > 6250:
            cells["quick_density_per_m2"] = 6250 / slope * 1e15
        if reached * mobility > 1.1:
            cells["quick_mobility_m2_per_V_s"] = mobility * 1.01
        if known:
            truths = (density, mobility, mobility * 3.81e-13)
            for column, truth, width in zip(QUANTITIES, truths, (share, 1.3 * share, 1.3 * share)):
                shown = truth * (1 + tremble)
                cells |= {
                    column: shown,
                    f"{column}_u": shown * width / 3,
                    f"{column}_low": shown * (1 - width),
                    f"{column}_high": shown * (1 + width),
                }
            cells |= {
                "rho_0_ohm": rho_0,
                "hall_slope_ohm_per_T": slope,
                "hall_offset_ohm": 6.0,
                "carriers": "electrons",
                "window_low_T": 0.0,
                "window_high_T": min(reached, end_T),
            }
        if known and 1.3 * share < 0.01:
            cells |= {"verdict": "stable", "waiting_for": None}
        elif known:
            left = 60 * (1.3 * share / 0.01 - 1)
            where = min(reached + left / 100, 12.0)
            cells |= {
                "time_to_target_s": left,
                "field_to_target_T": where,
                "field_to_target_low_T": 0.9 * where,
                "field_to_target_high_T": 1.2 * where,
            }
        yield tuple(cells.get(name) for name in ESTIMATES.names[1:])


def ramp(top_T: float, points: int, bottom_T: float = 0.0) -> list[float]:
    """Fields of a ramp in one direction."""
    step = (top_T - bottom_T) / max(points - 1, 1)
    return [bottom_T + step * index for index in range(points)]


class MadeRun:
    """A run whose rows this process writes and publishes itself.

    ``live``: with publishers and a ``live.json``, as while it is watched; else only on disk.
    ``more``: further sections of its configuration.
    """

    def __init__(
        self, folder: Path, *, bars: tuple[str, ...] = ("bar3",), live: bool = True,
        sample: str = "R0417", more: str = "",
    ) -> None:  # fmt: skip
        written = config(bars, sample) + more.encode()
        rig = parse(written)
        self.tables = run_tables(rig)
        self.run: RunFolder = create_run(rig, written, list(self.tables.values()), folder)
        assert self.run.monotonic_start is not None
        self.now_s = RunClock(self.run.monotonic_start).now_s
        self._open = ExitStack()
        self._journals = {
            stream: self._open.enter_context(Journal(self.run.journal_path(table), table))
            for stream, table in self.tables.items()
        }
        self._publishers: dict[str, Publisher] = {}
        if live:
            endpoints = free_endpoints(self.tables)
            for stream, table in self.tables.items():
                self._publishers[stream] = self._open.enter_context(
                    self._publisher(table, endpoints[stream])
                )
            self.run.write_live(endpoints, free_address())

    @property
    def path(self) -> Path:
        """Where the run lies."""
        return self.run.path

    def estimate(self, *rows: Row) -> None:
        """Write rows of the table of estimates."""
        for cells in rows:
            self._put(ESTIMATES.stream, cells)

    def event(self, kind: str, code: str, text: str, bar: str | None = "bar3") -> None:
        """Write something that happened now."""
        self._put(EVENTS.stream, (self.now_s(), kind, bar, code, text, 0, None))

    def reading(
        self, reader: str, value: float | None, status: str = "ok", detail: str = ""
    ) -> None:
        """Write a reading taken now."""
        self._put(f"readings/{reader}", (self.now_s(), 0.01, status, detail, value))

    def readings(self, field_T: float) -> None:
        """Write a good reading of every reader."""
        for reader, value in (("magnet", field_T), ("lockin_xx", 1e-5), ("lockin_xy", 1e-4)):
            self.reading(reader, value)

    def identify(self, reader: str, identity: str) -> None:
        """Note what an instrument said of itself."""
        self.run.note_instrument({"reader": reader, "identity": identity})

    def end(self) -> None:
        """End the run in order."""
        self.run.end_live()
        self._open.close()
        self._publishers.clear()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.end()

    def _put(self, stream: str, cells: Row) -> None:
        publisher = self._publishers.get(stream)
        if publisher is None:
            self._journals[stream].append(cells)
        else:
            publisher.publish(*cells)

    def _publisher(self, table: Table, endpoint: object) -> Publisher:
        journal = self._journals[table.stream]
        return Publisher(self.run.run_id, table, journal, endpoint)  # type: ignore[arg-type]


class PageProcess:
    """The page as a process of its own, started as the supervisor does."""

    def __init__(self, run: Path, port: int = 0, *more: object) -> None:
        command = [sys.executable, "-m", "dashboard.page", str(run), "--port", str(port)]
        command += ["--parent", str(os.getpid()), *map(str, more)]
        self.process = subprocess.Popen(
            command, stdin=subprocess.DEVNULL, stdout=subprocess.PIPE, stderr=subprocess.PIPE,
            text=True,
        )  # fmt: skip
        self._address = ""
        self._said: queue.SimpleQueue[str] = queue.SimpleQueue()
        self.errors: list[str] = []
        hearers = (
            (self.process.stdout, self._said.put), (self.process.stderr, self.errors.append)
        )  # fmt: skip
        self._threads = [
            threading.Thread(target=self._listen, args=words, daemon=True) for words in hearers
        ]
        for thread in self._threads:
            thread.start()

    def address(self) -> str:
        """Where the page is, once it is there."""
        if not self._address:
            line = self._said.get(timeout=READY_S)
            assert line.startswith("ready http://"), (line, self.errors)
            self._address = line.removeprefix("ready ").strip()
        return self._address

    def wait(self, timeout_s: float = READY_S) -> int:
        """The exit status of a page that ends by itself."""
        status = self.process.wait(timeout_s)
        for thread in self._threads:
            thread.join(timeout_s)
        for stream in (self.process.stdout, self.process.stderr):
            assert stream is not None
            stream.close()
        return status

    def end(self) -> int:
        """Ask it to end in order; its exit status."""
        self.process.send_signal(signal.SIGTERM)
        return self.wait()

    def kill(self) -> None:
        """End it as the system would."""
        self.process.kill()
        self.wait()

    def unread(self) -> list[str]:
        """Lines on stdout that nobody has asked for, once it has ended."""
        lines = iter(self._said.get, "")  # an empty one is put there at the end
        return list(lines)

    @staticmethod
    def _listen(stream: IO[str], hear: Callable[[str], None]) -> None:
        for line in stream:
            hear(line)
        hear("")
