"""``rampside demo``: a ramp on a simulated laboratory."""

from __future__ import annotations

import argparse
from importlib.resources import files

from acquire.config import parse
from dashboard.commands.watch import run_plan
from dashboard.ports import free_ports, is_free
from dashboard.roles import laboratory_ports, with_ports
from dashboard.watch import WatchPlan

DEMO = "demo.toml"


def run(arguments: argparse.Namespace) -> int:
    """Start the laboratory, then do what ``watch`` does."""
    config = with_free_ports((files("configs") / DEMO).read_bytes())
    return run_plan(
        WatchPlan(
            parse(config, DEMO),
            config,
            arguments.folder,
            arguments.port,
            not arguments.no_browser,
            arguments.exit,
            arguments.seconds,
            laboratory=True,
        )
    )


def with_free_ports(config: bytes) -> bytes:
    """The configuration with other ports where those of its instruments are taken."""
    taken = [port for port in laboratory_ports(parse(config, DEMO)) if not is_free(port)]
    return with_ports(config, dict(zip(taken, free_ports(len(taken)))))
