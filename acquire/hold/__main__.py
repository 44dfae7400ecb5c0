"""The process that asks the magnet supply to hold the field: once, and it can do nothing else.

    python -m acquire.hold RUN_FOLDER [--trial] [--parent PID]

It asks whoever watches the run whether it may, last of all before it sends; started by hand, it is
not allowed. With ``--trial`` it only sees whether the supply can be asked. Each step is a line of
JSON on stdout. Exit status 0: the supply answered as configured; 1: it did not, or nothing was sent.
"""

from __future__ import annotations

import faulthandler
import json
import os
import sys
from collections.abc import Mapping, Sequence
from contextlib import suppress

from acquire.bus import ask
from acquire.child_process import Child, child_parser
from acquire.clock import utc_now_text
from acquire.config.hold import HoldSection
from acquire.errors import BusError, RampsideError, RunError
from acquire.hold import record
from acquire.hold.command import ANSWERED, LAST, NOT_SENT, REACHED, hold, reach
from acquire.instrument import Instrument
from acquire.run_folder import RunFolder, open_run
from acquire.stop import Stopped

ALLOWED_WITHIN_S = 3.0


def main(arguments: Sequence[str] | None = None) -> int:
    """Entry point."""
    parser = child_parser("acquire.hold", __doc__)
    parser.add_argument("--trial", action="store_true", help="ask only who is there")
    options = parser.parse_args(arguments)
    child = Child("hold", options.parent)
    child.stop.install()
    try:
        run = open_run(options.run_folder)
        if options.trial:
            return 0 if _try(run, child) == REACHED else 1
        return 0 if _hold(run, child) == ANSWERED else 1
    except Stopped:
        _say(NOT_SENT, "it was asked to end before anything was sent.")
    except RampsideError as error:
        _say(NOT_SENT, str(error))
    return 1


def _try(run: RunFolder, child: Child) -> str:
    return reach(Instrument(_section(run)), _say, child.stop.wait)


def _section(run: RunFolder) -> HoldSection:
    if run.rig.hold is None:
        raise RunError(f"{run.path}: its configuration has no [hold], so nothing was sent.")
    return run.rig.hold


def _hold(run: RunFolder, child: Child) -> str:
    section, live = _section(run), run.live()
    if live is None or not live.alive or not live.hold:
        raise RunError(f"{run.path}: nobody watches this run, so nothing was sent.")
    if record.was_claimed(run.path):
        raise RunError(f"{run.path}: the command goes out once in a run; nothing was sent again.")

    def may_send(told: str) -> bool:
        message = {"kind": "hold", "do": "may_send", "pid": os.getpid(), "told": told}
        try:
            allowed = ask(live.hold, message, ALLOWED_WITHIN_S).get("ok") is True
        except BusError:
            return False
        return allowed and child.wanted()

    def claim(content: Mapping[str, object]) -> None:
        record.claim(run.path, {"utc": utc_now_text(), "pid": os.getpid(), **content})

    def say(step: str, text: str) -> None:
        if step in LAST and step != NOT_SENT:
            with suppress(RunError):  # what is said below tells it all the same
                record.conclude(run.path, {"utc": utc_now_text(), "outcome": step, "text": text})
        _say(step, text)

    return hold(section, Instrument(section), may_send, claim, say, child.stop.wait)


def _say(step: str, text: str) -> None:
    with suppress(OSError):  # nobody hears us; the record stands
        print(json.dumps({"step": step, "text": text}), flush=True)


if __name__ == "__main__":
    faulthandler.enable()
    sys.exit(main())
