"""What goes over the wire: four kinds of message, decoded by declared type.

A publisher sends ``Message`` after the topic ``<stream>|`` (the bar keeps ``a`` from also
subscribing to ``ab``). A subscriber asks a ``Question`` and gets an ``Answer``, whose ``lines``
are the piece of the journal as it is on disk. All name the run, so that somebody who still
listens to an earlier run at the same address is not misled. Who does not know the run asks
without one, and gets an ``Introduction``.
"""

from __future__ import annotations

from typing import Annotated, Any, TypeVar

import msgspec

from acquire.tables import Cell

Number = Annotated[int, msgspec.Meta(ge=0, le=2**63 - 1)]
Start = Annotated[int, msgspec.Meta(ge=-1, le=2**63 - 1)]
NEWEST = -1
"""As the start of a question: from the newest row on."""


class Message(msgspec.Struct, array_like=True, frozen=True, forbid_unknown_fields=True):
    """One row: ``cells`` are those after ``seq``, as the journal has them."""

    run: str
    stream: str
    seq: Number
    cells: tuple[Cell, ...]


class Question(msgspec.Struct, array_like=True, frozen=True, forbid_unknown_fields=True):
    """Asks for the rows of a stream from number ``start`` on, or the newest (-1).

    Where no run is named ``start`` is any number, by which the answer is known again.
    """

    run: str
    stream: str
    start: Start


class Answer(msgspec.Struct, array_like=True, frozen=True, forbid_unknown_fields=True):
    """Rows from number ``first`` on, perhaps none; ``next_seq`` is how many there are in all.

    ``start`` is that of the question. ``trouble``: why the publisher can't record, and so not
    publish, what it has; empty while it can.
    """

    run: str
    stream: str
    start: Start
    first: Number
    next_seq: Number
    lines: bytes
    trouble: str = ""


class Introduction(msgspec.Struct, array_like=True, frozen=True, forbid_unknown_fields=True):
    """Who publishes: the answer to a question that names no run.

    ``start`` is that of the question, which so knows its answer. ``time_s``: the time of the run
    when it was answered, by the clock of its rows, None if the publisher was not given one.
    ``started_utc``: the start of the run, from which the times in its rows count; empty if the
    publisher was not told. ``columns``: name, kind, unit and description of each.
    """

    run: str
    stream: str
    start: Start
    time_s: float | None
    started_utc: str
    columns: tuple[tuple[str, str, str, str], ...]


ANY_RUN = ""
"""As the run of a question: asks who is there."""

Kind = TypeVar("Kind", Message, Question, Answer, Introduction)
_encode = msgspec.msgpack.encode
_decoders: dict[Any, msgspec.msgpack.Decoder[Any]] = {
    kind: msgspec.msgpack.Decoder(kind) for kind in (Message, Question, Answer, Introduction)
}
_MALFORMED = (msgspec.MsgspecError, ValueError, OverflowError, RecursionError)
_plain = msgspec.msgpack.Decoder(dict[str, Any])


def topic(stream: str) -> bytes:
    """The first frame of a stream's messages, and what is subscribed to."""
    return stream.encode() + b"|"


def pack(message: Message | Question | Answer | Introduction) -> bytes:
    """The bytes of a message."""
    return _encode(message)


def unpack(kind: type[Kind], data: bytes) -> Kind | None:
    """The message in some bytes, or None if they are no such message."""
    try:
        message: Kind = _decoders[kind].decode(data)
    except _MALFORMED:
        return None
    return message


def pack_plain(message: dict[str, Any]) -> bytes:
    """The bytes of a small message of plain values."""
    return _encode(message)


def unpack_plain(data: bytes) -> dict[str, Any] | None:
    """The plain message in some bytes, or None if they are none."""
    try:
        return _plain.decode(data)
    except _MALFORMED:
        return None
