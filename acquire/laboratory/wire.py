"""One connection to an instrument: bytes to lines, and replies that leave when they are due."""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass, field

from acquire.laboratory.bench import Outcome

LONGEST_LINE = 4096  # bytes; longer ones are no commands
MOST_WAITING = 100_000  # bytes that the other side does not take


class Nonsense(Exception):
    """What comes over a connection can't be commands, or nobody takes the replies."""


@dataclass
class Wire:
    """Bytes in and out of one connection. Replies keep their order: one that is late holds up
    those behind it, as it would in an instrument that does one thing at a time."""

    _coming: bytes = b""
    _due: deque[tuple[float, bytes | None]] = field(default_factory=deque)  # None: cut here
    _last_s: float = 0.0
    _waiting: int = 0

    def lines(self, data: bytes) -> list[str]:
        """The lines that are complete with these bytes. Raises Nonsense."""
        *complete, self._coming = (self._coming + data).split(b"\n")
        if max(map(len, (*complete, self._coming))) > LONGEST_LINE:
            raise Nonsense
        return [line.decode("latin-1").rstrip("\r") for line in complete]

    def add(self, outcome: Outcome, time_s: float) -> None:
        """Take what follows from a line that came at ``time_s``. Raises Nonsense."""
        for piece in outcome.pieces:
            self._add(time_s + piece.after_s, piece.data)
        if outcome.cut:
            self._add(time_s, None)
        if self._waiting > MOST_WAITING:
            raise Nonsense

    def next_s(self) -> float | None:
        """When there is something to be sent; None if nothing waits."""
        return self._due[0][0] if self._due else None

    def ready(self, time_s: float) -> bytes | None:
        """What is to be sent next, None for cutting the line; empty if nothing is due."""
        if not self._due or self._due[0][0] > time_s:
            return b""
        return self._due[0][1]

    def sent(self, count: int) -> None:
        """So many bytes of what was ready are gone."""
        due_s, data = self._due.popleft()
        self._waiting -= count
        if data is not None and count < len(data):
            self._due.appendleft((due_s, data[count:]))

    def _add(self, due_s: float, data: bytes | None) -> None:
        self._last_s = max(self._last_s, due_s)
        self._due.append((self._last_s, data))
        self._waiting += len(data or b"")
