"""A disk that can be filled and emptied, as truly as the system permits.

As root on Linux it is a file system in memory of its own, filled by a ballast file. Else the size
of files that each process may write is limited from outside, which fails in the same place.
"""

from __future__ import annotations

import subprocess
from collections.abc import Callable, Iterable
from contextlib import suppress
from pathlib import Path

import psutil

from acquire.closing import Closing

SIZE = "64m"


class FullDisk(Closing):
    """The disk under ``folder``, for the processes that ``processes`` names."""

    def __init__(self, folder: Path, processes: Callable[[], Iterable[psutil.Process]]) -> None:
        self.folder = folder
        self._processes = processes
        self._limited: list[psutil.Process] = []
        self._ballast = folder / "ballast"
        mount = ["mount", "-t", "tmpfs", "-o", f"size={SIZE}", "tmpfs", str(folder)]
        try:
            self.mounted = subprocess.run(mount, capture_output=True, check=False).returncode == 0
        except OSError:
            self.mounted = False

    @property
    def how(self) -> str:
        """In what way it is full, for the report."""
        return "a full file system" if self.mounted else "a limit on the size of files"

    def fill(self) -> None:
        """Leave no room."""
        if not self.mounted:
            self._limit()
            return
        with suppress(OSError), open(self._ballast, "ab", buffering=0) as file:
            while True:
                file.write(bytes(1 << 20))
        with suppress(OSError), open(self._ballast, "ab", buffering=0) as file:
            while True:
                file.write(bytes(512))

    def empty(self) -> None:
        """Make room again."""
        if self.mounted:
            self._ballast.unlink(missing_ok=True)
        for process in self._limited:
            with suppress(psutil.Error):
                process.rlimit(psutil.RLIMIT_FSIZE, (psutil.RLIM_INFINITY, psutil.RLIM_INFINITY))
        self._limited = []

    def close(self) -> None:
        """Give the disk back, with all that is on it."""
        self.empty()
        if self.mounted:
            self.mounted = False  # lazily, should a process that was broken off still be there
            subprocess.run(["umount", "--lazy", str(self.folder)], check=True)

    def _limit(self) -> None:
        for process in self._processes():
            with suppress(psutil.Error):
                process.rlimit(psutil.RLIMIT_FSIZE, (0, psutil.RLIM_INFINITY))
                self._limited.append(process)

