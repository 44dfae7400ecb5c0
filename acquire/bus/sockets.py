"""Sockets of the bus with every option that matters set in one place.

Limits of queues are explicit: what does not fit is dropped and asked for again. Heartbeats find
connections that have died without a word. Nothing waits for ever at the end.

On any address but loopback, and wherever keys are given, both sides are known by key. Everything
for that is done here, in the one order that is safe: the options before the address is bound, the
gate on the same context before both; and then a stranger knocks, who must be refused.
"""

from __future__ import annotations

import math
import time

import zmq

from acquire.bus.addresses import check_address
from acquire.bus.gate import Gate
from acquire.bus.handshakes import Handshakes
from acquire.bus.keys import ClientKeys, KeyPair
from acquire.errors import BusError

LINGER_MS = 300  # how long closing may go on sending what is queued
HIGH_WATER = 1000  # messages queued a connection; 20 s of a reader at 50 Hz
LONGEST_MESSAGE = 1 << 22  # bytes; an answer holds at most 1 MiB and one line
LONGEST_QUESTION = 1 << 16
RENEW_S = 10.0  # after so long a silence a client's sockets are made anew
PROOF_S = 10.0  # how long the refusal of a stranger may take; some milliseconds as a rule
REBIND_S = 5.0  # how long the system may keep the port of a socket that was closed


def bound(
    context: zmq.Context[zmq.Socket[bytes]],
    kind: int,
    address: str,
    high_water: int,
    gate: Gate | None = None,
) -> tuple[zmq.Socket[bytes], str]:
    """A bound socket, and the address in full where its port was 0.

    With a gate, which must be the context's, only those come in whose keys it knows. Raises
    BusError if the address is not on loopback and there is no gate, if it is taken or can't be
    bound, or if a stranger is not refused there.
    """
    where = check_address(address, gate is not None)
    socket = _prepared(context, kind, high_water)
    try:
        if kind == zmq.ROUTER:
            socket.setsockopt(zmq.MAXMSGSIZE, LONGEST_QUESTION)
        socket.setsockopt(zmq.IPV6, int(where.ipv6))
        if gate is not None:
            gate.secure(socket)
        _bind(socket, address)
        full = socket.getsockopt(zmq.LAST_ENDPOINT).rstrip(b"\0").decode()  # type: ignore[union-attr]
        if gate is not None:
            _prove_that_strangers_are_refused(_PARTNERS[kind], full, gate)
    except BaseException:
        socket.close(linger=0)
        raise
    return socket, full


def bound_anew(
    socket: zmq.Socket[bytes],
    context: zmq.Context[zmq.Socket[bytes]],
    address: str,
    high_water: int,
    gate: Gate,
) -> zmq.Socket[bytes]:
    """Cut all connections of a bound socket: it is closed, and another one bound in its place.

    Who is still known connects again by itself. Raises BusError if the port can't be had again.
    """
    kind = int(socket.type)
    socket.close(linger=0)
    deadline = time.monotonic() + REBIND_S
    while True:  # the socket is closed by another thread, a moment later
        try:
            return bound(context, kind, address, high_water, gate)[0]
        except PortTaken:
            if time.monotonic() > deadline:
                raise
            time.sleep(0.005)


def connected(
    context: zmq.Context[zmq.Socket[bytes]],
    kind: int,
    address: str,
    high_water: int,
    keys: ClientKeys | None = None,
    who: str = "",
) -> tuple[zmq.Socket[bytes], Handshakes | None]:
    """A socket that connects to an address, again and again if need be.

    With keys, only to the server that has the key that is known; then also what comes of the
    handshakes with ``who``, to be closed before the socket. Raises BusError if the address is not
    on loopback and there are no keys.
    """
    where = check_address(address, keys is not None)
    socket = _prepared(context, kind, high_water)
    socket.setsockopt(zmq.MAXMSGSIZE, LONGEST_MESSAGE)
    socket.setsockopt(zmq.RECONNECT_IVL, 50)
    socket.setsockopt(zmq.RECONNECT_IVL_MAX, 500)
    socket.setsockopt(zmq.IPV6, int(where.ipv6))
    handshakes = None
    if keys is not None:
        _identify(socket, keys.own, keys.server)
        handshakes = Handshakes(socket, who)
    socket.connect(address)
    return socket, handshakes


_PARTNERS: dict[int, int] = {zmq.PUB: zmq.SUB, zmq.ROUTER: zmq.DEALER}
"""Who connects to which kind of bound socket."""


class PortTaken(BusError):
    """Somebody else is bound there."""


def _bind(socket: zmq.Socket[bytes], address: str) -> None:
    try:
        socket.bind(address)
    except zmq.ZMQError as error:
        if error.errno == zmq.EADDRINUSE:
            raise PortTaken(
                f"{address}: the port is taken; end the program that has it, or choose another."
            ) from None
        hint = "is it an address of this computer?" if error.errno == zmq.EADDRNOTAVAIL else (
            "choose another."
        )
        raise BusError(f"{address}: can't be bound ({error.strerror}); {hint}") from None


def _identify(socket: zmq.Socket[bytes], own: KeyPair, server: str) -> None:
    socket.setsockopt(zmq.CURVE_SECRETKEY, own.secret.encode())
    socket.setsockopt(zmq.CURVE_PUBLICKEY, own.public.encode())
    socket.setsockopt(zmq.CURVE_SERVERKEY, server.encode())
    if socket.getsockopt(zmq.MECHANISM) != zmq.CURVE:
        socket.close(linger=0)
        raise BusError("the connection could not be secured, so it is not made.")


def _prove_that_strangers_are_refused(kind: int, address: str, gate: Gate) -> None:
    """Knock with a key that nobody knows. Raises BusError if it is not refused by the gate."""
    stranger = KeyPair(*(key.decode() for key in zmq.curve_keypair()))
    gate.expect(stranger.public)
    with zmq.Context() as context:
        socket = _prepared(context, kind, 1)
        socket.setsockopt(zmq.LINGER, 0)
        socket.setsockopt(zmq.IPV6, int("[" in address))
        _identify(socket, stranger, gate.pair.public)
        handshake = Handshakes(socket, address)
        try:
            socket.connect(address)
            refused = handshake.wait_for_refusal(PROOF_S)
        finally:
            handshake.close()
            socket.close(linger=0)
    if not refused:
        raise BusError(f"{address}: a stranger was not refused, so nothing is published there.")


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
