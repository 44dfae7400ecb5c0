"""Small requests to a process, each with a reply."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import zmq

from acquire.bus.sockets import LONGEST_QUESTION, bound, connected, milliseconds
from acquire.bus.wire import pack_plain, unpack_plain
from acquire.closing import Closing
from acquire.errors import BusError

REQUESTS_QUEUED = 100  # a peer


class Inbox(Closing):
    """Takes requests at a loopback address. Belongs to one thread.

    It has no keys and so no other addresses: nobody on another computer has anything to request.

    Port 0 takes a free one; ``address`` tells which. Raises BusError if it can't be bound.
    """

    def __init__(self, address: str) -> None:
        self.refused = 0
        self._closed = False
        self._context = zmq.Context()
        try:
            self._socket, self.address = bound(self._context, zmq.ROUTER, address, REQUESTS_QUEUED)
        except BaseException:
            self._context.destroy(linger=0)
            raise

    def receive(
        self, timeout_s: float
    ) -> tuple[dict[str, Any], Callable[[dict[str, Any]], None]] | None:
        """The next request and how to reply to it; None if none comes in ``timeout_s`` seconds.

        What is malformed is counted in ``refused`` and dropped.
        """
        if self._closed:
            raise BusError(f"{self.address}: the inbox is closed.")
        if not self._socket.poll(milliseconds(timeout_s)):
            return None
        frames = self._socket.recv_multipart()
        message = unpack_plain(frames[1]) if len(frames) == 2 else None
        if message is None:
            self.refused += 1
            return None

        def reply(answer: dict[str, Any]) -> None:
            self._socket.send_multipart([frames[0], pack_plain(answer)], zmq.NOBLOCK)

        return message, reply

    def close(self) -> None:
        """Close; replies that are queued get a moment to be sent."""
        if not self._closed:
            self._closed = True
            self._socket.close()
            self._context.term()


def ask(address: str, message: dict[str, Any], timeout_s: float) -> dict[str, Any]:
    """Send a request to an inbox and wait for the reply. Raises BusError if none comes in time.

    The request may have been obeyed all the same; who asks again gives it an ``id``.
    """
    request = pack_plain(message)
    if len(request) > LONGEST_QUESTION:
        raise BusError(f"a request of {len(request)} bytes; at most {LONGEST_QUESTION} are taken.")
    with zmq.Context() as context:
        socket, _ = connected(context, zmq.DEALER, address, 1)
        try:
            socket.send(request, zmq.NOBLOCK)
            reply = unpack_plain(socket.recv()) if socket.poll(milliseconds(timeout_s)) else None
        finally:
            socket.close(linger=0)
    if reply is None:
        raise BusError(f"{address}: no reply within {timeout_s:g} s; is the process still there?")
    return reply
