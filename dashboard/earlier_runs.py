"""Earlier runs in the same folder that ended badly, closed beside the run that goes on."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

from acquire.closing import Closing
from acquire.errors import RampsideError
from acquire.run_folder import open_run
from dashboard.child import Child, python


class EarlierRuns(Closing):
    """Closes them in a process of its own: completing the estimates of a night takes a minute,
    which no ramp should wait for. Broken off by :meth:`close`, which the next rampside makes good.

    Parameters
    ----------
    folder : the folder of runs.
    by : the command that does it.
    hear : takes each line that the process says, from another thread.
    """

    def __init__(self, folder: Path, by: str, hear: Callable[[str], None]) -> None:
        self._child: Child | None = None
        paths = runs_that_ended_badly(folder)
        if paths:
            self._child = Child(python("dashboard.bad_end", *paths, "--by", by), hear)

    def close(self) -> None:
        """End it, wherever it is."""
        if self._child is not None:
            self._child.kill()
            self._child.close()
            self._child = None


def runs_that_ended_badly(folder: Path) -> list[Path]:
    """The runs in a folder of runs whose ``live.json`` is left over."""
    found = []
    for path in sorted(folder.glob("*/live.json")):
        try:
            live = open_run(path.parent).live()
        except RampsideError:
            continue  # no run of ours, or not to be understood: whoever opens it is told
        if live is not None and not live.alive:
            found.append(path.parent)
    return found
