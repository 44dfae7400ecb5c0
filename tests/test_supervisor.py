"""The supervisor over small processes of Python that stand in for those of a run."""

from __future__ import annotations

import os
import signal
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

import psutil
import pytest

from dashboard.pauses import Pauses
from dashboard.supervisor import ProcessNews, Role, Supervisor

Wait = Callable[..., None]

LIVES = "import signal; print('begun', flush=True); signal.pause()"
DIES = "import sys; sys.exit('no such instrument')"
DEAF = (
    "import signal; signal.signal(signal.SIGTERM, signal.SIG_IGN);"
    "print('begun', flush=True);\nwhile True: signal.pause()"
)
ORDERLY = (
    "import signal, sys; signal.signal(signal.SIGTERM, lambda *_: sys.exit(0));"
    "print('begun', flush=True); signal.pause()"
)
PARENT = (
    "import subprocess, sys, signal;"
    f"child = subprocess.Popen([sys.executable, '-c', {LIVES!r}], stdout=subprocess.DEVNULL);"
    "print('child', child.pid, flush=True); signal.pause()"
)


class Watched:
    """A supervisor with what it told and heard, and a clock of ours."""

    def __init__(self, programs: dict[str, str], ready: bool = True, within_s: float = 5.0) -> None:
        self.now = 1000.0
        self.ready = ready
        self.news: list[ProcessNews] = []
        self.lines: list[tuple[str, str]] = []
        roles = [
            Role(name, (sys.executable, "-c", text), lambda since: self.ready, within_s)
            for name, text in programs.items()
        ]
        self.supervisor = Supervisor(
            roles, self.news.append, lambda *said: self.lines.append(said), lambda: self.now
        )

    def happened(self) -> list[str]:
        """What was told so far, as role: happening; looks anew."""
        self.supervisor.poll()
        return [f"{news.role}: {news.happening}" for news in self.news]

    def said(self, role: str) -> list[str]:
        """The lines that a process has written."""
        return [line for name, line in self.lines if name == role]


@contextmanager
def watched(programs: dict[str, str], **options: object) -> Iterator[Watched]:
    """Start the programs; kill what is left of them at the end."""
    stand = Watched(programs, **options)  # type: ignore[arg-type]
    stand.supervisor.start()
    try:
        yield stand
    finally:
        stand.supervisor.close()


def test_pauses_double_up_to_a_limit_and_begin_again_after_health() -> None:
    pauses = Pauses()
    assert [pauses.after(1.0) for _ in range(7)] == [0.5, 1.0, 2.0, 4.0, 8.0, 10.0, 10.0]
    assert pauses.after(60.0) == 0.5
    assert pauses.after(59.9) == 1.0


def test_ready_is_told_once() -> None:
    with watched({"a": LIVES}) as stand:
        assert stand.happened() == ["a: ready"]
        assert stand.happened() == ["a: ready"]
        assert stand.supervisor.state("a") == "ready"


def test_a_killed_process_is_started_again_after_its_pause(wait_for: Wait) -> None:
    with watched({"a": LIVES, "b": LIVES}) as stand:
        stand.happened()
        first, other = stand.supervisor.pid("a"), stand.supervisor.pid("b")
        assert first is not None
        os.kill(first, signal.SIGKILL)
        wait_for(lambda: "a: died" in stand.happened(), "its death is noticed")
        assert "killed by signal 9" in stand.news[-1].text
        assert "started again in 0.5 s" in stand.news[-1].text
        stand.now += 0.4
        stand.happened()
        assert stand.supervisor.state("a") == "waiting"
        stand.now += 0.2
        stand.happened()
        assert stand.happened()[-1] == "a: back"
        assert stand.supervisor.pid("a") not in (None, first)
        assert stand.supervisor.pid("b") == other
        assert stand.supervisor.restarts == {"a": 1}


def test_one_that_cannot_live_leaves_the_others_working(wait_for: Wait) -> None:
    with watched({"bad": DIES, "good": LIVES}) as stand:
        for deaths in range(1, 5):
            wait_for(
                lambda deaths=deaths: stand.happened().count("bad: died") == deaths, "it dies again"
            )
            stand.now += 10.0
        assert "ended with status 1; it is started again in 4 s" in stand.news[-1].text
        assert "it said: no such instrument" in stand.news[-1].in_full
        assert stand.supervisor.state("good") == "ready"


def test_one_that_is_not_ready_in_time_is_started_again() -> None:
    with watched({"slow": LIVES}, ready=False, within_s=5.0) as stand:
        stand.now += 4.9
        assert stand.happened() == []
        stand.now += 0.2
        assert stand.happened() == ["slow: not_ready"]
        assert stand.supervisor.pid("slow") is None


def test_one_that_hangs_is_replaced() -> None:
    with watched({"a": LIVES}) as stand:
        stand.happened()
        first = stand.supervisor.pid("a")
        assert first is not None
        os.kill(first, signal.SIGSTOP)
        stand.supervisor.replace("a", "published nothing for 60 s")
        assert stand.news[-1].happening == "hung"
        assert not psutil.pid_exists(first)
        stand.now += 1.0
        assert stand.happened()[-1] == "a: hung"
        assert stand.happened()[-1] == "a: back"


def test_a_program_that_is_not_there_is_tried_again(tmp_path: Path) -> None:
    news: list[ProcessNews] = []
    role = Role("ghost", (str(tmp_path / "nothing"),), lambda since: True)
    supervisor = Supervisor([role], news.append)
    supervisor.start()
    assert supervisor.state("ghost") == "waiting"
    assert "could not be started" in news[0].text
    supervisor.close()


def test_stop_asks_first_and_kills_who_does_not_go(wait_for: Wait) -> None:
    with watched({"orderly": ORDERLY, "deaf": DEAF}) as stand:
        wait_for(lambda: len(stand.lines) == 2, "both have begun")
        assert stand.supervisor.stop(["orderly", "deaf"], 0.5) == ("deaf",)
        assert stand.supervisor.state("orderly") == "ended"
        stand.now += 100.0
        stand.happened()
        assert stand.supervisor.pid("orderly") is None, "what was stopped is not started again"


def test_close_also_ends_what_a_process_has_started(wait_for: Wait) -> None:
    with watched({"parent": PARENT}) as stand:
        wait_for(lambda: stand.said("parent"), "the grandchild has been started")
        grandchild = psutil.Process(int(stand.said("parent")[0].split()[1]))
        stand.supervisor.close()
        wait_for(
            lambda: not grandchild.is_running() or grandchild.status() == psutil.STATUS_ZOMBIE,
            "the grandchild is gone",
        )


def test_ctrl_c_in_the_terminal_does_not_reach_the_processes() -> None:
    with watched({"a": LIVES}) as stand:
        pid = stand.supervisor.pid("a")
        assert pid is not None
        assert os.getpgid(pid) == pid != os.getpgrp()


def test_modules_in_the_working_directory_do_not_shadow_ours(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, wait_for: Wait
) -> None:
    (tmp_path / "acquire.py").write_text("print('shadow')")
    monkeypatch.chdir(tmp_path)
    with watched({"a": "import acquire; print(acquire.__doc__.split()[0])"}) as stand:
        wait_for(lambda: stand.said("a") == ["Getting"], "ours is imported")
