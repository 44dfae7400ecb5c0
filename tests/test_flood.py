"""Who listens may be frozen for minutes, late, or slow: nothing is lost, and memory has bounds."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import psutil
import pytest
import row_listener
from row_publisher import TABLE
from test_service import FINISH, LiveBench, process
from two_bars import rig, rows

from acquire.bus import Endpoint, Publisher, ask
from acquire.journal import Journal
from acquire.tables import Row
from analyse.replay import RowMaker, merge_by_time, replay_readings

FREE = Endpoint("tcp://127.0.0.1:0", "tcp://127.0.0.1:0")
FAT = "x" * 2000
ROWS = 12_000  # 24 MB: far more than the queues of 1000 rows and the kernel's buffers hold
MOST_MORE_KB = 20_000  # the queues have 2 MB each; the rest is the allocator's


@pytest.fixture
def publisher(tmp_path: Path) -> Iterator[Publisher]:
    with (
        Journal(tmp_path / "a.csv", TABLE) as journal,
        Publisher("run", TABLE, journal, FREE) as publisher,
    ):
        yield publisher


@contextmanager
def listener(publisher: Publisher) -> Iterator[subprocess.Popen[str]]:
    """A process that listens until all rows have come."""
    where = publisher.endpoint
    line = [sys.executable, row_listener.__file__, where.publish, where.answer, str(ROWS)]
    with subprocess.Popen(line, stdout=subprocess.PIPE, text=True) as one:
        try:
            yield one
        finally:
            one.kill()


def said(one: subprocess.Popen[str]) -> str:
    assert one.stdout is not None
    return one.stdout.readline()


def memory_kB() -> int:
    return psutil.Process().memory_info().rss // 1024


def flood(publisher: Publisher) -> None:
    """Publish all rows as fast as it goes."""
    for k in range(ROWS):
        publisher.publish(float(k), FAT, 1.0)


def test_a_frozen_listener_loses_nothing_and_costs_nobody_else_memory(
    publisher: Publisher,
) -> None:
    publisher.publish(0.0, "the first", 1.0)
    with listener(publisher) as frozen:
        assert said(frozen) == "there\n"
        frozen.send_signal(signal.SIGSTOP)
        before = memory_kB()
        flood(publisher)
        assert memory_kB() - before < MOST_MORE_KB, "what it does not take is not kept for it"
        frozen.send_signal(signal.SIGCONT)
        filled, most_kB = map(int, said(frozen).split())
        assert frozen.wait(60) == 0
    assert filled > 1000, "the queues have overflown, or nothing was tried here"
    with listener(publisher) as late:
        assert said(late) == "there\n"
        _, late_kB = map(int, said(late).split())
        assert late.wait(60) == 0
    assert abs(most_kB - late_kB) < MOST_MORE_KB, "neither kept what it could not use yet"


def test_a_frozen_estimator_goes_on_as_if_it_had_not_been(
    tmp_path: Path, wait_for: Callable[..., None]
) -> None:
    whole: dict[str, list[Row]] = {"estimates": [], "events": []}
    for record in replay_readings(RowMaker(rig()), merge_by_time(rows())):
        whole[record.stream].append(record.cells)
    readings = list(merge_by_time(rows()))
    with LiveBench(tmp_path) as bench, process(bench.run.path, "--parent", str(os.getpid())) as one:
        assert one.stdout is not None
        assert one.stdout.readline() == "ready\n"
        bench.publish(readings[:600])
        wait_for(lambda: len(bench.tables()["estimates"]) > 40, "some estimates")
        one.send_signal(signal.SIGSTOP)
        bench.publish(readings[600:])
        written = len(bench.tables()["estimates"])
        one.send_signal(signal.SIGCONT)
        count = len(whole["estimates"])
        assert written < count
        assert ask(bench.live.requests, FINISH, 30.0)["estimates"] == count
        one.send_signal(signal.SIGTERM)
        assert one.wait(20) == 0
        tables = bench.tables()
    assert {name: [row[1:] for row in found] for name, found in tables.items()} == whole
