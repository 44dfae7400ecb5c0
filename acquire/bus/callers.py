"""Peers that fail before they show a key: they have none, or another one for us than we have.

ZeroMQ tells of them only by events of the socket, which name no peer; who called last is asked of
the operating system.
"""

from __future__ import annotations

import os
import socket as sockets
import threading
from contextlib import suppress
from itertools import count

import zmq
from zmq.utils.monitor import parse_monitor_message

from acquire.bus.refusals import Refusal, Refusals

WRONG_KEY = (
    "it expects another key of this computer than it has; copy this computer's .pub file there "
    "again, and have it accepted"
)
NO_KEYS = "it hung up during the handshake: it uses no keys, or is no rampside"
_EVENTS = (
    zmq.EVENT_ACCEPTED
    | zmq.EVENT_HANDSHAKE_FAILED_NO_DETAIL
    | zmq.EVENT_HANDSHAKE_FAILED_PROTOCOL
)
_numbers = count()


class Callers:
    """Watches sockets of one context. All but ``watch`` belongs to one thread.

    ZeroMQ waits for whoever hears its events, so the one who calls ``look`` must not stop while
    the sockets are in use. Sockets that are closed are watched on, in vain.
    """

    def __init__(self, context: zmq.Context[zmq.Socket[bytes]], refusals: Refusals) -> None:
        self._context = context
        self._refusals = refusals
        self._lock = threading.Lock()
        self._new: list[_Monitor] = []
        self._monitors: list[_Monitor] = []

    def watch(self, socket: zmq.Socket[bytes]) -> None:
        """Hear of everything that fails at a socket. For the thread that has the socket."""
        address = f"inproc://callers-{next(_numbers)}"
        socket.monitor(address, _EVENTS)
        monitor = _Monitor(self._context, address)
        with self._lock:  # from here on it is the other thread's
            self._new.append(monitor)

    @property
    def sockets(self) -> list[zmq.Socket[bytes]]:
        """Where it is heard that something has happened."""
        with self._lock:
            self._monitors += self._new
            self._new = []
        return [monitor.socket for monitor in self._monitors]

    def look(self) -> None:
        """Tell what has failed since the last look."""
        for monitor in self._monitors:
            for refusal in monitor.refusals():
                self._refusals.add(refusal)

    def close(self) -> None:
        """Close all."""
        for socket in self.sockets:
            socket.close()


class _Monitor:
    """Events of one socket."""

    def __init__(self, context: zmq.Context[zmq.Socket[bytes]], address: str) -> None:
        self._caller = "an unknown address"
        self.socket = context.socket(zmq.PAIR)
        self.socket.setsockopt(zmq.LINGER, 0)
        self.socket.connect(address)

    def refusals(self) -> list[Refusal]:
        """What has failed since the last time."""
        found = []
        with suppress(zmq.Again):
            while True:
                event = parse_monitor_message(self.socket.recv_multipart(zmq.NOBLOCK))
                if event["event"] == zmq.EVENT_ACCEPTED:
                    self._caller = _peer(event["value"]) or self._caller
                else:
                    wrong_key = event["value"] == zmq.PROTOCOL_ERROR_ZMTP_CRYPTOGRAPHIC
                    found.append(Refusal(self._caller, "", WRONG_KEY if wrong_key else NO_KEYS))
        return found


def _peer(fd: int) -> str:
    """The address of whoever is at the other end of a connection; "" if it has gone."""
    with suppress(OSError), sockets.socket(fileno=os.dup(fd)) as copy:
        return str(copy.getpeername()[0])
    return ""
