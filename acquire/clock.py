"""The clock of a run: seconds since its start, which no step of the wall clock can change."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass
from datetime import UTC, datetime


@dataclass(frozen=True)
class RunClock:
    """Seconds since the run's start.

    ``monotonic_start`` is what ``time.monotonic()`` said at the run's start; all processes of
    one machine see the same monotonic clock, so they may share it. ``monotonic`` is the clock
    itself, to be replaced in tests.
    """

    monotonic_start: float
    monotonic: Callable[[], float] = time.monotonic

    def now_s(self) -> float:
        """Seconds since the run's start."""
        return self.monotonic() - self.monotonic_start


def utc_text(moment: datetime) -> str:
    """A moment as ``2031-05-14T10:15:02.123456Z``; ``moment`` must know its time zone."""
    return moment.astimezone(UTC).strftime("%Y-%m-%dT%H:%M:%S.%fZ")


def utc_now_text() -> str:
    """The wall clock in UTC, to the microsecond: ``2031-05-14T10:15:02.123456Z``."""
    return utc_text(datetime.now(UTC))
