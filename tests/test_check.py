"""``rampside check`` on instruments that answer, and on some that do not."""

from __future__ import annotations

import subprocess
from collections.abc import Iterator
from pathlib import Path

import pytest
from ramp_bench import RampBench
from running import RAMPSIDE
from scripted_instrument import ScriptedInstrument, unterminated


@pytest.fixture
def bench() -> Iterator[RampBench]:
    """Three instruments; the field stands at zero."""
    with RampBench(period_s=0.02) as bench:
        bench.moving.clear()
        yield bench


def check(config: Path) -> subprocess.CompletedProcess[str]:
    """Type the command."""
    line = [str(RAMPSIDE), "check", str(config)]
    return subprocess.run(line, capture_output=True, text=True, timeout=60, check=False)


def with_filters(config: Path) -> Path:
    """The same rig behind filters of four poles, the time constant of one being a setting."""
    text = config.read_text()
    text = text.replace(
        'longitudinal = { reader = "lockin_xx", x = "X" }',
        'longitudinal = { reader = "lockin_xx", x = "X", '
        'filter = { time_constant_setting = "tc", poles = 4 } }',
    )
    text = text.replace(
        'hall = { reader = "lockin_xy", x = "X" }',
        'hall = { reader = "lockin_xy", x = "X", '
        "filter = { time_constant_s = 0.03, poles = 4 } }",
    )
    name = 'name = "lockin_xx"'
    setting = 'settings = [{ name = "tc", query = "TC?", unit = "s", codes = { 9 = 0.3 } }]'
    config.write_text(text.replace(name, f"{name}\n{setting}"))
    return config


def test_everything_that_was_asked_is_shown(bench: RampBench, tmp_path: Path) -> None:
    bench.lockin_xx.answers["TC?"] = "9"
    done = check(with_filters(bench.write_config(tmp_path / "rig.toml")))
    assert done.returncode == 0, done.stdout + done.stderr
    for wanted in (
        "no mistakes",
        f"magnet at {bench.magnet.resource}",
        r'asked *IDN?, got "BENCH,MAGNET,1,1\n" after ',
        r'asked FIELD?, got "+0.000000\n" after ',
        "read as B = 0 T",
        r'setting tc: asked TC?, got "9\n"',
        "read as tc = 0.3 s",
        "bar, longitudinal: 4 poles of 0.3 s lag 1.2 s behind",
        "at 30 T/min, the field moves 600 mT",
        "bar, hall: 4 poles of 0.03 s lag 0.12 s behind",
        "the target is expected near",
        "Nothing was changed on any of them.",
    ):
        assert wanted in done.stdout
    asked = {text for _, text in bench.lockin_xx.questions}
    assert asked == {"*IDN?", "XY?", "TC?"}, "only what is configured was asked"


def test_a_wrong_terminator_is_shown_and_is_status_1(bench: RampBench, tmp_path: Path) -> None:
    bench.magnet.answers["FIELD?"] = unterminated("+0.1\r")
    done = check(bench.write_config(tmp_path / "rig.toml"))
    assert done.returncode == 1
    assert r'got "+0.1\r" after' in done.stdout
    assert "FAILED" in done.stdout
    assert "can't be said: magnet did not answer as configured" in done.stdout
    assert "Failed: magnet." in done.stdout
    assert r'got "BENCH,LOCKIN,2,1\n"' in done.stdout, "the others were asked all the same"


def test_an_instrument_that_is_not_there(bench: RampBench, tmp_path: Path) -> None:
    bench.lockin_xy.refuse()
    done = check(bench.write_config(tmp_path / "rig.toml"))
    assert done.returncode == 1
    assert "Connection refused" in done.stdout
    assert "Failed: lockin_xy." in done.stdout
    assert "Traceback" not in done.stdout + done.stderr


def test_a_moving_field_tells_no_noise(bench: RampBench, tmp_path: Path) -> None:
    bench.moving.set()
    done = check(bench.write_config(tmp_path / "rig.toml"))
    assert done.returncode == 0
    assert "the field moves, so the noise can't be told" in done.stdout


HOLD = """
[hold]
resource = "{resource}"
write_termination = "\\r\\n"
read_termination = "\\n"
identity = {{ query = "*IDN?", pattern = "MAGNET" }}
command = "PAUSE"
reply = "OK"
stands_within_s = 10.0
standing_T = 0.001
"""


def test_what_would_be_sent_is_shown_and_not_sent(bench: RampBench, tmp_path: Path) -> None:
    with ScriptedInstrument({"*IDN?": "BENCH,MAGNET,1,1", "PAUSE": "OK"}) as supply:
        hold = HOLD.format(resource=supply.resource)
        done = check(bench.write_config(tmp_path / "rig.toml", hold))
        assert done.returncode == 0, done.stdout + done.stderr
        assert rf'asked for: "PAUSE\r\n" to {supply.resource}' in done.stdout
        assert 'a reply that matches "OK" within 1000 ms' in done.stdout
        assert "within 0.001 T of each other for 3 s, within 10 s" in done.stdout
        assert supply.connections == 0
