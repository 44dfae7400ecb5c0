"""A run in the terminal: a table that is kept up to date, or a plain line now and then.

Nothing here may stop a run: once the terminal is gone, nothing is written to it any more.
"""

from __future__ import annotations

import os
import sys
import threading
import time
from collections.abc import Callable
from contextlib import suppress
from types import TracebackType
from typing import Self

from rich.console import Console, Group, RenderableType
from rich.live import Live
from rich.table import Table
from rich.text import Text

from acquire.config import Rig
from dashboard.progress import Progress
from dashboard.summary import BarSummary
from dashboard.view import Moment, View
from dashboard.words import NAMES, duration, field, fitting, left_to_target, number, numbers_of

LINE_EVERY_S, NEWS_EVERY_S = 5.0, 1.0
_MARKS = {"ready": "green", "starting": "yellow", "waiting": "red", "ended": "dim"}


def open_view(rig: Rig, console: Console | None = None) -> View:
    """The view that suits where we write to: live in a terminal, else lines."""
    console = console or Console(highlight=False)
    return LiveView(rig, console) if console.is_terminal else LineView(rig, console)


def printable(text: str) -> str:
    """Text whose control characters, which may come from anywhere, do nothing to a terminal."""
    return "".join(c if c.isprintable() or c == "\n" else f"\\x{ord(c):02x}" for c in text)


class _Written:
    """Writes to a console from any thread until that fails for the first time."""

    def __init__(self, rig: Rig, console: Console) -> None:
        self._rig = rig
        self._console = console
        self._lock = threading.RLock()
        self._gone = False

    def say(self, text: str) -> None:
        """Show lines that stay."""
        shown = fitting(printable(text), self._console.encoding)
        self._try(lambda: self._console.print(Text(shown), soft_wrap=True))

    def alarm(self, text: str) -> None:
        """Show lines that stay, in red, and ring."""
        shown = fitting(printable(text), self._console.encoding)
        self._try(lambda: self._console.print(Text(shown, "bold red"), soft_wrap=True))
        self.ring()

    def ring(self) -> None:
        """Ring the terminal's bell, if there is a terminal."""
        if self._console.is_terminal:
            self._try(self._console.bell)

    def _try(self, write: Callable[[], object]) -> None:
        with self._lock:
            if self._gone:
                return
            try:
                write()
            except (OSError, ValueError, SystemExit):
                # A closed terminal, a closed file, a broken pipe; of the last, rich makes an exit.
                self._gone = True
                if self._console.file is sys.stdout:
                    forget_stdout()


def forget_stdout() -> None:
    """Nobody reads us any more: what is still to be written must not fail at the end."""
    with suppress(OSError, ValueError):
        nowhere = os.open(os.devnull, os.O_WRONLY)
        os.dup2(nowhere, sys.stdout.fileno())
        os.close(nowhere)


class LineView(_Written):
    """For logs and pipes: one line every few seconds, sooner when something begins or ends."""

    def __init__(self, rig: Rig, console: Console, now_s: Callable[[], float] = time.monotonic):
        super().__init__(rig, console)
        self._now = now_s
        self._last_s = float("-inf")
        self._last: object = None

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._try(self._console.file.flush)

    def show(self, progress: Progress, moment: Moment) -> None:
        """Write a line, if it is time for one."""
        troubles = (*progress.trouble, *progress.unrecorded)
        now = (progress.field_T is None, troubles, tuple(moment.states.values()))
        pause_s = LINE_EVERY_S if now == self._last else NEWS_EVERY_S
        if self._now() - self._last_s >= pause_s:
            self._last_s, self._last = self._now(), now
            self.say(line(progress, moment))
            self._try(self._console.file.flush)


class LiveView(_Written):
    """For a terminal: a few lines that are rewritten in place, what is said above them."""

    def __init__(self, rig: Rig, console: Console) -> None:
        super().__init__(rig, console)
        self._live = Live(console=console, auto_refresh=False)

    def __enter__(self) -> Self:
        self._try(self._live.start)
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._try(self._live.stop)

    def show(self, progress: Progress, moment: Moment) -> None:
        """Bring the lines up to date."""
        self._try(lambda: self._live.update(picture(self._rig, progress, moment), refresh=True))


def line(progress: Progress, moment: Moment) -> str:
    """The state of a run in one line."""
    readings = sum(progress.readings.values())
    parts = [f"{moment.time_s:6.1f} s", field(progress.field_T), f"{readings} readings"]
    for name, bar in progress.summary.bars.items():
        numbers = "  ".join(numbers_of(bar))
        parts.append(f"{name}: {numbers}  {_state(bar)}")
    parts += [f"{name}: {why}" for name, why in _troubles(progress)]
    parts += [moment.alarm] if moment.alarm else []
    parts += [f"{name} {state}" for name, state in moment.states.items() if state != "ready"]
    return " | ".join(parts)


def picture(rig: Rig, progress: Progress, moment: Moment) -> RenderableType:
    """The state of a run as a few lines for a terminal."""
    head = Text.assemble(
        (duration(moment.time_s), "bold"), "   field ", (field(progress.field_T), "bold"), "   "
    )
    for name, count in progress.readings.items():
        bad = progress.unusable[name]
        head.append(f"{name} {count}" + (f" ({bad} unusable)" if bad else "") + "   ")
    parts: list[RenderableType] = [head]
    for name, bar in progress.summary.bars.items():
        parts += [_numbers(name, bar, progress.summary.confidence), *_in_the_way(bar)]
    parts += [Text(f"{name}: {why}", "red") for name, why in _troubles(progress)]
    parts.append(_processes(moment))
    if moment.alarm:
        parts.append(Text(moment.alarm, "bold white on red"))
    return Group(*parts)


def _troubles(progress: Progress) -> list[tuple[str, str]]:
    """What is wrong with which stream."""
    unrecorded = [(name, f"cannot record: {why}") for name, why in progress.unrecorded.items()]
    return [*progress.trouble.items(), *unrecorded]


def _numbers(name: str, bar: BarSummary, confidence: float) -> Table:
    table = Table(title=Text(f"{name}: {_state(bar)}"), title_justify="left", box=None)
    for heading in ("", "value", f"{100 * confidence:g} % interval, at every look"):
        table.add_column(heading)
    for column, title in NAMES.items():
        value, ends = number(bar, column, 1)
        table.add_row(title, Text(value, "bold"), ends)
    return table


def _state(bar: BarSummary) -> str:
    left = left_to_target(bar)
    return f"{bar.verdict}, {left}" if left else bar.verdict


def _in_the_way(bar: BarSummary) -> list[RenderableType]:
    """What is between a Hall bar and a stable answer, and its open cautions."""
    missing = bar.get("waiting_for")
    lines: list[RenderableType] = [Text(f"in the way: {missing}")] if missing else []
    cautions = bar.cautions.items()
    return lines + [Text(f"caution: {text or code}", "yellow") for code, text in cautions]


def _processes(moment: Moment) -> Text:
    text = Text()
    for name, state in moment.states.items():
        text.append("● ", _MARKS.get(state, "dim"))
        again = moment.restarts.get(name, 0)
        text.append(name + (f" (restarted {again} times)" if again else "") + "   ", "dim")
    return text
