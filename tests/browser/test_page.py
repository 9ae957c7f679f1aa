"""The page as a person meets it, in a headless browser."""

from __future__ import annotations

import re
import time
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pytest
from tests.browser.server import served

from lozenge_engine.presets import FIRST, parse, shipped

if TYPE_CHECKING:
    from playwright.sync_api import Page

VIEWS = ("sprinkling", "spectrum", "counts", "entropies", "scaling", "separation")
FIGURES = {
    "sprinkling": "Sprinkling",
    "spectrum": "Spectrum",
    "counts": "Counts",
    "entropies": "Entropies",
    "scaling": "Scaling",
    "separation": "Separation",
}
SLOW = 90_000
"""Patience with a busy machine, in ms."""

# Rows of every layer's data that lie in sight: the first two are never drawn.
ROWS = """(group) => {
  const figure = window.Bokeh?.documents[0]?.get_model_by_name(group);
  if (!figure) return 0;
  return figure.renderers.filter((r) => r.glyph.type !== "Text")
    .reduce((n, r) => n + Math.max(0, r.data_source.get_length() - 2), 0);
}"""
IDLE = "() => window.Bokeh?.documents[0]?.is_idle"
FRONT = """() => window.Bokeh?.documents?.[0]?.is_idle
  && Bokeh.documents[0].get_model_by_name("Entropies")?.renderers
    .some((r) => r.data_source.get_length() > 3)"""


@pytest.fixture(scope="module")
def address() -> Iterator[str]:
    """A running server."""
    with served(5581) as found:
        yield found


@pytest.fixture
def bench(page: Page, address: str) -> Page:
    """The page with its first picture."""
    page.set_default_timeout(SLOW)
    page.goto(address)
    page.wait_for_function(FRONT, timeout=SLOW)
    return page


def rows(page: Page, view: str) -> int:
    """Rows of data that a view shows."""
    return int(page.evaluate(ROWS, FIGURES[view]))


def reading(page: Page, name: str) -> str:
    """A number in the line of readings."""
    return page.locator(f"dl.readings div:has(dt:text-is('{name}')) dd").first.inner_text()


def type_into(page: Page, name: str, value: object) -> None:
    """Type a value into the box of a control."""
    box = page.locator(f"#{name}-box")
    box.fill(str(value))
    box.press("Enter")


def settled(page: Page) -> None:
    """Wait until the picture is the present state's."""
    page.wait_for_function(
        "() => ![...document.querySelectorAll('section.view')].slice(0, 4)"
        ".some((s) => s.classList.contains('stale'))",
        timeout=SLOW,
    )
    page.wait_for_function(IDLE, timeout=SLOW)


def test_every_view_fills_with_data(bench: Page) -> None:
    for view in VIEWS:
        bench.wait_for_function(f"(g) => ({ROWS})(g) > 0", arg=FIGURES[view], timeout=SLOW)
    assert reading(bench, "S(A)")
    assert "|" in reading(bench, "I(A:B)")


def test_nothing_is_asked_of_any_other_host(bench: Page, outside_requests: list[str]) -> None:
    bench.wait_for_timeout(1000)
    assert outside_requests == []


def test_no_error_reaches_the_console(page: Page, address: str) -> None:
    said: list[str] = []
    page.on("console", lambda m: said.append(m.text) if m.type == "error" else None)
    page.on("pageerror", lambda error: said.append(str(error)))
    page.goto(address)
    page.wait_for_function(FRONT, timeout=SLOW)
    page.get_by_role("button", name="Dark").click()
    page.wait_for_timeout(500)
    assert said == []


def test_a_stale_view_is_half_opaque(bench: Page) -> None:
    opacity = bench.evaluate(
        """() => { const view = document.querySelector("#view-scaling");
          view.classList.add("stale");
          return getComputedStyle(view.querySelector(".figure .bk-Row")).opacity; }"""
    )
    assert opacity == "0.5"


def test_moving_separation_moves_regions_and_numbers(bench: Page) -> None:
    before = reading(bench, "I(A:B)")
    where = """() => Bokeh.documents[0].get_model_by_name("Sprinkling").renderers[1]
      .data_source.get_column("x0").slice(6, 7)[0]"""
    x0 = bench.evaluate(where)
    type_into(bench, "separation", 0.4)
    bench.wait_for_function(f"(x) => ({where})() !== x", arg=x0, timeout=SLOW)
    settled(bench)
    assert reading(bench, "I(A:B)") != before


def test_arrow_keys_move_a_slider(bench: Page) -> None:
    slider = bench.get_by_role("slider", name="separation d")
    slider.focus()
    slider.press("ArrowRight")
    bench.wait_for_function("() => true")
    assert bench.locator("#separation-box").input_value() == "0.155"


def test_impossible_value_is_refused_in_place_and_the_picture_stays(bench: Page) -> None:
    before = rows(bench, "sprinkling")
    type_into(bench, "half_width", 0.9)
    error = bench.locator("#half_width-error")
    error.wait_for(state="visible")
    assert "allowed is" in error.inner_text()
    assert bench.locator("#half_width-box").get_attribute("aria-invalid") == "true"
    assert rows(bench, "sprinkling") == before
    type_into(bench, "half_width", 0.2)
    error.wait_for(state="hidden")


def test_words_where_a_number_belongs_are_refused_in_place(bench: Page) -> None:
    type_into(bench, "seed", "many")
    error = bench.locator("#seed-error")
    error.wait_for(state="visible")
    assert "a number" in error.inner_text()


def test_latest_value_wins_after_dragging(bench: Page) -> None:
    bench.locator("#elements-range").wait_for()
    bench.evaluate(
        """async () => {
          const find = (root) => { for (const e of root.querySelectorAll("*")) {
            if (e.id === "elements-range") return e;
            if (e.shadowRoot) { const f = find(e.shadowRoot); if (f) return f; } } return null; };
          const slider = find(document);
          for (let i = 0; i < 100; i++) {
            slider.value = 500 + 4 * (i % 50);
            slider.dispatchEvent(new Event("input", { bubbles: true }));
            await new Promise((done) => setTimeout(done, 20));
          }
          slider.value = 250;
          slider.dispatchEvent(new Event("input", { bubbles: true }));
          slider.dispatchEvent(new Event("change", { bubbles: true }));
        }"""
    )
    expected = int(re.sub(r"\s", "", bench.locator("#elements-box").input_value()))
    shown = bench.locator("dl.readings div:has(dt:text-is('kept/nominal')) .small")
    end = time.monotonic() + SLOW / 1000
    # Counts of a Poisson sprinkling; the values dragged over before differ by more.
    while abs(int(re.sub(r"\D", "", shown.inner_text())) - expected) > 6 * expected**0.5:
        assert time.monotonic() < end, (shown.inner_text(), expected)
        bench.wait_for_timeout(50)
    settled(bench)
    assert abs(int(re.sub(r"\D", "", shown.inner_text())) - expected) < 6 * expected**0.5


def test_keep_leaves_a_grey_reference_and_back_returns_to_the_preset(bench: Page) -> None:
    settled(bench)
    before = rows(bench, "counts")
    bench.get_by_role("button", name="Keep").click()
    removed = bench.get_by_role("button", name="Remove kept")
    removed.wait_for()
    bench.wait_for_timeout(500)
    assert rows(bench, "counts") > before
    back = bench.get_by_role("button", name="Back to preset")
    assert back.is_disabled()
    type_into(bench, "separation", 0.35)
    settled(bench)
    mark = bench.locator(".field:has(#separation-box) .mark")
    mark.wait_for(state="visible")
    back.click()
    mark.wait_for(state="hidden")
    assert bench.locator("#separation-box").input_value() == "0.15"
    removed.click()
    bench.wait_for_timeout(500)
    settled(bench)
    assert rows(bench, "counts") == before


def test_saved_preset_loads_again_and_its_numbers_agree(bench: Page, tmp_path: Path) -> None:
    type_into(bench, "separation", 0.25)
    bench.wait_for_timeout(300)
    settled(bench)
    with bench.expect_download() as waiting:
        bench.get_by_role("button", name="Save").click()
    path = tmp_path / waiting.value.suggested_filename
    waiting.value.save_as(path)
    saved = parse(path.read_bytes())
    assert saved.setup.separation == 0.25
    assert saved.sender is not None
    bench.get_by_role("button", name="Back to preset").click()
    bench.locator("input[type=file][aria-label=Open]").set_input_files(path)
    agreement = bench.locator(".agreement")
    agreement.wait_for(state="visible")
    assert "same points" in agreement.inner_text()
    assert bench.locator("#separation-box").input_value() == "0.25"


@pytest.mark.parametrize(
    "content", [b"no json", b"{}", b'{"lozenge_preset": 99}', b"\xff\xfe\x00", b"[" * 5000]
)
def test_bad_preset_is_refused_and_the_page_keeps_its_state(
    bench: Page, tmp_path: Path, content: bytes
) -> None:
    path = tmp_path / "bad.json"
    path.write_bytes(content)
    title = bench.get_by_role("heading", level=1).inner_text()
    bench.locator("input[type=file][aria-label=Open]").set_input_files(path)
    error = bench.locator("header .refusal")
    error.wait_for(state="visible")
    assert "bad.json" in error.inner_text()
    assert bench.get_by_role("heading", level=1).inner_text() == title


def test_own_points_are_drawn_and_bad_ones_refused(bench: Page, tmp_path: Path) -> None:
    good = tmp_path / "points.csv"
    lines = ["t,x"]
    count = 0
    state = 12345
    while count < 400:
        state = (1103515245 * state + 12345) % 2**31
        t = state / 2**31 * 2 - 1
        state = (1103515245 * state + 12345) % 2**31
        x = state / 2**31 * 2 - 1
        if abs(t) + abs(x) < 1:
            lines.append(f"{t!r},{x!r}")
            count += 1
    good.write_text("\n".join(lines) + "\n", encoding="utf-8")
    opener = bench.locator("input[type=file][aria-label^='Open points']")
    opener.set_input_files(good)
    bench.wait_for_function(
        "() => Bokeh.documents[0].get_model_by_name('Sprinkling').renderers[0]"
        ".data_source.get_length() < 400",
        timeout=SLOW,
    )
    settled(bench)
    assert bench.locator("#elements-box").is_disabled()
    bad = tmp_path / "bad.csv"
    bad.write_text("t,x\n0.1,nan\n", encoding="utf-8")
    opener.set_input_files(bad)
    bench.locator("header .refusal").wait_for(state="visible")
    assert bench.locator("#elements-box").input_value().replace("\u202f", "") == "400"


def test_title_gives_its_view_the_room_and_gives_it_back(bench: Page) -> None:
    title = bench.get_by_role("button", name="How much entanglement?")
    title.click()
    other = bench.locator("#view-spectrum")
    other.wait_for(state="hidden")
    assert title.get_attribute("aria-expanded") == "true"
    title.click()
    other.wait_for(state="visible")


def test_many_elements_wait_for_their_button_and_cancel_within_a_second(bench: Page) -> None:
    type_into(bench, "elements", 20_000)
    compute = bench.get_by_role("button", name="Compute")
    compute.wait_for(state="visible")
    assert re.search(r"about \d", bench.locator(".work").inner_text())
    compute.click()
    cancel = bench.get_by_role("button", name="Cancel")
    cancel.wait_for(state="visible")
    bench.wait_for_timeout(1000)
    begin = time.monotonic()
    cancel.click()
    compute.wait_for(state="visible")
    assert time.monotonic() - begin < 2.0
    type_into(bench, "elements", 30000)
    error = bench.locator("#elements-error")
    error.wait_for(state="visible")
    assert "lozenge run" in error.inner_text()


def test_theme_restyles_page_and_plots(bench: Page) -> None:
    ground = "() => Bokeh.documents[0].get_model_by_name('Counts').background_fill_color"
    light = bench.evaluate(ground)
    bench.get_by_role("button", name="Dark").click()
    bench.wait_for_function(f"(c) => ({ground})() !== c", arg=light, timeout=SLOW)
    assert bench.evaluate("() => document.documentElement.dataset.theme") == "dark"


def test_every_control_has_a_name(bench: Page) -> None:
    nameless = bench.evaluate(
        """() => {
          const found = [];
          const walk = (root) => { for (const e of root.querySelectorAll("*")) {
            if (e.shadowRoot) walk(e.shadowRoot);
            if (!e.matches("input, select, button") || e.closest(".bk-toolbar")) continue;
            const name = e.getAttribute("aria-label") || e.textContent.trim()
              || [...(e.labels || [])].map((l) => l.textContent.trim()).join("");
            if (!name) found.push(e.outerHTML.slice(0, 120));
          } };
          walk(document);
          return found;
        }"""
    )
    assert nameless == []


@pytest.mark.parametrize(("width", "columns"), [(1440, 3), (1024, 2), (700, 1)])
def test_views_stand_in_as_many_columns_as_there_is_room_for(
    bench: Page, width: int, columns: int
) -> None:
    bench.set_viewport_size({"width": width, "height": 800})
    lefts: Any = bench.evaluate(
        "() => [...document.querySelectorAll('section.view')]"
        ".map((s) => Math.round(s.getBoundingClientRect().left))"
    )
    assert len(set(lefts)) == columns
    overflow = bench.evaluate(
        "() => document.documentElement.scrollWidth - document.documentElement.clientWidth"
    )
    assert overflow <= 0


@pytest.mark.parametrize("name", list(shipped()))
def test_shipped_preset_opens(bench: Page, name: str) -> None:
    title = shipped()[name].title
    if name != FIRST:
        bench.get_by_label("Shipped presets").select_option(name)
    bench.get_by_role("heading", level=1, name=title).wait_for()
    settled(bench)
    regions = len(shipped()[name].setup.regions())
    assert bench.locator("dl.readings dt", has_text=re.compile(r"^S\(.\)$")).count() == regions
