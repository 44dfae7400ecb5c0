"""The page's line to whoever decides about holding the field: the only thing that it can ask for.

A thread of its own asks for the state once a second and passes requests on, so that neither a page
nor a plot waits for an answer. A request is sent once: if no answer comes, that is said, and the
state shows what became of it.
"""

from __future__ import annotations

import queue
import threading
from collections.abc import Callable
from contextlib import suppress
from dataclasses import dataclass
from typing import Any

from acquire.bus import ask as ask_inbox
from acquire.closing import Closing
from acquire.errors import BusError, RampsideError
from acquire.run_folder import RunFolder

EVERY_S = 1.0
STATE_WITHIN_S, WITHIN_S = 0.5, 3.0
END_S = 0.6
MOST_WAITING = 20

Ask = Callable[[str, dict[str, Any], float], dict[str, Any]]


@dataclass(frozen=True)
class HoldState:
    """What the keeper last said: its state in a word (see :mod:`acquire.hold.words`), its sentence,
    whether the answer is good enough."""

    state: str
    told: str
    good: bool


class Request:
    """Something asked for. ``text`` is the answer; while there is none, that it is on its way."""

    def __init__(self, do: str, code: str) -> None:
        self.text = "..."
        self._message = {"kind": "hold", "do": do, "code": code}

    def carry_out(self, ask: Ask, address: str) -> None:
        """Send it, and keep the answer."""
        try:
            self.text = str(ask(address, self._message, WITHIN_S).get("text", ""))
        except BusError:
            self.text = "No answer from the watch; whether it was obeyed shows above."


class HoldLink(Closing):
    """For one run. Without [hold], or while nobody watches the run, ``state`` is None.

    ``ask`` is :func:`acquire.bus.ask`.
    """

    def __init__(self, run: RunFolder, ask: Ask = ask_inbox) -> None:
        self._run, self._ask = run, ask
        self._state: HoldState | None = None
        self._requests: queue.Queue[Request] = queue.Queue(MOST_WAITING)
        self._closing = threading.Event()
        self._thread = threading.Thread(target=self._go_on, name="hold link", daemon=True)
        if run.rig.hold is not None:
            self._thread.start()

    @property
    def state(self) -> HoldState | None:
        """The newest state; None if it is not known."""
        return self._state

    def request(self, do: str, code: str = "") -> Request:
        """Ask for ``arm``, ``hold_now`` or ``disarm``; doesn't wait."""
        request = Request(do, code[:100])
        try:
            self._requests.put_nowait(request)
        except queue.Full:
            request.text = "Not sent: too many requests wait."
        return request

    def close(self) -> None:
        """End the thread."""
        self._closing.set()
        if self._thread.is_alive():
            self._thread.join(END_S)

    def _go_on(self) -> None:
        address = ""
        while not self._closing.is_set():
            with suppress(RampsideError):
                address = self._address()
            request = None
            with suppress(queue.Empty):
                request = self._requests.get(timeout=0.0 if self._state is None else EVERY_S)
            if request is not None and not address:
                request.text = "Nobody watches this run, so nothing can be asked for."
            elif request is not None:
                request.carry_out(self._ask, address)
            self._state = self._asked(address) if address else None
            if self._state is None:
                self._closing.wait(EVERY_S)

    def _address(self) -> str:
        live = self._run.live()
        return live.hold if live is not None and live.alive else ""

    def _asked(self, address: str) -> HoldState | None:
        try:
            told = self._ask(address, {"kind": "hold", "do": "state"}, STATE_WITHIN_S)
        except BusError:
            return None
        return HoldState(str(told.get("state")), str(told.get("told")), bool(told.get("good")))
