"""What every test is held to: it leaves no process and no socket behind."""

from __future__ import annotations

import gc
import os
import threading
import time
from collections.abc import Callable, Iterator

import psutil
import pytest
from browser import browser

__all__ = ["browser"]  # one browser for all tests of a session

LEFT_OVER_S = 5.0  # how long what a test has ended may take to be gone


def _until(condition: Callable[[], object], timeout_s: float) -> bool:
    """Whether the condition came true in time. Looked at every 10 ms."""
    deadline = time.monotonic() + timeout_s
    pause = threading.Event()
    while not condition():
        if time.monotonic() > deadline:
            return False
        pause.wait(0.01)
    return True


@pytest.fixture
def wait_for() -> Callable[..., None]:
    """``wait_for(condition, what, timeout_s=20)``: go on when it holds, or fail the test."""

    def wait(condition: Callable[[], object], what: str = "", timeout_s: float = 20.0) -> None:
        if not _until(condition, timeout_s):
            pytest.fail(f"not within {timeout_s} s: {what or condition}")

    return wait


def _children() -> set[int]:
    return {child.pid for child in psutil.Process().children(recursive=True)}


def _started_since(before: set[int]) -> set[int]:
    """Children that were not there before, and were not started by one that was: a browser that
    tests share starts processes as it needs them."""
    return {pid for pid in _children() - before if not before & _ancestors(pid)}


def _ancestors(pid: int) -> set[int]:
    try:
        return {parent.pid for parent in psutil.Process(pid).parents()}
    except psutil.NoSuchProcess:
        return set()


def _sockets() -> set[str]:
    """The sockets of this process, by their number in the kernel; none where it does not tell."""
    found: set[str] = set()
    try:
        names = os.listdir("/proc/self/fd")
    except FileNotFoundError:
        return found
    for name in names:
        try:
            target = os.readlink(f"/proc/self/fd/{name}")
        except FileNotFoundError:
            continue
        if target.startswith("socket:"):
            found.add(target)
    return found


@pytest.fixture(autouse=True)
def nothing_left_over() -> Iterator[None]:
    """Fail a test after which a child process or a socket is left.

    What fixtures of a wider scope have started before the test is theirs, and not counted.
    """
    children, sockets = _children(), _sockets()
    yield

    def gone() -> bool:
        return not _started_since(children) and _sockets() <= sockets

    if gone() or (gc.collect() >= 0 and _until(gone, LEFT_OVER_S)):
        return
    left = [psutil.Process(pid).cmdline() for pid in _started_since(children)]
    pytest.fail(f"left over: processes {left}, sockets {sorted(_sockets() - sockets)}")
