"""How far a subscriber has come with one stream: what to deliver, and when to ask.

Decides only; has no socket and no clock of its own. Each row is delivered once, in order of its
number, whatever was lost, sent twice or came late.
"""

from __future__ import annotations

import re
from dataclasses import dataclass

from acquire.bus.wire import NEWEST, Answer, Message, unpack
from acquire.cells import RowCodec
from acquire.errors import JournalError
from acquire.tables import Row, Table

SILENCE_S = 1.0  # after which a stream is asked whether there is anything new
FIRST_SILENCE_S = 0.05  # the same, doubled each time, until rows come unasked: see take_answer
PATIENCE_S = 1.0  # after which a question is held for lost
MOST_AHEAD = 2000  # rows kept while a gap before them is filled; more are asked for again

_NEVER_WRITTEN = re.compile(rb"[\x00-\x09\x0b-\x1f\x7f]|\xc2[\x80-\x9f]|\xe2\x80[\xa8\xa9]")
"""Control characters in the lines of a journal: they are written as text (see cells)."""


@dataclass(frozen=True)
class StreamHealth:
    """What a subscriber knows of a stream.

    ``last_seq``: number of the last row delivered, -1 before the first.
    ``last_heard_monotonic``: ``time.monotonic()`` when the publisher last proved that it lives,
    by a row or an answer; None before. ``filled``: rows got by asking. ``refused``: messages
    dropped because they were malformed or of another run. ``rewound``: answers of a publisher
    that had fewer rows than were delivered (its last second went with a power cut). ``trouble``:
    why the publisher can't record, and so not publish, what it has; empty while it can. ``barred``:
    why the connections are not let in or not trusted, in words; empty if they are.
    """

    last_seq: int
    last_heard_monotonic: float | None
    filled: int
    refused: int
    rewound: int = 0
    trouble: str = ""
    barred: str = ""


class StreamProgress:
    """The state of one stream. ``start`` is the first number wanted, -1 the newest there is.

    Times are in seconds of any one monotonic clock.
    """

    def __init__(self, run_id: str, table: Table, start: int) -> None:
        self._run_id = run_id
        self._stream = table.stream
        self._codec = RowCodec(table)
        self._next: int | None = None if start < 0 else start
        self._ahead: dict[int, Row] = {}
        self._gap = True  # rows are known or supposed to be missing, and not asked for yet
        self._asked: float | None = None  # when the question was sent that is not answered yet
        self._in_vain = False  # whether the question before it was not answered either
        self._silence_s = FIRST_SILENCE_S
        self._heard: float | None = None
        self._filled = self._refused = self._rewound = 0
        self._trouble = ""

    def health(self) -> StreamHealth:
        """What is known now."""
        last = -1 if self._next is None else self._next - 1
        counts = self._filled, self._refused, self._rewound
        return StreamHealth(last, self._heard, *counts, self._trouble)

    def next_question(self) -> float:
        """From when on a question is due; -inf if at once."""
        times = []
        if self._asked is not None:
            times.append(self._asked + PATIENCE_S)
        if not self._gap and self._heard is not None:
            times.append(self._heard + self._silence_s)
        return max(times, default=float("-inf"))

    def ask(self, now: float) -> int:
        """The number to ask from; counts as asked at ``now``."""
        self._in_vain = self._asked is not None
        self._asked = now
        self._gap = False
        return NEWEST if self._next is None else self._next

    @property
    def settled(self) -> bool:
        """Whether the last question was answered and nothing is known to be missing."""
        return self._asked is None and not self._gap

    def inquire(self) -> None:
        """Have a question asked at once, whether or not one is due."""
        self._gap, self._asked = True, None

    def refuse(self) -> None:
        """Count something that was no message at all."""
        self._refused += 1

    def take_message(self, data: bytes, now: float) -> list[Row]:
        """Rows to deliver after a published message has come."""
        message = unpack(Message, data)
        if message is None or not self._ours(message):
            self._refused += 1
            return []
        try:
            row: Row = (message.seq, *self._codec.canonical(message.cells))
        except JournalError:
            self._refused += 1
            return []
        self._heard, self._trouble = now, ""
        self._silence_s = SILENCE_S
        if message.seq == self._next:
            return self._deliver([row])
        if self._next is None or message.seq > self._next:
            self._gap = True
            if len(self._ahead) < MOST_AHEAD:
                self._ahead[message.seq] = row
        return []

    def take_answer(self, data: bytes, now: float) -> list[Row]:
        """Rows to deliver after an answer has come.

        A connection for rows may come about later than the one for questions, and what was sent
        before is lost, so a new subscriber asks again after ever longer pauses.
        """
        answer = unpack(Answer, data)
        if answer is None or not self._ours(answer):
            self._refused += 1
            return []
        try:
            if _NEVER_WRITTEN.search(answer.lines):
                raise JournalError("characters that no journal has")
            rows = self._codec.rows_in(answer.lines, answer.first)
        except JournalError:
            self._refused += 1
            return []
        self._heard, self._asked, self._in_vain = now, None, False
        self._trouble = answer.trouble
        self._silence_s = min(2 * self._silence_s, SILENCE_S)
        if self._next is None:
            self._next = answer.first
        if answer.next_seq < answer.start:
            self._rewound += 1
        delivered = self.take_rows(rows, answer.first)
        if answer.first <= self._next < answer.next_seq:
            self._gap = True
        return delivered

    @property
    def abandoned(self) -> int | None:
        """The number wanted next when nobody answers questions, else None."""
        return self._next if self._in_vain else None

    def take_rows(self, rows: list[Row], first: int) -> list[Row]:
        """Rows to deliver out of the journal's rows from number ``first`` on."""
        if self._next is None or first > self._next:
            return []
        missing = rows[self._next - first :]
        self._filled += len(missing)
        return self._deliver(missing)

    def _ours(self, message: Message | Answer) -> bool:
        return message.run == self._run_id and message.stream == self._stream

    def _deliver(self, rows: list[Row]) -> list[Row]:
        """Count rows that begin at the next number, and those kept that follow on them."""
        assert self._next is not None
        position = self._next + len(rows)
        while position in self._ahead:
            rows.append(self._ahead.pop(position))
            position += 1
        self._next = position
        if self._ahead:
            self._ahead = {seq: row for seq, row in self._ahead.items() if seq >= position}
        return rows
