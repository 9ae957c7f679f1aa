"""A document's own turn: where its models may be changed, and all changes go out at once."""

from __future__ import annotations

import contextlib
from collections.abc import Callable, Iterator
from typing import Any

import panel as pn
from bokeh.document import Document

__all__ = ["Turn"]


class Turn:
    """Access to one page's document from any thread.

    Parameters
    ----------
    document : Document
        The page's document.
    """

    def __init__(self, document: Document) -> None:
        self.document = document

    def later(self, call: Callable[[Any], None]) -> Callable[[Any], None]:
        """Make of `call` a function that any thread may call; it runs in the document's turn."""

        def run(value: Any) -> None:
            def turn() -> None:
                with self.together():
                    call(value)

            if self.document.session_context is not None:
                self.document.add_next_tick_callback(turn)

        return run

    @contextlib.contextmanager
    def together(self) -> Iterator[None]:
        """Send all changes to the browser at once."""
        with pn.io.hold(self.document):
            yield
