"""Addresses on the network as they are written in configurations: numbers, never names."""

from __future__ import annotations

import ipaddress
from dataclasses import dataclass

KEYS_NEEDED = (
    "not a loopback address, so keys are needed: make them by `rampside keys make` on both "
    "computers, and name the one that reads as `computer` in [readers.elsewhere]"
)


@dataclass(frozen=True)
class Address:
    """``tcp://HOST:PORT`` in its parts. ``loopback``: it can't be reached from other computers."""

    host: str
    port: int
    loopback: bool
    ipv6: bool

    def __str__(self) -> str:
        return f"tcp://[{self.host}]:{self.port}" if self.ipv6 else f"tcp://{self.host}:{self.port}"


def parse_address(text: str) -> Address:
    """The address in a text. Raises ValueError, whose text goes on behind the address.

    A name instead of a number could mean another computer tomorrow; all addresses of a computer
    at once (``0.0.0.0``) would be more than anybody wants.
    """
    host, _, port = text.removeprefix("tcp://").rpartition(":")
    good_port = port.isascii() and port.isdigit() and len(port) <= 5 and int(port) <= 65_535
    try:
        number = ipaddress.ip_address(host.removeprefix("[").removesuffix("]"))
    except ValueError:
        number = None
    bracketed = host.startswith("[") and host.endswith("]")
    if (
        not text.startswith("tcp://")
        or not good_port
        or number is None
        or bracketed != (number.version == 6)
        or "%" in host
    ):
        raise ValueError("is no address of the bus; write tcp://127.0.0.1:PORT, with a number")
    if number.is_unspecified or number.is_multicast or str(number) == "255.255.255.255":
        raise ValueError("is not the address of one computer; write the number that it has")
    return Address(str(number), int(port), number.is_loopback, number.version == 6)
