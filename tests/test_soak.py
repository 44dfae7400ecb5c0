"""A short cut of the soak test, and that its judgement can fail."""

from __future__ import annotations

import shutil
import socket
from pathlib import Path

import pytest
from soak import folder, truth
from soak.link import LOOPBACK, Link
from soak.rig import INSTRUMENTS, QUESTIONS, configuration
from soak.run import main

from acquire.config import parse
from acquire.journal import Journal
from acquire.readings import stream_of
from acquire.run_folder import RunFolder, create_run, open_run
from acquire.tables import Row
from analyse.estimate_table import ESTIMATES, EVENTS
from analyse.replay import RowMaker, replay_readings
from dashboard.replay import logged_readings
from dashboard.streams import run_tables

PORTS = dict(zip(INSTRUMENTS, (47101, 47102, 47103)))
START = 1000.0


@pytest.mark.parametrize("seed", [6])  # even: the watch itself is killed at the end
def test_a_short_soak(seed: int, capsys: pytest.CaptureFixture[str]) -> None:
    words = ["--disturbances", "10", "--mean", "0.3", "--seed", str(seed), "--quiet"]
    assert main(words) == 0, capsys.readouterr().out


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A run of some readings, with the estimates that they make."""
    config = configuration(1, 60.0, PORTS, PORTS).encode()
    rig = parse(config)
    tables = run_tables(rig)
    run = create_run(rig, config, list(tables.values()), tmp_path_factory.mktemp("made"))
    for name in INSTRUMENTS:
        add(run, stream_of(name), [reading(name, k) for k in range(100)])
    maker = RowMaker(rig)
    for record in replay_readings(maker, logged_readings(run, maker.readers)):
        add(run, record.stream, [record.cells])
    return run.path


@pytest.fixture
def run(made: Path, tmp_path: Path) -> RunFolder:
    """A copy of it."""
    return open_run(shutil.copytree(made, tmp_path / made.name))


def add(run: RunFolder, stream: str, cells: list[Row]) -> None:
    table = run_tables(run.rig)[stream]
    with Journal(run.journal_path(table), table) as journal:
        for row in cells:
            journal.append(row)


def reading(name: str, k: int) -> Row:
    field = 0.01 * k
    values = {"magnet": (field,), "lockin_xx": (1e-7, 0.0), "lockin_xy": (1e-6 * field, 0.0)}
    return (0.1 * k + 0.01, 0.02, "ok", None, *values[name])


def heard(run: RunFolder) -> dict[str, list[Row]]:
    return {stream: list(run.rows(table)) for stream, table in run_tables(run.rig).items()}


def truth_file(run: RunFolder, path: Path, **changed: object) -> Path:
    """What the instruments answered; of the magnet's answer number 50 something else."""
    lines = ["monotonic_s,instrument,question,reply,spoiled"]
    for name in INSTRUMENTS:
        for k in range(100):
            values = reading(name, k)[4:]
            one = {"at": START + 0.1 * k + 0.01, "reply": ",".join(map(repr, values)), "bad": ""}
            if name == "magnet" and k == 50:
                one |= changed
            reply = f"{one['reply']},0" if name == "lockin_xx" else one["reply"]
            lines.append(f'{one["at"]!r},{name},{QUESTIONS[name]},"{reply}",{one["bad"]}')
    path.write_text("\n".join(lines) + "\n")
    return path


def test_a_run_in_order_has_no_faults(run: RunFolder, tmp_path: Path) -> None:
    found = folder.look_at(run, heard(run))
    assert found.faults == []
    assert len(found.rows["estimates"]) > 20
    compared = truth.compare(run, START, truth_file(run, tmp_path / "truth.csv"))
    assert (compared.ok, compared.wrong, compared.answers, compared.spoiled) == (300, [], 300, 0)


@pytest.mark.parametrize(
    "changed",
    [{"reply": "0.50000001"}, {"bad": "garble"}, {"at": START + 5.03}, {"at": START + 4.99}],
)
def test_a_reading_that_is_no_true_answer_to_its_own_question_is_found(
    run: RunFolder, tmp_path: Path, changed: dict[str, object]
) -> None:
    compared = truth.compare(run, START, truth_file(run, tmp_path / "truth.csv", **changed))
    (wrong,) = compared.wrong
    assert wrong.startswith("magnet row 50 at 5.010 s")


def test_a_row_that_was_heard_and_is_not_on_record_is_found(run: RunFolder) -> None:
    said = heard(run)
    said["readings/magnet"].append((100, *reading("magnet", 100)))
    del said["estimates"][3]
    said["events"] = [(0, 1.0, "note", None, "n", "never written", 0, None)]
    assert folder.look_at(run, said).faults == [
        "readings/magnet: 1 rows were published and are not on record",
        "estimates: heard with gaps or twice",
        f"estimates: {len(said['estimates']) - 3} rows were published and are not on record",
        "events: 1 rows were published and are not on record",
    ]


def test_estimates_other_than_a_replay_makes_them_are_found(run: RunFolder) -> None:
    with Journal(run.journal_path(ESTIMATES), ESTIMATES) as journal:
        journal.cut_back(journal.next_seq - 1)
    add(run, "events", [(1.0, "caution", "bar", "overload", "never raised", 3, None)])
    faults = folder.look_at(run, heard(run)).faults
    assert [fault.partition(":")[0] for fault in faults] == ["estimates", "events"]
    assert all("other than a replay makes them" in fault for fault in faults)


def test_what_is_left_in_the_folder_is_found(run: RunFolder) -> None:
    (run.path / ".instruments.json.new").write_text("[")
    add(run, stream_of("magnet"), [(10.0, None, "settings", "{}", None)])
    with open(run.journal_path(EVENTS), "ab") as file:
        file.write(b"7,1.0,no")
    faults = folder.look_at(run, heard(run)).faults
    assert "events.csv ends in a torn line" in faults
    assert "settings that are not in instruments.json: {('magnet', 100)}" in faults
    assert "left in the folder: ['.instruments.json.new']" in faults


def test_a_link_is_cut_held_up_and_mended() -> None:
    with socket.create_server((LOOPBACK, 0)) as server:
        link = Link(server.getsockname()[1])
        with link, socket.create_connection((LOOPBACK, link.port), 10.0) as near:
            far, _ = server.accept()
            with far:
                near.sendall(b"question\n")
                assert far.recv(100) == b"question\n"
                link.hold()
                far.sendall(b"late\n")
                near.settimeout(0.2)
                with pytest.raises(TimeoutError):
                    near.recv(100)
                link.mend()
                near.settimeout(10.0)
                assert near.recv(100) == b"late\n"
                link.cut()
                with pytest.raises(ConnectionResetError):
                    near.recv(100)
                with pytest.raises(ConnectionRefusedError):
                    socket.create_connection((LOOPBACK, link.port), 10.0)
