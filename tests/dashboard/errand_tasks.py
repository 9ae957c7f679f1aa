"""Tasks for the process of errands: they have to be importable there."""

from __future__ import annotations

import time
from typing import Any

from lozenge_engine.errors import refuse


def double(ask: int, **_: Any) -> int:
    return 2 * ask


def stepwise(ask: int, *, report: Any, publish: Any, **_: Any) -> int:
    for step in range(ask):
        publish(step)
        report("steps", step / ask)
        time.sleep(0.25)
    return ask


def endless(ask: object, *, report: Any, **_: Any) -> None:
    while True:
        report("for ever", 0.0)
        time.sleep(0.02)


def deaf(ask: float, **_: Any) -> None:
    time.sleep(ask)


def refused(ask: object, **_: Any) -> None:
    raise refuse("number", given=ask, allowed="another", do="type it")


def wrong(ask: object, **_: Any) -> None:
    raise KeyError(ask)


def known(ask: object, *, stages: Any, **_: Any) -> bool:
    """Whether the process remembers a key, which it does from then on."""
    return bool(stages.get(ask, lambda: 1)[1])


def killed(ask: object, **_: Any) -> None:
    import os
    import signal

    os.kill(os.getpid(), signal.SIGKILL)
