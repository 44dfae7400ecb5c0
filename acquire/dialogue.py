"""What a reader says to its instrument: prove who you are, tell your settings, give a reading."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, Protocol

from acquire.config.reader import ReaderSection, Setting
from acquire.errors import BadReply, ConnectError
from acquire.reply import Reply, escaped, fits, parse_replies, read_setting

Known = dict[str, dict[str, float | int | str | None]]
"""Settings by name: ``raw`` as the instrument answered, ``value`` as the configuration reads it."""


class Asked(Protocol):
    """The part of :class:`acquire.instrument.Instrument` that is used here."""

    def open(self, known_identity: str | None = None) -> str: ...
    def ask(self, query: str) -> str: ...
    def close(self) -> None: ...


class Dialogue:
    """Questions to one instrument, and what is known of it.

    Any InstrumentError that is raised here leaves the instrument closed; :meth:`connect` again.

    Parameters
    ----------
    known_identity : what the instrument said of itself when the run began, if that is known;
        nobody else is accepted later.
    wait : makes every call that may wait for the instrument (see :class:`acquire.stop.Stop`).
    """

    def __init__(
        self,
        section: ReaderSection,
        instrument: Asked,
        known_identity: str | None = None,
        wait: Callable[..., Any] = lambda call, *args: call(*args),
    ) -> None:
        self.identity = known_identity
        self.settings: Known = {}
        self._section = section
        self._instrument = instrument
        self._wait = wait

    def connect(self) -> bool:
        """Open, prove identity, ask all settings; whether a setting differs from before.

        The identity is asked once more after the settings: had a late answer slipped in between
        question and answer, all since would be out of turn, and it shows here.
        Raises InstrumentError.
        """
        identity = self._wait(self._instrument.open, self.identity)
        settings = {item.name: self._setting(item) for item in self._section.settings}
        if settings:
            self._expect(identity)
        changed = settings != self.settings
        self.identity, self.settings = identity, settings
        return changed

    def reading(self) -> Reply:
        """Ask all queries and read their replies. Raises InstrumentError.

        A reply that is not in order closes the instrument too.
        """
        replies = [self._ask(query) for query in self._section.queries]
        reply = parse_replies(self._section, replies)
        if not reply.in_order:
            self.close()
        return reply

    def refresh(self, setting: Setting) -> bool:
        """Ask one setting again; whether it has changed. Raises InstrumentError."""
        found = self._setting(setting)
        changed = found != self.settings.get(setting.name)
        if changed:
            self.settings = {**self.settings, setting.name: found}
        return changed

    def close(self) -> None:
        """Close the instrument."""
        self._instrument.close()

    def _ask(self, query: str) -> str:
        return str(self._wait(self._instrument.ask, query))

    def _setting(self, setting: Setting) -> dict[str, float | int | str | None]:
        raw = self._ask(setting.query)
        if not fits(raw):
            self.close()
            raise BadReply(f"{setting.query!r}: {escaped(raw)!r} is too long for a setting")
        return {"raw": raw, "value": read_setting(setting, raw)}

    def _expect(self, identity: str) -> None:
        again = self._ask(self._section.identity.query)
        if again != identity:
            self.close()
            raise ConnectError(
                f"its answers come out of turn: asked again who it is, it said {escaped(again)!r}"
            )
