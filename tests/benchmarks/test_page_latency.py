"""From the command to the first picture, and from a slider to the painted views.

Run on an idle machine: ``pytest -m benchmark tests/benchmarks/test_page_latency.py -s``.
"""

from __future__ import annotations

import statistics
import time
from collections.abc import Iterator
from typing import TYPE_CHECKING

import pytest
from tests.browser.server import served

if TYPE_CHECKING:
    from playwright.sync_api import Page

FRONT = ["Sprinkling", "Spectrum", "Counts", "Entropies"]
PAINTED = """() => window.Bokeh?.documents?.[0]?.is_idle
  && Bokeh.documents[0].get_model_by_name("Entropies")?.renderers
    .some((r) => r.data_source.get_length() > 3)"""
FIND = """const find = (root) => { for (const e of root.querySelectorAll("*")) {
  if (e.id === name + "-range") return e;
  if (e.shadowRoot) { const f = find(e.shadowRoot); if (f) return f; } } return null; };
const slider = find(document);
const frame = () => new Promise((done) => requestAnimationFrame(done));
const say = (kind) => slider.dispatchEvent(new Event(kind, { bubbles: true }));"""
# Milliseconds until the data of all views in front are new and two frames have been drawn.
MOVE = f"""async ([name, value, groups]) => {{
  {FIND}
  const data = () => groups.flatMap((g) =>
    Bokeh.documents[0].get_model_by_name(g).renderers.map((r) => r.data_source.data));
  const before = data();
  const start = performance.now();
  slider.value = value;
  say("input");
  while (data().some((d, i) => d === before[i])) {{
    await frame();
    if (performance.now() - start > 20000) throw new Error("never painted");
  }}
  while (!Bokeh.documents[0].is_idle) await frame();
  await frame();
  await frame();
  const took = performance.now() - start;
  say("change");
  return took;
}}"""
# Ten seconds of dragging; milliseconds from the last value to the last change of the picture.
DRAG = f"""async ([name, low, high]) => {{
  {FIND}
  const start = performance.now();
  for (let i = 0; performance.now() - start < 10000; i++) {{
    slider.value = low + ((high - low) * ((i * 7) % 100)) / 100;
    say("input");
    await new Promise((done) => setTimeout(done, 16));
  }}
  slider.value = (low + high) / 2;
  say("input");
  say("change");
  const end = performance.now();
  const data = () => Bokeh.documents[0].get_model_by_name("Sprinkling").renderers[1]
    .data_source.data;
  let [last, changed] = [data(), end];
  while (performance.now() - end < 4000) {{
    await frame();
    if (data() !== last) [last, changed] = [data(), performance.now()];
  }}
  return changed - end;
}}"""


@pytest.fixture(scope="module")
def address() -> Iterator[str]:
    """A running server."""
    with served(5681) as found:
        yield found


@pytest.fixture
def bench(page: Page, address: str) -> Page:
    """The page at 2 000 elements, when the sprinklings behind it have come."""
    page.goto(address)
    page.wait_for_function(PAINTED, timeout=60_000)
    box = page.locator("#elements-box")
    box.fill("2000")
    box.press("Enter")
    page.locator(".behind").wait_for(state="visible", timeout=60_000)
    page.locator(".behind").wait_for(state="hidden", timeout=300_000)
    return page


def report(what: str, times: list[float], limit: float) -> None:
    """Print the median and hold it against its limit, both in ms."""
    median = statistics.median(times)
    print(f"\n{what}: median {median:.0f} ms, {min(times):.0f} to {max(times):.0f}")
    assert median <= limit


def test_first_picture_comes_within_eight_seconds_of_the_command(page: Page) -> None:
    begin = time.monotonic()
    with served(5691) as address:
        port = time.monotonic() - begin
        page.goto(address)
        page.wait_for_function(PAINTED, timeout=60_000)
        took = time.monotonic() - begin
    print(f"\nfirst picture after {took:.1f} s, address after {port:.1f} s")
    assert took <= 8.0


def test_separation_paints_all_views_within_300_ms(bench: Page) -> None:
    times = []
    for i in range(20):
        times.append(bench.evaluate(MOVE, ["separation", 0.05 + 0.02 * i, FRONT]))
        bench.wait_for_timeout(1500)
    report("separation", times, 300.0)


def test_density_paints_all_views_within_800_ms(bench: Page) -> None:
    times = []
    for i in range(12):
        times.append(bench.evaluate(MOVE, ["elements", 710 + 3 * i, FRONT]))
        bench.wait_for_timeout(1500)
    report("elements about 2 000", times, 800.0)


@pytest.mark.parametrize(
    ("name", "low", "high"), [("separation", 0.0, 0.8), ("elements", 500, 800)]
)
def test_last_value_shows_within_a_second_of_ten_seconds_dragging(
    bench: Page, name: str, low: float, high: float
) -> None:
    late = bench.evaluate(DRAG, [name, low, high])
    print(f"\n{name}: last change {late:.0f} ms after the last value")
    assert late <= 1000.0
