"""The field as a lock-in's output knows it.

A voltage behind n RC stages does not stand for the field of its moment. While the field ramps
steadily it stands for the moment n T earlier; at the start of a ramp and at each change of rate
it stands for something in between. Since the Hall voltage is linear in field, passing the field
itself through the same n stages gives, exactly and in all these cases, the field that belongs to
the reading. In a steady ramp that is the field n T earlier.

Between its readings the field is taken as linear in time. For an input a + b t the k-th of equal
stages answers (s = t / T)
    x_k(t) = a + b (t - k T) + e^-s sum_{j=1..k} s^(k-j)/(k-j)! (x_j(0) - a + b j T).
"""

from __future__ import annotations

import math
from collections import deque
from dataclasses import dataclass

from analyse.lockin import LockinFilter

State = tuple[float, ...]

CLOSEST_S = 1e-9
"""Field readings that are closer in time are one."""


def advance_stages(
    state: State, start: float, rate: float, dt: float, time_constant_s: float
) -> State:
    """States of the stages after ``dt`` seconds of an input ``start + rate * t``."""
    s = dt / time_constant_s
    if s > 700.0:
        decay, powers = 0.0, [0.0] * len(state)
    else:
        decay = math.exp(-s)
        powers = [1.0]
        for k in range(1, len(state)):
            powers.append(powers[-1] * s / k)
    away = [x - start + rate * (j + 1) * time_constant_s for j, x in enumerate(state)]
    out = []
    for k in range(len(state)):
        transient = sum(powers[k - j] * away[j] for j in range(k + 1))
        out.append(start + rate * (dt - (k + 1) * time_constant_s) + decay * transient)
    return tuple(out)


@dataclass(frozen=True, slots=True)
class _Knot:
    time_s: float
    field_T: float
    settled_from_s: float
    state: State


class FieldTrack:
    """Field readings, and the filtered field at any moment between them.

    ``filter`` None gives the field itself. ``longest_gap_s``: after a longer gap between field
    readings the stages' states are not known, until they have settled again. ``start_s``: field
    readings from before are passed over, whenever they come.
    """

    def __init__(
        self,
        stages: LockinFilter | None,
        longest_gap_s: float | None,
        start_s: float = -math.inf,
    ) -> None:
        self.stages = stages
        self._start_s = start_s
        self._longest_gap_s = longest_gap_s
        self._knots: deque[_Knot] = deque()

    @property
    def last_time_s(self) -> float:
        """Time of the latest field reading, -inf before the first."""
        return self._knots[-1].time_s if self._knots else -math.inf

    def append(self, time_s: float, field_T: float) -> None:
        """Take a field reading. One that is not later than the last is passed over."""
        if time_s < self._start_s:
            return
        if not self._knots:
            self._knots.append(self._fresh(time_s, field_T))
            return
        last = self._knots[-1]
        if time_s - last.time_s <= CLOSEST_S:
            return
        if self._too_long(time_s - last.time_s):
            self._knots.append(self._fresh(time_s, field_T))
            return
        state = self._state_after(last, time_s, field_T, time_s)
        self._knots.append(_Knot(time_s, field_T, last.settled_from_s, state))

    def forget_before(self, time_s: float) -> None:
        """Drop the readings that no moment from ``time_s`` on needs."""
        while len(self._knots) > 2 and self._knots[1].time_s < time_s:
            self._knots.popleft()

    def at(self, time_s: float) -> tuple[float, float] | None:
        """(filtered field, rate of the field in T/s) at a moment.

        None where it is not known: before the first reading, in too long a gap, or while the
        stages have not settled since the first reading or since such a gap.
        """
        before = None
        for knot in self._knots:
            if knot.time_s >= time_s:
                after = knot
                break
            before = knot
        else:
            return None
        if after.time_s == time_s and (before is None or after.settled_from_s >= after.time_s):
            before = after
        if before is None or time_s < before.settled_from_s:
            return None
        if before is after:
            return (after.state[-1] if after.state else after.field_T), 0.0
        if self._too_long(after.time_s - before.time_s):
            return None
        rate = (after.field_T - before.field_T) / (after.time_s - before.time_s)
        if self.stages is None:
            return before.field_T + rate * (time_s - before.time_s), rate
        return self._state_after(before, after.time_s, after.field_T, time_s)[-1], rate

    def _too_long(self, gap_s: float) -> bool:
        return self._longest_gap_s is not None and gap_s > self._longest_gap_s

    def _fresh(self, time_s: float, field_T: float) -> _Knot:
        if self.stages is None:
            return _Knot(time_s, field_T, time_s, ())
        settled = time_s + self.stages.settle_s(1e-3)
        return _Knot(time_s, field_T, settled, (field_T,) * self.stages.poles)

    def _state_after(self, last: _Knot, time_s: float, field_T: float, at_s: float) -> State:
        if self.stages is None:
            return ()
        rate = (field_T - last.field_T) / (time_s - last.time_s)
        return advance_stages(
            last.state, last.field_T, rate, at_s - last.time_s, self.stages.time_constant_s
        )
