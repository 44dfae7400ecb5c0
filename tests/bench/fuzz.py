"""Malformed messages against the bus, by the million: nothing stops, no number changes.

    python tests/bench/fuzz.py [--messages 1000000] [--seed 1]

Messages are made from valid ones: bytes flipped, cut, doubled and put in, parts exchanged for other
types, nesting of thousands of levels, lengths that promise gigabytes, frames too few and too many,
and plain random bytes. Most are given to what decides (the decoders, a subscriber's progress), the
others go over real sockets to a publisher's answers, a subscriber and an inbox, between which a
well-behaved conversation goes on. At the end every row must have come, each once and as it was
recorded, and every request its own reply.
"""

from __future__ import annotations

import argparse
import json
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path
from random import Random
from typing import Any

import msgspec
import zmq

from acquire.bus import Endpoint, Inbox, Publisher, Subscriber
from acquire.bus.gate import Admission
from acquire.bus.keys import KeyFolder
from acquire.bus.progress import StreamProgress
from acquire.bus.wire import Answer, Introduction, Message, Question, pack, topic, unpack
from acquire.bus.wire import unpack_plain as unpack_request
from acquire.cells import RowCodec
from acquire.journal import Journal
from acquire.tables import SEQ, TIME, Column, Row, Table

TABLE = Table("a", "a.csv", "", (SEQ, TIME, Column("detail", "string"), Column("x", "number")))
RUN = "run"
FREE = Endpoint("tcp://127.0.0.1:0", "tcp://127.0.0.1:0")
SHARE_OVER_SOCKETS = 0.1
BURST = 50  # malformed messages between two good ones
DEADLINE_S = 60.0


class Fuzz:
    """Malformed messages, the same ones for the same seed."""

    def __init__(self, seed: int) -> None:
        self._random = Random(seed)
        line = RowCodec(TABLE).line((0, 0.5, "text", 1.5))
        introduction = Introduction(RUN, "a", 1, 0.5, "2031-05-14", (("x", "number", "V", "x"),))
        self._valid = [
            pack(Message(RUN, "a", 3, (0.5, "text", 1.5))),
            pack(Question(RUN, "a", 0)),
            pack(Question("", "", 7)),
            pack(Answer(RUN, "a", 0, 0, 1, line)),
            pack(Answer(RUN, "a", 0, 2, 9, b"")),
            pack(introduction),
            msgspec.msgpack.encode({"kind": "note", "code": "x", "text": "y", "id": "1"}),
        ]
        self._ways: list[Callable[[], bytes]] = [
            self._bytes, self._flipped, self._cut, self._joined, self._nested, self._lengths,
            self._typed, self._typed, self._lines,
        ]  # fmt: skip

    def message(self) -> bytes:
        """One message. Some may be valid by accident; what they say is never true."""
        return self._random.choice(self._ways)()

    def frames(self) -> list[bytes]:
        """A message of one or several frames, right and wrong numbers of them."""
        first = self._random.choice([b"a|", b"a", b"", b"b|", b"a|x"])
        return self._random.choice([
            [self.message()], [first, self.message()], [b"a|", self.message()], [first],
            [first, b"", self.message()], [b""], [self.message() for _ in range(9)],
        ])  # fmt: skip

    def _one(self) -> bytes:
        return self._random.choice(self._valid)

    def _bytes(self) -> bytes:
        return self._random.randbytes(self._random.choice([0, 1, 2, 5, 40, 300]))

    def _flipped(self) -> bytes:
        data = bytearray(self._one())
        for _ in range(self._random.randint(1, 4)):
            data[self._random.randrange(len(data))] = self._random.randrange(256)
        return bytes(data)

    def _cut(self) -> bytes:
        data = self._one()
        begin, end = sorted(self._random.randrange(len(data) + 1) for _ in range(2))
        return data[:begin] + data[end:]

    def _joined(self) -> bytes:
        data = self._one()
        at = self._random.randrange(len(data) + 1)
        return data[:at] + self._random.choice([self._one(), self._bytes()]) + data[at:]

    def _nested(self) -> bytes:
        opening = self._random.choice([b"\x91", b"\x81\xa1a", b"\x94", b"\xdc\x00\x01"])
        return opening * self._random.choice([10, 1000, 8000])

    def _lengths(self) -> bytes:
        kind = self._random.choice([b"\xdb", b"\xc6", b"\xdd", b"\xdf", b"\xc9"])
        return b"\x94" * self._random.randint(0, 1) + kind + self._random.choice(
            [b"\xff\xff\xff\xff", b"\x7f\xff\xff\xff", b"\x00\x10\x00\x00"]
        ) + self._bytes()  # fmt: skip

    def _typed(self) -> bytes:
        """The shape of a message, its parts of any type."""
        parts = [self._part() for _ in range(self._random.randint(0, 8))]
        if self._random.random() < 0.5:
            parts = [self._random.choice([RUN, "", 1]), self._random.choice(["a", "b"]), *parts]
        whole: Any = parts
        if self._random.random() < 0.3:
            whole = {str(number): part for number, part in enumerate(parts)}
        return msgspec.msgpack.encode(whole)

    def _part(self) -> Any:
        return self._random.choice([
            None, True, -1, 0, 3, 2**31, 2**63 - 1, 2**64 - 1, -(2**63), 0.5, float("nan"),
            float("inf"), -float("inf"), 1e308, "", RUN, "a", "\0", "x" * 1000, b"", b"\xff",
            b"0,0.5,text,1.5\n", [], [None], [0.5, "text", "x"], [float("nan"), None, 1.0], {},
            {"a": [1]},
        ])  # fmt: skip

    def _lines(self) -> bytes:
        """An answer that is one in form, with lines of a journal that are none."""
        first = self._random.choice([0, 1, 5, 10**6])
        lines = self._random.choice([
            b"x", b"\n", b"0,\n", b"0,nan,,\n", b"0,1,text,1,5\n", b"\xff\n", b'0,1,"\n', b"0" * 9999,
            b"7,1,text,1\n" * 50, b"0,1e999,,\n", b"-1,1,,\n", b"0,1,\0,1\n", b"0,1,,1",
        ])  # fmt: skip
        run = self._random.choice([RUN, "other"])
        return pack(Answer(run, "a", 0, first, self._random.choice([0, 1, 2**62]), lines))


@dataclass
class Report:
    """What was sent, what was dropped, how long it took."""

    messages: int = 0
    refused: int = 0
    rows: int = 0
    replies: int = 0
    seconds: float = 0.0


def fuzz(messages: int, seed: int, folder: Path) -> Report:
    """Send so many messages; AssertionError if a number changed, or whatever broke."""
    report, began = Report(), time.monotonic()
    over_sockets = int(messages * SHARE_OVER_SOCKETS)
    decode(Fuzz(seed), messages - over_sockets, report)
    converse(Fuzz(seed + 1), over_sockets, folder, report)
    report.seconds = time.monotonic() - began
    return report


def decode(made: Fuzz, messages: int, report: Report) -> None:
    """Give messages to what decides. Rows are taken only if they are what was really said."""
    folder = KeyFolder("/nowhere")
    admission = Admission(folder)
    progress = StreamProgress(RUN, TABLE, 0)
    for number in range(messages):
        data = made.message()
        report.messages += 1
        for kind in (Message, Question, Answer, Introduction):
            unpack(kind, data)
        unpack_request(data)
        if number % 16 == 0:
            assert admission.answer([data] * (number % 9))[0][2] == b"400"
        got = [*progress.take_message(data, 0.0), *progress.take_answer(data, 0.0)]
        check_rows(got)
        if got or number % 1000 == 0:  # they can be true by accident: begin anew
            report.refused += progress.health().refused
            progress = StreamProgress(RUN, TABLE, 0)
    report.refused += progress.health().refused


def check_rows(rows: list[Row]) -> None:
    """Rows in form: what a liar may make of them without keys, but never anything else."""
    codec = RowCodec(TABLE)
    for row in rows:
        assert row[1:] == codec.canonical(row[1:])
        assert isinstance(row[0], int)


def converse(made: Fuzz, messages: int, folder: Path, report: Report) -> None:
    """Over sockets: attackers talk to each of the three, and the good ones understand each other."""
    with ExitStack() as stack:
        journal = stack.enter_context(Journal(folder / "a.csv", TABLE))
        publisher = stack.enter_context(Publisher(RUN, TABLE, journal, FREE))
        inbox = stack.enter_context(Inbox("tcp://127.0.0.1:0"))
        listener = stack.enter_context(Subscriber(RUN, {"a": publisher.endpoint}, {"a": TABLE}))
        context = stack.enter_context(zmq.Context())

        def attacker(kind: int) -> zmq.Socket[bytes]:
            socket = stack.enter_context(context.socket(kind))
            socket.linger = 0
            return socket

        asker, requester, honest = (attacker(zmq.DEALER) for _ in range(3))
        asker.connect(publisher.endpoint.answer)
        requester.connect(inbox.address)
        honest.connect(inbox.address)
        false = attacker(zmq.PUB)  # a publisher of another run, whom somebody listens to as well
        answering = attacker(zmq.ROUTER)
        bad = [f"tcp://127.0.0.1:{one.bind_to_random_port('tcp://127.0.0.1')}"
               for one in (false, answering)]  # fmt: skip
        misled = stack.enter_context(Subscriber("true run", {"a": Endpoint(*bad)}, {"a": TABLE}))
        got: list[Row] = []
        sent = 0
        for burst in bursts(messages):
            for _ in range(burst):
                asker.send_multipart(made.frames(), zmq.NOBLOCK)
                requester.send_multipart(made.frames(), zmq.NOBLOCK)
                false.send_multipart([topic("a"), made.message()], zmq.NOBLOCK)
                if answering.poll(0):
                    peer = answering.recv_multipart()[0]
                    answering.send_multipart([peer, *made.frames()], zmq.NOBLOCK)
                report.messages += 3
            publisher.publish(sent / 7, f"row {sent}", 1 / (sent + 1))
            sent += 1
            while asker.poll(0):
                asker.recv_multipart()  # answers to questions that were valid by accident
            while requester.poll(0):
                requester.recv_multipart()
            honest.send(msgspec.msgpack.encode({"n": sent}))
            assert reply_to(inbox, honest) == {"n": sent}
            while serve(inbox, 0.0):
                pass
            report.replies += 1
            got += [row for _, row in listener.receive(0.0)]
            assert misled.receive(0.0) == []
        deadline = time.monotonic() + DEADLINE_S
        while len(got) < sent:
            assert time.monotonic() < deadline, f"{len(got)} of {sent} rows"
            got += [row for _, row in listener.receive(0.1)]
        assert got == [(n, n / 7, f"row {n}", 1 / (n + 1)) for n in range(sent)]
        assert journal.next_seq == sent
        report.rows = sent
        health = (listener.health()["a"], misled.health()["a"])
        report.refused += publisher.refused + inbox.refused + sum(one.refused for one in health)


def bursts(messages: int) -> Iterator[int]:
    """So many messages in all, three sockets at a time."""
    for _ in range(0, messages, 3 * BURST):
        yield BURST


def serve(inbox: Inbox, timeout_s: float) -> bool:
    """Have the inbox reply to one request by what it says; False if there was none."""
    refused = inbox.refused
    request = inbox.receive(timeout_s)
    if request is not None:
        message, reply = request
        try:
            reply(message)
        except (TypeError, ValueError):  # what can be decoded and not be encoded again
            reply({})
    return request is not None or inbox.refused > refused


def reply_to(inbox: Inbox, honest: zmq.Socket[bytes]) -> Any:
    """What the honest one is replied, among all that is made up."""
    deadline = time.monotonic() + DEADLINE_S
    while not honest.poll(0):
        assert time.monotonic() < deadline, "no reply"
        serve(inbox, 0.1)
    return msgspec.msgpack.decode(honest.recv())


def main() -> int:
    """The command."""
    parser = argparse.ArgumentParser(description=__doc__.partition("\n")[0])
    parser.add_argument("--messages", type=int, default=1_000_000)
    parser.add_argument("--seed", type=int, default=1)
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as folder:
        report = fuzz(options.messages, options.seed, Path(folder))
    print(json.dumps(report.__dict__))
    return 0


if __name__ == "__main__":
    sys.exit(main())
