"""From readings to pairs of field and resistivity, in an order that the data alone decide.

A voltage waits until the field, the other voltage and the current have passed its moment; then
the earliest one is released. So the pairs and their order do not depend on which message arrived
first.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass, replace

from analyse.channel import UNFILTERED_LONGEST, Channel, Sample
from analyse.field_track import CLOSEST_S, FieldTrack
from analyse.hall_bar import HallBar
from analyse.lockin import LockinFilter
from analyse.setup import Setup, Signal
from analyse.spikes import SpikeGate

WILD_FIELDS = 5
"""Field readings in a row that may be wild."""
CHANNELS = ("field", "longitudinal", "hall", "current")
LARGEST_T = 1e4
"""No field that was ever made is larger; a larger reading is none."""
LARGEST_OHM = 1e30
"""Nothing conducts less; a larger resistivity comes of a current that is none."""
SMALLEST_T, SMALLEST_OHM = 1e-15, 1e-30
"""What is smaller is nothing; numbers far below have no digits left to reckon with."""


@dataclass(frozen=True, slots=True)
class Pair:
    """One voltage with its field, or the reason why it can't be used.

    ``kind``: ok, overload, lost, wild, or no_field. ``rho_ohm``: resistivity, ``field_T``: the
    field that it stands for, ``rate_T_per_s``: how fast the field moved, ``quadrature_ohm``: what
    stands at right angles to the signal, where that is read, ``stages``: the filter before it,
    ``digit_ohm``: the last digit of readings like it, 0 if not known.
    """

    role: str
    time_s: float
    kind: str
    field_T: float = math.nan
    rate_T_per_s: float = 0.0
    rho_ohm: float = math.nan
    current_A: float = math.nan
    quadrature_ohm: float | None = None
    stages: LockinFilter | None = None
    digit_ohm: float = 0.0


class Pairing:
    """Takes readings of all channels of one Hall bar, gives pairs."""

    def __init__(self, bar: HallBar, setup: Setup) -> None:
        self._bar = bar
        self._setup = setup
        self._gap_s = setup.field.longest_gap_s
        signals = {"longitudinal": setup.longitudinal, "hall": setup.hall}
        self._voltages = {
            role: Channel(signal, FieldTrack(signal.filter, self._gap_s))
            for role, signal in signals.items()
        }
        self._tracks = [one.track for one in self._voltages.values() if one.track is not None]
        self._knots: deque[tuple[float, float]] = deque()
        excitation = setup.excitation
        measured = excitation.measured if excitation is not None else None
        self._current = Channel(measured) if measured is not None else None
        self._field_passed_s = -math.inf
        self._gate: SpikeGate[tuple[float, float | None]] = SpikeGate(WILD_FIELDS)
        self.wild_field_readings = 0

    def push(
        self, channel: str, time_s: float, x: float | None, y: float | None, status: str
    ) -> Iterator[Pair]:
        """Take one reading; yields the pairs that it completes."""
        if channel == "field":
            self._push_field(time_s - self._setup.field.delay_s, x, status)
        elif channel in self._voltages:
            self._voltages[channel].push(time_s, x, y, status)
        elif channel == "current":
            if self._current is None:
                raise ValueError("the excitation is not a measured one: no channel 'current'")
            self._current.push(time_s, x, y, status)
        else:
            raise ValueError(f"channel {channel!r} is not one of {', '.join(CHANNELS)}")
        return self._released()

    def set_filter(self, role: str, stages: LockinFilter | None) -> None:
        """From the next reading of a role on, another filter stands before it."""
        signal = replace(self._voltages[role].signal, filter=stages)
        self.change_signal(role, signal, -math.inf)

    def change_signal(self, channel: str, signal: Signal, since_s: float) -> None:
        """From the next reading of a channel on, ``signal`` is how it is read: an instrument was
        found to be set otherwise at ``since_s``.

        The field behind the filter is followed from then on (from the last reading, if that is
        later), and readings are used once it has settled; without a filter that is known some
        readings are passed over. Which field readings are here already does not matter.
        """
        one = self._current if channel == "current" else self._voltages[channel]
        assert one is not None
        skipped = UNFILTERED_LONGEST if signal.filter is None and since_s > -math.inf else 0
        if channel == "current":
            settle_s = 0.0 if signal.filter is None else signal.filter.settle_s(1e-3)
            one.change(signal, since_s + settle_s, skipped)
            return
        track = FieldTrack(signal.filter, self._gap_s, max(one.passed_s, since_s))
        for time_s, field_T in self._knots:
            track.append(time_s, field_T)
        one.change(signal, -math.inf, skipped)
        one.track = track
        self._tracks.append(track)

    def end(self, channel: str) -> Iterator[Pair]:
        """No more readings come from a channel; yields what that completes."""
        if channel == "field":
            self._add_knots(self._gate.flush())
            self._field_passed_s = math.inf
        elif channel == "current":
            if self._current is not None:
                self._current.end()
        else:
            self._voltages[channel].end()
        return self._released()

    def _push_field(self, time_s: float, field_T: float | None, status: str) -> None:
        if status == "ok" and field_T is not None and abs(field_T) <= LARGEST_T:
            field_T = field_T if abs(field_T) >= SMALLEST_T else 0.0
            judged = self._gate.push(field_T, (time_s, field_T))
        else:
            judged = self._gate.pass_by((time_s, None))
        self._add_knots(judged)

    def _add_knots(self, judged: list[tuple[tuple[float, float | None], bool]]) -> None:
        for (time_s, field_T), wild in judged:
            self._field_passed_s = max(self._field_passed_s, time_s)
            self.wild_field_readings += wild
            if field_T is not None and not wild:
                self._add_knot(time_s, field_T)

    def _add_knot(self, time_s: float, field_T: float) -> None:
        if self._knots and time_s - self._knots[-1][0] <= CLOSEST_S:
            return
        self._knots.append((time_s, field_T))
        for track in self._tracks:
            track.append(time_s, field_T)

    def _released(self) -> Iterator[Pair]:
        while True:
            role = self._next_role()
            if role is None:
                return
            channel = self._voltages[role]
            sample = channel.queue[0]
            if sample.kind in ("ok", "wild") and not self._ready(sample.time_s):
                return
            channel.queue.popleft()
            pair = self._pair(role, sample)
            channel.remember(sample)
            self._forget(sample.time_s)
            yield pair

    def _next_role(self) -> str | None:
        heads = [(c.queue[0].time_s, role) for role, c in self._voltages.items() if c.queue]
        if not heads:
            return None
        time_s, role = min(heads)
        for other, channel in self._voltages.items():
            if other != role and channel.passed_s <= time_s:
                return None
        return role

    def _ready(self, time_s: float) -> bool:
        """Whether nothing that comes later can change what is known of the moment.

        A channel has to be past it, not just at it: a row of the same time, or the row after it
        that is interpolated to, may be here already or not.
        """
        if self._current is not None and self._current.passed_s <= time_s:
            return False
        last = self._knots[-1][0] if self._knots else -math.inf
        if last >= time_s or self._field_passed_s == math.inf:
            return True
        gap = self._gap_s
        return gap is not None and self._field_passed_s > time_s and (
            self._field_passed_s - last > gap
        )

    def _pair(self, role: str, sample: Sample) -> Pair:
        if sample.kind not in ("ok", "wild"):
            return Pair(role, sample.time_s, sample.kind)
        assert sample.track is not None
        known = sample.track.at(sample.time_s)
        current = self._current_at(role, sample)
        if known is None or current is None:
            return Pair(role, sample.time_s, "no_field" if known is None else "lost")
        field_T, rate = known
        per_rho = current * (self._bar.squares if role == "longitudinal" else 1.0)
        if not abs(sample.value) <= LARGEST_OHM * abs(per_rho) or not per_rho:
            return Pair(role, sample.time_s, "lost")
        rho = sample.value / per_rho
        quadrature = None if sample.quadrature is None else sample.quadrature / per_rho
        return Pair(
            role, sample.time_s, sample.kind, field_T, rate,
            rho if abs(rho) >= SMALLEST_OHM else 0.0, current, quadrature, sample.track.stages,
            abs(sample.digit / per_rho),
        )

    def _forget(self, time_s: float) -> None:
        """Drop what was read before everything that can still come."""
        if len(self._tracks) > len(self._voltages):
            self._drop_unused_tracks()
        for track in self._tracks:
            track.forget_before(time_s)
        current = self._current
        while current is not None and current.queue and current.queue[0].time_s <= time_s:
            current.remember(current.queue.popleft())
        passed = min(time_s, *(channel.passed_s for channel in self._voltages.values()))
        while len(self._knots) > 1 and self._knots[0][0] < passed:
            self._knots.popleft()

    def _drop_unused_tracks(self) -> None:
        used = {id(channel.track) for channel in self._voltages.values()}
        used |= {id(one.track) for channel in self._voltages.values() for one in channel.queue}
        self._tracks = [track for track in self._tracks if id(track) in used]

    def _current_at(self, role: str, sample: Sample) -> float | None:
        if self._voltages[role].signal.resistance:
            return 1.0
        excitation = self._setup.excitation
        assert excitation is not None
        if excitation.current_A is not None:
            return excitation.current_A
        if self._current is not None:
            value = self._current.interpolated(sample.time_s)
            if value is None or value == 0.0:
                return None
            return value / excitation.shunt_ohm if excitation.shunt_ohm is not None else value
        other = "hall" if role == "longitudinal" else "longitudinal"
        beside = self._voltages[other].interpolated(sample.time_s)
        if beside is None:
            return None
        return self._current_behind_resistor({role: sample.value, other: beside})

    def _current_behind_resistor(self, values: dict[str, float]) -> float | None:
        """Current out of a source behind a series resistor, from what both signals read; None if
        they would take more than the source has."""
        excitation = self._setup.excitation
        assert excitation is not None
        assert excitation.source_V is not None and excitation.series_ohm is not None
        squares = excitation.source_to_drain_squares or self._bar.squares
        resistance, drop = excitation.series_ohm + excitation.contact_ohm, 0.0
        for role, part in (
            ("longitudinal", values["longitudinal"] * squares / self._bar.squares),
            ("hall", abs(values["hall"])),
        ):
            if self._voltages[role].signal.resistance:
                resistance += part
            else:
                drop += part
        if drop >= excitation.source_V or resistance <= 0.0:
            return None
        return (excitation.source_V - drop) / resistance
