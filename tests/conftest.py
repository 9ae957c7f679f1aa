"""What all tests share: one BLAS thread, repeatable examples, a browser that stays at home."""

from __future__ import annotations

import ipaddress
import os
import shutil
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any
from urllib.parse import urlsplit

import pytest
from hypothesis import settings

if TYPE_CHECKING:
    from playwright.sync_api import Browser, Page, Route, WebSocket

# Read by the linear algebra libraries when numpy is first imported, which is after this.
for variable in (
    "OPENBLAS_NUM_THREADS",
    "OMP_NUM_THREADS",
    "MKL_NUM_THREADS",
    "VECLIB_MAXIMUM_THREADS",
):
    os.environ.setdefault(variable, "1")

IN_CI = os.environ.get("CI") == "true"
HERE = Path(__file__).parent

# No deadline: a first call may compile.
settings.register_profile("lozenge", deadline=None, derandomize=IN_CI, print_blob=True)
settings.load_profile("lozenge")

CHROMIUM_NAMES = ("chromium", "chromium-browser", "google-chrome")
CHROMIUM_SWITCHES = (
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
    # Sockets are kept at home here: playwright's own interception of them doubles the time from
    # a slider to the painted views (240 to 490 ms, measured), so it would spoil the benchmarks.
    "--host-resolver-rules=MAP * ~NOTFOUND, EXCLUDE 127.0.0.1, EXCLUDE localhost",
)


@pytest.hookimpl(tryfirst=True)
def pytest_collection_modifyitems(items: list[pytest.Item]) -> None:
    """Mark what needs a browser and what is a benchmark, before markers select."""
    for item in items:
        if "chromium_path" in getattr(item, "fixturenames", ()):
            item.add_marker("browser")
        if HERE / "benchmarks" in item.path.parents:
            item.add_marker("benchmark")


@pytest.hookimpl(optionalhook=True)
def pytest_xdist_make_scheduler(config: pytest.Config, log: Any) -> Any:
    """Give workers whole files, whose tests share servers and results.

    All that starts a browser stays with one worker: two would starve each other.
    """
    from xdist.scheduler import LoadScopeScheduling

    class ByFile(LoadScopeScheduling):
        def _split_scope(self, nodeid: str) -> str:
            file = nodeid.split("::", 1)[0]
            return "browser" if file.startswith("tests/browser/") else file

    return ByFile(config, log)


@pytest.fixture(scope="session")
def chromium_path() -> str:
    """Path of an installed Chromium; without one the test is skipped, and in CI an error."""
    for name in CHROMIUM_NAMES:
        if found := shutil.which(name):
            return found
    reason = f"no browser: none of {', '.join(CHROMIUM_NAMES)} is on PATH; install one"
    if IN_CI:
        pytest.fail(reason, pytrace=False)
    pytest.skip(reason)


# Per module, because tests elsewhere may want the event loop that playwright holds meanwhile.
@pytest.fixture(scope="module")
def browser(chromium_path: str) -> Iterator[Browser]:
    """A headless Chromium."""
    from playwright.sync_api import sync_playwright

    with sync_playwright() as playwright:
        chromium = playwright.chromium.launch(
            executable_path=chromium_path, args=list(CHROMIUM_SWITCHES)
        )
        yield chromium
        chromium.close()


def leaves_this_machine(url: str) -> bool:
    """Whether a request to `url` would go to another host than this one."""
    parts = urlsplit(url)
    if parts.scheme in ("about", "blob", "data"):
        return False
    host = parts.hostname or ""
    try:
        return not ipaddress.ip_address(host).is_loopback
    except ValueError:
        return host != "localhost"


@pytest.fixture
def outside_requests() -> list[str]:
    """Addresses off this machine that the test's page asked for; none was reached."""
    return []


@pytest.fixture
def page(browser: Browser, outside_requests: list[str]) -> Iterator[Page]:
    """A fresh page of 1440x900; the test fails if it asked for anything off this machine."""

    def refuse_request(route: Route) -> None:
        outside_requests.append(route.request.url)
        route.abort()

    def note_socket(socket: WebSocket) -> None:
        if leaves_this_machine(socket.url):
            outside_requests.append(socket.url)

    context = browser.new_context(viewport={"width": 1440, "height": 900}, service_workers="block")
    context.route(leaves_this_machine, refuse_request)
    context.on("page", lambda page: page.on("websocket", note_socket))
    yield context.new_page()
    context.close()
    count = len(outside_requests)
    assert count == 0, f"{count} requests off this machine: {outside_requests[:5]}"
