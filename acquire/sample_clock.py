"""When the samples out of an instrument's buffer were taken, by our clock.

The instrument takes sample k at c + k p, by a clock of its own, and tells no times. But each time
its buffer is emptied, between the question at ``asked`` and the beginning of the reply at
``answered``, the sample that comes next is one that was not taken before the question, and will be
taken no later than one period after the reply:

    asked - latency < next <= answered - latency + p

Each emptying gives such an interval. The last one, moved on by the samples that came since and
widened by what the two clocks may differ (:data:`DRIFT`), and the new one must overlap; the times
are then known better than by either. So a slow exchange does no harm, a drift is followed, and the
times are never wrong by more than one period and the quickest of the last exchanges together. When
they do not overlap, samples were lost, or came twice.
"""

from __future__ import annotations

from dataclasses import dataclass

DRIFT = 5e-3
"""How far the instrument's clock may be off, as a share. Real ones are a hundred times better; that
is for periods that are stated in round numbers."""
SLEW = 0.1
"""By how much of a sample's period its distance to the next may be off that, to follow a drift."""


class OutOfStep(Exception):
    """The samples do not fit the time that has passed. ``due``: about how many were due."""

    def __init__(self, due: float) -> None:
        super().__init__(f"about {due:.0f} were due")
        self.due = due


@dataclass(frozen=True)
class Times:
    """Equally spaced times of ``count`` samples, oldest first."""

    first_s: float
    step_s: float
    count: int

    def at(self, index: int) -> float:
        """The time of one of them."""
        return self.first_s + index * self.step_s


class SampleClock:
    """Times of the samples of one instrument. Not started: call :meth:`start` first."""

    def __init__(self, period_s: float, latency_s: float = 0.0) -> None:
        self.period_s = period_s
        self.latency_s = latency_s
        self._low_s = self._high_s = 0.0
        self._next_s: float | None = None  # the time that the next sample would be given

    def start(self, asked_s: float, answered_s: float) -> None:
        """The buffer was emptied, and nothing is known of what was in it."""
        self._low_s, self._high_s = self._interval(asked_s, answered_s)
        self._next_s = None

    def times(self, count: int, asked_s: float, answered_s: float) -> Times:
        """The times of the ``count`` samples that were taken since; they follow on those before,
        and on each other, strictly.

        Raises OutOfStep if so many can't have been; :meth:`start` again then.
        """
        span_s = count * self.period_s
        low, high = self._interval(asked_s, answered_s)
        widened = DRIFT * span_s
        low = max(low, self._low_s + span_s - widened)
        high = min(high, self._high_s + span_s + widened)
        if low > high:
            middle = (asked_s + answered_s + self.period_s) / 2 - self.latency_s
            passed_s = middle - (self._low_s + self._high_s) / 2
            raise OutOfStep(max(passed_s / self.period_s, 0.0))
        self._low_s, self._high_s = low, high
        return self._given(count, span_s) if count else Times(0.0, 0.0, 0)

    def _given(self, count: int, span_s: float) -> Times:
        """Times that follow on those given before, come closer to the middle of what is possible
        without tearing neighbouring samples apart, and are possible."""
        middle = (self._low_s + self._high_s) / 2
        if self._next_s is None:
            first, following = middle - span_s, middle
        else:
            first, slew_s = self._next_s, SLEW * span_s
            following = first + span_s + max(-slew_s, min(slew_s, middle - first - span_s))
            following = max(self._low_s, min(self._high_s, following))
        step_s = (following - first) / count
        if not self.period_s / 4 < step_s < 4 * self.period_s:
            raise OutOfStep((middle - first) / self.period_s)
        self._next_s = following
        return Times(first, step_s, count)

    def _interval(self, asked_s: float, answered_s: float) -> tuple[float, float]:
        return asked_s - self.latency_s, answered_s - self.latency_s + self.period_s
