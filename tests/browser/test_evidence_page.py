"""The evidence page as a person meets it, in a headless browser."""

from __future__ import annotations

import contextlib
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

import pytest
from tests.browser.server import served

from lozenge_engine.config import SweepPlan
from lozenge_engine.evidence import EvidencePlan
from lozenge_engine.presets import FIRST, parse, shipped, write

if TYPE_CHECKING:
    from playwright.sync_api import Page

SLOW = 120_000
"""Patience with a busy machine, in ms."""
IDLE = "() => window.Bokeh?.documents[0]?.is_idle"
PLAN = EvidencePlan(alphas=5, rules=("root_count",), realisations=2, level="exact")
# Longer columns than a figure has that shows nothing: the first two rows are never drawn.
FILLED = """(group) => {
  const figure = window.Bokeh?.documents[0]?.get_model_by_name(group);
  return figure ? Math.max(...figure.renderers.map((r) => r.data_source.get_length())) > 4 : false;
}"""
FIGURES = ("CutEntropy", "Thresholds", "ModeShape", "StateFit")
NAMES = ("cutstudy", "thresholds", "modeshape", "statecheck", "mutual", "due")


@pytest.fixture(scope="module")
def address(tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    """A running server with a small geometry."""
    folder = tmp_path_factory.mktemp("evidence")
    preset = shipped()[FIRST]
    source = replace(preset.setup.points, density=400.0)
    sweeps = SweepPlan(density_low=100.0, density_high=300.0, density_points=3, smallest_region=5)
    setup = preset.setup.with_(points=source, sweeps=sweeps, half_width=0.3, separation=0.2)
    write(folder / "small.json", replace(preset, setup=setup, evidence=PLAN, sender=None))
    with contextlib.ExitStack() as stack:
        with contextlib.chdir(folder):
            found = stack.enter_context(served(5611, str(folder / "small.json")))
        yield found


@pytest.fixture
def evidence(page: Page, address: str) -> Page:
    """The evidence page of the server's preset."""
    return opened(page, f"{address}evidence")


def opened(page: Page, address: str) -> Page:
    page.set_default_timeout(SLOW)
    page.goto(address)
    page.wait_for_function(IDLE, timeout=SLOW)
    page.locator(".bar").wait_for()
    return page


def settled(page: Page) -> None:
    """Wait until nothing is computed any more."""
    page.locator(".bar span", has_text="verything is computed").wait_for()


def type_into(page: Page, name: str, value: object) -> None:
    box = page.locator(f"#{name}-box")
    box.fill(str(value))
    box.press("Enter")


def foot(page: Page, view: str) -> str:
    return page.locator(f"#view-{view} p").last.inner_text()


def test_all_views_are_drawn_and_nothing_is_asked_of_any_other_host(
    evidence: Page, outside_requests: list[str]
) -> None:
    settled(evidence)
    for figure in FIGURES:
        evidence.wait_for_function(FILLED, arg=figure, timeout=SLOW)
    for view in NAMES:
        assert evidence.locator(f"#view-{view} .refusal").count() == 0, foot(evidence, view)
        assert foot(evidence, view).strip()
    assert "2 regions, h = 0.3, gap 0.2, 800 elements" in evidence.locator("header").inner_text()
    assert evidence.locator("#numbers tr").count() > 10
    assert outside_requests == []


def test_link_of_the_bench_opens_its_present_screen(page: Page, address: str) -> None:
    page.set_default_timeout(SLOW)
    page.goto(address)
    page.wait_for_function(IDLE, timeout=SLOW)
    type_into(page, "half_width", 0.25)
    page.get_by_role("button", name="Dark").click()
    page.get_by_role("button", name="Light").wait_for()
    with page.context.expect_page() as found:
        page.get_by_role("link", name="Evidence …").click()
    evidence = found.value
    evidence.set_default_timeout(SLOW)
    evidence.wait_for_function(IDLE, timeout=SLOW)
    evidence.get_by_role("button", name="Light").wait_for()
    evidence.locator("header p", has_text="h = 0.25").wait_for()


def test_mode_is_stepped_through_with_a_button(evidence: Page) -> None:
    rows = evidence.locator("#numbers")
    rows.locator("summary").click()
    rows.locator("td", has_text="eigenvalue, mode 1 of the patch").wait_for()
    evidence.get_by_role("button", name="next rank").click()
    rows.locator("td", has_text="eigenvalue, mode 2 of the patch").wait_for()
    evidence.get_by_role("button", name="previous rank").click()
    rows.locator("td", has_text="eigenvalue, mode 1 of the patch").wait_for()
    evidence.locator("[aria-label=operator] label", has_text="union").click()
    rows.locator("td", has_text="eigenvalue, mode 1 of the union").wait_for()


def test_refused_value_stands_at_its_control_and_changes_nothing(evidence: Page) -> None:
    evidence.get_by_role("button", name="Cancel all").click()
    type_into(evidence, "delta", 50)
    error = evidence.locator("#delta-error")
    error.wait_for()
    assert "allowed is 3 to 10 %" in error.inner_text()
    assert "Cancelled" in foot(evidence, "thresholds")
    type_into(evidence, "delta", 5)
    error.wait_for(state="hidden")


def test_refusal_of_a_computation_stands_in_its_view(evidence: Page) -> None:
    evidence.wait_for_function(FILLED, arg="ModeShape", timeout=SLOW)
    type_into(evidence, "rank", 99_999)
    said = evidence.locator("#view-modeshape .refusal")
    said.wait_for()
    assert "allowed is" in said.inner_text()
    assert evidence.locator("#view-modeshape").get_attribute("class") == "view stale"
    type_into(evidence, "rank", 3)
    said.wait_for(state="detached")


def test_cancel_stops_a_view_and_the_page_stays_at_hand(evidence: Page) -> None:
    type_into(evidence, "realisations", 1000)
    view = evidence.locator("#view-statecheck")
    view.get_by_role("button", name="Cancel").wait_for()
    evidence.get_by_role("button", name="Dark").click()
    evidence.get_by_role("button", name="Light").wait_for(timeout=5000)
    evidence.get_by_role("button", name="Cancel all").click()
    evidence.locator(".bar span", has_text="Not everything is computed").wait_for()
    view.get_by_role("button", name="Compute").wait_for()
    type_into(evidence, "realisations", 2)
    view.get_by_role("button", name="Compute").wait_for(state="hidden")


def test_title_gives_a_view_the_room(evidence: Page) -> None:
    evidence.get_by_role("button", name="What is it due to?").click()
    evidence.locator("#view-cutstudy").wait_for(state="hidden")
    assert evidence.locator("#view-due").bounding_box()["width"] > 900  # type: ignore[index]
    evidence.get_by_role("button", name="What is it due to?").click()
    evidence.locator("#view-cutstudy").wait_for()


def test_saved_preset_holds_what_was_asked(evidence: Page, tmp_path: Path) -> None:
    evidence.locator("#view-modeshape label", has_text="modulus").click()
    type_into(evidence, "rank", 2)
    with evidence.expect_download() as found:
        evidence.get_by_role("button", name="Save").click()
    found.value.save_as(tmp_path / "saved.json")
    saved = parse((tmp_path / "saved.json").read_bytes())
    assert saved.evidence == replace(PLAN, mode_part="modulus", rank=2)
