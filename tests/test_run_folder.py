import errno
import json
import os
import re
import subprocess
import sys
import time
import warnings
from dataclasses import replace
from datetime import datetime

import instrument_noter
import pytest

from acquire.bus import Endpoint
from acquire.config import parse
from acquire.errors import RunError
from acquire.journal import Journal
from acquire.readings import reading_table
from acquire.run_folder import LiveRun, boot_id, create_run, open_run
from acquire.tables import SEQ, TIME, Column, Table

# Odd on purpose: it must be kept byte for byte.
CONFIG = b"""# a comment with a \xc2\xb5\r
[run]
title = "R0417-bar3"
[field]
reader = "magnet"
value = "B"
[[readers]]
name = "magnet"
resource = "TCPIP::127.0.0.1::5025::SOCKET"
write_termination = "\\n"
read_termination = "\\n"
queries = ["FIELD?"]
values = [{name = "B", position = 1, unit = "T"}]
[[readers]]
name = "Lockin_XX"
resource = "TCPIP::127.0.0.1::5026::SOCKET"
write_termination = "\\n"
read_termination = "\\n"
queries = ["X?"]
values = [{name = "X", position = 1, scale = 1e-3}]
[[hall_bars]]
name = "bar"
squares = 4.0
material = "GaAs"
longitudinal = {reader = "Lockin_XX", x = "X"}
hall = {reader = "Lockin_XX", x = "X"}
excitation = {current_A = 1e-7}"""
RIG = parse(CONFIG)
EVENTS = Table("events", "events.csv", "what happened", (SEQ, TIME, Column("text", "string")))
TABLES = [*(reading_table(reader.name, reader) for reader in RIG.readers), EVENTS]
MAGNET = TABLES[0]
ENDPOINTS = {"events": Endpoint("tcp://127.0.0.1:20001", "tcp://127.0.0.1:20002")}


@pytest.fixture
def run(tmp_path):
    return create_run(RIG, CONFIG, TABLES, tmp_path)


def test_a_run_is_named_by_its_start_and_title(run, tmp_path):
    assert run.path == tmp_path / run.run_id
    assert re.fullmatch(r"\d{4}-\d\d-\d\d_\d{6}_R0417-bar3", run.run_id)
    started = datetime.fromisoformat(run.started_utc)
    assert f"{started:%Y-%m-%d_%H%M%S}" == run.run_id[:17]
    assert 0 <= time.monotonic() - run.monotonic_start < 60


def test_a_name_that_is_taken_gets_a_number(run, tmp_path, monkeypatch):
    class Stopped(datetime):
        @classmethod
        def now(cls, tz=None):
            return datetime.fromisoformat(run.started_utc)

    monkeypatch.setattr("acquire.run_folder.datetime", Stopped)
    names = [create_run(RIG, CONFIG, TABLES, tmp_path).run_id for _ in range(2)]
    assert names == [f"{run.run_id}-2", f"{run.run_id}-3"]


def test_runs_go_where_the_configuration_says(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    run = create_run(RIG, CONFIG, TABLES)
    assert run.path.parent == tmp_path / "runs"
    assert run.path.is_absolute()


def test_a_new_run_has_all_its_files(run):
    files = {str(path.relative_to(run.path)) for path in run.path.rglob("*") if path.is_file()}
    readings = {"readings/magnet.csv", "readings/Lockin_XX.csv"}
    assert files == readings | {
        "config.toml", "datapackage.json", "events.csv", "instruments.json",
    }  # fmt: skip
    assert (run.path / "config.toml").read_bytes() == CONFIG
    assert (run.path / "readings/magnet.csv").read_text() == "seq,time_s,took_s,status,detail,B\n"
    assert run.instruments() == []


def test_an_opened_run_is_the_one_created(run):
    opened = open_run(str(run.path))
    assert (opened.path, opened.run_id, opened.started_utc, opened.rig, opened.config_bytes) == (
        run.path, run.run_id, run.started_utc, RIG, CONFIG,
    )  # fmt: skip
    assert opened.live() is None


def test_an_opened_run_has_the_name_of_its_folder_also_by_a_relative_path(run, monkeypatch):
    monkeypatch.chdir(run.path)
    assert open_run(".").run_id == run.run_id


def test_rows_are_read_while_they_are_written(run):
    cells = (0.1, 0.01, "ok", None, 1e-5)
    with Journal(run.journal_path(MAGNET), MAGNET) as journal:
        rows = [journal.record(cells), journal.record(cells)]
        assert list(open_run(run.path).rows(MAGNET)) == rows
        assert list(run.rows(MAGNET, 1)) == rows[1:]


def test_a_table_outside_the_run_is_refused(run, tmp_path):
    (tmp_path / "a.csv").write_text("seq,time_s\n")
    for path in ("../a.csv", "/etc/passwd"):
        with pytest.raises(RunError, match="is outside the run"):
            run.rows(replace(MAGNET, path=path))
        with pytest.raises(RunError, match="is outside the run"):
            create_run(RIG, CONFIG, [replace(MAGNET, path=path)], tmp_path)


def test_an_outsider_accepts_the_data_package(run):
    with Journal(run.journal_path(MAGNET), MAGNET) as journal:
        journal.append((0.1, 0.01, "ok", 'said "1,5"', 1e-05))
        journal.append((-0.0, None, "no_answer", "µ\n", None))
        journal.append((1e22, 5e-324, "ok", "", 0.1 + 0.2))
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        import frictionless

        report = frictionless.validate(str(run.path / "datapackage.json"))
        package = frictionless.Package(str(run.path / "datapackage.json"))
        rows = package.get_resource("readings/magnet").read_rows()
    assert report.valid, report.flatten(["type", "note"])
    assert report.stats["tasks"] == 3
    back = [tuple(float(c) if i in (1, 2, 5) and c is not None else c for i, c in enumerate(
        row.to_list())) for row in rows]  # fmt: skip
    assert back == list(run.rows(MAGNET))


def test_the_data_package_tells_units_and_meanings(run):
    package = json.loads((run.path / "datapackage.json").read_bytes())
    assert package["created"] == run.started_utc
    assert [resource["path"] for resource in package["resources"]] == [t.path for t in TABLES]
    time_s = package["resources"][0]["schema"]["fields"][1]
    assert time_s == {
        "name": "time_s", "type": "number", "unit": "s",
        "description": "seconds since the start of the run, monotonic clock",
    }  # fmt: skip


def test_names_that_differ_only_by_case_stay_apart(tmp_path):
    """The standard's names are lower case, those of readers need not be."""
    tables = [replace(EVENTS, stream=name, path=f"{name}.csv") for name in ("a", "A", "a-2")]
    run = create_run(RIG, CONFIG, tables, tmp_path)
    package = json.loads((run.path / "datapackage.json").read_bytes())
    names = [resource["name"] for resource in package["resources"]]
    assert len(set(names)) == 3
    assert names == [name.lower() for name in names]


def test_a_live_run_tells_where_it_is(run):
    written = run.write_live(ENDPOINTS, "tcp://127.0.0.1:20010")
    assert written == LiveRun(
        run.run_id, os.getpid(), run.monotonic_start, run.started_utc, ENDPOINTS,
        "tcp://127.0.0.1:20010", boot_id(),
    )  # fmt: skip
    assert open_run(run.path).live() == written
    assert written.alive
    run.end_live()
    run.end_live()
    assert open_run(run.path).live() is None


def test_live_json_is_what_others_expect(run):
    run.write_live(ENDPOINTS, "tcp://127.0.0.1:20010", monotonic_start=5.0, pid=77)
    assert json.loads((run.path / "live.json").read_bytes()) == {
        "run": run.run_id, "pid": 77, "monotonic_start": 5.0, "started_utc": run.started_utc,
        "endpoints": {"events": {"publish": "tcp://127.0.0.1:20001",
                                 "answer": "tcp://127.0.0.1:20002"}},
        "requests": "tcp://127.0.0.1:20010", "boot": boot_id(),
    }  # fmt: skip


def test_a_run_that_was_opened_needs_its_start_to_be_live(run):
    with pytest.raises(RunError, match="monotonic_start is needed"):
        open_run(run.path).write_live(ENDPOINTS, "tcp://127.0.0.1:20010")


def test_a_crashed_run_is_not_alive(run):
    with subprocess.Popen([sys.executable, "-c", ""]) as gone:
        gone.wait()
    assert not run.write_live(ENDPOINTS, "", pid=gone.pid).alive


def test_a_later_process_of_the_same_number_is_not_the_supervisor(run):
    child = [sys.executable, "-c", "input()"]
    with subprocess.Popen(child, stdin=subprocess.PIPE) as later:
        start = time.monotonic() - 1000
        assert not run.write_live(ENDPOINTS, "", start, later.pid).alive
        assert run.write_live(ENDPOINTS, "", time.monotonic(), later.pid).alive
        later.communicate(b"\n")


def test_a_run_from_before_the_machine_was_started_is_not_alive(run):
    assert not run.write_live(ENDPOINTS, "", time.monotonic() + 1e6).alive


@pytest.mark.parametrize("text", ["", "[]", "{}", '{"endpoints": {"a": {}}}', '{"endpoints": []}'])
def test_a_live_json_that_says_nothing_is_told(run, text):
    (run.path / "live.json").write_text(text)
    with pytest.raises(RunError, match="can't be used"):
        run.live()


def test_instruments_are_noted_in_order(run):
    for number in range(3):
        run.note_instrument({"reader": "magnet", "seq": number, "identity": "<script>µ\n"})
    assert [entry["seq"] for entry in open_run(run.path).instruments()] == [0, 1, 2]
    assert run.instruments()[0]["identity"] == "<script>µ\n"
    assert not list(run.path.glob(".*"))


def test_an_entry_for_the_same_row_takes_the_place_of_the_one_before(run):
    for entry in ({"reader": "a", "seq": 0}, {"reader": "b", "seq": 0}, {"reader": "a", "seq": 4}):
        run.note_instrument(entry)
    run.note_instrument({"reader": "a", "seq": 0, "answers": 2})
    run.note_instrument({"reader": "a", "identity": "no row"})
    run.note_instrument({"reader": "a", "identity": "no row either"})
    assert [(one["reader"], one.get("seq"), one.get("answers")) for one in run.instruments()] == [
        ("a", 0, 2), ("b", 0, None), ("a", 4, None), ("a", None, None), ("a", None, None),
    ]


def test_several_processes_note_instruments_at_once(run):
    command = [sys.executable, instrument_noter.__file__, str(run.path)]
    noters = [subprocess.Popen([*command, reader, "20"]) for reader in ("a", "b", "c")]
    assert [noter.wait(60) for noter in noters] == [0, 0, 0]
    entries = run.instruments()
    assert len(entries) == 60
    for reader in ("a", "b", "c"):
        assert [e["seq"] for e in entries if e["reader"] == reader] == list(range(20))


@pytest.mark.parametrize(("text", "why"), [("[", "is not JSON"), ("{}", "is not a list")])
def test_a_damaged_instruments_json_is_told_and_kept(run, text, why):
    (run.path / "instruments.json").write_text(text)
    with pytest.raises(RunError, match=why):
        run.note_instrument({"reader": "magnet"})
    assert (run.path / "instruments.json").read_text() == text


def test_what_is_no_run_is_refused(run, tmp_path):
    for path in (tmp_path, tmp_path / "nothing", run.path / "config.toml"):
        with pytest.raises(RunError, match="is not a run"):
            open_run(path)


def test_a_run_that_was_not_made_to_its_end_is_refused(run):
    """As after a crash in the middle of making it: the description is written last."""
    (run.path / "datapackage.json").unlink()
    with pytest.raises(RunError, match="is not a run"):
        open_run(run.path)


@pytest.mark.parametrize("text", ["", "[]", "{}", '{"created": "yesterday"}', '{"created": 5}'])
def test_a_data_package_of_something_else_is_refused(run, text):
    (run.path / "datapackage.json").write_text(text)
    with pytest.raises(RunError, match="not that of a run"):
        open_run(run.path)


def test_a_configuration_that_is_no_longer_accepted_is_told(run):
    (run.path / "config.toml").write_bytes(CONFIG.replace(b"squares", b"sqares"))
    with pytest.raises(RunError, match="did you mean squares"):
        open_run(run.path)


def test_a_place_where_no_run_can_be_made_is_told(tmp_path):
    (tmp_path / "file").write_text("")
    with pytest.raises(RunError, match="a run can't be made there"):
        create_run(RIG, CONFIG, TABLES, tmp_path / "file")


def full(fd):
    raise OSError(errno.ENOSPC, "No space left on device")


def test_a_full_disk_makes_no_half_run(tmp_path, monkeypatch):
    monkeypatch.setattr(os, "fsync", full)
    with pytest.raises(RunError, match="a run can't be made there .No space left on device"):
        create_run(RIG, CONFIG, TABLES, tmp_path / "runs")
    assert list((tmp_path / "runs").iterdir()) == []


def test_a_full_disk_costs_neither_the_notes_nor_their_file(run, monkeypatch):
    run.note_instrument({"reader": "magnet", "seq": 0})
    with monkeypatch.context() as patch:
        patch.setattr(os, "fsync", full)
        with pytest.raises(RunError, match="instruments.json: can't be written .No space left"):
            run.note_instrument({"reader": "magnet", "seq": 1})
    assert [entry["seq"] for entry in run.instruments()] == [0]
    assert not list(run.path.glob(".*")), "what was written of the new one takes no room"
    run.note_instrument({"reader": "magnet", "seq": 1})
    assert [entry["seq"] for entry in run.instruments()] == [0, 1]


def test_a_start_of_the_machine_since_then_is_known_by_its_name(run):
    """The number of the supervisor may be that of a daemon by now, as old as the machine's start."""
    live = run.write_live(ENDPOINTS, "", time.monotonic(), os.getpid())
    assert live.alive
    again = replace(live, boot="another")
    assert again.machine_restarted
    assert not again.alive
    assert replace(live, boot="").alive, "written before it was named"


def test_what_was_deleted_while_the_run_goes_on_is_there_again(run):
    live = run.write_live(ENDPOINTS, "tcp://127.0.0.1:20010")
    run.keep_live(replace(live, requests="another"))
    assert run.live() == live, "only if it is gone"
    (run.path / "live.json").unlink()
    run.keep_live(live)
    assert run.live() == live
    (run.path / "instruments.json").unlink()
    run.note_instrument({"reader": "magnet", "seq": 7})
    assert [entry["seq"] for entry in run.instruments()] == [7]
