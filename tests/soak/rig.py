"""The configuration of a soak test: a ramp that lasts, instruments behind links."""

from __future__ import annotations

from collections.abc import Mapping

INSTRUMENTS = ("magnet", "lockin_xx", "lockin_xy")
QUESTIONS = {"magnet": "FIELD?", "lockin_xx": "XYS?", "lockin_xy": "XY?"}
"""By instrument: the question that brings the values of a reading."""
PERIOD_S = 0.05
TO_T = 0.9

_HEAD = """
[run]
title = "soak"
[ramp]
path_T = [0.0, {to}, 0.0]
rate_T_per_min = {rate!r}
[target]
sheet_density_relative = 0.01
mobility_relative = 0.01
[field]
reader = "magnet"
value = "B"
[[hall_bars]]
name = "bar"
squares = 4.0
material = "GaAs"
longitudinal = {{ reader = "lockin_xx", x = "X", filter = {{ time_constant_setting = "T", poles = 2 }} }}
hall = {{ reader = "lockin_xy", x = "X", filter = {{ time_constant_setting = "T", poles = 2 }} }}
excitation = {{ current_A = 6e-9 }}
[laboratory]
seed = {seed}
current_A = 6e-9
sample = {{ sheet_density_per_m2 = 2.9e15, mobility_m2_per_V_s = 32.0, quantum_lifetime_s = 1e-13 }}
[laboratory.magnet]
port = {port}
path_T = [0.0, {to}, 0.0]
rate_T_per_min = {rate!r}
wait_s = 1.0
waits_for_question = true
noise_T = 2e-5
resolution_T = 1e-6
[[readers]]
name = "magnet"
resource = "TCPIP::127.0.0.1::{link}::SOCKET"
write_termination = "\\n"
read_termination = "\\n"
timeout_ms = 400
identity = {{ pattern = "MAGNET SUPPLY" }}
queries = ["FIELD?"]
period_s = {period}
values = [{{ name = "B", position = 1, unit = "T", lowest = -2.0, highest = 2.0 }}]
"""

_LOCKIN = """
[[readers]]
name = "{name}"
resource = "TCPIP::127.0.0.1::{link}::SOCKET"
write_termination = "\\n"
read_termination = "\\n"
timeout_ms = 400
identity = {{ pattern = "LOCK-IN,{name}" }}
queries = {queries}
fields = 3
period_s = {period}
values = [{{ name = "X", position = 1 }}, {{ name = "Y", position = 2 }}]
overload = {{ position = 3, bits = 4 }}
settings_period_s = 3.0
settings = [{{ name = "T", query = "TIMECONSTANT?", unit = "s" }}]
[[laboratory.lockins]]
name = "{name}"
port = {port}
measures = "{measures}"
answers = "numbers"
time_constant_s = 0.03
poles = 2
noise_V_per_rtHz = 1.2e-8
sensitivity_V = 3e-5
"""


def configuration(
    seed: int, ramp_s: float, ports: Mapping[str, int], links: Mapping[str, int]
) -> str:
    """The text: a ramp up and down in ``ramp_s`` seconds; by instrument, the port at which the
    laboratory listens and the one at which its reader finds it."""
    rate = 2 * TO_T / ramp_s * 60.0
    head = _HEAD.format(
        to=TO_T, rate=rate, seed=seed, period=PERIOD_S, port=ports["magnet"], link=links["magnet"]
    )
    lockins = {
        "lockin_xx": ("longitudinal", '["XYS?"]'),
        "lockin_xy": ("hall", '["XY?", "STATUS?"]'),  # two answers a reading, to be mixed up
    }
    return head + "".join(
        _LOCKIN.format(
            name=name,
            measures=what,
            queries=queries,
            period=PERIOD_S,
            port=ports[name],
            link=links[name],
        )
        for name, (what, queries) in lockins.items()
    )
