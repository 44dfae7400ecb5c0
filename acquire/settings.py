"""An instrument's settings: when to ask for which, and what is to be said of the answers."""

from __future__ import annotations

from collections.abc import Iterator, Mapping

from acquire.config.reader import ReaderSection, Setting
from acquire.reply import escaped


class SettingsRound:
    """Which setting is to be asked again: all of them every ``settings_period_s``, never two
    between the same two readings, so that readings stay in step."""

    def __init__(self, section: ReaderSection) -> None:
        self._settings = section.settings
        self._period_s = section.settings_period_s
        self._left: list[Setting] = []
        self._next_s = 0.0

    @property
    def is_over(self) -> bool:
        """Whether all have been asked."""
        return not self._left

    def restart(self, now_s: float) -> None:
        """They have just been asked, or can't be asked now."""
        self._left, self._next_s = [], now_s + self._period_s

    def due(self, now_s: float) -> Setting | None:
        """The one to ask now, if any."""
        if not self._left and self._period_s and now_s >= self._next_s:
            self._left, self._next_s = list(self._settings), now_s + self._period_s
        return self._left.pop(0) if self._left else None


Entry = Mapping[str, float | int | str | None]


def changes(
    section: ReaderSection, before: Mapping[str, Entry], now: Mapping[str, Entry]
) -> Iterator[str]:
    """A sentence for each setting that is another now."""
    for setting in section.settings:
        old, new = before.get(setting.name), now.get(setting.name)
        if old is not None and new is not None and old != new:
            unit = f" {setting.unit}" if setting.unit else ""
            yield f"{setting.name} has changed from {_shown(old)} to {_shown(new)}{unit}"


def not_understood(section: ReaderSection, now: Mapping[str, Entry]) -> Iterator[str]:
    """A sentence for each setting whose answer the configuration has no value for."""
    for setting in section.settings:
        entry = now.get(setting.name)
        if entry is not None and entry.get("value") is None:
            known = ", ".join(setting.codes or ()) or "none"
            yield (
                f"{setting.name}: the answer {escaped(str(entry.get('raw')))!r} to "
                f"{setting.query!r} is not among the configured codes ({known}); readings that "
                "need it are not used until it is. Add the code, or mend the query"
            )


def _shown(entry: Entry) -> str:
    value = entry.get("value")
    return f"an unknown code {escaped(str(entry.get('raw')))!r}" if value is None else f"{value}"
