"""A few readings off the instruments of a rig, for a look before a run."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterable, Iterator
from contextlib import ExitStack

from acquire.blocks import Blocks
from acquire.config.reader import ReaderSection
from acquire.dialogue import Dialogue
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

    A reader that hands over blocks gives all samples of each. Raises InstrumentError at the first
    exchange that fails.
    """
    with ExitStack() as stack:
        takers = [_taker(stack, section, now_s) for section in readers]
        start = now_s()
        for number in range(rounds):
            sleep(max(start + number * period_s - now_s(), 0.0))
            for take in takers:
                yield from take(number)


def _taker(
    stack: ExitStack, section: ReaderSection, now_s: Callable[[], float]
) -> Callable[[int], Iterator[Reading]]:
    """Opens an instrument; gives its readings for each round."""
    instrument = Instrument(section)
    stack.callback(instrument.close)
    if section.block is None:
        instrument.open()
        return lambda number: iter([_reading(section, instrument, number, now_s)])
    dialogue = Dialogue(section, instrument, now_s=now_s)
    dialogue.connect()
    blocks = Blocks(section, dialogue)
    return lambda number: _samples(section.name, blocks, instrument)


def _samples(reader: str, blocks: Blocks, instrument: Instrument) -> Iterator[Reading]:
    """What the buffer has; of blocks that come by themselves, all up to one that is waited for."""
    rows = blocks.read()
    while not instrument.reply_after_s:
        rows += blocks.read()
    for one in rows:
        yield Reading(reader, 0, one.time_s, None, one.status, one.detail, one.values)


def _reading(
    section: ReaderSection, instrument: Instrument, seq: int, now_s: Callable[[], float]
) -> Reading:
    began = now_s()
    replies = [instrument.ask(query) for query in section.queries]
    ended = now_s()
    reply = parse_replies(section, replies)
    middle, took_s = (began + ended) / 2, ended - began
    return Reading(
        section.name, seq, middle, took_s, reply.status, reply.detail, reply.values
    )
