"""Sockets of the bus with every option that matters set in one place.

Limits of queues are explicit: what does not fit is dropped and asked for again. Heartbeats find
connections that have died without a word. Nothing waits for ever at the end.
"""

from __future__ import annotations

import math

import zmq

from acquire.bus.addresses import check_loopback
from acquire.errors import BusError

LINGER_MS = 300  # how long closing may go on sending what is queued
HIGH_WATER = 1000  # messages queued a connection; 20 s of a reader at 50 Hz
LONGEST_MESSAGE = 1 << 22  # bytes; an answer holds at most 1 MiB and one line
LONGEST_QUESTION = 1 << 16


def bound(
    context: zmq.Context[zmq.Socket[bytes]], kind: int, address: str, high_water: int
) -> tuple[zmq.Socket[bytes], str]:
    """A socket bound to a loopback address, and the address in full where its port was 0.

    Raises BusError if the address is not on loopback, taken, or can't be bound.
    """
    check_loopback(address)
    socket = _prepared(context, kind, high_water)
    if kind == zmq.ROUTER:
        socket.setsockopt(zmq.MAXMSGSIZE, LONGEST_QUESTION)
    try:
        socket.bind(address)
    except zmq.ZMQError as error:
        socket.close(linger=0)
        if error.errno == zmq.EADDRINUSE:
            raise BusError(
                f"{address}: the port is taken; end the program that has it, or choose another."
            ) from None
        raise BusError(f"{address}: can't be bound ({error.strerror}); choose another.") from None
    return socket, socket.getsockopt(zmq.LAST_ENDPOINT).rstrip(b"\0").decode()  # type: ignore[union-attr]


def connected(
    context: zmq.Context[zmq.Socket[bytes]], kind: int, address: str, high_water: int
) -> zmq.Socket[bytes]:
    """A socket that connects to a loopback address, again and again if need be.

    Raises BusError if the address is not on loopback.
    """
    check_loopback(address)
    socket = _prepared(context, kind, high_water)
    socket.setsockopt(zmq.MAXMSGSIZE, LONGEST_MESSAGE)
    socket.setsockopt(zmq.RECONNECT_IVL, 50)
    socket.setsockopt(zmq.RECONNECT_IVL_MAX, 500)
    socket.connect(address)
    return socket


def milliseconds(seconds: float) -> int:
    """What to give to a poll, rounded up so that it does not wake before the time."""
    return math.ceil(seconds * 1000)


def _prepared(
    context: zmq.Context[zmq.Socket[bytes]], kind: int, high_water: int
) -> zmq.Socket[bytes]:
    socket = context.socket(kind)
    socket.setsockopt(zmq.SNDHWM, high_water)
    socket.setsockopt(zmq.RCVHWM, high_water)
    socket.setsockopt(zmq.LINGER, LINGER_MS)
    socket.setsockopt(zmq.HEARTBEAT_IVL, 2000)
    socket.setsockopt(zmq.HEARTBEAT_TIMEOUT, 6000)
    socket.setsockopt(zmq.HEARTBEAT_TTL, 6000)
    socket.setsockopt(zmq.TCP_KEEPALIVE, 1)
    return socket
