"""Addresses of the bus: which may be used, and free ones for a run."""

from __future__ import annotations

import random
import socket
from collections.abc import Iterable
from contextlib import ExitStack
from dataclasses import dataclass

from acquire.address import KEYS_NEEDED, Address, parse_address
from acquire.errors import BusError

# Below the ports that systems hand out for outgoing connections (from 32768 on Linux, 49152
# elsewhere): a subscriber that keeps calling a dead publisher would in the end be given the very
# port that it calls, talk to itself and keep the publisher from coming back.
LOWEST_PORT, HIGHEST_PORT = 20_000, 32_000


@dataclass(frozen=True)
class Endpoint:
    """The two addresses of a publisher: where it publishes, and where it answers questions.

    ``keys``: the folder of the keys that are used there, empty for none; ``computer``: whose key
    the publisher must have.
    """

    publish: str
    answer: str
    keys: str = ""
    computer: str = ""


def check_address(text: str, with_keys: bool) -> Address:
    """An address at which the bus may be used. Raises BusError.

    Without keys the bus is neither encrypted nor authenticated, so nothing of it may leave the
    computer.
    """
    try:
        address = parse_address(text)
    except ValueError as error:
        raise BusError(f"{text}: {error}.") from None
    if not (address.loopback or with_keys):
        raise BusError(f"{text}: {KEYS_NEEDED}.")
    return address


def free_endpoints(streams: Iterable[str]) -> dict[str, Endpoint]:
    """Free loopback addresses for each stream, all different. Raises BusError if there is none."""
    names = list(streams)
    addresses = _free_addresses(2 * len(names))
    pairs = zip(addresses[::2], addresses[1::2])
    return {name: Endpoint(*pair) for name, pair in zip(names, pairs)}


def free_address() -> str:
    """One free loopback address. Raises BusError if there is none."""
    return _free_addresses(1)[0]


def _free_addresses(count: int) -> list[str]:
    ports = random.SystemRandom().sample(range(LOWEST_PORT, HIGHEST_PORT), k=2_000)
    with ExitStack() as held:  # all held until the last is found, so that they differ
        found: list[str] = []
        for port in ports:
            if len(found) == count:
                break
            trial = held.enter_context(socket.socket(socket.AF_INET, socket.SOCK_STREAM))
            try:
                trial.bind(("127.0.0.1", port))
            except OSError:
                continue
            found.append(f"tcp://127.0.0.1:{port}")
    if len(found) < count:
        raise BusError(f"{count} free ports are needed on 127.0.0.1; end some other programs.")
    return found
