"""What ``live.json`` says of a run that goes on, and whether that is still true."""

from __future__ import annotations

import os
import time
from dataclasses import dataclass
from pathlib import Path

from acquire.bus import Endpoint


@dataclass(frozen=True)
class LiveRun:
    """What ``live.json`` says: who watches this run, and where its processes meet.

    ``monotonic_start`` is ``time.monotonic()`` at the run's start; ``requests`` is the address
    of the estimator's inbox; ``boot`` names the start of the machine, empty where that is not known;
    ``hold`` is the address of whoever decides about holding the field, empty where nobody does;
    ``unfinished``: its supervisor ended in order, but before all estimates were made.
    """

    run: str
    pid: int
    monotonic_start: float
    started_utc: str
    endpoints: dict[str, Endpoint]
    requests: str
    boot: str = ""
    hold: str = ""
    unfinished: bool = False

    @property
    def machine_restarted(self) -> bool:
        """Whether the machine has been started anew since the run's start."""
        before = self.boot and (now := boot_id()) and now != self.boot
        return bool(before) or time.monotonic() < self.monotonic_start

    @property
    def alive(self) -> bool:
        """Whether the supervisor is still there; if not, the run has crashed."""
        if self.machine_restarted or self.unfinished:
            return False
        run_age_s = time.monotonic() - self.monotonic_start
        try:
            os.kill(self.pid, 0)
        except ProcessLookupError:
            return False
        except PermissionError:
            pass  # somebody else's process
        return _process_age_s(self.pid) > run_age_s - 1.0  # else a later process of this number


def boot_id() -> str:
    """A name for this start of the machine; empty where the system does not tell."""
    try:
        return Path("/proc/sys/kernel/random/boot_id").read_text().strip()
    except OSError:
        return ""


def _process_age_s(pid: int) -> float:
    """How long ago a process was started; infinity where the system does not tell."""
    try:
        fields = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()
        ticks = int(fields[19])  # field 22 of proc(5), counted from the machine's start
    except (OSError, ValueError, IndexError):
        return float("inf")
    return time.clock_gettime(time.CLOCK_BOOTTIME) - ticks / os.sysconf("SC_CLK_TCK")
