"""The simulated laboratory as a process that can be told to misbehave, stopped, killed, begun anew."""

from __future__ import annotations

import signal
import socket
import subprocess
import sys
from pathlib import Path

from acquire.closing import Closing
from soak.link import LOOPBACK

DEADLINE_S = 30.0


class Laboratory(Closing):
    """One laboratory after the other; all write what they answer to the same file, ``truth``."""

    def __init__(self, config: Path, truth: Path, ports: dict[str, int]) -> None:
        self._config, self._truth, self._ports = config, truth, ports
        self._process: subprocess.Popen[str] | None = None
        self.lives = 0

    @property
    def pid(self) -> int:
        """The process's number."""
        assert self._process is not None
        return self._process.pid

    def start(self) -> None:
        """Begin, with the ramp at its beginning."""
        line = [sys.executable, "-m", "acquire.laboratory", str(self._config)]
        self._process = subprocess.Popen(
            [*line, "--truth", str(self._truth)], stdout=subprocess.PIPE, text=True
        )
        self.lives += 1
        assert self._process.stdout is not None
        assert self._process.stdout.readline().startswith("ready"), "the laboratory did not start"

    def kill(self) -> None:
        """As in a power cut."""
        self._end(signal.SIGKILL)

    def tell(self, instrument: str, command: str) -> str:
        """Have it misbehave; what it says to that."""
        with socket.create_connection((LOOPBACK, self._ports[instrument]), DEADLINE_S) as line:
            line.sendall(f"SIMULATE:{command}\n".encode())
            return line.makefile().readline().strip()

    def close(self) -> None:
        """End it in order."""
        self._end(signal.SIGTERM)

    def _end(self, number: signal.Signals) -> None:
        if self._process is None:
            return
        self._process.send_signal(number)
        self._process.wait(DEADLINE_S)
        assert self._process.stdout is not None
        self._process.stdout.close()
        self._process = None
