"""The command line, typed as a person types it: words, exit status, what is printed where."""

from __future__ import annotations

import json
import os
import socket
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest
from ramp_bench import RampBench

from dashboard.cli import parser

RAMPSIDE = Path(sys.executable).parent / "rampside"
COMMANDS = ("demo", "watch", "check", "replay", "read", "page", "keys")

TABLE_CONFIG = """
[run]
title = "R0417-bar3"
[field]
reader = "table"
value = "B"
[table]
delimiter = "comma"
[[table.values]]
name = "B"
column = "B/T"
unit = "T"
[[table.values]]
name = "rxx"
column = "Rxx/Ohm"
unit = "Ohm"
[[table.values]]
name = "rxy"
column = "Rxy/Ohm"
unit = "Ohm"
[[hall_bars]]
name = "bar3"
squares = 2.5
material = "GaAs"
longitudinal = { reader = "table", x = "rxx" }
hall = { reader = "table", x = "rxy" }
"""

WRONG_CONFIG = """
[run]
titel = "x"
[field]
reader = "meter"
value = "B"
[[readers]]
name = "metre"
resource = "TCPIP::127.0.0.1::47101::SOCKET"
write_termination = "\\n"
read_termination = "\\n"
timeout_ms = 5
queries = ["FIELD?"]
values = [{ name = "B", position = 1, unit = "T" }]
[[hall_bars]]
name = "bar"
squares = -1.0
material = "GaAz"
longitudinal = { reader = "metre", x = "X" }
hall = { reader = "metre", x = "B" }
"""


def rampside(*words: object, cwd: Path | None = None) -> subprocess.CompletedProcess[str]:
    """Type one command and wait for it."""
    line = [str(RAMPSIDE), *map(str, words)]
    return subprocess.run(line, cwd=cwd, capture_output=True, text=True, timeout=60, check=False)


@pytest.fixture
def table(tmp_path: Path) -> Path:
    """A straight line with a little alternating noise: n = 3e15 m^-2, 120 Ohm per square."""
    lines = ["B/T,Rxx/Ohm,Rxy/Ohm"]
    for step in range(201):
        field_T = step * 0.005
        wiggle = 0.02 if step % 2 else -0.02
        lines.append(f"{field_T:.4f},{300 + wiggle:.4f},{2080.503 * field_T - wiggle:.4f}")
    path = tmp_path / "sweep.csv"
    path.write_text("\n".join(lines) + "\n")
    return path


@pytest.fixture
def config(tmp_path: Path) -> Path:
    """A configuration for that table."""
    path = tmp_path / "rig.toml"
    path.write_text(TABLE_CONFIG)
    return path


@pytest.fixture
def taken_port() -> Iterator[int]:
    """A port that somebody listens on."""
    with socket.socket() as server:
        server.bind(("127.0.0.1", 0))
        server.listen()
        yield server.getsockname()[1]


@pytest.mark.parametrize("words", [["--help"], *([command, "--help"] for command in COMMANDS)])
def test_help_everywhere(words: list[str]) -> None:
    done = rampside(*words)
    assert done.returncode == 0
    assert done.stdout.startswith("usage: rampside")
    assert done.stderr == ""


def test_help_imports_nothing_heavy() -> None:
    code = (
        "import sys; from dashboard.cli import parser; parser();"
        "heavy = {'bokeh', 'numpy', 'pyvisa', 'rich', 'scipy', 'zmq'} & set(sys.modules);"
        "sys.exit(str(heavy) if heavy else 0)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr


def test_every_option_is_explained() -> None:
    root = parser()
    (commands,) = (action for action in root._actions if action.dest == "command")
    for name, command in commands.choices.items():  # type: ignore[union-attr]
        assert all(action.help for action in command._actions), name


@pytest.mark.parametrize(
    "words",
    [
        [],
        ["dance"],
        ["watch"],
        ["demo", "--port", "web"],
        ["demo", "--port", "65536"],
        ["demo", "--seconds", "0"],
        ["demo", "--seconds", "nan"],
        ["demo", "--frequency", "5"],
    ],
)
def test_wrong_usage_is_status_2(words: list[str]) -> None:
    done = rampside(*words)
    assert done.returncode == 2
    assert done.stdout == ""
    assert "usage: rampside" in done.stderr


@pytest.mark.parametrize("command", ["watch", "check"])
def test_all_mistakes_of_a_configuration_at_once(command: str, tmp_path: Path) -> None:
    (tmp_path / "wrong.toml").write_text(WRONG_CONFIG)
    done = rampside(command, "wrong.toml", cwd=tmp_path)
    assert done.returncode == 2
    assert done.stdout == ""
    for wanted in (
        "wrong.toml: ",
        "run.titel: unknown key; did you mean title?",
        "run.title: missing",
        "readers[0].timeout_ms: ",
        "(found 5)",
        "field.reader: no reader has this name (found 'meter'); did you mean metre?",
        "hall_bars[0].squares: ",
        "hall_bars[0].material: not in the table of materials",
        "did you mean GaAs?",
        "hall_bars[0].longitudinal.x: 'metre' has no such value (found 'X')",
    ):
        assert wanted in done.stderr
    assert "Traceback" not in done.stderr
    assert sorted(path.name for path in tmp_path.iterdir()) == ["wrong.toml"], "nothing was started"


def test_a_configuration_that_is_not_there(tmp_path: Path) -> None:
    done = rampside("watch", "rig.toml", cwd=tmp_path)
    assert done.returncode == 2
    assert "can't be read: No such file" in done.stderr


def test_an_unknown_material_alone(config: Path) -> None:
    config.write_text(config.read_text().replace('"GaAs"', '"kryptonite"'))
    done = rampside("check", config)
    assert done.returncode == 2
    assert "hall_bars[0].material: not in the table of materials" in done.stderr
    assert "(found 'kryptonite')" in done.stderr


def test_to_exit_with_the_ramp_needs_a_ramp(tmp_path: Path) -> None:
    with RampBench() as bench:
        config = bench.write_config(tmp_path / "rig.toml")
    text = config.read_text()
    begin = text.index("[ramp]")
    config.write_text(text[:begin] + text[text.index("[target]") :])
    done = rampside("watch", config, "--exit", "--port", 0, cwd=tmp_path)
    assert done.returncode == 2
    assert "--exit needs a [ramp]" in done.stderr
    assert not (tmp_path / "runs").exists()


def test_a_table_cannot_be_watched(config: Path) -> None:
    done = rampside("watch", config)
    assert done.returncode == 2
    assert "rampside replay" in done.stderr


def test_a_taken_port_is_told_with_a_next_step(tmp_path: Path, taken_port: int) -> None:
    done = rampside("demo", "--no-browser", "--port", taken_port, "--folder", tmp_path / "runs")
    assert done.returncode == 1
    assert done.stdout == ""
    assert f"Port {taken_port} is taken" in done.stderr
    assert "--port N" in done.stderr
    assert not (tmp_path / "runs").exists(), "nothing was started"


def test_a_folder_that_is_no_run(tmp_path: Path) -> None:
    for command in ("replay", "page"):
        done = rampside(command, tmp_path)
        assert done.returncode == 1
        assert "is not a run" in done.stderr
        assert "Traceback" not in done.stderr


def test_a_traceback_only_with_debug(tmp_path: Path) -> None:
    done = rampside("replay", tmp_path, "--debug")
    assert done.returncode == 1
    assert "Traceback" in done.stderr


def test_replay_of_a_table(config: Path, table: Path) -> None:
    done = rampside("replay", table, "--config", config)
    assert done.returncode == 0, done.stderr
    assert "bar3" in done.stdout
    assert "sheet density" in done.stdout


def test_replay_of_a_table_as_json(config: Path, table: Path) -> None:
    done = rampside("replay", table, "--config", config, "--json")
    assert done.returncode == 0, done.stderr
    result = json.loads(done.stdout)
    assert result["run"] == "sweep"
    bar = result["hall_bars"]["bar3"]
    density = bar["sheet_density_per_m2"]
    assert set(density) >= {"value", "standard_uncertainty", "interval", "confidence"}
    assert density["interval"][0] < 3e15 < density["interval"][1]
    assert density["confidence"] == 0.95
    assert bar["mobility_m2_per_V_s"]["value"] == pytest.approx(17.337, rel=2e-3)
    assert set(bar) >= {
        "scattering_time_s", "carriers", "window_T", "field_points", "verdict", "stable_at",
        "cautions",
    }  # fmt: skip


def test_replay_writes_the_estimates_to_a_new_file_only(config: Path, table: Path) -> None:
    copy = table.with_name("estimates.csv")
    words = ("replay", table, "--config", config, "--estimates", copy)
    assert rampside(*words).returncode == 0
    written = copy.read_bytes()
    assert written.startswith(b"seq,time_s,hall_bar,")
    done = rampside(*words)
    assert done.returncode == 2
    assert "is there already" in done.stderr
    assert copy.read_bytes() == written


def test_several_tables_need_a_configuration(table: Path) -> None:
    done = rampside("replay", table, table)
    assert done.returncode == 2
    assert "--config" in done.stderr


def test_nobody_listens_to_the_output_any_more(config: Path, table: Path) -> None:
    reading, writing = os.pipe()
    os.close(reading)
    try:
        done = subprocess.run(
            [str(RAMPSIDE), "replay", str(table), "--config", str(config), "--json"],
            stdout=writing,
            stderr=subprocess.PIPE,
            text=True,
            timeout=60,
            check=False,
        )
    finally:
        os.close(writing)
    assert done.returncode == 1
    assert "Traceback" not in done.stderr
    assert "Exception" not in done.stderr


def test_a_reader_that_is_not_configured(config: Path) -> None:
    done = rampside("read", config, "metre")
    assert done.returncode == 2
    assert "no reader 'metre'" in done.stderr
