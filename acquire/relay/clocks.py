"""How far the clock of a run elsewhere is from the clock of this run, by questions and answers.

Both clocks are monotonic and count from the start of their run, so that no step of a wall clock is
seen here. A question is sent and answered; the clock there was read at some moment in between.
So half the round trip is the largest error of taking the middle, whatever the way there and the
way back have in common. The quickest of the last round trips is believed; with its age it becomes
less certain, as clocks of computers run apart.
"""

from __future__ import annotations

from collections import deque
from dataclasses import dataclass

from acquire.bus import RoundTrip

KEPT = 16  # round trips
DRIFT = 1e-4  # seconds a second: two quartz clocks of 50 ppm each, the wrong way round
LEAST_STEP_S = 1e-3  # corrections smaller than this are not made: no filter is so quick


@dataclass(frozen=True)
class Difference:
    """Times there and ``offset_s`` are times here, to within ``uncertainty_s`` (a bound)."""

    offset_s: float
    uncertainty_s: float

    def step_to(self, found: Difference) -> bool:
        """Whether ``found`` is to be used from now on in place of this one."""
        step_s = abs(found.offset_s - self.offset_s)
        better = found.uncertainty_s < 0.5 * self.uncertainty_s
        return step_s > LEAST_STEP_S and (better or step_s > found.uncertainty_s)


class ClockComparison:
    """What is known of the difference, out of the last round trips. Times in s of this run."""

    def __init__(self) -> None:
        self._trips: deque[RoundTrip] = deque(maxlen=KEPT)

    def add(self, trip: RoundTrip) -> None:
        """Take a round trip. Earlier ones that can't be true beside it are forgotten: one of the
        clocks has stood still meanwhile, as when a computer is suspended."""
        if trip.received_s < trip.sent_s:
            return
        now = _at(trip, trip.received_s)
        for earlier in list(self._trips):
            before = _at(earlier, trip.received_s)
            apart_s = abs(now.offset_s - before.offset_s)
            if apart_s > now.uncertainty_s + before.uncertainty_s:
                self._trips.remove(earlier)
        self._trips.append(trip)

    def difference(self, now_s: float) -> Difference | None:
        """The difference now; None before the first round trip."""
        known = [_at(trip, now_s) for trip in self._trips]
        return min(known, key=lambda one: one.uncertainty_s, default=None)


def _at(trip: RoundTrip, now_s: float) -> Difference:
    offset_s = (trip.sent_s + trip.received_s) / 2 - trip.there_s
    age_s = max(now_s - trip.sent_s, 0.0)
    return Difference(offset_s, (trip.received_s - trip.sent_s) / 2 + DRIFT * age_s)
