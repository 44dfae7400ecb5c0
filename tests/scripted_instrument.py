"""An instrument on loopback that answers as it is told, also badly. For tests.

    with ScriptedInstrument({"*IDN?": "MAKER,MODEL,7,1", "X?": "1.5"}) as instrument:
        ... open instrument.resource, ask ...
        instrument.answers["X?"] = late("2.5", event)     # from the next question on

An answer is a text (sent with the terminator), bytes (sent as they are), a list of answers
(used up one by one, the last one stays), a function that returns one, or steps made by the
functions below. Nothing here waits for a clock where an event will do.
"""

from __future__ import annotations

import socket
import struct
import threading
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import Any

from acquire.closing import Closing

Answer = Any
DEADLINE_S = 20.0
_TICK_S = 0.02


@dataclass(frozen=True)
class Send:
    """Send bytes."""

    data: bytes


@dataclass(frozen=True)
class ToNewest:
    """Send bytes on the connection that was made last, as a gateway would that has one line to
    its instrument: what was asked on one connection is answered on the next."""

    data: bytes


@dataclass(frozen=True)
class Hold:
    """Wait until the event is set."""

    event: threading.Event


@dataclass(frozen=True)
class Pause:
    """Wait by the clock."""

    seconds: float


@dataclass(frozen=True)
class Hang:
    """Answer nothing more to this question."""


@dataclass(frozen=True)
class Close:
    """Close the connection; ``reset`` as a crashed host would."""

    reset: bool = False


def late(text: str, event: threading.Event) -> tuple[object, ...]:
    """The answer, once the event is set."""
    return (Hold(event), text)


def delayed(text: str, seconds: float) -> tuple[object, ...]:
    """The answer after so many seconds."""
    return (Pause(seconds), text)


def split(text: str, at: int, event: threading.Event) -> tuple[object, ...]:
    """The first ``at`` characters at once, the rest once the event is set."""
    return (Send(text[:at].encode()), Hold(event), text[at:])


def twice(text: str) -> tuple[object, ...]:
    """The answer, and the same again."""
    return (text, text)


def unterminated(text: str) -> tuple[object, ...]:
    """The answer without its terminator."""
    return (Send(text.encode("latin-1")),)


def half_then_close(text: str) -> tuple[object, ...]:
    """Half the answer, then the connection ends."""
    return (Send(text[: len(text) // 2].encode()), Close())


def long_line(size: int) -> tuple[object, ...]:
    """A line of ``size`` bytes before its terminator."""
    return (*(Send(piece) for piece in [b"7" * 65_536] * (size // 65_536)), "")


def trickle(text: str, seconds: float) -> tuple[object, ...]:
    """One character at a time, and never a terminator."""
    return tuple(step for sign in text for step in (Send(sign.encode()), Pause(seconds)))


class ScriptedInstrument(Closing):
    """A server for any number of connections, one after the other or at once.

    ``answers`` may be changed at any time. ``greeting``, where given, is done on each new
    connection before anything is asked, ``(Close(),)`` being accept-then-close. A question that
    has no answer here hangs.
    """

    def __init__(
        self,
        answers: dict[str, Answer],
        write_termination: str = "\n",
        read_termination: str = "\n",
        greeting: Answer = (),
    ) -> None:
        self.answers = answers
        self.greeting = greeting
        self.questions: list[tuple[int, str]] = []  # (number of the connection from 0, question)
        self.connections = 0
        self.failures: list[BaseException] = []
        self._ends = write_termination.encode(), read_termination.encode()
        self._changed = threading.Condition()
        self._over = threading.Event()
        self._listening: tuple[threading.Event, threading.Thread] | None = None
        self._threads: list[threading.Thread] = []
        self._lines: set[socket.socket] = set()
        self._newest: socket.socket | None = None
        self.port = 0
        self.listen()

    @property
    def resource(self) -> str:
        """The VISA resource name."""
        return f"TCPIP::127.0.0.1::{self.port}::SOCKET"

    def asked(self, question: str) -> int:
        """How often the question has come."""
        with self._changed:
            return sum(text == question for _, text in self.questions)

    def wait_for(self, condition: Callable[[], bool], what: str = "condition") -> None:
        """Wait until ``condition`` holds; it is looked at whenever something was asked."""
        with self._changed:
            if not self._changed.wait_for(condition, DEADLINE_S):
                raise AssertionError(f"{what}: not within {DEADLINE_S} s; asked {self.questions}")

    def wait_until_asked(self, question: str, times: int = 1) -> None:
        """Wait until the question has come so often."""
        self.wait_for(lambda: self.asked(question) >= times, f"{question} {times} times")

    def listen(self) -> None:
        """Take connections, on the same port as before if there was one."""
        listener = socket.socket()
        listener.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        listener.bind(("127.0.0.1", self.port))
        listener.listen()
        listener.settimeout(_TICK_S)
        self.port = listener.getsockname()[1]
        enough = threading.Event()
        self._listening = enough, self._start(self._accept, listener, enough)

    def refuse(self) -> None:
        """Cut all lines and take no connections, as if switched off; ``listen`` switches on."""
        if self._listening is not None:
            enough, thread = self._listening
            enough.set()
            thread.join(DEADLINE_S)
            self._listening = None
        self.cut()

    def cut(self) -> None:
        """Cut the lines that are open now."""
        for line in list(self._lines):
            _shut(line)

    def close(self) -> None:
        """End everything; raises AssertionError if a part of it did not end or went wrong."""
        self._over.set()
        self.refuse()
        for thread in self._threads:
            thread.join(DEADLINE_S)
        assert not any(thread.is_alive() for thread in self._threads), "a line did not end"
        assert not self.failures, self.failures

    def _start(self, work: Callable[..., None], *things: object) -> threading.Thread:
        thread = threading.Thread(target=self._watched, args=(work, *things), daemon=True)
        self._threads.append(thread)
        thread.start()
        return thread

    def _watched(self, work: Callable[..., None], *things: object) -> None:
        try:
            work(*things)
        except OSError:
            pass  # the line ended
        except BaseException as error:  # noqa: BLE001 - told in close()
            self.failures.append(error)

    def _accept(self, listener: socket.socket, enough: threading.Event) -> None:
        with listener:
            while not enough.is_set():
                try:
                    line, _ = listener.accept()
                except TimeoutError:
                    continue
                self._lines.add(line)
                self._newest = line
                with self._changed:
                    number, self.connections = self.connections, self.connections + 1
                    self._changed.notify_all()
                self._start(self._serve, line, number)

    def _serve(self, line: socket.socket, number: int) -> None:
        try:
            line.settimeout(_TICK_S)
            if self._perform(line, self.greeting):
                for question in self._questions(line):
                    with self._changed:
                        self.questions.append((number, question))
                        self._changed.notify_all()
                    if not self._perform(line, self._answer(question)):
                        return
        finally:
            self._lines.discard(line)
            line.close()

    def _questions(self, line: socket.socket) -> Iterable[str]:
        waiting = b""
        while not self._over.is_set():
            try:
                more = line.recv(4096)
            except TimeoutError:
                continue
            if not more:
                return
            waiting += more
            while self._ends[0] in waiting:
                question, _, waiting = waiting.partition(self._ends[0])
                yield question.decode("latin-1")

    def _answer(self, question: str) -> Answer:
        answer = self.answers.get(question, Hang())
        if isinstance(answer, list):
            answer = answer.pop(0) if len(answer) > 1 else answer[0]
        return answer() if callable(answer) else answer

    def _perform(self, line: socket.socket, answer: Answer) -> bool:
        """Do the steps of an answer; False when the line is to be closed."""
        for step in answer if isinstance(answer, tuple) else (answer,):
            if isinstance(step, str):
                _send(line, step.encode("latin-1") + self._ends[1], self._over)
            elif isinstance(step, bytes):
                _send(line, step, self._over)
            elif isinstance(step, Send):
                _send(line, step.data, self._over)
            elif isinstance(step, ToNewest):
                assert self._newest is not None
                _send(self._newest, step.data, self._over)
            elif isinstance(step, Hold):
                while not step.event.wait(_TICK_S):
                    if self._over.is_set():
                        return False
            elif isinstance(step, Pause):
                if self._over.wait(step.seconds):
                    return False
            elif isinstance(step, Close):
                if step.reset:
                    line.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, struct.pack("ii", 1, 0))
                return False
            else:
                assert isinstance(step, Hang), step
        return True


def _send(line: socket.socket, data: bytes, over: threading.Event) -> None:
    while data and not over.is_set():
        try:
            data = data[line.send(data) :]
        except TimeoutError:
            continue


def _shut(line: socket.socket) -> None:
    try:
        line.shutdown(socket.SHUT_RDWR)
    except OSError:
        pass
