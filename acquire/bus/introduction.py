"""Asking who publishes at an address, and what time it is there."""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from dataclasses import dataclass

import zmq

from acquire.bus.addresses import Endpoint
from acquire.bus.handshakes import Handshakes
from acquire.bus.keys import client_keys
from acquire.bus.progress import PATIENCE_S
from acquire.bus.sockets import RENEW_S, connected, milliseconds
from acquire.bus.wire import ANY_RUN, NEWEST, Introduction, Question, pack, unpack
from acquire.closing import Closing


@dataclass(frozen=True)
class RoundTrip:
    """A question and its answer, in seconds: when it was ``sent_s`` and its answer
    ``received_s`` by the clock here, and what the clock there was when it was answered."""

    run: str
    sent_s: float
    there_s: float
    received_s: float


class Introducer(Closing):
    """Asks, again and again if need be, who publishes where questions are answered.

    Belongs to one thread. Raises BusError if the address is not on loopback and there are no
    keys, KeysError if these can't be used.
    """

    def __init__(self, endpoint: Endpoint) -> None:
        self._endpoint = endpoint
        self._closed = False
        self._asked = float("-inf")
        self._number = 0
        self._context = zmq.Context()
        self._socket: zmq.Socket[bytes]
        self._handshakes: Handshakes | None
        try:
            self._connect()
        except BaseException:
            self._context.destroy(linger=0)
            raise

    @property
    def trouble(self) -> str:
        """Why the connection is not let in or not trusted, in words; empty if it is."""
        return "" if self._handshakes is None else self._handshakes.look()

    def ask(self, timeout_s: float) -> Introduction | None:
        """Run, stream, start and columns of the publisher; None if nobody has answered in time.

        An answer may still come to a later call.
        """
        now = time.monotonic()
        if now - self._asked > PATIENCE_S:
            self._asked = now
            self._send(NEWEST)
        introduction = self._receive(timeout_s)
        if introduction is not None:
            self._asked = float("-inf")
        return introduction

    def round_trip(self, now_s: Callable[[], float], timeout_s: float) -> RoundTrip | None:
        """Ask for the time of the run there, once; None if no answer comes in time.

        ``now_s`` is the clock here, with which it is to be compared.
        """
        self._number += 1
        sent_s = now_s()
        self._send(self._number)
        deadline = time.monotonic() + timeout_s
        while (left_s := deadline - time.monotonic()) > 0:
            answer = self._receive(left_s)
            received_s = now_s()
            if answer is None or answer.start != self._number:
                continue  # nothing, or the answer to an earlier question
            if answer.time_s is None or not math.isfinite(answer.time_s):
                return None
            return RoundTrip(answer.run, sent_s, answer.time_s, received_s)
        return None

    def close(self) -> None:
        """Close, at once. Closing twice is no mistake."""
        if not self._closed:
            self._closed = True
            self._disconnect()
            self._context.destroy(linger=0)

    def _send(self, start: int) -> None:
        if time.monotonic() - self._heard > RENEW_S:  # also: ZeroMQ gives up where it was refused
            self._disconnect()
            self._connect()
        try:
            self._socket.send(pack(Question(ANY_RUN, "", start)), zmq.NOBLOCK)
        except zmq.Again:
            pass  # another one is still on its way to a publisher that is not there yet

    def _receive(self, timeout_s: float) -> Introduction | None:
        if not self._socket.poll(milliseconds(timeout_s)):
            return None
        frames = self._socket.recv_multipart()
        introduction = unpack(Introduction, frames[0]) if len(frames) == 1 else None
        if introduction is not None:
            self._heard = time.monotonic()
        return introduction

    def _connect(self) -> None:
        self._heard = time.monotonic()  # or rather: not silent for longer than since now
        computer = self._endpoint.computer
        keys = client_keys(self._endpoint.keys, computer)
        self._socket, self._handshakes = connected(
            self._context, zmq.DEALER, self._endpoint.answer, 1, keys, computer
        )

    def _disconnect(self) -> None:
        if self._handshakes is not None:
            self._handshakes.close()
        self._socket.close(linger=0)
