"""Tells the estimator what should stand in the run's events, until it says that it does.

The estimator may be the very process that has died, so each message waits its turn and is sent
again, under the same id, until it is acknowledged; the estimator writes an id once.
"""

from __future__ import annotations

import queue
import threading
import uuid
from collections.abc import Callable
from contextlib import suppress

from acquire.errors import BusError

Ask = Callable[[str, dict[str, object], float], dict[str, object]]

MOST_WAITING = 1000
ONE_TRY_S = 1.0
BETWEEN_TRIES_S = 0.5


class EventSender:
    """Sends events to the inbox at ``address``, one after the other, from a thread of its own.

    ``ask`` is :func:`acquire.bus.ask`: it raises BusError where no reply comes in time. A reply
    with ``again`` says that the event could not be written, now.
    """

    def __init__(self, address: str, ask: Ask) -> None:
        self.dropped = 0
        self._address = address
        self._ask = ask
        self._waiting: queue.Queue[dict[str, object]] = queue.Queue(MOST_WAITING)
        self._closing = threading.Event()
        self._thread = threading.Thread(target=self._send_all, daemon=True)
        self._thread.start()

    def send(self, kind: str, code: str, text: str) -> None:
        """Have one event written when the estimator can; counted in ``dropped`` if too many wait."""
        try:
            self._waiting.put_nowait(
                {"kind": kind, "code": code, "text": text, "id": uuid.uuid4().hex}
            )
        except queue.Full:
            self.dropped += 1

    def close(self, within_s: float = 1.0) -> int:
        """Give up after the try that is under way; returns how many events were not written."""
        self._closing.set()
        self._thread.join(within_s)
        return self._waiting.unfinished_tasks

    def _send_all(self) -> None:
        while not self._closing.is_set():
            with suppress(queue.Empty):
                message = self._waiting.get(timeout=0.1)
                self._deliver(message)

    def _deliver(self, message: dict[str, object]) -> None:
        while not self._closing.is_set():
            written = False
            with suppress(BusError):
                written = not self._ask(self._address, message, ONE_TRY_S).get("again")
            if written:
                self._waiting.task_done()
                return
            self._closing.wait(BETWEEN_TRIES_S)
