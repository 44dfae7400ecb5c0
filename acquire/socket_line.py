"""The socket below a VISA session, where there is one to be seen.

VISA itself can't tell a closed line from a slow one (pyvisa-py spins on it until the timeout),
nor whether bytes wait, nor whether a connection was ever made; a socket can.
"""

from __future__ import annotations

import os
import select
import socket
from typing import Any

from acquire.errors import SessionLost


def socket_below(resource: Any) -> socket.socket | None:
    """The socket that pyvisa-py reads from; None for other resources and other libraries."""
    sessions = getattr(resource.visalib, "sessions", None)
    session = sessions.get(resource.session) if isinstance(sessions, dict) else None
    below = getattr(session, "interface", None)
    return below if isinstance(below, socket.socket) else None


def connection_problem(line: socket.socket) -> str | None:
    """Why the connection was not made, in words, or None if it was."""
    code = line.getsockopt(socket.SOL_SOCKET, socket.SO_ERROR)
    return os.strerror(code) if code else None


def acknowledge_at_once(line: socket.socket) -> None:
    """Let the other end know of what arrives without the usual wait (some 40 ms), where that can
    be had. Until it knows, its system holds back what the instrument sends next, and an answer too
    many would show only when the next question has been sent. Holds for a while only."""
    if hasattr(socket, "TCP_QUICKACK"):
        line.setsockopt(socket.IPPROTO_TCP, socket.TCP_QUICKACK, 1)


def is_readable(line: socket.socket, wait_s: float) -> bool:
    """Whether bytes, or the news that the line was closed, come within that time."""
    return bool(select.select([line], [], [], wait_s)[0])


def is_writable(line: socket.socket, wait_s: float) -> bool:
    """Whether the line takes bytes within that time."""
    return bool(select.select([], [line], [], wait_s)[1])


def waiting_bytes(line: socket.socket) -> bytes:
    """The bytes (up to 4096) that wait on a line that is readable; they stay there.

    Raises SessionLost if the other end has closed the line, OSError if it broke.
    """
    there = line.recv(4096, socket.MSG_PEEK)
    if not there:
        raise SessionLost("the instrument closed the connection")
    return there
