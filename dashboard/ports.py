"""Is a port free? Asked before anything is started."""

from __future__ import annotations

import errno
import socket
from contextlib import ExitStack

from acquire.errors import BusError

LOOPBACK = "127.0.0.1"


def is_free(port: int) -> bool:
    """True if a server could listen on this port of the loopback address now."""
    return _refusal(port) is None


def listens(port: int) -> bool:
    """True if somebody takes connections on this port of the loopback address."""
    with socket.socket() as caller:
        caller.settimeout(0.2)
        return caller.connect_ex((LOOPBACK, port)) == 0


def free_ports(count: int) -> list[int]:
    """Different ports of the loopback address that are free now."""
    with ExitStack() as held:  # all held until the last is found, so that they differ
        trials = [held.enter_context(socket.socket()) for _ in range(count)]
        for trial in trials:
            trial.bind((LOOPBACK, 0))
        return [int(trial.getsockname()[1]) for trial in trials]


def page_port(port: int) -> int:
    """The port for the page; 0 asks for any free one. Raises BusError if it can't be had."""
    if port == 0:
        return free_ports(1)[0]
    error = _refusal(port)
    if error is None:
        return port
    if error.errno == errno.EADDRINUSE:
        what = "is taken, perhaps by another rampside"
    else:
        what = f"can't be used ({error.strerror})"
    raise BusError(f"Port {port} {what}: choose another with --port N, or 0 for any free one.")


def _refusal(port: int) -> OSError | None:
    with socket.socket() as trial:
        trial.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        try:
            trial.bind((LOOPBACK, port))
            trial.listen(1)
        except OSError as error:
            return error
    return None
