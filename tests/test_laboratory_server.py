"""The simulated laboratory over real sockets, and its process."""

from __future__ import annotations

import json
import os
import signal
import socket
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path

import pytest

from acquire.config import parse
from acquire.errors import LaboratoryError
from acquire.laboratory.__main__ import main
from acquire.laboratory.bench import Bench
from acquire.laboratory.scenario import Scenario
from acquire.laboratory.server import MOST_CONNECTIONS, LaboratoryServer
from acquire.probe import probe

DEADLINE_S = 20.0
DEMO = (Path(__file__).parents[1] / "configs" / "demo.toml").read_text(encoding="utf-8")
PORTS = (47101, 47102, 47103)


def demo_at(*ports: int) -> str:
    """The demo's configuration with other ports."""
    text = DEMO
    for old, new in zip(PORTS, ports, strict=True):
        text = text.replace(str(old), str(new))
    return text


@dataclass
class Laboratory:
    """A server that this thread steps by hand, on a clock that stands until it is moved."""

    scenario: Scenario
    now: float = 0.0
    lines: list[socket.socket] = field(default_factory=list)

    def __post_init__(self) -> None:
        self.server = LaboratoryServer(Bench(self.scenario), lambda: self.now)

    def connect(self, name: str) -> socket.socket:
        line = socket.create_connection(("127.0.0.1", self.server.ports[name]), DEADLINE_S)
        line.setblocking(False)
        self.lines.append(line)
        return line

    def receive(self, line: socket.socket, done: Callable[[bytes], bool]) -> bytes:
        """Step until what has come is enough, or the line was closed."""
        data, deadline = b"", time.monotonic() + DEADLINE_S
        while not done(data):
            assert time.monotonic() < deadline, data
            self.server.step(0.01)
            try:
                more = line.recv(65_536)
            except BlockingIOError:
                continue
            if not more:
                return data
            data += more
        return data

    def ask(self, line: socket.socket, text: str, end: str = "\n") -> str:
        line.sendall((text + end).encode())
        data = self.receive(line, lambda data: data.endswith(b"\n"))
        return data.decode("latin-1")

    def closed(self, line: socket.socket) -> bool:
        """Whether the other end closes the line without a word."""
        try:
            return self.receive(line, lambda data: data != b"") == b""
        except ConnectionError:
            return True

    def silent(self, line: socket.socket, steps: int = 5) -> bool:
        """Whether nothing comes although the server is at work."""
        for _ in range(steps):
            self.server.step(0.01)
        try:
            return line.recv(1, socket.MSG_PEEK) is None
        except BlockingIOError:
            return True

    def close(self) -> None:
        for line in self.lines:
            line.close()
        self.server.close()


@pytest.fixture
def laboratory() -> Iterator[Laboratory]:
    rig = parse(demo_at(0, 0, 0).replace("::0::", "::1::").encode())
    assert rig.laboratory is not None
    found = Laboratory(rig.laboratory)
    yield found
    found.close()


def test_each_instrument_has_a_port_of_its_own(laboratory: Laboratory) -> None:
    assert set(laboratory.server.ports) == {"lockin_xx", "lockin_xy", "magnet"}
    assert len(set(laboratory.server.ports.values())) == 3
    for name in laboratory.server.ports:
        assert name in laboratory.ask(laboratory.connect(name), "*IDN?")


def test_many_questions_on_many_lines_each_get_their_answer(laboratory: Laboratory) -> None:
    lines = [laboratory.connect("lockin_xx") for _ in range(5)]
    for _ in range(3):
        for line in lines:
            assert laboratory.ask(line, "XYS?").count(",") == 2
            assert laboratory.ask(line, "slope?", "\r\n") == "3\n"
    magnet = laboratory.connect("magnet")
    assert laboratory.ask(magnet, "STATE?") == "0\r\n"


def test_a_question_in_pieces_and_several_at_once(laboratory: Laboratory) -> None:
    line = laboratory.connect("lockin_xx")
    line.sendall(b"SLO")
    assert laboratory.silent(line)
    line.sendall(b"PE?\nSTATUS?\nNONSENSE\n")
    data = laboratory.receive(line, lambda data: data.count(b"\n") == 3)
    assert data == b'3\n0\nERROR -113,"Undefined header"\n'


def test_a_delayed_reply_comes_when_it_is_due_and_a_split_one_in_halves(
    laboratory: Laboratory,
) -> None:
    line = laboratory.connect("lockin_xx")
    laboratory.ask(line, "SIMULATE:BEGIN delay,delay_s=3,replies=1")
    line.sendall(b"SLOPE?\n")
    assert laboratory.silent(line)
    laboratory.now = 2.9
    assert laboratory.silent(line)
    laboratory.now = 3.0
    assert laboratory.receive(line, lambda data: data != b"") == b"3\n"
    laboratory.ask(line, "SIMULATE:BEGIN split,delay_s=1,replies=1")
    line.sendall(b"SLOPE?;SLOPE?\n")
    assert laboratory.receive(line, lambda data: data != b"") == b"3;"
    assert laboratory.silent(line)
    laboratory.now = 5.0
    assert laboratory.receive(line, lambda data: data != b"") == b"3\n"


def test_who_is_late_does_not_hold_up_the_others(laboratory: Laboratory) -> None:
    slow, quick = laboratory.connect("lockin_xx"), laboratory.connect("lockin_xy")
    laboratory.ask(slow, "SIMULATE:BEGIN delay,delay_s=100")
    slow.sendall(b"SLOPE?\n")
    assert laboratory.ask(quick, "SLOPE?") == "24\n"
    assert laboratory.silent(slow)


def test_a_cut_line_is_closed_and_a_new_one_is_answered(laboratory: Laboratory) -> None:
    line = laboratory.connect("lockin_xx")
    laboratory.ask(line, "SIMULATE:BEGIN disconnect,replies=1")
    line.sendall(b"X?\n")
    assert laboratory.closed(line)
    assert laboratory.ask(laboratory.connect("lockin_xx"), "SLOPE?") == "3\n"


def test_an_instrument_without_power_refuses_until_it_is_back(laboratory: Laboratory) -> None:
    line, other = laboratory.connect("lockin_xx"), laboratory.connect("magnet")
    assert laboratory.ask(other, "SIMULATE:BEGIN off,instrument=lockin_xx,lasts_s=5") == "OK\r\n"
    assert laboratory.closed(line)
    with pytest.raises(ConnectionRefusedError):
        laboratory.connect("lockin_xx")
    assert laboratory.ask(other, "STATE?") == "0\r\n"
    laboratory.now = 5.1
    laboratory.server.step(0.0)
    assert laboratory.ask(laboratory.connect("lockin_xx"), "SLOPE?") == "3\n"


def test_nonsense_without_end_and_a_listener_that_never_reads_are_let_go(
    laboratory: Laboratory,
) -> None:
    endless = laboratory.connect("lockin_xx")
    endless.sendall(b"x" * 10_000)
    assert laboratory.closed(endless)
    deaf, deadline = laboratory.connect("lockin_xx"), time.monotonic() + DEADLINE_S
    question = b"*IDN?\n" * 500
    with pytest.raises(ConnectionError):
        while time.monotonic() < deadline:
            try:
                deaf.send(question)
            except BlockingIOError:
                pass
            laboratory.server.step(0.0)
    assert laboratory.ask(laboratory.connect("lockin_xx"), "SLOPE?") == "3\n"


def test_a_line_that_goes_without_a_word_and_one_too_many_do_no_harm(
    laboratory: Laboratory,
) -> None:
    for _ in range(3):
        laboratory.connect("magnet").close()
        laboratory.server.step(0.0)
    for _ in range(MOST_CONNECTIONS + 1):
        last = laboratory.connect("magnet")
        laboratory.server.step(0.1)
    assert laboratory.closed(last)
    assert laboratory.ask(laboratory.lines[-2], "STATE?") == "0\r\n"


def test_a_taken_port_is_named_and_nothing_is_left_open() -> None:
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        taken.listen()
        port = taken.getsockname()[1]
        rig = parse(demo_at(0, port, 0).replace("::0::", "::1::").encode())
        assert rig.laboratory is not None
        with pytest.raises(LaboratoryError, match=f"port {port} for the simulated lockin_xy"):
            LaboratoryServer(Bench(rig.laboratory))


def test_the_readers_of_the_demo_understand_its_instruments() -> None:
    """The same as ``rampside check``: real sockets, VISA, strict replies, tables of codes."""
    rig = parse(demo_at(0, 0, 0).replace("::0::", "::1::").encode())
    assert rig.laboratory is not None
    over = threading.Event()
    with LaboratoryServer(Bench(rig.laboratory)) as server:

        def run() -> None:
            while not over.is_set():
                server.step()

        thread = threading.Thread(target=run)
        thread.start()
        try:
            where = parse(demo_at(*server.ports.values()).encode())
            probes = {reader.name: probe(reader) for reader in where.readers}
        finally:
            over.set()
            thread.join(DEADLINE_S)
    assert all(one.good for one in probes.values()), probes
    assert probes["lockin_xx"].settings == {"time_constant": 0.1, "slope": 4}
    assert probes["lockin_xy"].settings == {"time_constant": 0.1, "slope": 24.0}
    readings = {name: one.reading for name, one in probes.items()}
    assert all(reading is not None and reading.status == "ok" for reading in readings.values())


# --------------------------------------------------------------------------------- process


def start(config: Path, *words: str) -> subprocess.Popen[str]:
    return subprocess.Popen(
        [sys.executable, "-m", "acquire.laboratory", str(config), *words],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
    )  # fmt: skip


@pytest.fixture
def config(tmp_path: Path) -> Path:
    path = tmp_path / "rig.toml"
    path.write_text(demo_at(0, 0, 0).replace("::0::", "::1::"), encoding="utf-8")
    return path


def test_the_process_says_when_it_is_ready_and_ends_when_asked(config: Path) -> None:
    with start(config) as process:
        assert process.stdout is not None
        word, _, told = process.stdout.readline().partition(" ")
        ports = json.loads(told)
        assert word == "ready"
        assert list(ports) == ["lockin_xx", "lockin_xy", "magnet"]
        with socket.create_connection(("127.0.0.1", ports["magnet"]), DEADLINE_S) as line:
            line.sendall(b"*IDN?\n")
            assert b"SIMULATED MAGNET" in line.recv(100)
            process.send_signal(signal.SIGINT)  # the terminal's Ctrl-C is the supervisor's
            line.sendall(b"TARGET?\n")
            assert line.recv(100) == b"+0.900000000\r\n"
            process.send_signal(signal.SIGTERM)
            assert process.wait(DEADLINE_S) == 0
        assert process.stdout.read() == ""
        assert process.stderr is not None and process.stderr.read() == ""


def test_the_process_ends_when_its_parent_has_died(config: Path) -> None:
    with start(config, "--parent", str(os.getpid() + 1)) as process:
        assert process.wait(DEADLINE_S) == 0


def test_the_process_fails_with_one_sentence(
    config: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("acquire.stop.Stop.install", lambda self: None)
    with socket.socket() as taken:
        taken.bind(("127.0.0.1", 0))
        taken.listen()
        port = taken.getsockname()[1]
        config.write_text(demo_at(port, 47102, 47103), encoding="utf-8")
        assert main([str(config)]) == 1
        told = capsys.readouterr()
        assert told.out == ""
        assert told.err.startswith(f"simulated laboratory: port {port} for the simulated lockin_xx")
        assert told.err.count("\n") == 1
    config.write_text(DEMO.partition("\n[laboratory]\n")[0], encoding="utf-8")
    assert main([str(config)]) == 2
    assert "laboratory: missing" in capsys.readouterr().err
    assert main([str(config.parent / "none.toml")]) == 2
