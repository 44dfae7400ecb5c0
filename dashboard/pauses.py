"""How long to wait before what died is started again."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass
class Pauses:
    """Pauses that double from ``first_s`` to ``longest_s``; over again after ``healthy_s``.

    The numbers are a judgement, not a measurement: a process that died by accident is back at
    once, one that can't live costs a start every ten seconds.
    """

    first_s: float = 0.5
    longest_s: float = 10.0
    healthy_s: float = 60.0
    _next_s: float | None = None

    def after(self, lived_s: float) -> float:
        """The pause, in seconds, that follows a life of ``lived_s`` seconds."""
        if self._next_s is None or lived_s >= self.healthy_s:
            self._next_s = self.first_s
        pause_s = self._next_s
        self._next_s = min(2 * pause_s, self.longest_s)
        return pause_s
