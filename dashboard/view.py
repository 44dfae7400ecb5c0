"""Where a run is shown while it goes on: what every view can do."""

from __future__ import annotations

from collections.abc import Mapping
from contextlib import AbstractContextManager
from dataclasses import dataclass
from typing import Protocol

from dashboard.progress import Progress


@dataclass(frozen=True)
class Moment:
    """What the view shows beside the progress: time since the run's start, the processes, and the
    sentence of an alarm that stands."""

    time_s: float
    states: Mapping[str, str]
    restarts: Mapping[str, int]
    alarm: str = ""


class View(AbstractContextManager["View"], Protocol):
    """Where a run is shown. No method raises, also when nobody can see it any more."""

    def say(self, text: str) -> None:
        """Show lines that stay."""

    def alarm(self, text: str) -> None:
        """Show lines that stay, in red, and ring."""

    def ring(self) -> None:
        """Ring the terminal's bell, if there is a terminal."""

    def show(self, progress: Progress, moment: Moment) -> None:
        """Show the present state in place of the one before."""
