"""``rampside read``: one reader alone, heard at the addresses that it says."""

from __future__ import annotations

import subprocess
from collections.abc import Iterator
from pathlib import Path

import pytest
from ramp_bench import RampBench
from running import RAMPSIDE, Running

from acquire.bus import Subscriber, free_endpoints
from acquire.run_folder import open_run
from dashboard.streams import reading_tables


@pytest.fixture
def config(tmp_path: Path) -> Iterator[Path]:
    """A rig of three instruments that answer."""
    with RampBench() as bench:
        yield bench.write_config(tmp_path / "rig.toml")


def test_one_reader_is_heard_and_ends_in_order(config: Path, tmp_path: Path) -> None:
    with Running("read", config, "magnet", "--folder", tmp_path / "runs") as reader:
        reader.wait_for("readings; B ")
        run = open_run(reader.run)
        live = run.live()
        assert live is not None
        assert live.endpoints["readings/magnet"].publish in reader.text
        table = reading_tables(run.rig)["readings/magnet"]
        with Subscriber(run.run_id, live.endpoints, {table.stream: table}) as subscriber:
            assert subscriber.receive(10.0)[0][1][3] == "settings"
        status, took_s = reader.end()
    assert (status, took_s < 3.0) == (0, True)
    rows = list(run.rows(table))
    assert rows[-1][3] == "end"
    assert run.live() is None


def test_the_ports_as_asked_for(config: Path, tmp_path: Path) -> None:
    words = ("--publish-port", 5411, "--answer-port", 5411)
    line = [str(RAMPSIDE), "read", str(config), "magnet", *map(str, words)]
    done = subprocess.run(line, capture_output=True, text=True, timeout=60, check=False)
    assert done.returncode == 2
    assert "must differ" in done.stderr


def test_a_watch_takes_over_what_a_reader_elsewhere_reads(config: Path, tmp_path: Path) -> None:
    addresses = free_endpoints(["readings/magnet"])["readings/magnet"]
    elsewhere = f'elsewhere = {{ publish = "{addresses.publish}", answer = "{addresses.answer}" }}'
    name = 'name = "magnet"'
    config.write_text(config.read_text().replace(name, f"{name}\n{elsewhere}"))
    runs = tmp_path / "runs"
    words = ("watch", config, "--port", 0, "--no-browser", "--folder", runs)
    with Running("read", config, "magnet", "--folder", runs) as reader:
        reader.wait_for("readings; B ")
        assert addresses.publish in reader.text
        with Running(*words) as watch:
            watch.wait_until_all_work()
            assert watch.children()["magnet"].cmdline()[2] == "acquire.relay"
            assert watch.end()[0] == 0
        assert reader.end()[0] == 0
    run = open_run(watch.run)
    rows = list(run.rows(reading_tables(run.rig)["readings/magnet"]))
    assert sum(row[3] == "ok" for row in rows) > 5
