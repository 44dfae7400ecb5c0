"""One instrument behind VISA: open it, ask it, close it. The only file that imports pyvisa.

Three rules stand here, each bought with wrong numbers or a hanging program elsewhere:

- An exchange that failed poisons the session: it is closed at once and never used again, because
  a late answer, or the second half of one, would be taken for the answer to the next question.
- "Opened" means that the instrument has said who it is; a session by itself proves nothing.
- Nothing waits longer than ``timeout_ms`` (opening: :data:`OPEN_TIMEOUT_MS`), however slowly
  the bytes drip.

Whatever goes wrong below comes out as one of the errors of :mod:`acquire.errors`. Not for several
threads. Tried on TCP sockets and serial lines; USB and GPIB on a stand-in.
"""

from __future__ import annotations

import gc
import socket
import time
import warnings
from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from typing import Any

import pyvisa
from pyvisa.constants import BufferOperation, Parity, StatusCode, StopBits
from pyvisa.resources import MessageBasedResource, SerialInstrument, TCPIPSocket

from acquire.byte_stream import ByteStream, Kind
from acquire.config.block import Block
from acquire.config.reader import Connection, SerialLine
from acquire.errors import (
    BadReply,
    ConnectError,
    InstrumentError,
    OtherInstrument,
    ReplyTimeout,
    SessionLost,
)
from acquire.identity import identity_problem
from acquire.ieee_block import LONGEST_BLOCK
from acquire.reply import escaped
from acquire.socket_line import (
    acknowledge_at_once,
    connection_problem,
    is_writable,
    socket_below,
)

OPEN_TIMEOUT_MS = 2000  # a second try at reaching the host comes after 1 s on TCP
LONGEST_QUESTION = 4096  # bytes; pyvisa-py would wait for ever between two pieces of a longer one
_SLICE_MS = 100  # how finely a wait on a line that can't be watched is cut

_managers: Counter[str] = Counter()  # pyvisa has one manager a library: the last user closes it


class Instrument:
    """What a section describes. After any error it is closed; open it again to go on."""

    def __init__(self, section: Connection, now: Callable[[], float] = time.monotonic) -> None:
        self.section = section
        self.reply_after_s = 0.0
        self._asked_s = 0.0
        self._now = now
        self._stream = ByteStream(section, None, "message", None, self._now, _is_timeout)
        self._resource: Any = None
        self._socket: socket.socket | None = None
        self._timeout_s = section.timeout_ms / 1000

    @property
    def last_reply(self) -> bytes:
        """The bytes that the latest question brought, terminator included, also when they were no
        complete reply; of a block, its beginning."""
        return self._stream.came

    @property
    def is_open(self) -> bool:
        """Whether the next question can be asked."""
        return self._resource is not None

    def open(self, known_identity: str | None = None) -> str:
        """Open the session, ask who is there and return the answer.

        Raises ConnectError if nobody answers, if the answer does not match the configured
        pattern, or if it is not ``known_identity``, where one is given.
        """
        self.close()
        self._stream.forget()
        self._connect()
        try:
            identity = self.ask(self.section.identity.query)
        except InstrumentError as error:
            raise ConnectError(f"{self.section.resource}: {error}") from error
        problem = identity_problem(self.section.identity, identity, known_identity)
        if problem is not None:
            self.close()
            other = identity_problem(self.section.identity, identity) is None
            raise (OtherInstrument if other else ConnectError)(
                f"{self.section.resource}: {problem}"
            )
        return identity

    def ask(self, query: str) -> str:
        """Send one question and return its answer without the terminator.

        Raises ReplyTimeout, BadReply or SessionLost, and is closed then.
        """
        with self._exchange(query):
            self._write(query)
            return self._stream.line(query).decode(self.section.encoding)

    def ask_block(self, query: str, block: Block) -> bytes:
        """Send one question and return what the block holds that answers it: bytes as they are,
        or the text of a line. ``reply_after_s`` is then how long after the question it began.

        Raises as :meth:`ask`.
        """
        with self._exchange(query):
            self._write(query)
            data = self._block(query, block)
            self.reply_after_s = max((self._stream.began_s or 0.0) - self._asked_s, 0.0)
            return data

    def next_block(self, block: Block) -> bytes:
        """What the next block holds that comes unasked. ``reply_after_s`` is then for how long it
        was waited for; 0 if it was there already. Raises as :meth:`ask`."""
        with self._exchange("(the next block)", silent=False):
            began_s, waiting = self._now(), self._stream.is_waiting()
            data = self._block("(the next block)", block)
            waited_s = (self._stream.began_s or 0.0) - began_s
            self.reply_after_s = 0.0 if waiting else max(waited_s, 1e-9)
            return data

    def _block(self, query: str, block: Block) -> bytes:
        if block.format == "text":
            return self._stream.line(query, LONGEST_BLOCK)
        return self._stream.block(query, block.terminated)

    def tell(self, command: str) -> None:
        """Send one line that is not answered. Raises SessionLost or BadReply, and is closed then."""
        with self._exchange(command):
            self._write(command)

    def expect_silence(self, wait_s: float = 0.0) -> None:
        """Make sure that nothing comes unasked within that time.

        An answer that was not the question's own (one that came twice, or late) leaves the true
        one behind it, which shows here. Buses that mark the end of a message (USB, GPIB) keep
        question and answer together by themselves; nothing is done there.
        Raises BadReply or SessionLost, and is closed then.
        """
        if self._resource is None:
            raise SessionLost("the session is not open")
        try:
            with self._translated("(nothing)"):
                self._stream.expect_silence(wait_s)
        except BaseException:
            self.close()
            raise

    def close(self) -> None:
        """Close the session. Never raises; closing twice is no mistake."""
        resource, self._resource, self._socket = self._resource, None, None
        if resource is None:
            return
        with suppress(Exception):  # what is broken can't be closed any better
            resource.close()
        library = self.section.visa_library
        _managers[library] -= 1
        if _managers[library] <= 0:
            with suppress(Exception):
                pyvisa.ResourceManager(library).close()

    def _connect(self) -> None:
        reason = self._opened()
        if reason is None and self._socket is not None:
            reason = connection_problem(self._socket)
        if reason is not None:
            self.close()
            hint = "is the instrument on and its address right?"
            raise ConnectError(f"{self.section.resource}: can't be opened ({reason}); {hint}")

    def _opened(self) -> str | None:
        """Open and set up; what went wrong, or None. The library forgets to close its socket
        when it can't connect: the error and all that hangs on it is dropped here."""
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", ResourceWarning)
            try:
                self._resource = _open_resource(self.section)
                self._set_up(self._resource)
                return None
            except Exception as error:  # noqa: BLE001 - whatever a backend raises, it did not open
                reason = _reason(error)
            gc.collect()
        return reason

    def _set_up(self, resource: Any) -> None:
        if not isinstance(resource, MessageBasedResource):
            raise TypeError("this kind of resource can't be asked questions")
        self._socket = socket_below(resource)
        watched = _kind(resource, self._socket) in ("socket", "message")
        resource.timeout = self.section.timeout_ms if watched else _SLICE_MS
        resource.read_termination = self.section.read_termination
        if isinstance(resource, SerialInstrument):
            if self.section.serial is not None:
                _set_serial(resource, self.section.serial)
            resource.flush(BufferOperation.discard_read_buffer)
        if self._socket is not None:
            self._socket.settimeout(self._timeout_s)  # a full line would block a write for ever
        self._stream = ByteStream(
            self.section, resource, _kind(resource, self._socket), self._socket,
            lambda: self._now(), _is_timeout,
        )  # fmt: skip

    def _write(self, query: str) -> None:
        data = (query + self.section.write_termination).encode(self.section.encoding)
        if len(data) > LONGEST_QUESTION:
            raise InstrumentError(f"{escaped(query)!r} is too long for a question")
        if self._socket is not None and not is_writable(self._socket, self._timeout_s):
            raise SessionLost(f"{query!r} can't be sent: the line is blocked")
        self._asked_s = self._now()
        self._resource.write_raw(data)
        if self._socket is not None:
            acknowledge_at_once(self._socket)

    @contextmanager
    def _exchange(self, line: str, silent: bool = True) -> Iterator[None]:
        if self._resource is None:
            raise SessionLost(f"{line!r} can't be sent: the session is not open")
        self._stream.forget()
        try:
            with self._translated(line):
                if silent:
                    self._stream.expect_silence(0.0)
                yield
        except BaseException:
            self.close()
            raise

    @contextmanager
    def _translated(self, query: str) -> Iterator[None]:
        try:
            yield
        except InstrumentError:
            raise
        except pyvisa.VisaIOError as error:
            if _is_timeout(error):
                raise ReplyTimeout(self._stream.silence(query)) from error
            raise SessionLost(f"{query!r}: {_reason(error)}") from error
        except UnicodeEncodeError as error:
            raise InstrumentError(f"{query!r} can't be sent as {self.section.encoding}") from error
        except UnicodeError as error:
            got = escaped(self.last_reply)
            raise BadReply(
                f"{query!r}: the reply {got!r} is not {self.section.encoding}"
            ) from error
        except Warning as error:
            raise BadReply(f"{query!r}: {error}") from error
        except Exception as error:  # the library lets whatever its backends raise through
            raise SessionLost(f"{query!r}: {_reason(error)}") from error


def _open_resource(section: Connection) -> Any:
    manager = pyvisa.ResourceManager(section.visa_library)
    resource = manager.open_resource(section.resource, open_timeout=OPEN_TIMEOUT_MS)
    _managers[section.visa_library] += 1
    return resource


def _set_serial(resource: SerialInstrument, line: SerialLine) -> None:
    resource.baud_rate = line.baud_rate
    resource.data_bits = line.data_bits
    resource.stop_bits = StopBits.one if line.stop_bits == 1 else StopBits.two
    resource.parity = Parity[line.parity]


def _kind(resource: Any, line: socket.socket | None) -> Kind:
    """How a session tells where a reply ends."""
    if line is not None:
        return "socket"
    if isinstance(resource, SerialInstrument):
        return "serial"
    return "unwatched" if isinstance(resource, TCPIPSocket) else "message"


def _is_timeout(error: Exception) -> bool:
    return (
        isinstance(error, pyvisa.VisaIOError) and error.error_code == StatusCode.error_timeout
    )


def _reason(error: Exception) -> str:
    text = (error.strerror if isinstance(error, OSError) else "") or str(error)
    text = text or type(error).__name__
    return " ".join(text.split())[:200]
