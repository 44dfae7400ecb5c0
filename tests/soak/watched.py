"""The watch that is disturbed: its processes, and what they hold open."""

from __future__ import annotations

import signal
import time
import urllib.request
from collections.abc import Callable
from contextlib import suppress
from pathlib import Path

import psutil
from running import Running

from acquire.closing import Closing
from soak.rig import INSTRUMENTS

ESTIMATOR, PAGE = "analyse.service", "dashboard.page"
ROLES = (*INSTRUMENTS, ESTIMATOR, PAGE)
DEADLINE_S = 60.0


class Watched(Closing):
    """``rampside watch`` on a configuration, with its run under ``folder``."""

    def __init__(self, config: Path, folder: Path) -> None:
        words = ("--port", 0, "--no-browser", "--folder", folder)
        self._running = Running("watch", config, *words)

    @property
    def run(self) -> Path:
        """The folder of the run."""
        return self._running.run

    @property
    def text(self) -> str:
        """All that it has said."""
        return self._running.text

    @property
    def supervisor(self) -> psutil.Process:
        """The command itself."""
        return psutil.Process(self._running.pid)

    def processes(self) -> dict[str, psutil.Process]:
        """Those of its processes that live now, by role."""
        found = {}
        for name, process in self._running.children().items():
            if name in ROLES and lives(process):
                found[name] = process
        return found

    def everything(self) -> list[psutil.Process]:
        """The command and all that it has started."""
        return [self.supervisor, *self.processes().values()]

    def open_files(self) -> dict[str, int]:
        """How many files, sockets among them, each process has open."""
        processes = {"supervisor": self.supervisor, **self.processes()}
        return {name: process.num_fds() for name, process in processes.items()}

    def wait_until_all_work(self) -> None:
        """At its beginning."""
        self._running.wait_until_all_work()

    def page_answers(self) -> bool:
        """Whether somebody who opens the page gets it."""
        try:
            with urllib.request.urlopen(self._running.after("Page:"), timeout=10) as page:
                return bool(page.status == 200)
        except OSError:
            return False

    def end_in_order(self) -> tuple[int, float]:
        """Ctrl-C; the exit status and how long it took, in seconds."""
        return self._running.end(signal.SIGINT)

    def kill(self) -> dict[str, float]:
        """Kill the command alone; how long each of its processes has outlived it, in seconds."""
        processes = self.processes()
        self._running.send(signal.SIGKILL)
        began = time.monotonic()
        outlived: dict[str, float] = {}

        def ended() -> bool:
            for role, process in processes.items():
                if role not in outlived and not lives(process):
                    outlived[role] = round(time.monotonic() - began, 1)
            return len(outlived) == len(processes)

        until(ended, "its processes end")
        self._running.wait()
        return outlived

    def close(self) -> None:
        """Kill what is left."""
        with suppress(psutil.NoSuchProcess):  # it has ended, as it should have
            for process in self.processes().values():
                process.kill()
        self._running.__exit__(None, None, None)


def lives(process: psutil.Process) -> bool:
    """Whether it has not ended."""
    try:
        return bool(process.is_running() and process.status() != psutil.STATUS_ZOMBIE)
    except psutil.NoSuchProcess:
        return False


def until(condition: Callable[[], object], what: str, timeout_s: float = DEADLINE_S) -> None:
    """Wait until it holds, looking ten times a second. Raises AssertionError."""
    deadline = time.monotonic() + timeout_s
    while not condition():
        assert time.monotonic() < deadline, f"not within {timeout_s:g} s: {what}"
        time.sleep(0.1)
