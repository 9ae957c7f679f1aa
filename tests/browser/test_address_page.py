"""The address, undo and redo, a lost server and bundles as a person meets them in a browser."""

from __future__ import annotations

import base64
import os
import re
import socket
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING
from urllib.parse import parse_qsl, urlsplit

import pytest
from tests.browser.server import ADDRESS, START, served

from lozenge_engine.address import query_of
from lozenge_engine.bundle import Bundle, pack
from lozenge_engine.config import PointSource, Setup
from lozenge_engine.presets import Preset

if TYPE_CHECKING:
    from playwright.sync_api import Page

SLOW = 60_000
FRONT = """() => window.Bokeh?.documents?.[0]?.is_idle
  && Bokeh.documents[0].get_model_by_name("Entropies")?.renderers
    .some((r) => r.data_source.get_length() > 3)"""
SCREEN = Preset(
    title="A quiet court",
    sentence="Of ours.",
    setup=Setup(
        points=PointSource(density=200.0, seed=3), half_width=0.3, separation=0.1, region_count=2
    ),
)


@pytest.fixture(scope="module")
def address() -> Iterator[str]:
    """A running server."""
    with served(5671) as found:
        yield found


@pytest.fixture
def bench(page: Page, address: str) -> Page:
    """A page with a small screen from its address."""
    page.set_default_timeout(SLOW)
    page.goto(f"{address}?{query_of(SCREEN)}")
    page.wait_for_function(FRONT, timeout=SLOW)
    return page


def at(page: Page) -> dict[str, str]:
    """Names and values of the address."""
    return dict(parse_qsl(urlsplit(page.url).query))


def box(page: Page, name: str) -> str:
    return page.locator(f"#{name}-box").input_value()


def type_into(page: Page, name: str, value: object, *, key: str = "") -> None:
    """Type a value and wait until the address carries it."""
    field = page.locator(f"#{name}-box")
    field.fill(str(value))
    field.press("Enter")
    wait_at(page, key or name, value)


def wait_at(page: Page, key: str, value: object) -> None:
    page.wait_for_function(
        "([k, v]) => new URLSearchParams(location.search).get(k) === v", arg=[key, str(value)]
    )


def wait_box(page: Page, name: str, value: str) -> None:
    page.wait_for_function(
        """([name, value]) => { const find = (root) => {
          for (const e of root.querySelectorAll("*")) {
            if (e.id === name) return e;
            if (e.shadowRoot) { const f = find(e.shadowRoot); if (f) return f; } } return null; };
          return find(document)?.value === value; }""",
        arg=[f"{name}-box", value],
    )


def test_address_opens_its_state_is_copied_and_a_reload_comes_back_in_it(bench: Page) -> None:
    assert bench.get_by_role("heading", level=1).inner_text() == SCREEN.title
    assert (box(bench, "seed"), box(bench, "separation")) == ("3", "0.1")
    type_into(bench, "separation", 0.2)
    type_into(bench, "seed", 8)
    bench.get_by_role("button", name="Dark").click()
    wait_at(bench, "theme", "dark")
    bench.context.grant_permissions(["clipboard-read", "clipboard-write"])
    bench.get_by_role("button", name="Copy link").click()
    bench.get_by_text("Copied.").wait_for()
    assert bench.evaluate("() => navigator.clipboard.readText()") == bench.url
    bench.reload()
    bench.wait_for_function(FRONT, timeout=SLOW)
    assert (box(bench, "seed"), box(bench, "separation")) == ("8", "0.2")
    assert bench.evaluate("() => document.documentElement.dataset.theme") == "dark"
    # The list of states outlives the reload.
    bench.get_by_role("button", name="Undo").click()
    wait_at(bench, "theme", "light")
    bench.go_back()
    wait_box(bench, "seed", "3")
    wait_box(bench, "separation", "0.2")
    bench.go_forward()
    wait_box(bench, "seed", "8")


def test_first_page_writes_its_address_without_a_step(page: Page, address: str) -> None:
    page.set_default_timeout(SLOW)
    page.goto(address)
    page.wait_for_function("() => location.search.startsWith('?v=1&')")
    assert page.get_by_role("button", name="Undo").is_disabled()
    assert page.get_by_role("button", name="Redo").is_disabled()


def test_fault_of_an_address_is_named_in_place_and_the_rest_holds(page: Page, address: str) -> None:
    page.set_default_timeout(SLOW)
    page.goto(f"{address}?{query_of(SCREEN).replace('half_width=0.3', 'half_width=wide')}")
    refusal = page.locator("header .refusal")
    refusal.wait_for(state="visible")
    assert "half_width" in refusal.inner_text()
    assert (box(page, "seed"), box(page, "separation")) == ("3", "0.1")
    assert at(page)["half_width"] == "wide"


def test_undo_and_redo_by_button_and_by_key_but_not_in_a_text_field(bench: Page) -> None:
    undo, redo = (bench.get_by_role("button", name=name) for name in ("Undo", "Redo"))
    assert undo.is_disabled()
    type_into(bench, "separation", 0.2)
    type_into(bench, "separation", 0.25)
    bench.locator("#separation-box").press("Control+z")
    bench.wait_for_timeout(300)
    assert at(bench)["separation"] == "0.25"
    slider = bench.get_by_role("slider", name="separation d")
    slider.focus()
    for _ in range(4):  # more often than there are changes, and faster than the browser walks
        slider.press("Control+z")
    wait_box(bench, "separation", "0.1")
    assert undo.is_disabled()
    slider.press("Control+Shift+Z")
    wait_box(bench, "separation", "0.2")
    redo.click()
    wait_box(bench, "separation", "0.25")
    assert redo.is_disabled()
    undo.click()
    wait_box(bench, "separation", "0.2")
    type_into(bench, "seed", 4)
    assert redo.is_disabled()
    assert box(bench, "separation") == "0.2"


def test_dragging_writes_no_address_and_its_end_makes_one_entry(bench: Page) -> None:
    entries = bench.evaluate("() => history.length")
    found = bench.evaluate(
        """async () => {
          const find = (root) => { for (const e of root.querySelectorAll("*")) {
            if (e.id === "separation-range") return e;
            if (e.shadowRoot) { const f = find(e.shadowRoot); if (f) return f; } } return null; };
          const slider = find(document);
          const seen = new Set();
          for (let i = 0; i < 40; i++) {
            slider.value = 0.11 + 0.002 * i;
            slider.dispatchEvent(new Event("input", { bubbles: true }));
            await new Promise((done) => setTimeout(done, 20));
            seen.add(location.search);
          }
          slider.dispatchEvent(new Event("change", { bubbles: true }));
          return [seen.size, Number(slider.value)];
        }"""
    )
    assert found[0] == 1
    wait_at(bench, "separation", found[1])
    assert bench.evaluate("() => history.length") == entries + 1
    # So does a key that is held: its first step is a change, its repetitions drag.
    slider = bench.get_by_role("slider", name="separation d")
    slider.focus()
    for _ in range(6):
        bench.keyboard.down("ArrowRight")
    bench.keyboard.up("ArrowRight")
    wait_at(bench, "separation", round(found[1] + 0.03, 6))
    assert bench.evaluate("() => history.length") == entries + 3


def test_bundle_opens_by_the_button_and_by_dropping(bench: Page, tmp_path: Path) -> None:
    sent = Preset(title="Sent", sentence="By hand.", setup=SCREEN.setup.with_(separation=0.3))
    data = pack(Bundle(sent, "", {"python": "3"}, {"counts.svg": b"<svg/>"}))
    path = tmp_path / "sent.zip"
    path.write_bytes(data)
    bench.locator("input[type=file][aria-label=Open]").set_input_files(path)
    bench.get_by_role("heading", level=1, name="Sent").wait_for()
    assert bench.locator(".agreement").inner_text() == "The bundle holds 1 figure."
    bench.go_back()
    bench.get_by_role("heading", level=1, name=SCREEN.title).wait_for()
    bench.evaluate(
        """(text) => {
          const find = (root) => { for (const e of root.querySelectorAll("*")) {
            if (e.classList.contains("column")) return e;
            if (e.shadowRoot) { const f = find(e.shadowRoot); if (f) return f; } } return null; };
          const bytes = Uint8Array.from(atob(text), (c) => c.charCodeAt(0));
          const dataTransfer = new DataTransfer();
          dataTransfer.items.add(new File([bytes], "sent.zip"));
          find(document).dispatchEvent(new DragEvent("drop", { dataTransfer, bubbles: true }));
        }""",
        base64.b64encode(data).decode(),
    )
    bench.get_by_role("heading", level=1, name="Sent").wait_for()
    wait_box(bench, "separation", "0.3")


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


@contextmanager
def killed(port: int) -> Iterator[str]:
    """A server that is killed at the end; gives its address."""
    environment = {
        **os.environ,
        "PYTHONPATH": os.pathsep.join(filter(None, sys.path)),
        "PYTHONUNBUFFERED": "1",
    }
    command = [sys.executable, "-c", START, "--no-browser", "--port", str(port)]
    with subprocess.Popen(command, stdout=subprocess.PIPE, text=True, env=environment) as server:
        assert server.stdout is not None
        try:
            yield next(found[0] for line in server.stdout if (found := ADDRESS.search(line)))
        finally:
            server.kill()


def test_killed_server_is_said_at_once_and_the_page_comes_back_in_its_state(
    page: Page, outside_requests: list[str]
) -> None:
    page.set_default_timeout(SLOW)
    port = free_port()
    with killed(port) as where:
        page.goto(f"{where}?{query_of(SCREEN)}")
        page.wait_for_function(FRONT, timeout=SLOW)
        others = [page.context.new_page() for _ in range(2)]
        for other, name in zip(others, ("campaign", "evidence"), strict=True):
            other.goto(f"{where}{name}")
            other.wait_for_function("() => window.Bokeh?.documents?.[0]?.is_idle", timeout=SLOW)
        type_into(page, "separation", 0.2)
    lost = page.locator(".lost")
    lost.wait_for(state="visible", timeout=2000)
    assert "connection to the server is lost" in lost.inner_text()
    assert f"--port {port}" in lost.inner_text()
    inert = "(node) => node.closest('[inert]') !== null"
    assert page.locator("#separation-range").evaluate(inert)
    assert not page.get_by_role("button", name="Copy link").evaluate(inert)
    for other in others:
        other.locator(".lost").wait_for(state="visible", timeout=2000)
        other.close()
    again = lost.get_by_role("button", name="Reload")
    again.click()
    page.get_by_text(re.compile("does not answer yet")).wait_for()
    assert box(page, "separation") == "0.2"
    with killed(port) as other:
        assert other == where
        again.click()
        lost.wait_for(state="hidden")
        page.wait_for_function(FRONT, timeout=SLOW)
        assert (box(page, "separation"), box(page, "seed")) == ("0.2", "3")
        assert page.get_by_role("heading", level=1).inner_text() == SCREEN.title
    assert outside_requests == []
