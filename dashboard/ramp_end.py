"""When a ramp counts as over: told from the field readings alone."""

from __future__ import annotations

from collections import deque
from collections.abc import Sequence

CLOSE = 0.01  # of the planned span: what still counts as standing, and as having arrived
STANDS_S = 5.0
STANDS_SHARE = 0.02  # of the planned time: a slow ramp needs a longer look to be seen moving
LEAST_SHARE = 0.9  # of the planned time, so that a path that returns is not over where it began


class RampEnd:
    """Decides whether the field has come to rest at the end of the planned ramp.

    It has when the field moved away from where it stood at first, at least 90 % of the planned
    time ago, and for 5 s (2 % of the planned time if that is longer) every reading lay within
    1 % of the planned span of the last planned field and of every other. Where it stood at the
    last field at first, and the ramp was planned to begin elsewhere, the ramp may have been over
    before we came: then 90 % of the planned time without a move will do.

    Parameters
    ----------
    path_T
        The planned fields, in tesla, in order; at least two.
    duration_s
        The time that the planned ramp takes, in seconds.
    """

    def __init__(self, path_T: Sequence[float], duration_s: float) -> None:
        self._last_T = path_T[-1]
        self._close_T = CLOSE * (max(path_T) - min(path_T))
        self._begins_elsewhere = abs(path_T[0] - path_T[-1]) > self._close_T
        self._least_s = LEAST_SHARE * duration_s
        self._stands_s = max(STANDS_S, STANDS_SHARE * duration_s)
        self._first_T: float | None = None
        self._moved_at_s: float | None = None
        self._recent: deque[tuple[float, float]] = deque()
        self.over = False

    def add(self, time_s: float, field_T: float) -> None:
        """Take one field reading; times must not run backwards."""
        if self._first_T is None:
            self._first_T = field_T
            if self._begins_elsewhere and abs(field_T - self._last_T) <= self._close_T:
                self._moved_at_s = time_s
        if self._moved_at_s is None and abs(field_T - self._first_T) > self._close_T:
            self._moved_at_s = time_s
        self._recent.append((time_s, field_T))
        while len(self._recent) > 1 and self._recent[1][0] <= time_s - self._stands_s:
            self._recent.popleft()
        self.over = self.over or self._is_over(time_s)

    def _is_over(self, time_s: float) -> bool:
        if self._moved_at_s is None or time_s - self._moved_at_s < self._least_s:
            return False
        if time_s - self._recent[0][0] < self._stands_s:
            return False
        fields = [field_T for _, field_T in self._recent]
        away_T = max(abs(field_T - self._last_T) for field_T in fields)
        return away_T <= self._close_T and max(fields) - min(fields) <= self._close_T
