"""What the instruments' settings, as their readers told them, mean for the readings after them."""

from __future__ import annotations

import json
import math
from collections import deque
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace

from acquire.config.hall_bar import Filter
from acquire.config.hall_bar import Signal as SignalSection
from acquire.readings import Reading
from analyse.lockin import LockinFilter
from analyse.setup import Signal

Settings = dict[str, dict[str, object]]


def settings_in(detail: str) -> Settings:
    """The settings in the detail of a settings row, each with ``raw`` and ``value``."""
    try:
        settings = json.loads(detail)["settings"]
        return {name: entry for name, entry in settings.items() if isinstance(entry, dict)}
    except (ValueError, KeyError, TypeError, AttributeError):
        return {}


def numbers_in(settings: Settings) -> dict[str, float]:
    """Those that have numeric values."""
    values = [(name, entry.get("value")) for name, entry in settings.items()]
    return {
        name: float(value)
        for name, value in values
        if isinstance(value, int | float) and not isinstance(value, bool)
    }


def stages_of(section: Filter, known: Mapping[str, float]) -> LockinFilter | None:
    """The filter by its configuration and the settings that are known; None if it is not known."""
    time_constant = section.time_constant_s
    if section.time_constant_setting is not None:
        time_constant = known.get(section.time_constant_setting)
    poles: float | None = section.poles
    if section.poles_setting is not None:
        poles = known.get(section.poles_setting)
    if time_constant is None or poles is None or poles not in range(1, 9):
        return None
    try:
        return LockinFilter(time_constant, int(poles))
    except ValueError:
        return None


def refers_to_settings(section: SignalSection) -> bool:
    """Whether anything about a signal is to be taken from its reader's settings."""
    return _filter_from_settings(section) or any(
        name is not None
        for name in (section.phase_setting, section.full_scale_setting, section.range_setting)
    )


class SignalSettings:
    """How one signal is read, as far as settings say so.

    ``known`` is False while one that is needed has no value: the readings can't be used then.
    """

    def __init__(self, section: SignalSection, signal: Signal) -> None:
        self._section = section
        self._plain = signal
        self._now: Signal | None = signal
        self._range: object = None
        needed = (section.phase_setting, section.full_scale_setting)
        self.known = not _filter_from_settings(section) and not any(needed)

    def take(self, known: Mapping[str, float], time_s: float) -> tuple[Signal, float] | None:
        """Take the settings as they are from ``time_s`` on. The signal and since when it holds,
        if it has changed; -inf as the time if nothing held before."""
        signal = self._signal(known)
        if signal is None:
            self.known, self._now = False, None
            return None
        before, self._now, was_known, self.known = self._now, signal, self.known, True
        new_range = known.get(self._section.range_setting or "")
        other_range = self._range is not None and new_range != self._range
        self._range = new_range
        if signal == before and not other_range:
            return None
        return signal, time_s if was_known or before is None else -math.inf

    def _signal(self, known: Mapping[str, float]) -> Signal | None:
        section, signal = self._section, self._plain
        if _filter_from_settings(section):
            assert section.filter is not None
            stages = stages_of(section.filter, known)
            if stages is None:
                return None
            signal = replace(signal, filter=stages)
        if section.phase_setting is not None:
            reference_deg = known.get(section.phase_setting, math.nan)
            if not math.isfinite(reference_deg):
                return None
            signal = replace(signal, phase_deg=signal.phase_deg - reference_deg)
        if section.full_scale_setting is not None:
            full_scale = known.get(section.full_scale_setting, math.nan)
            if not (math.isfinite(full_scale) and full_scale > 0):
                return None
            signal = replace(signal, gain=signal.gain / full_scale)
        return signal


@dataclass(frozen=True)
class SettingChange:
    """A setting that was found to be another at a moment; ``text`` says all of it."""

    time_s: float
    name: str
    text: str


class SettingChanges:
    """What has changed on the instruments, kept for each Hall bar until its field points have
    passed the moment. ``bars``: by reader, the Hall bars that have a voltage from it."""

    def __init__(self, bars: Mapping[str, Sequence[str]]) -> None:
        self._bars = {reader: tuple(dict.fromkeys(names)) for reader, names in bars.items()}
        self._last: dict[str, Settings] = {}
        self._waiting: dict[str, deque[SettingChange]] = {
            name: deque() for names in self._bars.values() for name in names
        }

    def take(self, reading: Reading, settings: Settings) -> None:
        """Take note of the settings in a row."""
        before = self._last.get(reading.reader, {})
        self._last[reading.reader] = settings
        for name, entry in settings.items():
            old, new = _shown(before.get(name, entry)), _shown(entry)
            if old == new:
                continue
            change = SettingChange(
                reading.time_s, name,
                f"{reading.reader}: {name} has changed from {old} to {new}; that holds from its "
                f"row {reading.seq + 1} on, at {reading.time_s:.3f} s",
            )
            for bar in self._bars.get(reading.reader, ()):
                self._waiting[bar].append(change)

    def before(self, bar: str, time_s: float) -> Iterator[SettingChange]:
        """Those before a moment that a Hall bar's voltages have passed, each once."""
        waiting = self._waiting.get(bar, deque())
        while waiting and waiting[0].time_s < time_s:
            yield waiting.popleft()


def _shown(entry: Mapping[str, object]) -> str:
    value = entry.get("value")
    return f"an unknown code {str(entry.get('raw'))[:40]!r}" if value is None else str(value)[:80]


def _filter_from_settings(section: SignalSection) -> bool:
    stages = section.filter
    return stages is not None and (
        stages.time_constant_setting is not None or stages.poles_setting is not None
    )
