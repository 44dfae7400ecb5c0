"""Readings out of an instrument's buffer: rows with their times, and what is missing between them."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass
from itertools import pairwise

from acquire.block_data import Sample, samples_in
from acquire.config.block import Block
from acquire.config.reader import ReaderSection
from acquire.dialogue import Dialogue
from acquire.errors import BadReply
from acquire.reply import parse_fields, read_number
from acquire.sample_clock import OutOfStep, SampleClock, Times


@dataclass(frozen=True)
class Taken:
    """A row of a reading, or of samples that can't be used; as in :mod:`acquire.readings`.
    ``took``: from question to answer, where it was asked for alone."""

    time_s: float
    status: str
    detail: str
    values: tuple[float | None, ...] = ()
    took: tuple[float, float] | None = None


class Blocks:
    """Empties the buffer of one reader's instrument, block by block.

    The first block after :meth:`restart` is thrown away, since it is not known since when its
    samples have waited. So is one whose samples do not fit the time that has passed, which a row
    says; with a counter in the samples it tells instead where some are missing.
    """

    def __init__(self, section: ReaderSection, dialogue: Dialogue) -> None:
        assert section.block is not None
        self._section = section
        self._block: Block = section.block
        self._dialogue = dialogue
        self._clock: SampleClock | None = None
        self._last: bytes = b""
        self._since_s = -math.inf
        self._fresh = False  # whether no block has come since the clock began
        self._count: int | None = None  # the number of the last sample, where they have numbers

    def restart(self) -> None:
        """The connection is a new one: what is in the buffer is of no known time."""
        self._clock = None

    def read(self) -> list[Taken]:
        """The rows that the buffer gives now. Raises InstrumentError, and is closed then."""
        data, asked_s, answered_s = self._dialogue.block(self._block)
        try:
            samples = samples_in(self._section, self._block, data)
            return self._rows(data, samples, asked_s, answered_s)
        except BadReply:
            self._dialogue.close()
            raise

    def _rows(
        self, data: bytes, samples: list[Sample], asked_s: float, answered_s: float
    ) -> list[Taken]:
        # Nothing that comes later is from before this:
        self._since_s = max(asked_s - self._block.latency_s, self._since_s)
        since_s = self._since_s if math.isfinite(self._since_s) else answered_s
        again, self._last = data == self._last and _varies(samples), data
        period_s = self._period_s()
        if period_s is None:
            self._clock = None
            return [_unused(since_s, samples, "the sample period is not known")]
        begins = self._clock is None
        if self._clock is None or self._clock.period_s != period_s:
            self._begin(period_s, samples, asked_s, answered_s)
            why = f"the sample period is {period_s:g} s now"
            return [] if begins else [_unused(since_s, samples, why)]
        if again:
            return [_unused(since_s, samples, "they came in the block before, to the last bit")]
        places, why = self._places(samples)
        for skipped in self._ways(places) if not why else ():
            try:
                left = [place - skipped for place in places]
                times = self._clock.times(left[-1] + 1 if left else 0, asked_s, answered_s)
                self._fresh = False
                if times.count:
                    self._since_s = max(self._since_s, times.at(times.count - 1))
                return list(self._placed(samples, left, times))
            except OutOfStep as error:
                why = f"{error}: some were lost, or came twice, or the sample period is another"
        self._begin(period_s, samples, asked_s, answered_s)
        return [_unused(since_s, samples, why)]

    def _begin(
        self, period_s: float, samples: list[Sample], asked_s: float, answered_s: float
    ) -> None:
        if asked_s == -math.inf:  # it waited for us: when it was sent is not known
            self._clock = None
            return
        self._clock = SampleClock(period_s, self._block.latency_s)
        self._clock.start(asked_s, answered_s)
        self._fresh = True
        numbers = self._numbers(samples)
        self._count = numbers[-1] if numbers else None

    def _ways(self, places: list[int]) -> list[int]:
        """How many of the samples that are missing before a block may have been lost before the
        clock began: none, or, in the first block after that, all that their numbers show."""
        return [0, places[0]] if self._fresh and places and places[0] else [0]

    def _period_s(self) -> float | None:
        block = self._block
        if block.sample_period_s is not None:
            return block.sample_period_s
        name = block.sample_period_setting or block.sample_rate_setting or ""
        value = self._dialogue.settings.get(name, {}).get("value")
        if not isinstance(value, int | float) or not 1e-9 < value < 1e9:
            return None
        return float(value) if block.sample_period_setting is not None else 1.0 / value

    def _places(self, samples: list[Sample]) -> tuple[list[int], str]:
        """How many samples there were before each, since the last of the block before; or why
        they can't be placed."""
        if self._block.counter_position is None or not samples:
            return list(range(len(samples))), ""
        numbers = self._numbers(samples)
        if any(two <= one for one, two in pairwise(numbers)):
            return [], "their numbers do not go up"
        if self._count is None:
            return [], "the number of the sample before them is not known"
        if numbers[0] <= self._count:
            return [], f"they begin with number {numbers[0]}, after number {self._count} had come"
        places = [number - self._count - 1 for number in numbers]
        self._count = numbers[-1]
        return places, ""

    def _numbers(self, samples: list[Sample]) -> list[int]:
        position = self._block.counter_position
        if position is None:
            return []
        found = [read_number(str(sample[position - 1])) for sample in samples]
        if any(number is None or number != int(number) for number in found):
            raise BadReply(f"the field at position {position} is no sample number in every sample")
        return [int(number) for number in found if number is not None]

    def _placed(
        self, samples: list[Sample], places: list[int], times: Times
    ) -> Iterator[Taken]:
        after = -1
        for sample, place in zip(samples, places):
            if place > after + 1:
                missing = place - after - 1
                why = f"{missing} samples before the next were lost: the buffer ran over"
                yield Taken(times.at(place - 1), "no_answer", why)
            after = place
            reply = parse_fields(self._section, sample)
            if not reply.in_order:
                raise BadReply(f"in a block of {len(samples)} samples: {reply.detail}")
            yield Taken(times.at(place), reply.status, reply.detail, reply.values)


def _unused(time_s: float, samples: list[Sample], why: str) -> Taken:
    if not samples:
        return Taken(time_s, "no_answer", f"no samples came: {why}")
    return Taken(time_s, "bad_reply", f"{len(samples)} samples can't be used: {why}")


def _varies(samples: list[Sample]) -> bool:
    """Whether a block could not come twice by chance."""
    return len({tuple(sample) for sample in samples}) > 2


