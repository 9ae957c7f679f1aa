"""The campaign page as a person meets it, in a headless browser."""

from __future__ import annotations

import contextlib
import re
import time
from collections.abc import Iterator
from pathlib import Path
from typing import TYPE_CHECKING, Any

import pytest
from tests.browser.server import served

from lozenge_engine import store
from lozenge_engine.presets import FIRST, shipped

if TYPE_CHECKING:
    from playwright.sync_api import Page

SLOW = 90_000
"""Patience with a busy machine, in ms."""
IDLE = "() => window.Bokeh?.documents[0]?.is_idle"
# Marks in sight: the first two rows are never drawn.
MARKS = """(group) => {
  const figure = window.Bokeh?.documents[0]?.get_model_by_name(group);
  return figure ? figure.renderers[1].data_source.get_length() - 2 : 0;
}"""
FIGURES = ("Quantity", "Slope", "ErrorReached")


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Where the server is started, so that results files lie there."""
    return tmp_path_factory.mktemp("campaigns")


@pytest.fixture(scope="module")
def address(folder: Path) -> Iterator[str]:
    """A running server."""
    with contextlib.ExitStack() as stack:
        with contextlib.chdir(folder):
            found = stack.enter_context(served(5591))
        yield found


@pytest.fixture
def campaign(page: Page, address: str) -> Page:
    """The campaign page with nothing open."""
    return opened(page, f"{address}campaign")


def opened(page: Page, address: str) -> Page:
    page.set_default_timeout(SLOW)
    page.goto(address)
    page.wait_for_function(IDLE, timeout=SLOW)
    page.get_by_role("button", name="Start").wait_for()
    return page


def type_into(page: Page, name: str, value: object) -> None:
    """Type a value into the box of a control."""
    box = page.locator(f"#{name}-box")
    box.fill(str(value))
    box.press("Enter")


def small(page: Page, name: str, *, realisations: int = 5, wanted: str = "count") -> None:
    """Set up a campaign of a few seconds."""
    page.locator("#axis-select").select_option("density")
    page.locator("#wanted-select").select_option(wanted)
    for control, value in (
        ("low", 60),
        ("high", 200),
        ("points", 4),
        ("smallest_region", 5),
        ("realisations", realisations),
        ("workers", 1),
        ("file", name),
    ):
        type_into(page, control, value)


def start(page: Page, name: str, **plan: Any) -> None:
    small(page, name, **plan)
    button = page.get_by_role("button", name="Start")
    button.focus()
    button.press("Enter")
    said(page, name)


def said(page: Page, text: str) -> None:
    """Wait until the line of readings says something."""
    page.locator("dl.readings .status", has_text=text).wait_for()


def done(page: Page) -> int:
    """Realisations in the line of readings."""
    box = page.locator("dl.readings div:has(dt:text-is('realisations')) dd").first
    return int(re.sub(r"\D", "", box.inner_text()))


def counts(path: Path) -> list[int]:
    """Finished realisations of each sprinkling; a small region may be empty, which is a failure."""
    with store.inspect(path) as results:
        return [n for n, _ in results.counts()]


def test_link_of_the_bench_opens_its_present_screen(page: Page, address: str) -> None:
    page.set_default_timeout(SLOW)
    page.goto(address)
    page.wait_for_function(IDLE, timeout=SLOW)
    type_into(page, "half_width", 0.2)
    page.get_by_role("button", name="Dark").click()
    page.get_by_role("button", name="Light").wait_for()
    with page.context.expect_page() as found:
        page.get_by_role("link", name="Campaign …").click()
    campaign = found.value
    campaign.set_default_timeout(SLOW)
    campaign.wait_for_function(IDLE, timeout=SLOW)
    campaign.get_by_role("button", name="Light").wait_for()
    campaign.locator("#axis-select").select_option("half_width")
    sweeps = shipped()[FIRST].setup.sweeps
    campaign.wait_for_function(
        """(wanted) => { const find = (root) => { for (const e of root.querySelectorAll("*")) {
            if (e.id === "high-box") return e;
            if (e.shadowRoot) { const f = find(e.shadowRoot); if (f) return f; } } return null; };
          return Number(find(document)?.value) === wanted; }""",
        arg=float(f"{sweeps.size_high * 0.2:.6g}"),
        timeout=SLOW,
    )


def test_campaign_runs_to_its_end_and_fills_the_figures(campaign: Page, folder: Path) -> None:
    start(campaign, "end", wanted="slope")
    said(campaign, "all 20 realisations")
    for figure in FIGURES:
        campaign.wait_for_function(f"(g) => ({MARKS})(g) > 0", arg=figure, timeout=SLOW)
    assert counts(folder / "end.sqlite") == [5] * 4
    campaign.locator("h3", has_text="The fit").wait_for()
    # Four densities in the two placement classes of the preset.
    assert campaign.locator("#numbers tbody tr").count() == 8
    assert "file=end.sqlite" in campaign.url


def test_pause_and_resume_lose_nothing(campaign: Page, folder: Path) -> None:
    start(campaign, "pause", realisations=40)
    campaign.get_by_role("button", name="Pause").click()
    said(campaign, "paused")
    before = counts(folder / "pause.sqlite")
    assert sum(before) < 160
    campaign.get_by_role("button", name="Resume").click()
    said(campaign, "all 160 realisations")
    assert counts(folder / "pause.sqlite") == [40] * 4


def test_more_realisations_go_on_where_it_ended(campaign: Page, folder: Path) -> None:
    start(campaign, "more", realisations=2)
    said(campaign, "all 8 realisations")
    more = campaign.get_by_role("button", name="More realisations")
    assert more.is_disabled()
    type_into(campaign, "more_realisations", 4)
    more.click()
    said(campaign, "all 16 realisations")
    assert counts(folder / "more.sqlite") == [4] * 4


def test_closed_tab_changes_nothing_and_a_second_shows_the_same(
    page: Page, address: str, folder: Path
) -> None:
    opened(page, f"{address}campaign")
    start(page, "tabs", realisations=400)
    page.close()
    before = sum(counts(folder / "tabs.sqlite"))
    end = time.monotonic() + SLOW / 1000
    while sum(counts(folder / "tabs.sqlite")) <= before + 2:
        assert time.monotonic() < end
        time.sleep(0.1)
    one, two = (
        opened(page.context.new_page(), f"{address}campaign?file=tabs.sqlite") for _ in range(2)
    )
    said(one, "running")
    said(two, "running")
    two.get_by_role("button", name="Pause").click()
    said(one, "paused")
    said(two, "paused")
    one.wait_for_timeout(1500)
    assert done(one) == done(two) == sum(counts(folder / "tabs.sqlite"))


def test_refusals_stand_at_their_control(campaign: Page, folder: Path) -> None:
    small(campaign, "../elsewhere")
    error = campaign.locator("#file-error")
    error.wait_for(state="visible")
    assert "without a folder" in error.inner_text()
    button = campaign.get_by_role("button", name="Start")
    campaign.wait_for_timeout(300)
    assert button.is_disabled()
    type_into(campaign, "file", "fine")
    error.wait_for(state="hidden")
    type_into(campaign, "realisations", "many")
    campaign.locator("#realisations-error").wait_for(state="visible")
    type_into(campaign, "realisations", 3)
    type_into(campaign, "low", 900)
    campaign.locator("#low-error").wait_for(state="visible")
    assert not (folder.parent / "elsewhere.sqlite").exists()
    assert not (folder / "fine.sqlite").exists()


def test_name_of_an_existing_file_is_refused_while_it_is_typed(
    campaign: Page, folder: Path
) -> None:
    (folder / "taken.sqlite").write_bytes(b"mine")
    box, button = campaign.locator("#file-box"), campaign.get_by_role("button", name="Start")
    box.fill("taken")  # the box keeps the focus
    campaign.locator("#file-error", has_text="taken.sqlite, which exists").wait_for()
    bar = campaign.get_by_label("Start the new campaign")
    bar.get_by_text("refused above: results file").wait_for()
    assert button.is_disabled()
    assert box.input_value() == "taken"
    box.fill("taken2")
    campaign.locator("#file-error").wait_for(state="hidden")
    assert button.is_enabled()
    (folder / "taken.sqlite").unlink()


def test_missing_file_is_said_once_and_by_its_bare_name(page: Page, address: str) -> None:
    opened(page, f"{address}campaign?file=nosuch.sqlite")
    page.wait_for_timeout(500)
    assert page.get_by_text("nosuch.sqlite").count() == 1
    refusal = page.get_by_label("Results file", exact=True).get_by_role("alert")
    assert refusal.inner_text() == "nosuch.sqlite is not in this folder: choose a file of the list."


def test_finished_campaign_is_not_offered_to_resume(campaign: Page) -> None:
    start(campaign, "whole", realisations=3)
    said(campaign, "all 12 realisations")
    section = campaign.get_by_label("Results file", exact=True)
    section.get_by_text("type a larger number").wait_for()
    assert campaign.get_by_role("button", name="Resume").is_disabled()
    more = campaign.get_by_role("button", name="More realisations")
    for control, value in (("more_minutes", 0), ("more_realisations", 2)):
        type_into(campaign, control, value)
        campaign.locator(f"#{control}-error").wait_for()
        assert more.is_disabled()
    type_into(campaign, "more_realisations", 4)
    campaign.locator("#more_realisations-error").wait_for(state="hidden")
    assert more.is_disabled()  # the budget is still refused
    type_into(campaign, "more_minutes", 5)
    campaign.locator("#more_minutes-error").wait_for(state="hidden")
    assert more.is_enabled()


def test_foreign_file_is_refused_in_place_and_kept(campaign: Page, folder: Path) -> None:
    foreign = folder / "foreign.sqlite"
    foreign.write_bytes(b"nothing of ours " * 200)
    listed = campaign.get_by_label("Results files of this folder")
    campaign.wait_for_timeout(1500)
    listed.select_option("foreign.sqlite")
    campaign.get_by_role("button", name="Open", exact=True).click()
    refusal = campaign.get_by_role("alert").filter(has_text="allowed is").first
    refusal.wait_for()
    assert foreign.read_bytes() == b"nothing of ours " * 200
    foreign.unlink()


def test_prediction_follows_the_controls(campaign: Page) -> None:
    small(campaign, "unused", realisations=3)
    said_of = campaign.get_by_label("Prediction")
    said_of.get_by_text("12 realisations").wait_for()
    type_into(campaign, "realisations", 6)
    said_of.get_by_text("24 realisations").wait_for()
    type_into(campaign, "counts", "2, 8")
    said_of.get_by_text("left out, and why").wait_for()


def test_no_error_reaches_the_console(page: Page, address: str) -> None:
    heard: list[str] = []
    page.on("console", lambda m: heard.append(m.text) if m.type == "error" else None)
    page.on("pageerror", lambda error: heard.append(str(error)))
    opened(page, f"{address}campaign")
    start(page, "quiet", realisations=2)
    said(page, "all 8 realisations")
    page.get_by_role("button", name="Dark").click()
    page.get_by_role("radio", name="I", exact=True).check()
    page.get_by_role("button", name="What is found?").click()
    page.wait_for_timeout(700)
    assert heard == []


@pytest.mark.parametrize(("width", "height"), [(1440, 900), (1024, 768)])
def test_nothing_is_wider_than_the_page(page: Page, address: str, width: int, height: int) -> None:
    page.set_viewport_size({"width": width, "height": height})
    opened(page, f"{address}campaign")
    # The button is in sight before anything is scrolled, and its target large enough to hit.
    button = page.get_by_role("button", name="Start").bounding_box()
    assert button is not None
    assert button["y"] + button["height"] <= height
    remove = page.get_by_role("button", name="remove placement 1").bounding_box()
    assert remove is not None
    assert min(remove["width"], remove["height"]) >= 24
    start(page, f"wide-{width}", realisations=2)
    said(page, "all 8 realisations")
    page.wait_for_timeout(500)
    over = page.evaluate(
        """() => ["#column", "#line", "#views", "#words"].filter((name) => {
          const e = document.querySelector(name); return e.scrollWidth > e.clientWidth + 1; })"""
    )
    assert over == []
