"""Seeing whether the magnet supply can be asked: once an arming, better while a person is there.

A supply that takes a single connection, which its reader has, shows here and not when the command
is to go out.
"""

from __future__ import annotations

from contextlib import suppress

from acquire.closing import Closing
from acquire.hold.keeper import State
from acquire.run_folder import RunFolder
from dashboard.hold_process import HoldProcess, Said


class HoldTrial(Closing):
    """The trials of a run, one after the other."""

    def __init__(self, run: RunFolder) -> None:
        self._run = run
        self._process: HoldProcess | None = None
        self._tried = False

    @property
    def goes_on(self) -> bool:
        """Whether its process is there."""
        return self._process is not None

    def look(self, state: State, ready: bool) -> list[Said]:
        """What it says now. ``ready``: the readers work, so that theirs are the first connections.

        It begins once it is armed, and is broken off when that is over, whichever way.
        """
        if state != "armed":
            self._tried = self._tried and state != "off"
            self.close()
        elif ready and not self._tried:
            self._tried = True
            with suppress(OSError):  # no memory, no process: then the command will say so
                self._process = HoldProcess(self._run, trial=True)
        if self._process is None:
            return []
        said = self._process.said()
        if self._process.over:
            self.close()
        return said

    def close(self) -> None:
        """Break off what goes on."""
        if self._process is not None:
            self._process.close()
            self._process = None
