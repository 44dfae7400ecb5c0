"""By how much a filter's correlation inflates the variance of one role's readings."""

from __future__ import annotations

from analyse.lockin import LockinFilter


class Inflation:
    """Variance inflation of one role's readings by their spacing, remembered by spacing."""

    def __init__(self) -> None:
        self.stages: LockinFilter | None = None
        self._known: dict[str, float] = {}
        self._last_s: float | None = None

    def next(self, time_s: float, stages: LockinFilter | None) -> float:
        """Kappa for a reading at a time behind a filter."""
        if stages != self.stages:
            self.stages, self._known = stages, {}
        last, self._last_s = self._last_s, time_s
        if stages is None or last is None or time_s <= last:
            return 1.0
        key = f"{time_s - last:.2g}"
        if key not in self._known:
            self._known[key] = stages.inflation(time_s - last)
        return self._known[key]
