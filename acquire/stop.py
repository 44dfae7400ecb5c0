"""How a process is asked to end: between two things it does, or out of a wait, never in a write."""

from __future__ import annotations

import signal
from collections.abc import Callable
from typing import ParamSpec, TypeVar

P = ParamSpec("P")
T = TypeVar("T")


class Stopped(BaseException):
    """Ends a wait because the process was asked to end. An interrupt, not an error, so that no
    ``except Exception`` on its way takes it for one."""


class Stop:
    """``requested`` becomes True with SIGTERM. A call made through :meth:`wait` is broken off
    then, and later ones do not begin; everything else that runs is left to finish.

    A handler runs between two steps of the interpreter, so a wait inside a library that was
    written in C ends only when it returns.
    """

    def __init__(self) -> None:
        self.requested = False
        self._waiting = False

    def install(self) -> None:
        """Obey SIGTERM; leave SIGINT and SIGHUP to the supervisor, who ends its children in
        order. For the main thread."""
        signal.signal(signal.SIGTERM, self.handle)
        signal.signal(signal.SIGINT, signal.SIG_IGN)
        if hasattr(signal, "SIGHUP"):
            signal.signal(signal.SIGHUP, signal.SIG_IGN)

    def handle(self, number: int = 0, frame: object = None) -> None:
        """Ask to end; what a signal does. Raises Stopped inside a wait."""
        self.requested = True
        if self._waiting:
            self._waiting = False
            raise Stopped

    def wait(self, call: Callable[P, T], *args: P.args, **kwargs: P.kwargs) -> T:
        """``call(*args, **kwargs)``; raises Stopped instead of beginning or going on with it."""
        self._waiting = True
        try:
            if self.requested:
                raise Stopped
            return call(*args, **kwargs)
        finally:
            self._waiting = False
