"""One sprinkling, several placements."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from lozenge_engine.config import Config, PointSource, Rule
from lozenge_engine.errors import Cancelled, InputError
from lozenge_engine.geometry import Region, equal_row
from lozenge_engine.kernels import modes
from lozenge_engine.pipeline import compute
from lozenge_engine.placement import mirror_images
from lozenge_engine.samples import Draw, reading_of, take
from lozenge_engine.stages import Stages

UNEVEN = (Region(x0=-0.4, half_width=0.3), Region(x0=0.4, half_width=0.2))
CONFIG = Config(points=PointSource(density=150.0, seed=3), regions=UNEVEN)


def test_a_reading_holds_the_numbers_of_the_result() -> None:
    result = compute(CONFIG)
    reading = reading_of(result)
    assert reading.elements.tolist() == [r.elements for r in result.regions]
    assert reading.kept.tolist() == [r.kept_modes for r in result.regions]
    assert reading.entropy.tolist() == [r.entropy for r in result.regions]
    assert reading.union_support == result.unions["support"].entropy
    assert reading.union_direct_sum == result.unions["direct_sum"].entropy
    assert reading.pair_support.tolist() == [p.support for p in result.pairs]
    assert reading.pair_direct_sum.tolist() == [p.direct_sum for p in result.pairs]
    assert reading.cross_block.tolist() == [p.cross_block for p in result.pairs]
    assert reading.trusted is True


def test_the_union_of_one_region_is_the_region() -> None:
    reading = reading_of(compute(replace(CONFIG, regions=UNEVEN[:1])))
    assert reading.union_support == reading.union_direct_sum == reading.entropy[0]
    assert reading.pair_support.size == 0


def test_a_draw_gives_one_reading_for_each_layout() -> None:
    layouts = mirror_images(UNEVEN)
    readings = take(Draw(config=CONFIG, layouts=layouts))
    for layout, reading in zip(layouts, readings, strict=True):
        alone = reading_of(compute(replace(CONFIG, regions=layout)))
        np.testing.assert_allclose(reading.entropy, alone.entropy, rtol=1e-12)


def test_the_layouts_of_a_draw_share_the_modes_of_the_patch(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    calls: list[int] = []
    original = modes.certified_modes

    def counted(*args, **kw):  # type: ignore[no-untyped-def]
        calls.append(1)
        return original(*args, **kw)

    monkeypatch.setattr(modes, "certified_modes", counted)
    take(Draw(config=CONFIG, layouts=tuple(equal_row(2, 0.2, 0.1 * k) for k in range(5))))
    assert len(calls) == 1


def test_a_draw_stops_when_it_is_cancelled() -> None:
    def stop(*_: object) -> None:
        raise Cancelled

    with pytest.raises(Cancelled):
        take(Draw(config=CONFIG, layouts=(UNEVEN,)), stages=Stages(), report=stop)


def test_a_layout_that_holds_too_few_elements_is_refused() -> None:
    with pytest.raises(InputError, match="region A"):
        take(Draw(config=CONFIG, layouts=((Region(half_width=0.005),),)))


KEY = Draw(config=CONFIG, layouts=(UNEVEN,)).key


@pytest.mark.parametrize(
    "other",
    [
        Draw(config=replace(CONFIG, realisation=1), layouts=(UNEVEN,)),
        Draw(config=replace(CONFIG, order=2.0), layouts=(UNEVEN,)),
        Draw(config=replace(CONFIG, region_rule=Rule(alpha=2.0)), layouts=(UNEVEN,)),
        Draw(config=CONFIG, layouts=(UNEVEN, UNEVEN)),
        Draw(config=CONFIG, layouts=(UNEVEN[::-1],)),
        Draw(config=CONFIG, layouts=((UNEVEN[0],), (UNEVEN[1],))),
    ],
    ids=["realisation", "order", "rule", "layouts", "letters", "split"],
)
def test_the_key_of_a_draw_sees_what_its_readings_depend_on(other: Draw) -> None:
    assert other.key != KEY


def test_the_key_of_an_equal_draw_is_equal() -> None:
    assert Draw(config=replace(CONFIG), layouts=(UNEVEN,)).key == KEY
