"""A few readings off the instruments of a rig, for a look before a run."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterable, Iterator
from contextlib import ExitStack

from acquire.config.reader import ReaderSection
from acquire.instrument import Instrument
from acquire.readings import Reading
from acquire.reply import parse_replies


def sample(
    readers: Iterable[ReaderSection],
    rounds: int,
    period_s: float,
    now_s: Callable[[], float] = time.monotonic,
    sleep: Callable[[float], None] = time.sleep,
) -> Iterator[Reading]:
    """Readings of each reader in turn, ``rounds`` times, a round every ``period_s`` seconds.

    Raises InstrumentError at the first exchange that fails.
    """
    with ExitStack() as stack:
        instruments = [Instrument(reader) for reader in readers]
        for instrument in instruments:
            stack.callback(instrument.close)
            instrument.open()
        start = now_s()
        for number in range(rounds):
            sleep(max(start + number * period_s - now_s(), 0.0))
            for instrument in instruments:
                yield _reading(instrument, number, now_s)


def _reading(instrument: Instrument, seq: int, now_s: Callable[[], float]) -> Reading:
    began = now_s()
    replies = [instrument.ask(query) for query in instrument.section.queries]
    ended = now_s()
    reply = parse_replies(instrument.section, replies)
    return Reading(
        instrument.section.name,
        seq,
        (began + ended) / 2,
        ended - began,
        reply.status,
        reply.detail,
        reply.values,
    )
