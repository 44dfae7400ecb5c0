"""A simulated laboratory whose ramp takes 6 s, as a configuration. For tests."""

from __future__ import annotations

from pathlib import Path

from dashboard.ports import free_ports
from dashboard.roles import with_ports

DENSITY_PER_M2 = 3e15
MOBILITY = 20.0  # m^2/(V s)

_LOCKIN = """
[[readers]]
name = "{name}"
resource = "TCPIP::127.0.0.1::{port}::SOCKET"
write_termination = "\\n"
read_termination = "\\n"
queries = ["XY?"]
fields = 2
period_s = 0.1
values = [{{ name = "X", position = 1 }}, {{ name = "Y", position = 2 }}]

[[laboratory.lockins]]
name = "{name}"
port = {port}
measures = "{measures}"
time_constant_s = 0.03
poles = 2
noise_V_per_rtHz = 1e-7
"""

_RIG = b"""
[run]
title = "small"
[ramp]
path_T = [0.0, 1.0]
rate_T_per_min = 10.0
[target]
sheet_density_relative = 0.02
mobility_relative = 0.02
[field]
reader = "magnet"
value = "B"
[[readers]]
name = "magnet"
resource = "TCPIP::127.0.0.1::47101::SOCKET"
write_termination = "\\n"
read_termination = "\\n"
queries = ["FIELD?"]
period_s = 0.1
values = [{ name = "B", position = 1, unit = "T" }]
[[hall_bars]]
name = "bar"
squares = 4.0
material = "GaAs"
longitudinal = { reader = "lockin_xx", x = "X", filter = { time_constant_s = 0.03, poles = 2 } }
hall = { reader = "lockin_xy", x = "X", filter = { time_constant_s = 0.03, poles = 2 } }
excitation = { current_A = 1e-6 }
[laboratory]
current_A = 1e-6
sample = { sheet_density_per_m2 = 3e15, mobility_m2_per_V_s = 20.0, quantum_lifetime_s = 1e-13 }
[laboratory.magnet]
port = 47101
path_T = [0.0, 1.0]
rate_T_per_min = 10.0
wait_s = 1.0
waits_for_question = true
"""


_HOLD = b"""
[hold]
resource = "TCPIP::127.0.0.1::47101::SOCKET"
write_termination = "\\n"
read_termination = "\\n"
timeout_ms = 300
identity = { query = "*IDN?", pattern = "MAGNET SUPPLY" }
command = "PAUSE"
standing_T_per_min = 0.5
standing_for_s = 0.8
stands_within_s = 4.0
"""


def write_small_laboratory(path: Path, hold: bool = False) -> Path:
    """The configuration, on ports that are free now; with ``hold`` its supply can be held,
    and its ramp takes 15 s."""
    lockins = [("lockin_xx", 47102, "longitudinal"), ("lockin_xy", 47103, "hall")]
    text = _RIG + "".join(
        _LOCKIN.format(name=name, port=port, measures=measures) for name, port, measures in lockins
    ).encode()
    if hold:
        text = text.replace(b"rate_T_per_min = 10.0", b"rate_T_per_min = 4.0") + _HOLD
    path.write_bytes(with_ports(text, dict(zip((47101, 47102, 47103), free_ports(3)))))
    return path
