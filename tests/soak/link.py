"""A TCP line between a reader and its instrument that can be cut, held up, and mended."""

from __future__ import annotations

import selectors
import socket
import struct
import threading
from dataclasses import dataclass, field

from acquire.closing import Closing

LOOPBACK = "127.0.0.1"
_TICK_S = 0.05
_GULP = 65_536


@dataclass(eq=False)
class _Pair:
    """Both ends of one connection, and what has come from each for the other."""

    ends: tuple[socket.socket, socket.socket]
    waiting: list[bytes] = field(default_factory=lambda: [b"", b""])
    ended: bool = False


class Link(Closing):
    """Listens on a port of its own and leads every connection to ``target``, in a thread.

    ``cut`` breaks all connections and refuses new ones; ``hold`` keeps what is under way, as a
    line does over which nothing gets through for a while, so that it comes late; ``mend`` ends both.
    """

    def __init__(self, target: int) -> None:
        self._target = target
        self._state = "whole"
        self._changed = threading.Event()
        self._pairs: list[_Pair] = []
        self._listener: socket.socket | None = None
        self.port = 0
        self._listen()
        self._over = threading.Event()
        self._thread = threading.Thread(target=self._work, daemon=True)
        self._thread.start()

    def cut(self) -> None:
        """Break it."""
        self._turn("cut")

    def hold(self) -> None:
        """Let nothing through."""
        self._turn("held")

    def mend(self) -> None:
        """Let everything through."""
        self._turn("whole")

    def close(self) -> None:
        """End all."""
        self._over.set()
        self._thread.join(10.0)
        assert not self._thread.is_alive()

    def _turn(self, state: str) -> None:
        self._changed.clear()
        self._state = state
        if not self._changed.wait(10.0):
            raise AssertionError("the link does not obey")

    def _listen(self) -> None:
        self._listener = socket.socket()
        self._listener.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        self._listener.bind((LOOPBACK, self.port))
        self._listener.listen()
        self._listener.settimeout(0.0)
        self.port = self._listener.getsockname()[1]

    def _work(self) -> None:
        while not self._over.is_set():
            state = self._state
            self._obey(state)
            self._changed.set()
            self._wait(state)
            if state == "whole":
                self._accept()
            for pair in list(self._pairs):
                self._carry(pair, state == "held")
        self._obey("cut")

    def _obey(self, state: str) -> None:
        if state == "cut":
            if self._listener is not None:
                self._listener.close()
                self._listener = None
            for pair in list(self._pairs):
                self._end(pair, reset=True)
        elif self._listener is None:
            self._listen()

    def _wait(self, state: str) -> None:
        with selectors.DefaultSelector() as selector:
            if state != "held":
                for end in (end for pair in self._pairs for end in pair.ends):
                    selector.register(end, selectors.EVENT_READ)
                if self._listener is not None:
                    selector.register(self._listener, selectors.EVENT_READ)
            selector.select(_TICK_S)

    def _accept(self) -> None:
        assert self._listener is not None
        try:
            near, _ = self._listener.accept()
        except OSError:
            return
        far = socket.socket()
        far.settimeout(1.0)
        try:
            far.connect((LOOPBACK, self._target))
        except OSError:  # nobody there: as if it had been refused here
            near.close()
            far.close()
            return
        for end in (near, far):
            end.settimeout(0.0)
            end.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        self._pairs.append(_Pair((near, far)))

    def _carry(self, pair: _Pair, held: bool) -> None:
        for side in (0, 1):
            try:
                more = pair.ends[side].recv(_GULP)
                pair.waiting[1 - side] += more
                pair.ended = pair.ended or not more
            except BlockingIOError:
                pass
            except OSError:
                pair.ended = True
        if held:
            return
        for side in (0, 1):
            try:
                if pair.waiting[side]:
                    count = pair.ends[side].send(pair.waiting[side])
                    pair.waiting[side] = pair.waiting[side][count:]
            except BlockingIOError:
                pass
            except OSError:
                pair.ended = True
        if pair.ended:
            self._end(pair)

    def _end(self, pair: _Pair, reset: bool = False) -> None:
        for end in pair.ends:
            if reset:
                end.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, struct.pack("ii", 1, 0))
            end.close()
        self._pairs.remove(pair)
