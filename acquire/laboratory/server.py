"""The laboratory's sockets: one port on loopback an instrument, all in one thread."""

from __future__ import annotations

import selectors
import socket
import time
from collections.abc import Callable
from dataclasses import dataclass, field

from acquire.closing import Closing
from acquire.errors import LaboratoryError
from acquire.laboratory.bench import Bench
from acquire.laboratory.wire import Nonsense, Wire

LOOPBACK = "127.0.0.1"
LONGEST_WAIT_S = 0.05  # so soon an instrument is seen to be switched off or on
MOST_CONNECTIONS = 64


@dataclass(eq=False)
class _Connection:
    instrument: str
    line: socket.socket
    wire: Wire = field(default_factory=Wire)


class LaboratoryServer(Closing):
    """Takes any number of connections to each instrument.

    Parameters
    ----------
    now_s : seconds since the laboratory's start; by default it starts now.

    Raises LaboratoryError, naming the port, if one can't be had.
    """

    def __init__(self, bench: Bench, now_s: Callable[[], float] | None = None) -> None:
        began = time.monotonic()
        self._bench = bench
        self._now = now_s or (lambda: time.monotonic() - began)
        self._selector = selectors.DefaultSelector()
        self._listening: dict[str, socket.socket] = {}
        self._connections: list[_Connection] = []
        self.ports: dict[str, int] = {}
        try:
            for name, place in bench.places.items():
                self._listen(name, place.port)
        except BaseException:
            self.close()
            raise

    def step(self, longest_s: float = LONGEST_WAIT_S) -> None:
        """Do what is to be done now; wait for it at most so long."""
        self._switch()
        for key, _ in self._selector.select(self._wait_s(longest_s)):
            if isinstance(key.data, _Connection):
                self._hear(key.data)
            else:
                self._accept(key.data)
        for connection in list(self._connections):
            self._send(connection)

    def close(self) -> None:
        """Cut all connections and listen no more."""
        for connection in list(self._connections):
            self._drop(connection)
        for name in list(self._listening):
            self._deafen(name)
        self._selector.close()

    def _listen(self, name: str, port: int) -> None:
        listener = socket.socket()
        try:
            listener.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
            listener.setblocking(False)
            listener.bind((LOOPBACK, port))
            listener.listen()
        except OSError as error:
            listener.close()
            raise LaboratoryError(
                f"port {port} for the simulated {name} can't be had ({error.strerror}): end what "
                "uses it, or give another port in [laboratory]."
            ) from None
        self.ports[name] = listener.getsockname()[1]
        self._listening[name] = listener
        self._selector.register(listener, selectors.EVENT_READ, name)

    def _deafen(self, name: str) -> None:
        listener = self._listening.pop(name)
        self._selector.unregister(listener)
        listener.close()

    def _switch(self) -> None:
        """Let instruments go off and come back."""
        now = self._now()
        for name, port in self.ports.items():
            off, listens = self._bench.is_off(name, now), name in self._listening
            if off and listens:
                self._deafen(name)
                for connection in [c for c in self._connections if c.instrument == name]:
                    self._drop(connection)
            elif not off and not listens:
                self._listen(name, port)

    def _wait_s(self, longest_s: float) -> float:
        now = self._now()
        due = [when for c in self._connections if (when := c.wire.next_s()) is not None]
        # What is due and yet not sent waits for the other side: the selector tells of that.
        coming = [when - now for when in due if when > now]
        return min([longest_s, *coming])

    def _accept(self, name: str) -> None:
        try:
            line, _ = self._listening[name].accept()
        except OSError:  # who wanted to come has gone
            return
        if len(self._connections) >= MOST_CONNECTIONS:
            line.close()
            return
        line.setblocking(False)
        line.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        connection = _Connection(name, line)
        self._connections.append(connection)
        self._selector.register(line, selectors.EVENT_READ, connection)

    def _hear(self, connection: _Connection) -> None:
        try:
            data = connection.line.recv(4096)
        except BlockingIOError:
            return
        except OSError:
            data = b""
        if not data:
            self._drop(connection)
            return
        try:
            for line in connection.wire.lines(data):
                now = self._now()
                outcome = self._bench.hear(connection.instrument, line, now)
                connection.wire.add(outcome, now)
        except Nonsense:
            self._drop(connection)

    def _send(self, connection: _Connection) -> None:
        while (data := connection.wire.ready(self._now())) != b"":
            try:
                if data is None:
                    self._drop(connection)
                    return
                connection.wire.sent(connection.line.send(data))
            except BlockingIOError:
                break
            except OSError:
                self._drop(connection)
                return
        self._watch(connection, blocked=data != b"")

    def _watch(self, connection: _Connection, blocked: bool) -> None:
        wanted = selectors.EVENT_READ | (selectors.EVENT_WRITE if blocked else 0)
        if self._selector.get_key(connection.line).events != wanted:
            self._selector.modify(connection.line, wanted, connection)

    def _drop(self, connection: _Connection) -> None:
        if connection in self._connections:
            self._connections.remove(connection)
            self._selector.unregister(connection.line)
            connection.line.close()
