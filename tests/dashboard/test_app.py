"""The server's address."""

from __future__ import annotations

import socket
from typing import Any

from lozenge_dashboard.app import ADDRESS, _unless_gone, free_port


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


def test_a_tab_that_closes_while_it_is_written_to_is_no_error() -> None:
    from tornado.websocket import WebSocketClosedError

    told: list[Any] = []

    class Loop:
        def default_exception_handler(self, context: Any) -> None:
            told.append(context)

    other = {"message": "m", "exception": ValueError("other")}
    for context in ({"message": "m", "exception": WebSocketClosedError()}, other):
        _unless_gone(Loop(), context)  # type: ignore[arg-type]
    assert told == [other]
