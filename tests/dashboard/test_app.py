"""The server's address."""

from __future__ import annotations

import socket

from lozenge_dashboard.app import ADDRESS, free_port


def test_busy_port_gives_the_next_free_one() -> None:
    with socket.socket() as taken:
        taken.bind((ADDRESS, 0))
        taken.listen()
        port = taken.getsockname()[1]
        assert free_port(port) > port


def test_free_port_is_taken_as_it_is() -> None:
    with socket.socket() as probe:
        probe.bind((ADDRESS, 0))
        port = probe.getsockname()[1]
    assert free_port(port) == port


def test_only_the_loopback_address_is_served() -> None:
    assert ADDRESS == "127.0.0.1"
