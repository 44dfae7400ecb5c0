"""How the field goes with time: straight pieces between knots, and what follows from them exactly."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from bench.rc_stages import Array, RCStages


@dataclass(frozen=True)
class Profile:
    """Field at knots of time, straight between, constant outside. Times must not fall.

    Two knots at one time are a jump.
    """

    times_s: tuple[float, ...]
    fields_T: tuple[float, ...]

    @property
    def end_s(self) -> float:
        """Time of the last knot."""
        return self.times_s[-1]

    @property
    def start_s(self) -> float:
        """Time at which the field begins to move."""
        moved = np.flatnonzero(np.diff(self.fields_T))
        return self.times_s[moved[0]] if len(moved) else self.end_s

    @property
    def largest_T(self) -> float:
        """Largest magnitude of field."""
        return max(abs(one) for one in self.fields_T)

    @property
    def turning_fields_T(self) -> tuple[float, ...]:
        """Start, turning points and end of the field's path."""
        path = [self.fields_T[0]]
        for field_T in self.fields_T[1:]:
            if field_T == path[-1]:
                continue
            if len(path) > 1 and (field_T - path[-1]) * (path[-1] - path[-2]) > 0:
                path.pop()
            path.append(field_T)
        return tuple(path)

    def at(self, time_s: Array) -> Array:
        """Field at times."""
        return np.asarray(np.interp(time_s, self.times_s, self.fields_T))

    def swept(self, time_s: Array) -> Array:
        """Field passed over, both ways counted, until times."""
        travelled = np.concatenate(([0.0], np.cumsum(np.abs(np.diff(self.fields_T)))))
        return np.asarray(np.interp(time_s, self.times_s, travelled))

    def behind(self, stages: RCStages, time_s: Array) -> Array:
        """Field behind RC stages at times, exact; settled at the first knot before it."""
        time_s = np.asarray(time_s, float)
        out = np.full(time_s.shape, float(self.fields_T[0]))
        rate = 0.0
        for k in range(len(self.times_s) - 1):
            dt = self.times_s[k + 1] - self.times_s[k]
            rise = self.fields_T[k + 1] - self.fields_T[k]
            if dt == 0.0:
                out += rise * stages.step(time_s - self.times_s[k])
                continue
            if rise / dt != rate:
                out += (rise / dt - rate) * stages.ramp(time_s - self.times_s[k])
                rate = rise / dt
        if rate != 0.0:
            out -= rate * stages.ramp(time_s - self.times_s[-1])
        return out


def path(
    fields_T: Sequence[float], rates_T_per_s: float | Sequence[float], *, wait_s: float = 0.0,
    holds_s: Sequence[float] = (), after_s: float = 0.0,
) -> Profile:
    """A wait, then from field to field at a rate (one, or one for each piece), then a hold.

    ``holds_s``: a hold at the end of each piece but the last, where given.
    """
    pieces = len(fields_T) - 1
    rates = [rates_T_per_s] * pieces if isinstance(rates_T_per_s, float) else list(rates_T_per_s)
    times, fields = [0.0], [float(fields_T[0])]

    def go(to_T: float, in_s: float) -> None:
        times.append(times[-1] + in_s)
        fields.append(float(to_T))

    if wait_s > 0:
        go(fields[0], wait_s)
    for k in range(pieces):
        go(fields_T[k + 1], abs(fields_T[k + 1] - fields_T[k]) / rates[k])
        if k < len(holds_s) and holds_s[k] > 0 and k < pieces - 1:
            go(fields_T[k + 1], holds_s[k])
    if after_s > 0:
        go(fields[-1], after_s)
    return Profile(tuple(times), tuple(fields))


def staircase(start_T: float, end_T: float, steps: int, rate_T_per_s: float, hold_s: float
              ) -> Profile:
    """Equal steps, each a short ramp and a hold."""
    fields = np.linspace(start_T, end_T, steps + 1)
    return path([float(b) for b in fields], rate_T_per_s, holds_s=[hold_s] * steps,
                after_s=hold_s, wait_s=hold_s)
