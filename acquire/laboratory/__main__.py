"""The process of the simulated laboratory.

    python -m acquire.laboratory CONFIG [--truth FILE] [--parent PID]

Writes one line when all instruments listen: ``ready`` and, as JSON, the port of each. Ends in
order (exit status 0) on SIGTERM, or when its parent has died; 1: a port can't be had; 2: the
configuration is wrong or has no [laboratory].
"""

from __future__ import annotations

import argparse
import faulthandler
import json
import os
import sys
import time
from collections.abc import Sequence
from contextlib import ExitStack, suppress
from pathlib import Path

from acquire.config import ConfigError, Problem, load
from acquire.errors import RampsideError
from acquire.laboratory.bench import Bench
from acquire.laboratory.scenario import Scenario
from acquire.laboratory.server import LaboratoryServer
from acquire.laboratory.truth import TruthLog
from acquire.stop import Stop


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the laboratory until it is asked to end. Returns the exit status."""
    parser = argparse.ArgumentParser(
        prog="python -m acquire.laboratory", description="Run a simulated laboratory."
    )
    parser.add_argument("config")
    parser.add_argument("--parent", type=int, metavar="PID", help="end when this process has died")
    parser.add_argument("--truth", type=Path, metavar="FILE", help="add each reply to this file")
    options = parser.parse_args(arguments)
    began = time.monotonic()
    stop = Stop()
    stop.install()
    try:
        with ExitStack() as stack:
            scenario = _scenario(options.config)
            bench = Bench(scenario)
            if options.truth is not None:
                bench = Bench(scenario, stack.enter_context(TruthLog(options.truth, began)).add)
            server = stack.enter_context(LaboratoryServer(bench, lambda: time.monotonic() - began))
            with suppress(OSError):  # nobody listens any more
                print(f"ready {json.dumps(server.ports)}", flush=True)
            while not stop.requested and options.parent in (None, os.getppid()):
                server.step()
    except RampsideError as error:
        print(f"simulated laboratory: {error}", file=sys.stderr, flush=True)
        return 2 if isinstance(error, ConfigError) else 1
    return 0


def _scenario(config: str) -> Scenario:
    rig, _ = load(config)
    if rig.laboratory is None:
        raise ConfigError(config, [Problem("laboratory", "missing: there is nothing to simulate")])
    return rig.laboratory


if __name__ == "__main__":
    faulthandler.enable()
    sys.exit(main())
