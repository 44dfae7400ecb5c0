"""Peers that were not let in, told to a person: which address, which key, why; never a flood."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable
from dataclasses import dataclass

AGAIN_S = 300.0  # how long the same peer is not told again for the same reason
MOST_REMEMBERED = 200  # peers and reasons; of others only the number is told, now and then


@dataclass(frozen=True)
class Refusal:
    """Somebody who was not let in. ``key`` is empty where none was shown."""

    address: str
    key: str
    why: str

    def __str__(self) -> str:
        key = f" with the key {self.key}" if self.key else ""
        return f"refused somebody at {self.address}{key}: {self.why}"


class Refusals:
    """Tells each peer and reason once in a while, and how often it came meanwhile.

    Any thread may use it. ``tell`` takes a sentence; ``count`` is how many there were in all.
    """

    def __init__(
        self, tell: Callable[[str], None], clock: Callable[[], float] = time.monotonic
    ) -> None:
        self.count = 0
        self._tell = tell
        self._clock = clock
        self._lock = threading.Lock()
        self._told: dict[Refusal, tuple[float, int]] = {}

    def add(self, refusal: Refusal) -> None:
        """Count one more, and tell it if it is news."""
        with self._lock:
            self.count += 1
            now = self._clock()
            told_at, since = self._told.get(refusal, (float("-inf"), 0))
            if now - told_at < AGAIN_S:
                self._told[refusal] = (told_at, since + 1)
                return
            if refusal not in self._told and len(self._told) >= MOST_REMEMBERED:
                self._forget(now)
                if len(self._told) >= MOST_REMEMBERED:
                    return
            self._told[refusal] = (now, 0)
        more = f" ({since} times more since that was last said)" if since else ""
        self._tell(f"{refusal}{more}")

    def _forget(self, now: float) -> None:
        self._told = {one: last for one, last in self._told.items() if now - last[0] < AGAIN_S}
