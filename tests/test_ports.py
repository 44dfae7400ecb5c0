"""Ports that are free, taken or forbidden, and their numbers in a configuration."""

from __future__ import annotations

import socket

import pytest

from acquire.errors import BusError
from dashboard.ports import free_ports, is_free, listens, page_port
from dashboard.roles import with_ports


def test_a_taken_port() -> None:
    with socket.socket() as server:
        server.bind(("127.0.0.1", 0))
        server.listen()
        port = server.getsockname()[1]
        assert not is_free(port)
        assert listens(port)
        with pytest.raises(BusError, match=rf"Port {port} is taken.*--port N"):
            page_port(port)
    assert is_free(port)
    assert not listens(port)
    assert page_port(port) == port


def test_free_ports_are_all_different() -> None:
    ports = free_ports(20)
    assert len(set(ports)) == 20
    assert page_port(0) > 0


def test_ports_are_replaced_where_they_stand_alone() -> None:
    text = b'resource = "TCPIP::127.0.0.1::47101::SOCKET"\nport = 47101 # 147101 4710 1.47101\n'
    assert with_ports(text, {47101: 5}) == text.replace(b"::47101::", b"::5::").replace(
        b"= 47101 ", b"= 5 "
    )
    assert with_ports(text, {}) == text


def test_ports_may_change_places() -> None:
    assert with_ports(b"a = 1001, b = 1002", {1001: 1002, 1002: 1001}) == b"a = 1002, b = 1001"
