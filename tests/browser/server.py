"""The program as a process of its own, for tests that meet it through a browser."""

from __future__ import annotations

import os
import re
import signal
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager

START = "from lozenge_dashboard.cli import main; raise SystemExit(main())"
ADDRESS = re.compile(r"http://127\.0\.0\.1:\d+/")


@contextmanager
def served(port: int, *preset: str) -> Iterator[str]:
    """Serve a preset, or the first, on a port or the next free one; gives the address.

    The process is interrupted at the end, as with Ctrl-C, and has to end by itself.
    """
    environment = {
        **os.environ,
        "PYTHONPATH": os.pathsep.join(filter(None, sys.path)),
        "PYTHONUNBUFFERED": "1",
    }
    server = subprocess.Popen(
        [sys.executable, "-c", START, *preset, "--no-browser", "--port", str(port)],
        stdout=subprocess.PIPE,
        text=True,
        env=environment,
    )
    assert server.stdout is not None
    try:
        found = None
        while found is None:
            line = server.stdout.readline()
            assert line, "the server ended before it named its address"
            found = ADDRESS.search(line)
        yield found[0]
        server.send_signal(signal.SIGINT)
        server.wait(20)
    finally:
        server.kill()
        server.wait()
        server.stdout.close()
