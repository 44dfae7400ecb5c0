"""Is a port free? Asked before anything is started."""

from __future__ import annotations

import errno
import socket
from contextlib import ExitStack

from acquire.errors import BusError

LOOPBACK = "127.0.0.1"
ANYWHERE = {"0.0.0.0": LOOPBACK, "::": "::1"}
"""All addresses of this computer, and the one of them at which to look whether somebody listens."""


def is_free(port: int, address: str = LOOPBACK) -> bool:
    """True if a server could listen on this port of an own address now."""
    return _refusal(port, address) is None


def has_address(host: str) -> bool:
    """True if this computer has this address, given as a number."""
    family = socket.AF_INET6 if ":" in host else socket.AF_INET
    with socket.socket(family) as trial:
        try:
            trial.bind((host, 0))
        except OSError:
            return False
    return True


def listens(port: int, address: str = LOOPBACK) -> bool:
    """True if somebody takes connections on this port of an own address."""
    with _socket(address) as caller:
        caller.settimeout(0.2)
        return caller.connect_ex((ANYWHERE.get(address, address), port)) == 0


def free_ports(count: int, address: str = LOOPBACK) -> list[int]:
    """Different ports of an own address that are free now."""
    with ExitStack() as held:  # all held until the last is found, so that they differ
        trials = [held.enter_context(_socket(address)) for _ in range(count)]
        for trial in trials:
            trial.bind((address, 0))
        return [int(trial.getsockname()[1]) for trial in trials]


def page_port(port: int, address: str = LOOPBACK) -> int:
    """The port for the page; 0 asks for any free one. Raises BusError if it can't be had."""
    error = _refusal(port, address)
    if error is None:
        return port or free_ports(1, address)[0]
    if error.errno == errno.EADDRNOTAVAIL:
        raise BusError(f"{address} is no address of this computer: choose another --page-address.")
    if error.errno == errno.EADDRINUSE:
        what = "is taken, perhaps by another rampside"
    else:
        what = f"can't be used ({error.strerror})"
    raise BusError(f"Port {port} {what}: choose another with --port N, or 0 for any free one.")


def _refusal(port: int, address: str) -> OSError | None:
    with _socket(address) as trial:
        trial.setsockopt(socket.SOL_SOCKET, socket.SO_REUSEADDR, 1)
        try:
            trial.bind((address, port))
            trial.listen(1)
        except OSError as error:
            return error
    return None


def _socket(address: str) -> socket.socket:
    return socket.socket(socket.AF_INET6 if ":" in address else socket.AF_INET)
