"""Publishing one stream: the journal first, then everybody who listens; and answering those who
missed something, out of the journal, in a thread of its own."""

from __future__ import annotations

import threading
import time
from collections.abc import Callable
from dataclasses import replace

import zmq
from msgspec import structs

from acquire.bus.addresses import Endpoint
from acquire.bus.gate import Gate
from acquire.bus.keys import KeyFolder
from acquire.bus.sockets import HIGH_WATER, bound, bound_anew, milliseconds
from acquire.bus.wire import ANY_RUN, Answer, Introduction, Message, Question, pack, topic, unpack
from acquire.closing import Closing
from acquire.errors import BusError, JournalError
from acquire.journal import Journal, Piece
from acquire.tables import Cell, Row, Table

SYNC_PERIOD_S = 1.0
QUESTIONS_QUEUED = 64  # a peer; more are dropped and asked again


class Publisher(Closing):
    """Publishes the rows of one table.

    A background thread answers questions and syncs the journal once a second, so that both go on
    while the owner waits for an instrument. ``publish`` and ``close`` belong to the thread that
    made the publisher. The journal stays the caller's: close it after the publisher.
    ``started_utc``, the run's start, and its clock ``now_s``, from any thread, are told to those
    who ask who publishes here. Port 0 takes a
    free one, and ``endpoint`` tells which.

    Where ``endpoint`` names a folder of keys, only those come in whose public keys are there;
    ``tell`` takes a sentence for each one who was refused. When a key is taken out of the folder
    all connections are cut before the next row, and those who are still known come again.
    Raises KeysError if the keys can't be used, BusError if an address is taken, or is not on
    loopback and there are no keys.
    """

    def __init__(
        self,
        run_id: str,
        table: Table,
        journal: Journal,
        endpoint: Endpoint,
        *,
        started_utc: str = "",
        now_s: Callable[[], float] | None = None,
        high_water: int = HIGH_WATER,
        tell: Callable[[str], None] = lambda text: None,
    ) -> None:
        self._run_id = run_id
        self._stream = table.stream
        self._topic = topic(table.stream)
        self._journal = journal
        self._closed = False
        self._high_water = high_water
        self._context = context = zmq.Context()
        self._gate: Gate | None = None
        try:
            if endpoint.keys:
                keys = KeyFolder(endpoint.keys)
                self._gate = Gate(context, keys, tell, endpoint.computer)
            self._socket, publish = bound(
                context, zmq.PUB, endpoint.publish, high_water, self._gate
            )
            router, answer = bound(
                context, zmq.ROUTER, endpoint.answer, QUESTIONS_QUEUED, self._gate
            )
        except BaseException:
            if self._gate is not None:
                self._gate.close()
            context.destroy(linger=0)
            raise
        self._cuts = 0
        self.endpoint = replace(endpoint, publish=publish, answer=answer)
        columns = tuple((one.name, one.kind, one.unit, one.description) for one in table.columns)
        introduction = Introduction(run_id, table.stream, 0, None, started_utc, columns)
        self._answerer = _Answerer(context, router, answer, introduction, journal, now_s, self._gate)

    @property
    def refused(self) -> int:
        """How many questions were malformed or meant for another run."""
        return self._answerer.refused

    def publish(self, *cells: Cell) -> int:
        """Record a row, then send it; returns its number. ``cells`` are those after ``seq``.

        Raises JournalError if it could not be recorded (nothing was sent then; it may be tried
        again) or if the journal could not be synced or read since the last call, BusError if the
        publisher is closed or its thread has ended.
        """
        if self._closed:
            raise BusError(f"{self._stream}: the publisher is closed.")
        row = self._record(cells)
        seq = row[0]
        assert isinstance(seq, int)
        message = pack(Message(self._run_id, self._stream, seq, row[1:]))
        if self._gate is not None and self._gate.cuts != self._cuts:
            self._cut(self._gate)
        self._socket.send_multipart([self._topic, message], zmq.NOBLOCK)
        return seq

    def _record(self, cells: Row) -> Row:
        """The row as recorded. Whoever asks meanwhile is told if that can't be done."""
        try:
            self._answerer.raise_failure()
            if self._gate is not None:
                self._gate.raise_failure()
            row = self._journal.record(cells)
        except JournalError as error:
            self._answerer.trouble = error.reason
            raise
        self._answerer.trouble = ""
        return row

    def _cut(self, gate: Gate) -> None:
        self._cuts = gate.cuts
        self._socket = bound_anew(
            self._socket, self._context, self.endpoint.publish, self._high_water, gate
        )

    def close(self) -> None:
        """Stop answering, sync, give what is queued a moment to be sent. Ends within 1 s.

        Raises JournalError if the journal can't be synced.
        """
        if self._closed:
            return
        self._closed = True
        stopped = self._answerer.stop()
        self._socket.close()
        if self._gate is not None:
            self._gate.close()
        if stopped:
            self._context.term()
        self._journal.sync()


class _Answerer:
    """The thread that answers out of the journal and syncs it. From its start on, its sockets
    are its own."""

    def __init__(
        self,
        context: zmq.Context[zmq.Socket[bytes]],
        router: zmq.Socket[bytes],
        address: str,
        introduction: Introduction,
        journal: Journal,
        now_s: Callable[[], float] | None,
        gate: Gate | None,
    ) -> None:
        self.refused = 0
        self.trouble = ""  # why nothing can be recorded; written by the owner's thread
        self._context = context
        self._address = address
        self._gate = gate
        self._cuts = 0
        self._run_id = introduction.run
        self._stream = stream = introduction.stream
        self._introduction = introduction
        self._now_s = now_s
        self._journal = journal
        self._journal_error: JournalError | None = None
        self._router = router
        self._end = context.socket(zmq.PAIR)
        self._end.bind("inproc://end")
        self._stop = context.socket(zmq.PAIR)
        self._stop.connect("inproc://end")
        self._thread = threading.Thread(target=self._run, name=f"answers {stream}", daemon=True)
        self._thread.start()

    def raise_failure(self) -> None:
        """Tell the owner what went wrong in the thread."""
        if not self._thread.is_alive():
            raise BusError(f"{self._stream}: nobody answers questions any more; start anew.")
        if self._journal_error is not None:
            error, self._journal_error = self._journal_error, None
            raise error

    def stop(self) -> bool:
        """End the thread. False if it hangs in a disk that does not answer."""
        self._stop.send(b"")
        self._thread.join(timeout=0.5)
        self._stop.close(linger=0)
        return not self._thread.is_alive()

    def _run(self) -> None:
        try:
            self._serve()
        finally:
            self._router.close()
            self._end.close(linger=0)

    def _serve(self) -> None:
        poller = zmq.Poller()
        poller.register(self._router, zmq.POLLIN)
        poller.register(self._end, zmq.POLLIN)
        next_sync = time.monotonic() + SYNC_PERIOD_S
        while True:
            if self._gate is not None and self._gate.cuts != self._cuts:
                self._cuts = self._gate.cuts
                poller.unregister(self._router)
                self._router = bound_anew(
                    self._router, self._context, self._address, QUESTIONS_QUEUED, self._gate
                )
                poller.register(self._router, zmq.POLLIN)
            wait_s = max(next_sync - time.monotonic(), 0.0)
            ready = dict(poller.poll(milliseconds(wait_s)))
            if self._end in ready:
                return
            try:
                if self._router in ready:
                    frames = self._router.recv_multipart()
                    if self._gate is None or self._gate.cuts == self._cuts:
                        self._answer(frames)
                if time.monotonic() >= next_sync:
                    next_sync = time.monotonic() + SYNC_PERIOD_S
                    self._journal.sync()
            except JournalError as error:
                self._journal_error = error

    def _answer(self, frames: list[bytes]) -> None:
        question = unpack(Question, frames[1]) if len(frames) == 2 else None
        if question is not None and question.run == ANY_RUN:
            self._router.send_multipart([frames[0], self._introduce(question.start)], zmq.NOBLOCK)
            return
        if question is None or question.stream != self._stream:
            self.refused += 1
            return
        if question.run != self._run_id:  # say who is here, but nothing of the run
            self.refused += 1
            piece = Piece(0, b"", 0)
        else:
            piece = self._journal.piece(question.start)
        head = (self._run_id, self._stream, question.start)
        answer = Answer(*head, piece.first, piece.next_seq, piece.lines, self.trouble)
        # A peer that does not take its answers loses them here; this never blocks.
        self._router.send_multipart([frames[0], pack(answer)], zmq.NOBLOCK)

    def _introduce(self, start: int) -> bytes:
        time_s = None if self._now_s is None else self._now_s()
        return pack(structs.replace(self._introduction, start=start, time_s=time_s))
