"""A terminal that goes away takes nothing with it: all ends in order, and nothing is left."""

from __future__ import annotations

import os
import pty
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import psutil
import pytest
from ramp_bench import RampBench
from running import RAMPSIDE

from acquire.run_folder import open_run
from dashboard.streams import reading_tables

ENDS_WITHIN_S = 3.0
_IN_THE_TERMINAL = (
    "import fcntl, os, sys, termios; fcntl.ioctl(0, termios.TIOCSCTTY, 0);"
    "os.execv(sys.argv[1], sys.argv[1:])"
)


class Terminal:
    """A watch in a terminal of its own, which can be closed."""

    def __init__(self, *words: object) -> None:
        self._master, slave = pty.openpty()
        self.process = subprocess.Popen(
            [sys.executable, "-c", _IN_THE_TERMINAL, str(RAMPSIDE), *map(str, words)],
            stdin=slave,
            stdout=slave,
            stderr=slave,
            start_new_session=True,
        )
        os.close(slave)
        self._reading = threading.Thread(target=self._read, daemon=True)
        self._closed = threading.Event()
        self._reading.start()

    def close(self) -> None:
        """As when the window is closed or the line to another computer breaks."""
        self._closed.set()
        self._reading.join(20.0)
        os.close(self._master)

    def _read(self) -> None:
        os.set_blocking(self._master, False)
        while not self._closed.wait(0.02):
            try:
                os.read(self._master, 65_536)
            except OSError:
                continue


@pytest.fixture
def bench() -> Iterator[RampBench]:
    """Three instruments with a ramp longer than the test."""
    with RampBench(steps=400, wait=5, period_s=0.1) as bench:
        yield bench


@pytest.fixture
def words(bench: RampBench, tmp_path: Path) -> tuple[object, ...]:
    """The command line of a watch on them."""
    config = bench.write_config(tmp_path / "rig.toml")
    return ("watch", config, "--port", 0, "--no-browser", "--folder", tmp_path / "runs")


def test_a_terminal_that_is_closed_ends_all_in_order(
    words: tuple[object, ...], tmp_path: Path, wait_for: Callable[..., None]
) -> None:
    terminal = Terminal(*words)
    with ended(terminal.process):
        wait_for(lambda: _estimates(tmp_path / "runs") > 5, "the watch works", 60.0)
        children = _children(terminal.process)
        began = time.monotonic()
        terminal.close()  # the system sends SIGHUP, and what is written fails from now on
        assert terminal.process.wait(20.0) == 0
        assert time.monotonic() - began < ENDS_WITHIN_S
        assert not any(child.is_running() for child in children)
    _assert_ended_in_order(tmp_path / "runs")


def test_when_nobody_reads_what_it_says_any_more_it_goes_on_until_it_is_asked_to_end(
    words: tuple[object, ...], tmp_path: Path, wait_for: Callable[..., None]
) -> None:
    """As in ``rampside watch ... | less`` after q; rich would exit there."""
    pipe = subprocess.PIPE
    process = subprocess.Popen(
        [str(RAMPSIDE), *map(str, words)],
        stdin=pipe, stdout=pipe, stderr=pipe, start_new_session=True,
    )  # fmt: skip
    with ended(process):
        wait_for(lambda: _estimates(tmp_path / "runs") > 5, "the watch works", 60.0)
        for file in (process.stdin, process.stdout, process.stderr):
            assert file is not None
            file.close()
        page = next(one for one in _children(process) if "dashboard.page" in one.cmdline())
        page.kill()  # of which there is something to say

        def another() -> bool:
            names = [child.cmdline() for child in _children(process) if child.pid != page.pid]
            return any("dashboard.page" in name for name in names)

        wait_for(another, "the page is started again", 60.0)
        began = time.monotonic()
        process.send_signal(signal.SIGTERM)
        assert process.wait(20.0) == 0
        assert time.monotonic() - began < ENDS_WITHIN_S
    _assert_ended_in_order(tmp_path / "runs")


@contextmanager
def ended(process: subprocess.Popen[bytes]) -> Iterator[None]:
    """Kill the command if a test leaves it."""
    try:
        yield
    finally:
        if process.poll() is None:
            process.kill()
            process.wait()


def _children(process: subprocess.Popen[bytes]) -> list[psutil.Process]:
    return psutil.Process(process.pid).children(recursive=True)


def _assert_ended_in_order(runs: Path) -> None:
    (path,) = runs.iterdir()
    run = open_run(path)
    assert run.live() is None
    for table in reading_tables(run.rig).values():
        assert list(run.rows(table))[-1][3] == "end"


def _estimates(runs: Path) -> int:
    return sum(path.read_bytes().count(b"\n") for path in runs.glob("*/estimates.csv"))
