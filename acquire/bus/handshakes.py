"""Why a client does not get in, out of the events of its socket."""

from __future__ import annotations

import zmq
from zmq.utils.monitor import parse_monitor_message

REFUSED = (
    "{who!r} refused our key; copy this computer's .pub file there, and say there: "
    "rampside keys accept COMPUTER.pub"
)
WRONG_SERVER = (
    "{who!r} hangs up at our handshake: it has not the key that we know of it, or nobody is behind a "
    "tunnel; copy its .pub file here again"
)
NO_KEYS = "{who!r} uses no keys, so it is not trusted; give it keys, too"
HANG_UPS = 3  # in a row, before it is held for more than a connection that broke
_EVENTS = (
    zmq.EVENT_HANDSHAKE_SUCCEEDED
    | zmq.EVENT_HANDSHAKE_FAILED_NO_DETAIL
    | zmq.EVENT_HANDSHAKE_FAILED_PROTOCOL
    | zmq.EVENT_HANDSHAKE_FAILED_AUTH
)


class Handshakes:
    """Watches one client socket, for the thread that has it. Make it before the socket connects.

    ``trouble`` says why the last handshakes failed; empty if they did not.
    """

    def __init__(self, socket: zmq.Socket[bytes], who: str) -> None:
        self.trouble = ""
        self._who = who
        self._hang_ups = 0
        self._monitored = socket
        self._events = socket.get_monitor_socket(_EVENTS)
        self._events.setsockopt(zmq.LINGER, 0)

    def look(self) -> str:
        """Take what has happened; returns ``trouble``."""
        while True:
            try:
                frames = self._events.recv_multipart(zmq.NOBLOCK)
            except zmq.Again:
                return self.trouble
            self._take(parse_monitor_message(frames)["event"])

    def wait_for_refusal(self, timeout_s: float) -> bool:
        """Whether the first handshake ends with the server's refusing our key."""
        if not self._events.poll(int(timeout_s * 1000)):
            return False
        event = parse_monitor_message(self._events.recv_multipart())
        return bool(event["event"] == zmq.EVENT_HANDSHAKE_FAILED_AUTH)

    def close(self) -> None:
        """End watching. Before the socket is closed."""
        self._monitored.disable_monitor()
        self._events.close()

    def _take(self, kind: int) -> None:
        if kind == zmq.EVENT_HANDSHAKE_FAILED_NO_DETAIL:
            self._hang_ups += 1
            if self._hang_ups >= HANG_UPS:
                self.trouble = WRONG_SERVER.format(who=self._who)
            return
        self._hang_ups = 0
        if kind == zmq.EVENT_HANDSHAKE_FAILED_AUTH:
            self.trouble = REFUSED.format(who=self._who)
        elif kind == zmq.EVENT_HANDSHAKE_FAILED_PROTOCOL:
            self.trouble = NO_KEYS.format(who=self._who)
        elif kind == zmq.EVENT_HANDSHAKE_SUCCEEDED:
            self.trouble = ""
