"""What is to be said of an instrument's settings: which have changed, which can't be understood."""

from __future__ import annotations

from collections.abc import Iterator, Mapping

from acquire.config.reader import ReaderSection
from acquire.reply import escaped

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
