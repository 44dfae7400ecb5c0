"""One started process: its life, and the last lines that it said."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import threading
from collections import deque
from collections.abc import Callable, Sequence
from contextlib import suppress

LINES_KEPT = 20
READY = "ready"  # some say so when they are, and more; no news for a person


class Child:
    """A process in a process group of its own, started fresh, whose words are kept.

    A group of its own keeps the terminal's Ctrl-C away from it: the supervisor alone decides who
    ends when. ``hear`` is called with each line that the process writes, from another thread.
    """

    def __init__(self, command: Sequence[str], hear: Callable[[str], None]) -> None:
        self._lines: deque[str] = deque(maxlen=LINES_KEPT)
        self._hear = hear
        self._process = subprocess.Popen(
            command,
            stdin=subprocess.DEVNULL,
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            env=_environment(),
            text=True,
            errors="replace",
            process_group=0,
        )
        self._reader = threading.Thread(target=self._read, daemon=True)
        self._reader.start()

    @property
    def pid(self) -> int:
        """The process's number."""
        return self._process.pid

    @property
    def status(self) -> int | None:
        """The exit status (negative: the signal that killed it); None while it lives."""
        return self._process.poll()

    def last_words(self) -> str:
        """The last line that it wrote, once it has ended; empty if it wrote none."""
        self._reader.join(0.5)
        return self._lines[-1] if self._lines else ""

    def terminate(self) -> None:
        """Ask it to end in order."""
        self._send(signal.SIGTERM)

    def wait(self, timeout_s: float) -> bool:
        """True if it has ended within ``timeout_s``."""
        try:
            self._process.wait(max(timeout_s, 0.0))
        except subprocess.TimeoutExpired:
            return False
        return True

    def kill(self) -> None:
        """End it and whatever it started, now; harmless when it has ended."""
        self._send(signal.SIGKILL)
        self.wait(1.0)

    def close(self) -> None:
        """Let go of a process that has ended."""
        self._reader.join(1.0)
        if self._process.stdout is not None and not self._reader.is_alive():
            self._process.stdout.close()

    def _send(self, number: signal.Signals) -> None:
        if self._process.poll() is None:
            with suppress(ProcessLookupError):
                os.killpg(self._process.pid, number)

    def _read(self) -> None:
        assert self._process.stdout is not None
        for line in self._process.stdout:
            if (text := line.rstrip()) and text.partition(" ")[0] != READY:
                self._lines.append(text)
                self._hear(text)


def python(module: str, *words: object) -> tuple[str, ...]:
    """The command line that runs a module of ours in a process that watches its parent."""
    texts = (str(word) for word in words)
    return (sys.executable, "-m", module, *texts, "--parent", str(os.getpid()))


def _environment() -> dict[str, str]:
    environment = dict(os.environ)
    environment["PYTHONSAFEPATH"] = "1"  # modules in the working directory must not shadow ours
    environment["PYTHONUNBUFFERED"] = "1"  # the last words must get out before a kill
    for library in ("OMP", "OPENBLAS", "MKL"):  # small matrices: threads would only cost
        environment.setdefault(f"{library}_NUM_THREADS", "1")
    return environment
