"""A link between two computers that can be stalled, cut and mended: a TCP forwarder. For tests."""

from __future__ import annotations

import socket
import threading
from contextlib import suppress

from acquire.closing import Closing

LOOK_S = 0.05


class Link(Closing):
    """Forwards what comes at ``address`` to ``target``, both ``tcp://HOST:PORT``."""

    def __init__(self, host: str, target: str) -> None:
        at, _, port = target.removeprefix("tcp://").rpartition(":")
        self._target = (at, int(port))
        self._flows = threading.Event()
        self._flows.set()
        self._ended = threading.Event()
        self._lock = threading.Lock()
        self._ends: list[socket.socket] = []
        self._threads: list[threading.Thread] = []
        self._listener = self._listen((host, 0))
        self._own = self._listener.getsockname()
        self.address = f"tcp://{self._own[0]}:{self._own[1]}"
        self._start(self._accept)

    def stall(self) -> None:
        """Let nothing through, as when a switch hangs; the connections stay."""
        self._flows.clear()

    def cut(self) -> None:
        """Break all connections and take no more."""
        with self._lock:
            self._listener.close()
            self._break()

    def mend(self) -> None:
        """Be as at first."""
        self._flows.set()
        with self._lock:
            if self._listener.fileno() < 0:
                self._listener = self._listen(self._own)

    def close(self) -> None:
        """End."""
        self._ended.set()
        self._flows.set()
        self.cut()
        for thread in self._threads:
            thread.join(20)

    def _listen(self, at: tuple[str, int]) -> socket.socket:
        listener = socket.create_server(at)
        listener.settimeout(LOOK_S)
        return listener

    def _start(self, run: object, *words: object) -> None:
        thread = threading.Thread(target=run, args=words, daemon=True)  # type: ignore[arg-type]
        self._threads.append(thread)
        thread.start()

    def _break(self) -> None:
        for end in self._ends:
            with suppress(OSError):
                end.shutdown(socket.SHUT_RDWR)
            end.close()
        self._ends.clear()

    def _accept(self) -> None:
        while not self._ended.wait(0.0):
            with self._lock:
                listener = self._listener
            try:
                caller, _ = listener.accept()
            except OSError:  # nobody, or cut just now
                self._ended.wait(LOOK_S)
                continue
            caller.settimeout(None)
            try:
                callee = socket.create_connection(self._target)
            except OSError:
                caller.close()
                continue
            with self._lock:
                self._ends += [caller, callee]
            self._start(self._forward, caller, callee)
            self._start(self._forward, callee, caller)

    def _forward(self, source: socket.socket, sink: socket.socket) -> None:
        with suppress(OSError):
            while data := source.recv(65536):
                self._flows.wait()
                sink.sendall(data)
        with self._lock:
            for end in (source, sink):
                if end in self._ends:
                    self._ends.remove(end)
                with suppress(OSError):
                    end.shutdown(socket.SHUT_RDWR)
                end.close()
