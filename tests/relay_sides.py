"""A reader elsewhere and its relay here, as processes with a run each. For tests."""

from __future__ import annotations

import re
import signal
import subprocess
import sys
from pathlib import Path

from acquire.bus import Endpoint, free_endpoints
from acquire.config import parse
from acquire.readings import reading_table
from acquire.relay.translation import ENDED
from acquire.run_folder import RunFolder, create_run
from acquire.tables import Row

CONFIG = """
[run]
title = "relay"
[field]
reader = "lockin"
value = "B"
[[hall_bars]]
name = "bar"
squares = 4.0
material = "GaAs"
longitudinal = {{ reader = "lockin", x = "x" }}
hall = {{ reader = "lockin", x = "x" }}
excitation = {{ current_A = 1e-6 }}
[[readers]]
name = "lockin"
resource = "{resource}"
write_termination = "\\n"
read_termination = "\\n"
timeout_ms = 10000
period_s = 0.02
queries = ["X?"]
fields = 2
values = [{{ name = "x", position = 1 }}, {{ name = "B", position = 2, unit = "T" }}]
settings = [{{ name = "time_constant", query = "T?", codes = {{ "9" = 0.3 }} }}]
elsewhere = {{ publish = "{publish}", answer = "{answer}"{computer} }}
"""


def configuration(resource: str, far: Endpoint) -> bytes:
    """The rig, its reader heard at ``far``, by the keys of that if it has any."""
    computer = f', computer = "{far.computer}"' if far.keys else ""
    text = CONFIG.format(
        resource=resource, publish=far.publish, answer=far.answer, computer=computer
    )
    return (text + (f'[keys]\nfolder = "{far.keys}"\n' if far.keys else "")).encode()


ADDRESS = Endpoint("tcp://127.0.0.1:21001", "tcp://127.0.0.1:21002")
TABLE = reading_table(
    "lockin", parse(configuration("TCPIP::a::1::SOCKET", ADDRESS)).reader("lockin")
)


class Side:
    """A run with its process, which may be killed and started again."""

    def __init__(
        self, module: str, folder: Path, config: bytes, endpoint: Endpoint, clock_s: float = 0.0
    ) -> None:
        self.module = module
        self.endpoint = endpoint
        self.run: RunFolder = create_run(parse(config), config, [TABLE], folder)
        assert self.run.monotonic_start is not None
        self.monotonic_start = self.run.monotonic_start - clock_s  # its clock is so far ahead
        self.run.write_live({TABLE.stream: endpoint}, "tcp://127.0.0.1:1", self.monotonic_start)
        self.words: list[str] = []
        self.process: subprocess.Popen[str] | None = None

    def start(self, *more: str) -> None:
        command = [sys.executable, "-m", self.module, str(self.run.path), "lockin", *more]
        self.process = subprocess.Popen(command, stderr=subprocess.PIPE, text=True)

    def end(self, number: signal.Signals = signal.SIGTERM) -> int:
        process, self.process = self.process, None
        assert process is not None
        process.send_signal(number)
        self.words.append(process.communicate(timeout=10)[1])
        return process.returncode

    def rows(self) -> list[Row]:
        return list(self.run.rows(TABLE))

    def count(self) -> int:
        return len(self.rows())

    def close(self) -> None:
        if self.process is not None:
            self.end(signal.SIGKILL)


class Pair:
    """A reader elsewhere, at ``far``, and its relay here, which hears it at ``heard_at``: the same
    if not given."""

    def __init__(
        self,
        folder: Path,
        resource: str,
        far: Endpoint | None = None,
        heard_at: Endpoint | None = None,
    ) -> None:
        self.folder = folder
        self.addresses = free_endpoints(["far", "near"])
        if far is not None:
            self.addresses["far"] = far
        self.config = configuration(resource, heard_at or self.addresses["far"])
        self.sides: list[Side] = []

    def far(self, clock_s: float = 0.0) -> Side:
        return self._side("acquire.reader", "far", clock_s)

    def near(self) -> Side:
        return self._side("acquire.relay", "near")

    def _side(self, module: str, name: str, clock_s: float = 0.0) -> Side:
        side = Side(module, self.folder / name, self.config, self.addresses[name], clock_s)
        self.sides.append(side)
        return side


def as_heard_here(far: Side, near: Side) -> list[Row]:
    """The rows elsewhere that were heard, as they must stand here by what this run's journal says
    of the clocks; without their numbers."""
    there = {one[0]: one[1:] for one in far.rows()}
    rows: list[Row] = []
    seq: int | None = None
    offset_s = latest_s = 0.0
    for _, time_s, _, status, detail, *_ in near.rows():
        clock = re.search(r"its 0 s are (\S+) s here", str(detail)) if status == "relay" else None
        offset_s = float(clock[1]) if clock is not None else offset_s
        adopted = re.search(r"to run \"(.*)\", started .*, from its row (\d+)", str(detail))
        if status == "relay" and adopted is not None:
            seq = int(adopted[2]) if adopted[1] == far.run.run_id else None
        elif seq is not None and status not in ("relay", "unheard", "end"):
            read_s, took_s, was, what, *values = there[seq]
            assert isinstance(read_s, float)
            was, what = ("no_answer", ENDED) if was == "end" else (was, what)
            rows.append((max(read_s + offset_s, latest_s), took_s, was, what, *values))
            seq += 1
        latest_s = max(latest_s, float(str(time_s)))
    return rows


def heard_of(near: Side, run: RunFolder) -> list[Row]:
    """The rows here that came from a run, without their numbers."""
    rows = near.rows()
    assert [one[0] for one in rows] == list(range(len(rows)))
    (begin,) = [n for n, one in enumerate(rows) if f'listens to run "{run.run_id}"' in str(one[4])]
    after = rows[begin + 1 :]
    stop = next((n for n, one in enumerate(after) if "listens to run" in str(one[4])), len(after))
    return [one[1:] for one in after[:stop] if one[3] not in ("end", "relay", "unheard")]
