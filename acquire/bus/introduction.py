"""Asking who publishes at an address."""

from __future__ import annotations

import time

import zmq

from acquire.bus.progress import PATIENCE_S
from acquire.bus.sockets import connected, milliseconds
from acquire.bus.wire import ANY_RUN, NEWEST, Introduction, Question, pack, unpack
from acquire.closing import Closing


class Introducer(Closing):
    """Asks, again and again if need be, who publishes where questions are answered at ``address``.

    Belongs to one thread. Raises BusError if the address is not on loopback.
    """

    def __init__(self, address: str) -> None:
        self._closed = False
        self._asked = float("-inf")
        self._context = zmq.Context()
        try:
            self._socket = connected(self._context, zmq.DEALER, address, 1)
        except BaseException:
            self._context.destroy(linger=0)
            raise

    def ask(self, timeout_s: float) -> Introduction | None:
        """Run, stream, start and columns of the publisher; None if nobody has answered in time.

        An answer may still come to a later call.
        """
        if time.monotonic() - self._asked > PATIENCE_S:
            self._asked = time.monotonic()
            try:
                self._socket.send(pack(Question(ANY_RUN, "", NEWEST)), zmq.NOBLOCK)
            except zmq.Again:
                pass  # another one is still on its way to a publisher that is not there yet
        if not self._socket.poll(milliseconds(timeout_s)):
            return None
        frames = self._socket.recv_multipart()
        introduction = unpack(Introduction, frames[0]) if len(frames) == 1 else None
        if introduction is not None:
            self._asked = float("-inf")
        return introduction

    def close(self) -> None:
        """Close, at once. Closing twice is no mistake."""
        if not self._closed:
            self._closed = True
            self._context.destroy(linger=0)
