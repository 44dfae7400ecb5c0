"""End to end: commands as typed, instruments on sockets, a run's folder at the end."""

from __future__ import annotations

import re
import signal
import subprocess
import urllib.request
from collections.abc import Callable, Iterator
from pathlib import Path

import psutil
import pytest
from ramp_bench import RampBench
from running import RAMPSIDE, Running
from small_laboratory import DENSITY_PER_M2, MOBILITY, write_small_laboratory

from acquire.run_folder import open_run
from analyse.estimate_table import ESTIMATES, EVENTS
from dashboard.streams import reading_tables

ENDS_WITHIN_S = 3.0
READERS = {"magnet", "lockin_xx", "lockin_xy"}
WATCHING = {*READERS, "analyse.service", "dashboard.page"}


@pytest.fixture
def bench() -> Iterator[RampBench]:
    """Three instruments before a Hall bar; the ramp takes 40 s, longer than any test of it."""
    with RampBench(steps=400, wait=5, period_s=0.1) as bench:
        yield bench


@pytest.fixture
def demo(tmp_path: Path) -> Iterator[Running]:
    """A demo on a small laboratory, with all of its processes at work."""
    config = write_small_laboratory(tmp_path / "small.toml")
    words = ("--config", config, "--port", 0, "--no-browser", "--folder", tmp_path / "runs")
    with Running("demo", "--exit", *words) as demo:
        demo.wait_until_all_work()
        yield demo


@pytest.fixture
def watch(bench: RampBench, tmp_path: Path) -> Iterator[Running]:
    """A watch on them, with all of its processes at work."""
    config = bench.write_config(tmp_path / "rig.toml")
    words = ("watch", config, "--port", 0, "--no-browser", "--folder", tmp_path / "runs")
    with Running(*words) as watch:
        watch.wait_until_all_work()
        yield watch


def replay(run: Path, copy: Path) -> subprocess.CompletedProcess[str]:
    """Replay a run and write its estimates to a new file."""
    line = [str(RAMPSIDE), "replay", str(run), "--estimates", str(copy)]
    return subprocess.run(line, capture_output=True, text=True, timeout=60, check=False)


def assert_whole(run: Path, tmp_path: Path) -> None:
    """Every table is complete, nothing says that the run goes on, a replay gives it again."""
    assert not (run / "live.json").exists()
    folder = open_run(run)
    for table in reading_tables(folder.rig).values():
        rows = list(folder.rows(table))
        assert [row[0] for row in rows] == list(range(len(rows)))
        assert rows[-1][3] == "end"
    copy = tmp_path / f"again-{run.name}.csv"
    done = replay(run, copy)
    assert done.returncode == 0, done.stderr
    assert "came out again to the last bit." in done.stderr
    assert copy.read_bytes() == (run / "estimates.csv").read_bytes()


def test_the_demo_from_the_first_reading_to_the_end_of_the_ramp(
    demo: Running, tmp_path: Path
) -> None:
    assert set(demo.children()) == {*WATCHING, "acquire.laboratory"}
    assert demo.wait() == 0
    assert "The ramp is over." in demo.text
    assert "bar: stable since" in demo.text
    assert demo.text.rstrip().endswith(f"Run:  {demo.run}")
    assert_whole(demo.run, tmp_path)
    run = open_run(demo.run)
    last = dict(zip(ESTIMATES.names, list(run.rows(ESTIMATES))[-1]))
    assert last["sheet_density_per_m2_low"] < DENSITY_PER_M2 < last["sheet_density_per_m2_high"]
    assert last["mobility_m2_per_V_s_low"] < MOBILITY < last["mobility_m2_per_V_s_high"]
    assert last["carriers"] == "electrons"
    assert {entry["reader"] for entry in run.instruments()} == READERS


def test_the_laboratory_killed_in_mid_ramp(demo: Running, tmp_path: Path) -> None:
    demo.children()["acquire.laboratory"].kill()
    demo.wait_for("simulated laboratory works again")
    demo.wait_for("T | ", demo.text.count("T | ") + 2)
    status, took_s = demo.end(signal.SIGHUP)  # as when the terminal is closed
    assert (status, took_s < ENDS_WITHIN_S) == (0, True), demo.text
    assert_whole(demo.run, tmp_path)
    statuses = {
        row[3]
        for table in reading_tables(open_run(demo.run).rig).values()
        for row in open_run(demo.run).rows(table)
    }
    assert "no_answer" in statuses


def test_the_page_stays_when_the_ramp_is_over_and_comes_back_later(tmp_path: Path) -> None:
    words = ("--port", 0, "--no-browser", "--folder", tmp_path / "runs")
    with RampBench(steps=30, wait=2) as bench, Running(
        "watch", config := bench.write_config(tmp_path / "rig.toml"), *words
    ) as watch:
        watch.wait_for("The ramp is over.")
        watch.wait_for("Ctrl-C ends the watch and the page.")
        with urllib.request.urlopen(watch.after("Page:"), timeout=10) as page:
            assert page.status == 200
        assert watch.end()[0] == 0
    assert (watch.run / "config.toml").read_bytes() == config.read_bytes()
    assert_whole(watch.run, tmp_path)
    with Running("page", watch.run, "--port", 0, "--no-browser") as page_command:
        page_command.wait_for("Open it in a browser.")
        with urllib.request.urlopen(page_command.after("Page:"), timeout=10) as page:
            assert page.status == 200
        assert page_command.end()[0] == 0


def test_ctrl_c_ends_in_time_and_in_order(watch: Running, tmp_path: Path) -> None:
    children = watch.children()
    assert set(children) == WATCHING
    status, took_s = watch.end(signal.SIGINT)
    assert status == 0, watch.text
    assert took_s < ENDS_WITHIN_S
    assert not any(child.is_running() for child in children.values())
    assert_whole(watch.run, tmp_path)


def test_any_process_killed_in_mid_ramp_changes_nothing(
    watch: Running, bench: RampBench, tmp_path: Path, wait_for: Callable[..., None]
) -> None:
    roles = {
        "reader lockin_xy": "lockin_xy",
        "reader magnet": "magnet",
        "estimator": "analyse.service",
        "page": "dashboard.page",
    }
    wait_for(lambda: bench.field_T > 0.02, "the ramp has begun")
    for role, name in roles.items():
        watch.children()[name].kill()
        watch.wait_for(f"{role} was killed by signal 9")
    for role in roles:
        watch.wait_for(f"{role} works again")
    assert bench.field_T < 1.0, "the ramp still goes on"
    watch.wait_for("readings | bar:", watch.text.count("readings | bar:") + 1)
    status, took_s = watch.end(signal.SIGTERM)
    assert (status, took_s < ENDS_WITHIN_S) == (0, True), watch.text
    assert_whole(watch.run, tmp_path)
    events = [row[2:6] for row in open_run(watch.run).rows(EVENTS)]
    for role in roles:
        for code in ("died", "back"):
            assert any(
                (kind, told) == ("process", code) and str(text).startswith(role)
                for kind, _, told, text in events
            ), (role, code, events)


def test_a_full_disk_is_told_everywhere_and_costs_nothing(
    watch: Running, bench: RampBench, tmp_path: Path, wait_for: Callable[..., None]
) -> None:
    """Files that may not grow stand for the disk: the system refuses a write in the same place."""
    wait_for(lambda: bench.field_T > 0.02, "the ramp has begun")
    full = [watch.children()[name] for name in ("magnet", "analyse.service")]
    for process in full:
        process.rlimit(psutil.RLIMIT_FSIZE, (0, psutil.RLIM_INFINITY))
    watch.wait_for("readings/magnet: cannot record: file too large")
    watch.wait_for("reader magnet: nothing can be recorded, so nothing is published")
    full[0].rlimit(psutil.RLIMIT_FSIZE, (psutil.RLIM_INFINITY, psutil.RLIM_INFINITY))
    watch.wait_for("reader magnet: readings are recorded again")
    watch.wait_for("estimates: cannot record: file too large")
    watch.wait_for("estimator: nothing can be recorded, so nothing is published")
    full[1].rlimit(psutil.RLIMIT_FSIZE, (psutil.RLIM_INFINITY, psutil.RLIM_INFINITY))
    watch.wait_for("estimator: estimates and events are recorded again")
    run = open_run(watch.run)

    def told() -> set[tuple[object, ...]]:
        return {(row[4], str(row[5]).partition(":")[0]) for row in run.rows(EVENTS)}

    wanted = {("cannot_record", "readings/magnet"), ("recorded_again", "readings/magnet")}
    wait_for(lambda: told() >= {*wanted, ("recorded_again", "estimates")}, "events say it")
    assert watch.end()[0] == 0
    assert_whole(watch.run, tmp_path)
    rows = list(run.rows(reading_tables(run.rig)["readings/magnet"]))
    assert {row[3] for row in rows} == {"settings", "ok", "end"}, "no reading was lost"
    assert "started again" not in watch.text


def test_no_orphan_when_the_watch_itself_is_killed_and_the_next_one_closes_its_run(
    demo: Running, tmp_path: Path, wait_for: Callable[..., None]
) -> None:
    children = demo.children()
    assert set(children) == {*WATCHING, "acquire.laboratory"}
    demo.wait_for("readings | bar:", demo.text.count("readings | bar:") + 1)
    demo.send(signal.SIGKILL)
    demo.wait()
    wait_for(
        lambda: not any(_lives(child) for child in children.values()), "its processes end"
    )
    assert (demo.run / "live.json").exists()
    words = ("--port", 0, "--no-browser", "--folder", tmp_path / "runs")
    with Running("watch", tmp_path / "small.toml", *words) as watch:
        watch.wait_for(f"earlier run: {demo.run.name} ended badly.")
        assert watch.end()[0] == 0
    run = open_run(demo.run)
    (mark,) = [row for row in run.rows(EVENTS) if row[2] == "run"]
    assert mark[4] == "ended_badly"
    assert "closed by rampside watch" in str(mark[5])
    assert_whole(demo.run, tmp_path)


def test_a_process_that_cannot_be_asked_is_killed_in_time(watch: Running) -> None:
    stopped = watch.children()["lockin_xx"]
    stopped.suspend()
    status, took_s = watch.end()
    assert status == 0
    assert took_s < ENDS_WITHIN_S
    assert re.search(r"Had to be killed, .*\breader lockin_xx\b", watch.text)
    assert not stopped.is_running()


def test_bounded_by_seconds(bench: RampBench, tmp_path: Path) -> None:
    config = bench.write_config(tmp_path / "rig.toml")
    runs = tmp_path / "runs"
    with Running(
        "watch", config, "--seconds", 1.5, "--port", 0, "--no-browser", "--folder", runs
    ) as watch:
        assert watch.wait() == 0
    assert "The ramp is over" not in watch.text
    assert not (watch.run / "live.json").exists()


def _lives(process: psutil.Process) -> bool:
    try:
        return process.is_running() and process.status() != psutil.STATUS_ZOMBIE
    except psutil.NoSuchProcess:
        return False
