"""The twin's switch and the scaling view's toggles, as a user meets them."""

from __future__ import annotations

import json
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

import pytest
from tests.browser.server import served

from lozenge_dashboard.palette import LIGHT
from lozenge_engine.config import Averaging, PointSource, Setup
from lozenge_engine.presets import parse, shipped, write

if TYPE_CHECKING:
    from playwright.sync_api import Page

PAINTED = """() => window.Bokeh?.documents?.[0]?.is_idle
  && Bokeh.documents[0].get_model_by_name("Entropies")?.renderers
    .some((r) => r.data_source.get_length() > 3)"""
ACCENT = """([group, colour]) => Bokeh.documents[0].get_model_by_name(group).renderers
  .some((r) => Array.from(r.data_source.data.color ?? []).includes(colour))"""
Y_LABEL = "() => Bokeh.documents[0].get_model_by_name('Scaling').left[0].axis_label"


@pytest.fixture(scope="module")
def address(tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    """A server on a small screen without references."""
    setup = Setup(
        points=PointSource(density=200.0, seed=3),
        half_width=0.35,
        separation=0.1,
        averaging=Averaging(sprinklings=2),
    )
    sweeps = replace(setup.sweeps, density_low=150.0, density_high=300.0, density_points=3)
    setup = setup.with_(sweeps=replace(sweeps, separation_points=3, smallest_region=20))
    preset = replace(shipped()["two-equal-regions"], setup=setup, sender=None, campaign=None)
    path = tmp_path_factory.mktemp("twin") / "small.json"
    write(path, preset)
    with served(5711, str(path)) as found:
        yield found


def test_the_switch_brings_the_twin_and_the_preset_keeps_it(
    page: Page, address: str, outside_requests: list[str], tmp_path: Path
) -> None:
    page.goto(address)
    page.wait_for_function(PAINTED, timeout=60_000)
    assert not page.evaluate(ACCENT, ["Entropies", LIGHT.accent])
    page.locator("input[name='twin-radio']").nth(1).check(force=True)
    for group in ("Spectrum", "Counts", "Entropies", "Separation"):
        page.wait_for_function(ACCENT, arg=[group, LIGHT.accent], timeout=60_000)
    page.get_by_role("button", name="chain", exact=True).click()
    page.get_by_role("button", name="− twin", exact=True).click()
    page.wait_for_function(f"{Y_LABEL[6:]}.startsWith('S minus twin')", timeout=30_000)
    with page.expect_download() as download:
        page.get_by_role("button", name="Save", exact=True).click()
    saved = tmp_path / "saved.json"
    download.value.save_as(saved)
    view = json.loads(saved.read_text(encoding="utf-8"))["view"]
    assert (view["twin"], view["chain"], view["difference"]) == (True, True, True)
    assert parse(saved.read_bytes()).view.difference
    page.locator("input[name='twin-radio']").nth(0).check(force=True)
    page.wait_for_function(f"{Y_LABEL[6:]}.startsWith('entropy S')", timeout=30_000)
    assert not page.evaluate(ACCENT, ["Entropies", LIGHT.accent])
    assert outside_requests == []
