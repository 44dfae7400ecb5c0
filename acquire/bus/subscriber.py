"""Listening to streams: every row once, in order, whatever was lost on the way."""

from __future__ import annotations

import time
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path

import zmq

from acquire.bus.addresses import Endpoint
from acquire.bus.keys import client_keys
from acquire.bus.progress import StreamHealth, StreamProgress
from acquire.bus.sockets import HIGH_WATER, RENEW_S, connected, milliseconds
from acquire.bus.wire import Question, pack, topic
from acquire.closing import Closing
from acquire.errors import BusError, JournalError
from acquire.journal_reader import JournalFollower
from acquire.tables import Row, Table

QUESTIONS_QUEUED = 1  # while nobody is connected; one is enough, its answer tells the rest
MOST_AT_ONCE = 1000  # messages taken from one socket before the others have their turn


class Subscriber(Closing):
    """Receives the streams of one run. Belongs to one thread.

    ``endpoints`` and ``tables`` have the same streams. ``start`` is the first number wanted, for
    all or by stream (0 where not named); -1 means from the newest row on. A publisher that has
    ended answers no more: with ``folder``, the run's on this machine, what it has recorded is
    then read from there. Raises BusError for an address not on loopback without keys, KeysError
    where the keys of an endpoint can't be used.
    """

    def __init__(
        self,
        run_id: str,
        endpoints: Mapping[str, Endpoint],
        tables: Mapping[str, Table],
        start: Mapping[str, int] | int = 0,
        *,
        folder: Path | None = None,
        high_water: int = HIGH_WATER,
    ) -> None:
        if set(endpoints) != set(tables):
            raise BusError(f"streams without an address or a table: {set(endpoints) ^ set(tables)}")
        self._context = zmq.Context()
        self._poller = zmq.Poller()
        self._closed = False
        self._streams: dict[str, _Stream] = {}
        self._by_socket: dict[zmq.Socket[bytes], _Stream] = {}
        try:
            for name, endpoint in endpoints.items():
                first = start if isinstance(start, int) else start.get(name, 0)
                table = tables[name]
                stream = _Stream(self._context, run_id, table, endpoint, first, high_water)
                if folder is not None:
                    stream.follower = JournalFollower(folder / table.path, table)
                self._streams[name] = stream
                self._register(stream)
        except BaseException:
            self._context.destroy(linger=0)
            raise

    def receive(self, timeout_s: float) -> list[tuple[str, Row]]:
        """What has come, as (stream, row), each stream's rows in order and each row once.

        Waits until there is something, at most ``timeout_s`` seconds. Asks for what is missing,
        and whether there is anything new where a stream was silent for 1 s.
        """
        if self._closed:
            raise BusError("the subscriber is closed.")
        deadline = time.monotonic() + timeout_s
        wait_s = 0.0
        while True:
            got: list[tuple[str, Row]] = []
            for socket, _ in self._poller.poll(milliseconds(wait_s)):
                stream = self._by_socket[socket]
                got += [(stream.name, row) for row in stream.take(socket)]
            next_question = self._ask()
            for stream in self._streams.values():
                got += [(stream.name, row) for row in stream.read_journal()]
            now = time.monotonic()
            if got or now >= deadline:
                return got
            wait_s = max(min(deadline, next_question) - now, 0.0)

    def catch_up(self, within_s: float) -> list[tuple[str, Row]]:
        """As :meth:`receive`, but asks each stream at once and waits until all that it had then
        has come, at most ``within_s`` seconds."""
        for stream in self._streams.values():
            stream.progress.inquire()
        deadline = time.monotonic() + within_s
        got = self.receive(0.0)
        while not self._settled() and (left_s := deadline - time.monotonic()) > 0:
            got += self.receive(min(left_s, 0.05))
        return got

    def _settled(self) -> bool:
        return all(stream.progress.settled for stream in self._streams.values())

    def health(self) -> dict[str, StreamHealth]:
        """What is known of each stream."""
        return {name: stream.health() for name, stream in self._streams.items()}

    def close(self) -> None:
        """Close all sockets, at once. Closing twice is no mistake."""
        if not self._closed:
            self._closed = True
            for stream in self._streams.values():
                stream.close()
            self._context.destroy(linger=0)

    def _ask(self) -> float:
        """Ask where it is due; returns when the next question will be."""
        upcoming = float("inf")
        for stream in self._streams.values():
            now = time.monotonic()
            if stream.progress.next_question() <= now:
                if stream.stale(now):
                    self._renew(stream, now)
                stream.ask(now)
            upcoming = min(upcoming, stream.progress.next_question())
        return upcoming

    def _register(self, stream: _Stream) -> None:
        for socket in stream.sockets:
            self._poller.register(socket, zmq.POLLIN)
            self._by_socket[socket] = stream

    def _renew(self, stream: _Stream, now: float) -> None:
        for socket in stream.sockets:
            self._poller.unregister(socket)
            del self._by_socket[socket]
        stream.reconnect(now)
        self._register(stream)


class _Stream:
    """The two sockets of one stream and how far it has come."""

    def __init__(
        self,
        context: zmq.Context[zmq.Socket[bytes]],
        run_id: str,
        table: Table,
        endpoint: Endpoint,
        start: int,
        high_water: int,
    ) -> None:
        self.name = table.stream
        self.progress = StreamProgress(run_id, table, start)
        self._context = context
        self._run_id = run_id
        self._endpoint = endpoint
        self._high_water = high_water
        self._topic = topic(table.stream)
        self.follower: JournalFollower | None = None
        self._reading = False  # whether there may be more in the journal
        self._connect(time.monotonic())

    @property
    def sockets(self) -> tuple[zmq.Socket[bytes], zmq.Socket[bytes]]:
        """The one that listens, and the one that asks."""
        return self._listening, self._asking

    def take(self, socket: zmq.Socket[bytes]) -> list[Row]:
        """Rows to deliver out of what has come on one of the sockets."""
        rows: list[Row] = []
        for _ in range(MOST_AT_ONCE):
            try:
                frames = socket.recv_multipart(zmq.NOBLOCK)
            except zmq.Again:
                break
            now = time.monotonic()
            if socket is self._asking and len(frames) == 1:
                rows += self.progress.take_answer(frames[0], now)
            elif socket is self._listening and len(frames) == 2 and frames[0] == self._topic:
                rows += self.progress.take_message(frames[1], now)
            else:
                self.progress.refuse()
        return rows

    def read_journal(self) -> list[Row]:
        """Rows to deliver out of the journal on disk, when the publisher does not answer."""
        wanted = self.progress.abandoned
        if wanted is None or self.follower is None or not self._reading:
            return []
        try:
            rows = self.follower.read(wanted, MOST_AT_ONCE)
        except JournalError:
            rows = []
            self.progress.refuse()
        self._reading = len(rows) == MOST_AT_ONCE
        return self.progress.take_rows(rows, wanted)

    def ask(self, now: float) -> None:
        """Send a question; one that can't be queued counts as lost."""
        self._reading = True
        question = Question(self._run_id, self.name, self.progress.ask(now))
        try:
            self._asking.send(pack(question), zmq.NOBLOCK)
        except zmq.Again:
            pass  # another one is still on its way to a publisher that is not there yet

    def stale(self, now: float) -> bool:
        """Whether it was silent for so long that the connections are not to be trusted."""
        heard = self.progress.health().last_heard_monotonic
        return now - max(heard or 0.0, self._connected) > RENEW_S

    def reconnect(self, now: float) -> None:
        """Give up both connections and make them anew."""
        self.close()
        self._connect(now)

    def health(self) -> StreamHealth:
        """What is known of it."""
        troubles = [handshakes.look() for handshakes in self._handshakes]
        return replace(self.progress.health(), barred=next(filter(None, troubles), ""))

    def close(self) -> None:
        """Close both sockets, at once."""
        for handshakes in self._handshakes:
            handshakes.close()
        for socket in self.sockets:
            socket.close(linger=0)

    def _connect(self, now: float) -> None:
        self._connected = now
        endpoint = self._endpoint
        keys = client_keys(endpoint.keys, endpoint.computer)
        self._listening, rows = connected(
            self._context, zmq.SUB, endpoint.publish, self._high_water, keys, endpoint.computer
        )
        self._listening.setsockopt(zmq.SUBSCRIBE, self._topic)
        self._asking, answers = connected(
            self._context, zmq.DEALER, endpoint.answer, QUESTIONS_QUEUED, keys, endpoint.computer
        )
        self._handshakes = [one for one in (rows, answers) if one is not None]
