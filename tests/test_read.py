"""``rampside read``: one reader alone, heard at the addresses that it says."""

from __future__ import annotations

import subprocess
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest
from ramp_bench import RampBench
from running import RAMPSIDE, Running

from acquire.bus import Endpoint, Subscriber, free_endpoints
from acquire.bus.keys import KeyFolder
from acquire.run_folder import open_run
from analyse.estimate_table import ESTIMATES
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


def test_another_address_needs_keys_and_says_what_to_do(config: Path, tmp_path: Path) -> None:
    keys = tmp_path / "keys"
    config.write_text(f'{config.read_text()}\n[keys]\nfolder = "{keys}"\n')
    line = [str(RAMPSIDE), "read", str(config), "magnet", "--host"]
    for host, message in [
        ("192.0.2.7", "make it by: rampside keys make NAME"),
        ("0.0.0.0", "is not the address of one computer"),
        ("cryostat", "is no address of the bus"),
    ]:
        done = subprocess.run([*line, host], capture_output=True, text=True, timeout=60, check=False)
        assert (done.returncode, message in done.stderr) == (2, True), done.stderr
    KeyFolder(keys).make("desk")  # the address is of documentation, and no computer has it
    done = subprocess.run([*line, "192.0.2.7"], capture_output=True, text=True, timeout=60, check=False)
    assert (done.returncode, "is not an address of this computer" in done.stderr) == (2, True)
    assert not (tmp_path / "runs").exists()


def elsewhere(config: Path, addresses: Endpoint, keys: KeyFolder) -> Path:
    """The same rig, its magnet read on the computer "cryostat" with these keys."""
    section = (
        f'elsewhere = {{ publish = "{addresses.publish}", answer = "{addresses.answer}", '
        'computer = "cryostat" }'
    )
    name = 'name = "magnet"'
    text = config.read_text().replace(name, f"{name}\n{section}")
    path = config.with_name(f"{keys.path.name}.toml")
    path.write_text(f'{text}\n[keys]\nfolder = "{keys.path}"\n')
    return path


def test_two_computers_with_keys_and_a_stranger(
    config: Path, tmp_path: Path, wait_for: Callable[..., None]
) -> None:
    """Several loopback addresses stand for several computers."""
    free = free_endpoints(["readings/magnet"])["readings/magnet"]
    addresses = Endpoint(*(one.replace("127.0.0.1", "127.0.0.2") for one in
                           (free.publish, free.answer)))  # fmt: skip
    cryostat, desk, stranger = (
        KeyFolder(tmp_path / name) for name in ("cryostat", "desk", "stranger")
    )
    for keys in (cryostat, desk, stranger):
        keys.make(keys.path.name)
    for keys in (desk, stranger):
        keys.accept(cryostat.path / "cryostat.pub")
    cryostat.accept(desk.path / "desk.pub")
    runs = tmp_path / "runs"
    words = ("--port", 0, "--no-browser", "--folder", runs)
    with Running("read", elsewhere(config, addresses, cryostat), "magnet", "--folder", runs) as reader:
        reader.wait_for("readings; B ")
        with Running("watch", elsewhere(config, addresses, stranger), *words) as watch:
            watch.wait_for("'cryostat' refused our key")
            reader.wait_for(f"refused somebody at 127.0.0.1 with the key {stranger.own().public}")
            assert watch.end()[0] == 0
        with Running("watch", elsewhere(config, addresses, desk), *words) as watch:
            watch.wait_until_all_work()
            live = open_run(watch.run)
            wait_for(lambda: len(list(live.rows(ESTIMATES))) > 5, "estimates", 60)
            assert watch.end()[0] == 0
        assert reader.end()[0] == 0
        assert "'cryostat' refused our key" not in watch.text
    run = open_run(watch.run)
    rows = list(run.rows(reading_tables(run.rig)["readings/magnet"]))
    assert sum(row[3] == "ok" for row in rows) > 5
    assert "relay" in [row[3] for row in rows]
    line = [str(RAMPSIDE), "replay", str(run.path)]
    done = subprocess.run(line, capture_output=True, text=True, timeout=60, check=False)
    assert "came out again to the last bit." in done.stderr, done.stderr


def test_a_watch_without_the_keys_does_not_begin(config: Path, tmp_path: Path) -> None:
    desk = KeyFolder(tmp_path / "desk")
    path = elsewhere(config, Endpoint("tcp://192.0.2.7:42001", "tcp://192.0.2.7:42002"), desk)
    for command, message in [
        ("watch", "make it by: rampside keys make NAME"),
        ("check", "make it by: rampside keys make NAME"),
        ("watch", "no public key of 'cryostat' (there are: desk)"),
    ]:
        line = [str(RAMPSIDE), command, str(path)]
        done = subprocess.run(line, capture_output=True, text=True, timeout=60, check=False)
        assert (done.returncode, message in done.stderr) == (2, True), done.stderr
        if command == "check":
            desk.make("desk")
    assert not (tmp_path / "runs").exists()


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
