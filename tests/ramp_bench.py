"""Two lock-ins and a magnet supply on loopback, before a Hall bar of straight lines. For tests.

The field moves a step each time that it is asked for, so nothing here depends on a clock.
"""

from __future__ import annotations

import itertools
import random
import threading
from contextlib import ExitStack
from pathlib import Path
from types import TracebackType
from typing import Self

from scripted_instrument import ScriptedInstrument

ELECTRON_C = 1.602176634e-19
DENSITY_PER_M2 = 3e15
MOBILITY = 20.0  # m^2/(V s)
CURRENT_A = 1e-6
SQUARES = 4.0
NOISE_V = 2e-8

_READER = """
[[readers]]
name = "{name}"
resource = "{resource}"
write_termination = "\\n"
read_termination = "\\n"
queries = ["{query}"]
fields = {fields}
period_s = {period_s}
timeout_ms = 500
values = [{values}]
"""

_RIG = """
[run]
title = "bench"
[ramp]
path_T = [0.0, 1.0]
rate_T_per_min = {rate}
[target]
sheet_density_relative = 0.02
mobility_relative = 0.02
[field]
reader = "magnet"
value = "B"
[[hall_bars]]
name = "bar"
squares = 4.0
material = "GaAs"
longitudinal = {{ reader = "lockin_xx", x = "X" }}
hall = {{ reader = "lockin_xy", x = "X" }}
excitation = {{ current_A = 1e-6 }}
"""


class RampBench:
    """Three instruments; the field goes from 0 to 1 T in ``steps`` questions after ``wait``."""

    def __init__(self, steps: int = 100, wait: int = 10, period_s: float = 0.1) -> None:
        self.steps, self.wait, self.period_s = steps, wait, period_s
        self.moving = threading.Event()  # while it is not set the field stays where it is
        self.moving.set()
        self._count = itertools.count()
        self.field_T = 0.0
        self._random = random.Random(7)
        self._stack = ExitStack()
        self.magnet = self._instrument({"*IDN?": "BENCH,MAGNET,1,1", "FIELD?": self._field})
        self.lockin_xx = self._instrument({"*IDN?": "BENCH,LOCKIN,1,1", "XY?": self._along})
        self.lockin_xy = self._instrument({"*IDN?": "BENCH,LOCKIN,2,1", "XY?": self._across})

    def write_config(self, path: Path, more: str = "") -> Path:
        """The configuration for these three."""
        rate = 60 / (self.steps * self.period_s)
        field = '{ name = "B", position = 1, unit = "T" }'
        voltages = '{ name = "X", position = 1 }, { name = "Y", position = 2 }'
        readers = [
            ("magnet", self.magnet, "FIELD?", 1, field),
            ("lockin_xx", self.lockin_xx, "XY?", 2, voltages),
            ("lockin_xy", self.lockin_xy, "XY?", 2, voltages),
        ]
        text = _RIG.format(rate=rate) + "".join(
            _READER.format(
                name=name,
                resource=instrument.resource,
                query=query,
                fields=fields,
                period_s=self.period_s,
                values=values,
            )
            for name, instrument, query, fields, values in readers
        )
        path.write_text(text + more)
        return path

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._stack.close()

    def _instrument(self, answers: dict[str, object]) -> ScriptedInstrument:
        return self._stack.enter_context(ScriptedInstrument(answers))

    def _field(self) -> str:
        if self.moving.is_set():
            self.field_T = min(max(next(self._count) - self.wait, 0) / self.steps, 1.0)
        return f"{self.field_T:+.6f}"

    def _along(self) -> str:
        volts = SQUARES * CURRENT_A / (DENSITY_PER_M2 * ELECTRON_C * MOBILITY)
        return f"{volts + self._random.gauss(0, NOISE_V):.7E},0.0E+00"

    def _across(self) -> str:
        volts = CURRENT_A * self.field_T / (DENSITY_PER_M2 * ELECTRON_C)
        return f"{volts + self._random.gauss(0, NOISE_V):.7E},0.0E+00"
