"""A rampside command that goes on, as in a terminal of its own. For tests."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import threading
import time
from pathlib import Path
from types import TracebackType
from typing import Self

import psutil

RAMPSIDE = Path(sys.executable).parent / "rampside"
DEADLINE_S = 40.0


class Running:
    """The command, every line that it prints, and the processes that it has started.

    ``typing``: its input is a pipe, for :meth:`type`.
    """

    def __init__(self, *words: object, typing: bool = False) -> None:
        self.lines: list[str] = []
        self._said = threading.Condition()
        self._process = subprocess.Popen(
            [str(RAMPSIDE), *map(str, words)],
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            stdin=subprocess.PIPE if typing else subprocess.DEVNULL,
            text=True,
            start_new_session=True,
            env={**os.environ, "COLUMNS": "200"},
        )
        self._thread = threading.Thread(target=self._listen, daemon=True)
        self._thread.start()

    def type(self, line: str) -> None:
        """Type a line and Enter."""
        assert self._process.stdin is not None
        self._process.stdin.write(f"{line}\n")
        self._process.stdin.close()

    @property
    def pid(self) -> int:
        """The number of the command's process."""
        return self._process.pid

    @property
    def text(self) -> str:
        """All that it has printed."""
        with self._said:
            return "\n".join(self.lines)

    def wait_for(self, text: str, times: int = 1, timeout_s: float = DEADLINE_S) -> None:
        """Wait until it has printed ``text`` so often; fails when it ends before."""
        with self._said:
            found = self._said.wait_for(
                lambda: self._count(text) >= times or not self._thread.is_alive(), timeout_s
            )
            assert found and self._count(text) >= times, f"no {text!r} in:\n" + "\n".join(self.lines)

    def wait_until_all_work(self) -> None:
        """Wait for a line with a field that names no process as still starting or waiting."""

        def works(line: str) -> bool:
            return " T | " in line and not line.endswith((" starting", " waiting"))

        with self._said:
            found = self._said.wait_for(
                lambda: any(map(works, self.lines)) or not self._thread.is_alive(), DEADLINE_S
            )
            assert found and self._thread.is_alive(), "\n".join(self.lines)

    def after(self, label: str) -> str:
        """What follows a label at the beginning of a line, once that has been printed."""
        self.wait_for(label)
        with self._said:
            return next(
                line.removeprefix(label).strip() for line in self.lines if line.startswith(label)
            )

    @property
    def run(self) -> Path:
        """The folder of the run."""
        return Path(self.after("Run:"))

    def children(self) -> dict[str, psutil.Process]:
        """The processes that it has started, by the module and its words."""
        found = {}
        for child in psutil.Process(self._process.pid).children():
            try:
                line = child.cmdline()
            except psutil.Error:
                continue
            if "-m" in line:
                words = line[line.index("-m") + 1 :]
                name = words[2] if words[0] in ("acquire.reader", "acquire.relay") else words[0]
                found[name] = child
        return found

    def send(self, number: signal.Signals) -> None:
        """Send a signal to the command alone."""
        self._process.send_signal(number)

    def wait(self, timeout_s: float = DEADLINE_S) -> int:
        """Its exit status."""
        status = self._process.wait(timeout_s)
        self._thread.join(timeout_s)
        return status

    def end(self, number: signal.Signals = signal.SIGINT) -> tuple[int, float]:
        """Send a signal; the exit status and how long it took, in seconds."""
        began = time.monotonic()
        self.send(number)
        status = self._process.wait(DEADLINE_S)
        took_s = time.monotonic() - began
        self._thread.join(DEADLINE_S)
        return status, took_s

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        if self._process.poll() is None:
            self._process.kill()
            self._process.wait()
        self._thread.join(DEADLINE_S)
        assert self._process.stdout is not None
        self._process.stdout.close()
        if self._process.stdin is not None:
            self._process.stdin.close()
        if error is not None:
            print(self.text)

    def _count(self, text: str) -> int:
        return sum(text in line for line in self.lines)

    def _listen(self) -> None:
        assert self._process.stdout is not None
        for line in self._process.stdout:
            with self._said:
                self.lines.append(line.rstrip("\n"))
                self._said.notify_all()
        with self._said:
            self._said.notify_all()
