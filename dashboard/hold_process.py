"""The process that sends the command: started once, heard, and never started again."""

from __future__ import annotations

import json
import queue
from dataclasses import dataclass

from acquire.hold.command import LAST
from acquire.hold.record import was_claimed
from acquire.run_folder import RunFolder
from dashboard.child import Child, python

END_S = 0.5


@dataclass(frozen=True)
class Said:
    """A step that it told, with its sentence. The step ``gone`` is ours: it ended without its last
    word, and ``claimed`` tells whether the command may have been sent."""

    step: str
    text: str
    claimed: bool = False


class HoldProcess:
    """``python -m acquire.hold`` for a run. Raises OSError if it can't be started.

    ``trial``: it sees whether the supply can be asked, and sends nothing.
    """

    def __init__(self, run: RunFolder, trial: bool = False) -> None:
        self._run = run
        self._lines: queue.SimpleQueue[str] = queue.SimpleQueue()
        self._finished = False
        self._words = ""
        words = (run.path, "--trial") if trial else (run.path,)
        self._child = Child(python("acquire.hold", *words), self._lines.put)

    @property
    def pid(self) -> int:
        """Its number."""
        return self._child.pid

    @property
    def over(self) -> bool:
        """Whether it has ended and all that it said was taken."""
        return self._finished and self._child.status is not None and self._lines.empty()

    def said(self) -> list[Said]:
        """What it has told since the last call; doesn't wait, except for its last words."""
        ended = self._child.status is not None
        if ended:
            self._child.last_words()  # all lines have come after this
        found = []
        while not self._lines.empty():
            step, text = _read(self._lines.get())
            if step:
                found.append(Said(step, text))
                self._finished = self._finished or step in LAST
            else:
                self._words = text
        if ended and not self._finished:
            self._finished = True
            found.append(self._gone())
        return found

    def kill(self) -> None:
        """End it now."""
        self._child.kill()

    def close(self) -> None:
        """End it: asked first, killed soon after."""
        self._child.terminate()
        if not self._child.wait(END_S):
            self._child.kill()
        self._child.close()

    def _gone(self) -> Said:
        status = self._child.status or 0
        how = f"signal {-status} killed it" if status < 0 else f"it ended with status {status}"
        words = f" ({self._words})" if self._words else ""
        why = f"the process that sends it has gone: {how}{words}"
        return Said("gone", why, was_claimed(self._run.path))


def _read(line: str) -> tuple[str, str]:
    """Step and sentence; an empty step for anything else that it wrote."""
    try:
        told = json.loads(line)
        return str(told["step"]), str(told["text"])
    except (ValueError, TypeError, KeyError):
        return "", line
