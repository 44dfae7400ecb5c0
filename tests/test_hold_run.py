"""Holding the field end to end: the demo as typed, its laboratory, its estimator killed."""

from __future__ import annotations

import socket
import subprocess
from pathlib import Path

from running import DEADLINE_S, RAMPSIDE, Running
from small_laboratory import write_small_laboratory
from test_watch import assert_whole

from acquire.config import load
from acquire.hold.record import was_claimed
from acquire.run_folder import open_run
from analyse.estimate_table import EVENTS


def demo(tmp_path: Path, *more: object) -> Running:
    """A demo whose supply can be held, with a person at the keyboard."""
    config = write_small_laboratory(tmp_path / "small.toml", hold=True)
    words = ("--config", config, "--port", 0, "--no-browser", "--folder", tmp_path / "runs")
    return Running("demo", *words, *more, typing=True)


def heard(tmp_path: Path) -> int:
    """How often the command has come to the simulated supply."""
    rig, _ = load(tmp_path / "small.toml")
    assert rig.laboratory is not None
    with socket.create_connection(("127.0.0.1", rig.laboratory.magnet.port), DEADLINE_S) as line:
        line.settimeout(DEADLINE_S)
        line.sendall(b"SIMULATE:HEARD? PAUSE\n")
        return int(line.makefile().readline())


def hold_events(run: Path) -> list[str]:
    """What happened to the holding of the field, without what chance and a slow machine decide:
    whether there was time for the trial, and whether the verdict came and went before."""
    codes = [str(row[4]) for row in open_run(run).rows(EVENTS)]
    found = [code for code in codes if code.startswith("hold_") and code != "hold_reached"]
    while "hold_waits" in found:
        at = found.index("hold_waits")
        del found[at - 1 : at + 1]
    return found


def test_armed_in_the_terminal_and_held_when_stable(tmp_path: Path) -> None:
    with demo(tmp_path, "--arm-hold") as running:
        code = running.after("Code:")
        for text in ("A superconducting magnet can quench", 'Sent:     "PAUSE\\n" to TCPIP'):
            assert text in running.text
        running.type(code)
        running.wait_for("The field is held: it stands at")
        assert heard(tmp_path) == 1
        assert running.end()[0] == 0
    assert hold_events(running.run) == [
        "hold_armed", "hold_begun", "hold_connected", "hold_allowed", "hold_sending",
        "hold_answered", "hold_held",
    ]  # fmt: skip
    assert_whole(running.run, tmp_path)


def test_the_estimator_killed_between_decision_and_command(tmp_path: Path) -> None:
    with demo(tmp_path, "--arm-hold") as running:
        running.type(running.after("Code:"))
        running.wait_for("About to ask the magnet supply")
        running.children()["analyse.service"].kill()
        running.wait_for("estimator works again")
        sent = was_claimed(running.run)
        running.wait_for("The field is held" if sent else "Disarmed, and nothing was sent")
        assert heard(tmp_path) == int(sent)
        assert running.end()[0] == 0
    assert hold_events(running.run)[-1] == ("hold_held" if sent else "hold_disarmed")
    assert_whole(running.run, tmp_path)


def test_nothing_to_arm_is_a_wrong_command_line(tmp_path: Path) -> None:
    config = write_small_laboratory(tmp_path / "small.toml")
    line = [str(RAMPSIDE), "demo", "--config", str(config), "--arm-hold", "--no-browser"]
    done = subprocess.run(line, capture_output=True, text=True, timeout=DEADLINE_S, check=False)
    assert done.returncode == 2
    assert "--arm-hold needs a [hold]" in done.stderr
