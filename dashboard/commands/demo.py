"""``rampside demo``: a ramp on a simulated laboratory."""

from __future__ import annotations

import argparse
from pathlib import Path

import configs
from acquire.config import parse
from acquire.errors import RampsideError, UsageError
from dashboard.commands.watch import run_plan
from dashboard.configuration import load_configuration
from dashboard.page_address import page_address
from dashboard.ports import free_ports, is_free
from dashboard.roles import laboratory_ports, with_ports
from dashboard.watch import WatchPlan

DEMO = "demo.toml"


def run(arguments: argparse.Namespace) -> int:
    """Start the laboratory, then do what ``watch`` does."""
    config, source = _configuration(arguments.config)
    return run_plan(
        WatchPlan(
            parse(config, source),
            config,
            arguments.folder,
            arguments.port,
            page_address(arguments.page_address, arguments.page_secret),
            not arguments.no_browser,
            arguments.exit,
            arguments.seconds,
            arm_hold=arguments.arm_hold,
            bell=arguments.bell,
            laboratory=True,
        )
    )


def shipped(name: str) -> Path:
    """A file that came along in configs/. Raises RampsideError if it did not.

    By hand: importlib.resources fails on a folder without modules that is installed as editable,
    since one of the places where it may lie is no directory (python/cpython#106532).
    """
    for place in configs.__path__:
        if (path := Path(place, name)).is_file():
            return path
    raise RampsideError(f"{name} is missing from the installation: install rampside anew.")


def _configuration(path: Path | None) -> tuple[bytes, str]:
    """The configuration, with other ports where those of its instruments are taken."""
    if path is None:
        config, source = shipped(DEMO).read_bytes(), DEMO
    else:
        config, source = load_configuration(path)[1], str(path)
    rig = parse(config, source)
    if rig.laboratory is None:
        raise UsageError(f"{source} has no [laboratory]: rampside watch {source} is what it is for.")
    taken = [port for port in laboratory_ports(rig) if not is_free(port)]
    return with_ports(config, dict(zip(taken, free_ports(len(taken))))), source
