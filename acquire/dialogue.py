"""What a reader says to its instrument: prove who you are, tell your settings, give a reading.

An answer is taken for the one that was asked for only while nothing speaks against it. On a line
that keeps late answers, or with an instrument that sends them twice, every answer may be that to
the question before. That shows by one of these: the identity, asked again at the end of
connecting and after a setting that has changed, is not what it was; the replies of one reading
have other numbers of fields than before; something comes unasked soon after the last answer.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from typing import Any, Protocol

from acquire.config.block import Block
from acquire.config.reader import Proof, ReaderSection, Setting
from acquire.errors import BadReply, ConnectError
from acquire.reply import Reply, escaped, fits, parse_replies, read_setting, split_fields

Known = dict[str, dict[str, float | int | str | None]]
"""Settings by name: ``raw`` as the instrument answered, ``value`` as the configuration reads it."""


class Asked(Protocol):
    """The part of :class:`acquire.instrument.Instrument` that is used here."""

    reply_after_s: float

    def open(self, known_identity: str | None = None) -> str: ...
    def ask(self, query: str) -> str: ...
    def ask_block(self, query: str, block: Block) -> bytes: ...
    def next_block(self, block: Block) -> bytes: ...
    def tell(self, command: str) -> None: ...
    def expect_silence(self, wait_s: float = 0.0) -> None: ...
    def close(self) -> None: ...


class Dialogue:
    """Questions to one instrument, and what is known of it.

    Any InstrumentError that is raised here leaves the instrument closed; :meth:`connect` again.

    Parameters
    ----------
    known_identity : what the instrument said of itself when the run began, if that is known;
        nobody else is accepted later.
    wait : makes every call that may wait for the instrument (see :class:`acquire.stop.Stop`).
    now_s : the clock of :attr:`answers`.
    """

    def __init__(
        self,
        section: ReaderSection,
        instrument: Asked,
        known_identity: str | None = None,
        wait: Callable[..., Any] = lambda call, *args: call(*args),
        now_s: Callable[[], float] = time.monotonic,
    ) -> None:
        self.identity = known_identity
        self.settings: Known = {}
        self.answers: dict[str, tuple[float, float, int]] = {}
        """By setting: when it was first and last answered as it stands, and how often."""
        self._section = section
        self._instrument = instrument
        self._wait = wait
        self._now = now_s
        self._counts: list[int] | None = None

    def connect(self) -> bool:
        """Open, prove identity, ask all settings; whether a setting differs from before.

        The identity is asked once more at the end: had a late answer slipped in between question
        and answer, all since would be out of turn, and it shows here.
        Raises InstrumentError.
        """
        identity = self._wait(self._instrument.open, self.identity)
        settings, when = {}, {}
        for item in self._section.settings:
            settings[item.name] = self._setting(item)
            when[item.name] = self._now()
        if settings or self.identity is None:
            self._expect(identity)
        changed = settings != self.settings
        for name, found in settings.items():
            self._answered(name, found, when[name])
        self.identity, self.settings = identity, settings
        self._counts = None
        if self._section.block is not None and self._section.block.unasked:
            for query in self._section.queries:
                self._wait(self._instrument.tell, query)
        return changed

    def reading(self) -> Reply:
        """Ask all queries and read their replies. Raises InstrumentError.

        A reply that is not in order closes the instrument too. One that is, may still be that to
        the questions before: see :meth:`expect_silence`.
        """
        replies = [self._ask(query) for query in self._section.queries]
        reply = self._in_turn(parse_replies(self._section, replies), replies)
        if reply.in_order and self._section.proof is not None:
            self._prove(self._section.proof)
        if not reply.in_order:
            self.close()
        return reply

    def block(self, block: Block) -> tuple[bytes, float, float]:
        """Empty the buffer, or wait for the next block that comes unasked: what it held, after
        when it was whole and no later than when. The former is -inf if it was there already.

        Raises InstrumentError.
        """
        asked_s = self._now()
        if block.unasked:
            data = self._wait(self._instrument.next_block, block)
            waited_s = self._instrument.reply_after_s
            came_s = asked_s + waited_s
            return data, came_s - block.jitter_s if waited_s else -math.inf, came_s
        (query,) = self._section.queries
        data = self._wait(self._instrument.ask_block, query, block)
        answered_s = asked_s + self._instrument.reply_after_s
        if self._section.proof is not None:
            self._prove(self._section.proof)
        return data, asked_s, answered_s

    def _prove(self, proof: Proof) -> None:
        """Ask what has one answer only: it is not that to another question."""
        answer = self._ask(proof.query)
        if answer.strip() != proof.reply:
            self.close()
            got = escaped(answer)
            raise BadReply(f"answers out of turn: {proof.query!r} was answered by {got!r}")

    def expect_silence(self, wait_s: float) -> None:
        """Wait so long for an answer that would be one too many. Raises InstrumentError."""
        self._wait(self._instrument.expect_silence, wait_s)

    def refresh(self, setting: Setting) -> bool:
        """Ask one setting again; whether it has changed. Raises InstrumentError.

        A change is believed when the instrument then still says who it is.
        """
        found, now = self._setting(setting), self._now()
        changed = found != self.settings.get(setting.name)
        if changed:
            assert self.identity is not None
            self._expect(self.identity)
        self._answered(setting.name, found, now)
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

    def _answered(
        self, name: str, found: dict[str, float | int | str | None], now: float
    ) -> None:
        first, _, count = self.answers.get(name, (now, now, 0))
        if found != self.settings.get(name):
            first, count = now, 0
        self.answers[name] = (first, now, count + 1)

    def _in_turn(self, reply: Reply, replies: list[str]) -> Reply:
        """The replies to several queries must be cut into fields as in the reading before."""
        counts = [len(split_fields(self._section, text)) for text in replies]
        if reply.status not in ("ok", "range") or counts == self._counts:
            return reply
        if self._counts is None:
            self._counts = counts
            return reply
        nothing = (None,) * len(reply.values)
        came, before = ("+".join(map(str, one)) for one in (counts, self._counts))
        detail = f"answers out of turn: {came} fields where {before} came before"
        return Reply("bad_reply", nothing, detail, in_order=False)

    def _expect(self, identity: str) -> None:
        again = self._ask(self._section.identity.query)
        if again != identity:
            self.close()
            raise ConnectError(
                f"its answers come out of turn: asked again who it is, it said {escaped(again)!r}"
            )
