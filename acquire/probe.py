"""Talk once to an instrument, for a person who wants to see it: ``rampside check``.

Only the questions of the configuration are asked, so nothing is changed on the instrument.
"""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TypeVar

from acquire.block_data import samples_in
from acquire.config.block import Block
from acquire.config.reader import ReaderSection, Setting
from acquire.errors import BadReply, ConnectError, InstrumentError
from acquire.instrument import Instrument
from acquire.reply import (
    Reply,
    escaped,
    parse_fields,
    parse_replies,
    read_setting,
    split_fields,
)

T = TypeVar("T")


@dataclass(frozen=True)
class Exchange:
    """One question and what came of it.

    ``what`` is ``identity``, ``reading``, ``proof`` or ``setting NAME``. ``raw`` has the bytes that came,
    terminator included, also when they were no good (show them by
    :func:`acquire.reply.escaped`). ``meaning`` is what they were read as, ``error`` what was
    wrong; both are texts for a person.
    """

    what: str
    asked: str
    raw: bytes
    took_s: float
    meaning: str | None = None
    error: str | None = None


@dataclass(frozen=True)
class Probe:
    """What one instrument said. ``reading`` is None if not all queries were answered;
    ``settings`` has the values of those that were."""

    reader: str
    resource: str
    exchanges: tuple[Exchange, ...]
    identity: str | None
    reading: Reply | None
    settings: dict[str, float | int | str | None]

    @property
    def good(self) -> bool:
        """Whether everything was answered as configured. An overload is an answer, too."""
        return self.identity is not None and all(item.error is None for item in self.exchanges)


def probe(section: ReaderSection, now_s: Callable[[], float] = time.monotonic) -> Probe:
    """Open an instrument, ask identity, queries and settings once each, close it.

    After an exchange that failed it is opened anew for the next, so that one wrong query does not
    hide the others; it ends early only when the instrument can't be opened. Never raises for
    what an instrument does; takes at most the timeouts of all questions and openings together.
    """
    instrument = Instrument(section, now_s)
    try:
        return _Probing(section, instrument, now_s).run()
    finally:
        instrument.close()


class _Probing:
    def __init__(
        self, section: ReaderSection, instrument: Instrument, now_s: Callable[[], float]
    ) -> None:
        self._section = section
        self._instrument = instrument
        self._now = now_s
        self._done: list[Exchange] = []
        self._identity: str | None = None
        self._settings: dict[str, float | int | str | None] = {}

    def run(self) -> Probe:
        reading = None
        try:
            self._open()
            reading = self._read()
            for setting in self._section.settings:
                self._ask_setting(setting)
        except ConnectError:
            pass  # in the list already
        return Probe(
            self._section.name,
            self._section.resource,
            tuple(self._done),
            self._identity,
            reading,
            self._settings,
        )

    def _open(self) -> None:
        asked, began = self._section.identity.query, self._now()
        try:
            identity = self._instrument.open()
        except ConnectError as error:
            self._add("identity", asked, began, error=str(error))
            raise
        if self._identity is None:
            self._identity = identity
            self._add("identity", asked, began, identity)

    def _ask(self, what: str, query: str) -> str | None:
        return self._exchange(what, query, lambda: self._instrument.ask(query))

    def _exchange(self, what: str, query: str, ask: Callable[[], T]) -> T | None:
        if not self._instrument.is_open:
            self._open()
        began = self._now()
        try:
            reply = ask()
        except InstrumentError as error:
            self._add(what, query, began, error=str(error))
            return None
        self._add(what, query, began)
        return reply

    def _read(self) -> Reply | None:
        block = self._section.block
        reading = self._read_once() if block is None else self._read_block(block)
        proof = self._section.proof
        if proof is not None:
            answer = self._ask("proof", proof.query)
            if answer is not None and answer.strip() != proof.reply:
                self._set(-1, error=f"{escaped(answer)!r} is not {proof.reply!r}")
            elif answer is not None:
                self._set(-1, meaning="as it must be")
        return reading

    def _read_block(self, block: Block) -> Reply | None:
        """Empty the buffer, or wait for the next block that comes; its last sample."""
        query = "".join(self._section.queries)
        data = self._exchange("reading", query, lambda: self._block_of(query, block))
        if data is None:
            return None
        try:
            samples = samples_in(self._section, block, data)
        except BadReply as error:
            self._set(-1, error=str(error))
            return None
        if not samples:
            self._set(-1, meaning="no samples")
            return None
        reading = parse_fields(self._section, samples[-1])
        values = self._values(reading, 0, self._section.fields)
        self._set(-1, meaning=f"{len(samples)} samples; the last: {values}")
        self._judge(reading)
        return reading

    def _block_of(self, query: str, block: Block) -> bytes:
        if not block.unasked:
            return self._instrument.ask_block(query, block)
        if query:
            self._instrument.tell(query)
        data = self._instrument.next_block(block)
        self._instrument.close()  # which ends the stream, so that something can be asked again
        return data

    def _read_once(self) -> Reply | None:
        first = len(self._done)
        replies = [self._ask("reading", query) for query in self._section.queries]
        good = [reply for reply in replies if reply is not None]
        if len(good) < len(replies):
            return None
        reading = parse_replies(self._section, good)
        begin = 0
        for index, reply in enumerate(good, first):
            end = begin + len(split_fields(self._section, reply))
            self._set(index, meaning=self._values(reading, begin, end))
            begin = end
        self._judge(reading)
        return reading

    def _values(self, reading: Reply, begin: int, end: int) -> str:
        """The values that stand in the fields from ``begin`` up to ``end``, counted from 0."""
        parts = []
        for value, number in zip(self._section.values, reading.values):
            if begin < value.position <= end and number is not None:
                parts.append(f"{value.name} = {number * value.scale:.9g} {value.unit}")
        return ", ".join(parts) or f"{end - begin} fields"

    def _ask_setting(self, setting: Setting) -> None:
        raw = self._ask(f"setting {setting.name}", setting.query)
        if raw is None:
            return
        value = self._settings[setting.name] = read_setting(setting, raw)
        if value is None:
            known = ", ".join(setting.codes or ()) or "none"
            self._set(-1, error=f"{raw.strip()!r} is not among the configured codes ({known})")
        else:
            self._set(-1, meaning=f"{setting.name} = {value} {setting.unit}".strip())

    def _judge(self, reading: Reply) -> None:
        """Say at the last query what is to be said of the whole reading."""
        told = f"{reading.status}: {reading.detail}"
        if reading.status == "bad_reply":
            self._set(-1, error=told)
        elif reading.status != "ok":
            self._set(-1, meaning=f"{self._done[-1].meaning}; {told}")

    def _add(
        self,
        what: str,
        asked: str,
        began: float,
        meaning: str | None = None,
        error: str | None = None,
    ) -> None:
        took_s = self._now() - began
        raw = self._instrument.last_reply
        self._done.append(Exchange(what, asked, raw, took_s, meaning, error))

    def _set(self, index: int, meaning: str | None = None, error: str | None = None) -> None:
        self._done[index] = replace(self._done[index], meaning=meaning, error=error)
