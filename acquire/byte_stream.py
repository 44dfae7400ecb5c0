"""The bytes of one open session: whole replies out of what comes, and nothing longer than that.

A reply is a line up to its terminator, or a definite-length block of IEEE 488.2
(:mod:`acquire.ieee_block`). On sockets and serial lines it comes in any pieces, and no wait is
longer than the timeout, however slowly they drip; buses that mark the end of a message by
themselves (USB, GPIB, VXI-11) are left to VISA.
"""

from __future__ import annotations

import socket
import time
from collections.abc import Callable
from typing import Any, Literal

from acquire.config.reader import Connection
from acquire.errors import BadReply, ReplyTimeout
from acquire.ieee_block import header_length, payload_length
from acquire.reply import escaped
from acquire.socket_line import acknowledge_at_once, is_readable, waiting_bytes

Kind = Literal["socket", "unwatched", "serial", "message"]
"""``unwatched`` is a socket below another VISA library, which shows nothing of it."""

LONGEST_REPLY = 16_384  # bytes; far above 64 numbers, far below what hurts
_POLL_S = 0.001
_GULP = 64  # bytes read at once from a serial line; many more would take pyvisa-py long
_SHOWN = 200  # bytes of a block that are kept for a person to look at


class ByteStream:
    """What comes from an instrument. Raises BadReply, ReplyTimeout, SessionLost, and whatever
    VISA raises.

    ``came`` has what the latest question brought so far (of a block: its beginning); ``began_s``
    is when the first of it was there, by ``now``.
    """

    def __init__(
        self,
        section: Connection,
        resource: Any,
        kind: Kind,
        line: socket.socket | None,
        now: Callable[[], float],
        is_timeout: Callable[[Exception], bool],
    ) -> None:
        self.came = b""
        self.began_s: float | None = None
        self._section = section
        self._resource = resource
        self._kind = kind
        self._line = line
        self._now = now
        self._is_timeout = is_timeout
        self._end = section.read_termination.encode("latin-1", "replace")
        self._timeout_s = section.timeout_ms / 1000

    def forget(self) -> None:
        """A new question is asked."""
        self.came, self.began_s = b"", None

    def is_waiting(self) -> bool:
        """Whether bytes are there already, as far as that can be seen."""
        if self._line is not None:
            return is_readable(self._line, 0.0)
        return self._kind == "serial" and self._resource.bytes_in_buffer > 0

    def expect_silence(self, wait_s: float) -> None:
        """Raises BadReply if bytes are there or come within that time: nothing was asked."""
        if self._line is not None:
            if wait_s:
                acknowledge_at_once(self._line)
            waiting = len(waiting_bytes(self._line)) if is_readable(self._line, wait_s) else 0
        elif self._kind == "serial":
            waiting = self._serial_waiting(self._now() + wait_s)
        else:
            return
        if waiting:
            self.came = self._resource.read_bytes(min(waiting, _GULP), break_on_termchar=True)
            stray = escaped(self.came)
            raise BadReply(f"{stray!r} came without a question; does something else use the line?")

    def line(self, query: str, longest: int = LONGEST_REPLY) -> bytes:
        """A reply up to its terminator, without it."""
        data = self._message(longest) if self._kind == "message" else self._up_to_end(query, longest)
        self.came = data[:LONGEST_REPLY]
        if not data.endswith(self._end):
            raise BadReply(f"{query!r}: the reply {escaped(data)!r} {self._other_end()}")
        return data[: len(data) - len(self._end)]

    def block(self, query: str, terminated: bool) -> bytes:
        """What a definite-length block holds. ``terminated``: whether the terminator follows."""
        deadline = self._now() + self._timeout_s
        count = header_length(self._take(query, 2, deadline))
        size = payload_length(self._take(query, count, deadline))
        data = self._take(query, size, deadline)
        if terminated:
            end = self._take(query, len(self._end), deadline)
            if end != self._end:
                raise BadReply(
                    f"{query!r}: {escaped(end)!r} follows where the block of {size} bytes ends, not "
                    f"read_termination = {self._section.read_termination!r}: the length is wrong"
                )
        return data

    def silence(self, query: str) -> str:
        """What is wrong with a reply that did not come, or not to its end."""
        within = f"within {self._section.timeout_ms} ms"
        if not self.came:
            return f"{query!r}: no reply {within}"
        return f"{query!r}: only {escaped(self.came)!r} came {within}; it {self._other_end()}"

    def _other_end(self) -> str:
        """How a reply ends that does not end as configured, for whoever mends the configuration."""
        told = f"does not end with read_termination = {self._section.read_termination!r}"
        tail = self.came[len(self.came.rstrip(b"\r\n\0;")) :]
        return f"{told} but with {escaped(tail)!r}" if tail else told

    def _up_to_end(self, query: str, longest: int) -> bytes:
        deadline = self._now() + self._timeout_s
        pieces, size = list[bytes](), 0
        while True:
            piece = self._some(deadline)
            pieces.append(piece)
            size += len(piece)
            self.came = (self.came + piece)[: LONGEST_REPLY + _GULP]
            if piece.endswith(self._end[-1:]):
                return b"".join(pieces)
            if size > longest:
                raise BadReply(f"{query!r}: the reply does not end within {longest} bytes")
            if self._now() >= deadline:
                raise ReplyTimeout(self.silence(query))

    def _take(self, query: str, count: int, deadline: float) -> bytes:
        """Exactly so many bytes."""
        pieces, left = list[bytes](), count
        while left:
            piece = self._up_to(left, deadline)
            if piece:
                self._note_beginning()
                pieces.append(piece)
                left -= len(piece)
                self.came = (self.came + piece)[:_SHOWN]
            elif self._now() >= deadline:
                got = f"{count - left} of {count} bytes"
                came = f", after {escaped(self.came)!r}" if self.came else ""
                raise ReplyTimeout(
                    f"{query!r}: {got} of a block came within {self._section.timeout_ms} ms{came}"
                )
        return b"".join(pieces)

    def _up_to(self, count: int, deadline: float) -> bytes:
        """Some of so many bytes; none if none come in time."""
        if self._line is not None:
            if not is_readable(self._line, max(deadline - self._now(), 0.0)):
                return b""
            count = min(count, len(waiting_bytes(self._line)))
        elif self._kind == "serial":
            count = min(count, self._serial_waiting(deadline), _GULP)
        elif self._kind == "unwatched":
            self._resource.timeout = max(1, round(1000 * (deadline - self._now())))
        return bytes(self._resource.read_bytes(count)) if count else b""

    def _some(self, deadline: float) -> bytes:
        """What is there, up to a terminator; nothing if nothing comes in time or in a slice."""
        if self._kind == "serial":
            size = min(self._serial_waiting(deadline), _GULP)
            piece = self._resource.read_bytes(size, break_on_termchar=True) if size else b""
        elif self._line is None:
            piece = self._byte()
        elif is_readable(self._line, max(deadline - self._now(), 0.0)):
            line, end, _ = waiting_bytes(self._line).partition(self._end[-1:])
            # What is behind the end must stay in the socket, where the next question will see it;
            # asked for more, the library keeps the rest to itself and hands it out as an answer.
            piece = self._resource.read_bytes(len(line + end))
        else:
            piece = b""
        if piece:
            self._note_beginning()
        return bytes(piece)

    def _serial_waiting(self, deadline: float) -> int:
        """How many bytes wait, as soon as there are any or it is too late. Waits by itself:
        pyvisa-py counts by the wall clock, which may be set back."""
        waiting = int(self._resource.bytes_in_buffer)
        while not waiting and self._now() < deadline:
            time.sleep(_POLL_S)
            waiting = int(self._resource.bytes_in_buffer)
        return waiting

    def _byte(self) -> bytes:
        """One byte, for asking for more would lose what came before a timeout."""
        try:
            return bytes(self._resource.read_bytes(1))
        except Exception as error:
            if self._is_timeout(error):
                return b""
            raise

    def _message(self, longest: int) -> bytes:
        """A reply over a bus that marks its end by itself."""
        data = bytes(self._resource.read_bytes(longest + 1, break_on_termchar=True))
        self._note_beginning()
        if len(data) > longest:
            raise BadReply(f"the reply does not end within {longest} bytes")
        return data

    def _note_beginning(self) -> None:
        if self.began_s is None:
            self.began_s = self._now()


