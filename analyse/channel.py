"""One voltage channel: its readings in order, judged, waiting to be paired with their field."""

from __future__ import annotations

import math
from collections import deque
from dataclasses import dataclass, replace

from analyse.field_track import CLOSEST_S, FieldTrack
from analyse.setup import Signal
from analyse.spikes import SpikeGate

MOST_HELD = 300
UNFILTERED_LONGEST = 3


@dataclass(frozen=True, slots=True)
class Sample:
    """A reading at the sample: ``kind`` is ok, or why it is not used (overload, lost, wild).

    ``track`` is the field behind the filter that the reading was taken with, ``digit`` the last digit
    of readings like it, as far as it is known.
    """

    time_s: float
    kind: str
    track: FieldTrack | None = None
    value: float = math.nan
    quadrature: float | None = None
    digit: float = 0.0


OVERLOAD_SENTINEL = 9.9e37
"""What instruments answer for a reading beyond their range (IEEE 488.2 and SCPI: 9.9E37)."""


class Channel:
    """Readings of one signal. ``passed_s``: no sample from before this time will come any more.

    A reading whose time lies before that of the one before it stands for no moment: it is counted
    as lost, at the time that the channel has come to.
    """

    def __init__(self, signal: Signal, track: FieldTrack | None = None) -> None:
        self.signal = signal
        self.track = track
        self.queue: deque[Sample] = deque()
        self.passed_s = -math.inf
        self._newest_s = -math.inf
        self._gate: SpikeGate[Sample] = SpikeGate()
        self._last: tuple[float, float] | None = None
        self._until_s, self._to_skip = -math.inf, 0

    def push(self, time_s: float, x: float | None, y: float | None, status: str) -> None:
        """Take a reading; anything but status ok with a finite x counts as overload or lost."""
        good = status == "ok" and x is not None and math.isfinite(x)
        if good and self.signal.detection == "XY":
            good = y is not None and math.isfinite(y)
        backwards = time_s < self._newest_s
        time_s = max(time_s, self._newest_s)
        self._fit_gate(time_s - self._newest_s)
        self._newest_s = time_s
        beyond = x is not None and abs(x) >= OVERLOAD_SENTINEL
        if good and self._unsettled(time_s):
            good = False
        if not good or backwards or beyond:
            kind = "overload" if beyond or status in ("overload", "range") else "lost"
            self._release(self._gate.pass_by(Sample(time_s, kind, self.track)))
            return
        assert x is not None
        value = self.signal.at_sample(x, y)
        sample = Sample(
            time_s, "ok", self.track, value, self.signal.quadrature(x, y), self._gate.last_digit
        )
        self._release(self._gate.push(value, sample))

    def change(self, signal: Signal, until_s: float, skipped: int = 0) -> None:
        """From the next reading on the instrument is set otherwise, so ``signal`` holds.

        What waits for its neighbours is wild. Readings before ``until_s``, and so many more, are
        counted as lost.
        """
        self.signal = signal
        self._until_s, self._to_skip = until_s, skipped
        self._release(self._gate.restart())

    def _unsettled(self, time_s: float) -> bool:
        if time_s < self._until_s:
            return True
        self._to_skip -= 1
        return self._to_skip >= 0

    def end(self) -> None:
        """No more readings come."""
        self._release(self._gate.flush())
        self.passed_s = math.inf

    def _fit_gate(self, spacing_s: float) -> None:
        """As many readings may be wild in a row as a filter needs to settle after a jump."""
        stages = self.track.stages if self.track is not None else None
        if stages is None:
            self._gate.longest = UNFILTERED_LONGEST
        elif CLOSEST_S < spacing_s < math.inf:
            self._gate.longest = min(MOST_HELD, 2 + int(stages.settle_s(1e-3) / spacing_s))

    def interpolated(self, time_s: float) -> float | None:
        """Value at a moment that the channel has passed; None if it is not known.

        Between the last sample before it and the first row after it; the former alone where the
        latter is no good. Rows further ahead are not looked at: whether they are here already
        depends on the order of arrival.
        """
        before: tuple[float, float] | None = self._last
        after: tuple[float, float] | None = None
        for sample in self.queue:
            good = sample.kind == "ok"
            if sample.time_s <= time_s:
                before = (sample.time_s, sample.value) if good else before
                continue
            after = (sample.time_s, sample.value) if good else None
            break
        if before is None or after is None:
            nearest = before or after
            return nearest[1] if nearest is not None else None
        share = (time_s - before[0]) / (after[0] - before[0])
        return before[1] + share * (after[1] - before[1])

    def remember(self, sample: Sample) -> None:
        """Keep a sample that was taken off the queue, for interpolation."""
        if sample.kind == "ok":
            self._last = (sample.time_s, sample.value)

    def _release(self, judged: list[tuple[Sample, bool]]) -> None:
        for sample, wild in judged:
            self.queue.append(replace(sample, kind="wild") if wild else sample)
            self.passed_s = max(self.passed_s, sample.time_s)
