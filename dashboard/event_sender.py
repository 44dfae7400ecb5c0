"""Tells the estimator what should stand in the run's events, until it says that it does.

The estimator may be the very process that has died, so each message waits its turn and is sent
again, under the same id, until it is acknowledged; the estimator writes an id once.
"""

from __future__ import annotations

import math
import queue
import threading
import time
import uuid
from collections.abc import Callable
from contextlib import suppress

from acquire.errors import BusError

Ask = Callable[[str, dict[str, object], float], dict[str, object]]

MOST_WAITING = 1000
ONE_TRY_S = 1.0
BETWEEN_TRIES_S = 0.5
LAST_TRIES_S = 0.02  # between tries, when it is to end


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
        self._until_s = math.inf
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
        """Try on for so long with what still waits; returns how many events were not written."""
        self._until_s = time.monotonic() + within_s
        self._closing.set()
        self._thread.join(within_s)
        return self._waiting.unfinished_tasks

    def _send_all(self) -> None:
        while True:
            try:
                message = self._waiting.get(timeout=0.1 if not self._closing.is_set() else 0.0)
            except queue.Empty:
                if self._closing.is_set():
                    return
            else:
                self._deliver(message)

    def _deliver(self, message: dict[str, object]) -> None:
        while (left_s := self._left_s()) > 0.0:
            written = False
            with suppress(BusError):
                written = not self._ask(self._address, message, min(ONE_TRY_S, left_s)).get("again")
            if written:
                self._waiting.task_done()
                return
            if self._closing.wait(BETWEEN_TRIES_S):
                time.sleep(LAST_TRIES_S)

    def _left_s(self) -> float:
        return self._until_s - time.monotonic() if self._closing.is_set() else math.inf
