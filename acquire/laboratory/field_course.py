"""The field of the magnet against time: it waits, ramps along a path, and can be held."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import ArrayLike, NDArray


class FieldCourse:
    """A ramp through the fields of ``path_T`` at one rate, beginning after ``wait_s``.

    Times are in seconds of the laboratory, which starts at 0; :meth:`hold` and :meth:`go_on` must
    be told in their order. What lies in the past never changes: the filters behind the field
    ask for it late.
    """

    def __init__(self, path_T: Sequence[float], rate_T_per_s: float, wait_s: float = 0.0) -> None:
        legs = np.abs(np.diff(path_T)) / rate_T_per_s
        self._path_T = np.asarray(path_T, float)
        self._at_s = wait_s + np.concatenate([[0.0], np.cumsum(legs)])
        # The supply's own clock against the laboratory's: it stands while the field is held.
        self._marks_s = [0.0]
        self._own_s = [0.0]
        self.held = False

    def field_T(self, time_s: ArrayLike) -> NDArray[np.float64]:
        """The field at one moment or several."""
        return np.asarray(np.interp(self._own(time_s), self._at_s, self._path_T))

    def target_T(self, time_s: float) -> float:
        """The field that the leg under way leads to."""
        leg = int(np.searchsorted(self._at_s[1:], self._own(time_s), side="right"))
        return float(self._path_T[min(leg + 1, len(self._path_T) - 1)])

    def has_begun(self, time_s: float) -> bool:
        """Whether the wait before the ramp is over."""
        return bool(self._own(time_s) >= self._at_s[0])

    def is_over(self, time_s: float) -> bool:
        """Whether the field stands at the end of the path."""
        return bool(self._own(time_s) >= self._at_s[-1])

    def hold(self, time_s: float) -> None:
        """Let the field stand where it is, now."""
        if not self.held:
            self._mark(time_s)
            self.held = True

    def go_on(self, time_s: float) -> None:
        """Ramp on, or wait on, from where it was held."""
        if self.held:
            self._mark(time_s)
            self.held = False

    def _own(self, time_s: ArrayLike) -> NDArray[np.float64]:
        times = np.asarray(time_s, float)
        own = np.asarray(np.interp(times, self._marks_s, self._own_s))
        return own if self.held else own + np.maximum(times - self._marks_s[-1], 0.0)

    def _mark(self, time_s: float) -> None:
        own = float(self._own(time_s))
        self._marks_s.append(time_s)
        self._own_s.append(own)
