"""What the children of a supervisor do alike: command line, when they end, how they fail.

Each is started as ``python -m MODULE RUN_FOLDER ... [--parent PID]``.
"""

from __future__ import annotations

import argparse
import os
import sys
from collections.abc import Callable
from contextlib import suppress

from acquire.errors import RampsideError
from acquire.stop import Stop


def child_parser(module: str, description: str | None) -> argparse.ArgumentParser:
    """The command line of a child: ``run_folder``, ``--parent``, and what the caller adds."""
    parser = argparse.ArgumentParser(prog=f"python -m {module}", description=description)
    parser.add_argument("run_folder")
    parser.add_argument("--parent", type=int, metavar="PID", help="end when this process has died")
    return parser


class Child:
    """This process, as a child.

    Parameters
    ----------
    role : what its complaints begin with.
    parent : number of the process without which it is not to go on; None: no matter which.
    """

    def __init__(self, role: str, parent: int | None) -> None:
        self.stop = Stop()
        self._role = role
        self._parent = parent

    def wanted(self) -> bool:
        """Whether to go on: it has not been asked to end, and its parent lives."""
        return not self.stop.requested and self._parent in (None, os.getppid())

    def complain(self, text: str) -> None:
        """Write a sentence to stderr."""
        with suppress(OSError):  # a terminal that has gone
            print(f"{self._role}: {text}", file=sys.stderr, flush=True)

    def exit_status(self, work: Callable[[], object]) -> int:
        """Obey signals and do the work. 0: ended in order, 1: failed (one sentence says why)."""
        self.stop.install()
        try:
            work()
        except RampsideError as error:
            self.complain(str(error))
            return 1
        return 0
