"""Where the page is served: on this computer alone, or to others who know a secret."""

from __future__ import annotations

import ipaddress
import socket
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path

from acquire.errors import UsageError
from dashboard.ports import ANYWHERE, LOOPBACK
from dashboard.secret_file import make_if_missing, read_secret

SOMEWHERE = ("192.0.2.1", 9)
"""An address of no computer (RFC 5737): which of ours would be used to get there? Nothing is sent."""


@dataclass(frozen=True)
class PageAddress:
    """An address of this computer, in numbers, and the file with the secret for the page there.

    ``names``: under which hosts the page may be asked for, the one that people are told first.
    Made by :func:`page_address`.
    """

    address: str = LOOPBACK
    names: tuple[str, ...] = (LOOPBACK, "localhost")
    secret: Path | None = None

    def url(self, port: int) -> str:
        """What to open in a browser."""
        return f"http://{self.names[0]}:{port}"

    def told(self, port: int) -> str:
        """The same for a person, with what they must know."""
        if self.secret is None:
            return self.url(port)
        asks = f"{self.url(port)} asks for the secret in {self.secret}"
        if _is_loopback(self.address):
            return asks
        return f"{asks}\n      It crosses the network in clear text: an SSH tunnel is safer."

    def arguments(self) -> tuple[str, ...]:
        """For the command line of the page's process; the secret itself never stands on one."""
        secret = () if self.secret is None else ("--page-secret", str(self.secret))
        return ("--page-address", self.address, *secret)


HERE = PageAddress()


def page_address(wanted: str = LOOPBACK, secret: Path | None = None) -> PageAddress:
    """The page's address as a person asked for it; makes the secret's file if it is missing.

    Raises UsageError for an address that is none, for one that others can reach without a
    secret, and for a secret that is not kept well.
    """
    address = _in_numbers(wanted)
    if secret is None and not _is_loopback(address):
        raise UsageError(
            f"Everybody who reaches {wanted} could see the page: add --page-secret FILE (made if it "
            "is missing), or better leave the page on 127.0.0.1 and come through an SSH tunnel."
        )
    if secret is not None:
        secret = secret.absolute()
        make_if_missing(secret)
        read_secret(secret)
    return PageAddress(address, _names(wanted, address), secret)


def _in_numbers(wanted: str) -> str:
    with suppress(ValueError):
        return str(ipaddress.ip_address(wanted.strip("[]")))
    try:
        found = socket.getaddrinfo(wanted, None, type=socket.SOCK_STREAM)
    except (OSError, UnicodeError):
        raise UsageError(
            f"{wanted!r} is no address of this computer: give one as 192.168.1.20, or leave "
            "--page-address out."
        ) from None
    return str(found[0][4][0])


def _is_loopback(address: str) -> bool:
    return ipaddress.ip_address(address).is_loopback


def _names(wanted: str, address: str) -> tuple[str, ...]:
    """Explicit names only: a page of another site can't make this server its own by DNS."""
    own = [LOOPBACK, "localhost"]
    if address == LOOPBACK:
        return tuple(own)
    if _is_loopback(address):
        return (_as_host(address), "localhost")
    names = [socket.gethostname().lower()]
    if address in ANYWHERE:
        names += [*_own_addresses(), *own]
    else:
        names += [wanted.lower(), _as_host(address)]
    return tuple(dict.fromkeys(names))


def _own_addresses() -> list[str]:
    """The addresses of this computer that can be found out: by its name, and on the way out."""
    found: list[str] = []
    with suppress(OSError, UnicodeError):
        known = socket.getaddrinfo(socket.gethostname(), None, type=socket.SOCK_STREAM)
        found += [str(entry[4][0]) for entry in known]
    with suppress(OSError), socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as way:
        way.connect(SOMEWHERE)
        found.append(str(way.getsockname()[0]))
    return [_as_host(address.partition("%")[0]) for address in found]


def _as_host(address: str) -> str:
    return f"[{address}]" if ":" in address else address
