"""Who may talk to the server: this machine's browser, on pages of this server, and nobody else.

A page of another site that is open in the same browser could otherwise reach the server under a
name of its own that it lets point to the loopback address, or open a socket to it.
"""

from __future__ import annotations

from collections.abc import Collection
from typing import Any
from urllib.parse import urlsplit

from tornado.httputil import HTTPServerRequest
from tornado.routing import Matcher, Rule
from tornado.web import Application, RequestHandler

__all__ = ["guard"]


class _Foreign(Matcher):
    """Matches a request that is not from this server's own pages.

    Parameters
    ----------
    allowed : collection of str
        Host and port, in lower case, of every address that the server has.
    """

    def __init__(self, allowed: Collection[str]) -> None:
        self.allowed = allowed

    def match(self, request: HTTPServerRequest) -> dict[str, Any] | None:
        """Say why the request is refused; None lets it pass."""
        origin = request.headers.get("Origin")
        upgrade = request.headers.get("Upgrade", "").lower() == "websocket"
        if request.headers.get("Host", "").lower() not in self.allowed:
            why = "another host"
        elif origin is None and upgrade:
            why = "a socket from no origin"
        elif origin is not None and urlsplit(origin).netloc.lower() not in self.allowed:
            why = "another origin"
        else:
            return None
        return {"path_kwargs": {"why": why}}


class _Refusal(RequestHandler):
    """Answers what is refused, whatever was asked."""

    def prepare(self) -> None:
        """Refuse before any method is looked at."""
        self.set_status(403)
        self.set_header("Content-Type", "text/plain; charset=utf-8")
        self.finish(f"Refused: {self.path_kwargs['why']}. Open the address that Lozenge printed.\n")


def guard(application: Application, *, allowed: Collection[str]) -> None:
    """Refuse requests with a foreign Host or Origin, and sockets without an Origin.

    Parameters
    ----------
    application : tornado.web.Application
        The server's; rules that it gets later come after this one.
    allowed : collection of str
        Host and port of every address that the server has.
    """
    rule = Rule(_Foreign({name.lower() for name in allowed}), _Refusal)
    application.default_router.rules.insert(0, rule)
