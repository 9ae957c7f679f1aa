"""Make the picture of the page that README shows: ``python -m lozenge_dashboard.screenshot``.

Needs the test extra (playwright) and an installed Chromium.
"""

from __future__ import annotations

import argparse
import multiprocessing
import shutil
import socket
import time
from pathlib import Path

from lozenge_dashboard.app import ADDRESS, free_port, serve

__all__ = ["main", "take"]

TARGET = Path(__file__).parents[1] / "screenshot.png"
PORT = 5780
SWITCHES = ("--no-sandbox", "--disable-gpu", "--disable-background-networking")
DRAWN = """() => window.Bokeh?.documents?.[0]?.is_idle
  && Bokeh.documents[0].get_model_by_name("Scaling")?.renderers[1].data_source.get_length() > 7"""


def take(target: Path, *, theme: str = "light", seconds: float = 240.0) -> None:
    """Serve the first preset, wait until its sweeps are drawn, and save the page as PNG.

    Parameters
    ----------
    target : Path
        Where the picture goes.
    theme : {"light", "dark"}
        Colours of the page.
    seconds : float
        Longest time to wait for the sweeps.
    """
    from playwright.sync_api import sync_playwright

    port = free_port(PORT)
    # Not a daemon: the server has a worker process of its own.
    server = multiprocessing.get_context("spawn").Process(
        target=serve, args=(None, None, port, False)
    )
    server.start()
    try:
        _wait_for(port)
        with sync_playwright() as playwright:
            chromium = playwright.chromium.launch(
                executable_path=shutil.which("chromium"), args=list(SWITCHES)
            )
            page = chromium.new_page(viewport={"width": 1440, "height": 900})
            page.goto(f"http://{ADDRESS}:{port}/")
            page.wait_for_function(DRAWN, timeout=1000 * seconds)
            if theme == "dark":
                page.get_by_role("button", name="Dark").click()
            page.locator(".behind").wait_for(state="hidden", timeout=1000 * seconds)
            page.wait_for_timeout(1000)
            page.screenshot(path=target)
            chromium.close()
    finally:
        server.terminate()
        server.join()


def _wait_for(port: int, seconds: float = 60.0) -> None:
    """Wait until the server listens."""
    end = time.monotonic() + seconds
    while True:
        with socket.socket() as probe:
            if probe.connect_ex((ADDRESS, port)) == 0:
                return
        if time.monotonic() > end:
            raise TimeoutError(f"no server on port {port} after {seconds:g} s")
        time.sleep(0.1)


def main() -> None:
    """Take the picture."""
    parser = argparse.ArgumentParser(description="Make the picture of the page for README.")
    parser.add_argument("target", nargs="?", type=Path, default=TARGET)
    parser.add_argument("--theme", choices=("light", "dark"), default="light")
    given = parser.parse_args()
    take(given.target, theme=given.theme)


if __name__ == "__main__":
    main()
