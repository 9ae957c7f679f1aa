"""The numbers in words."""

from __future__ import annotations

import math
from dataclasses import replace

import pytest
from tests.dashboard.scenes import SMALL, bare, full

from lozenge_dashboard.readings import COLUMNS, readings_html, table_rows, values
from lozenge_engine.config import Setup


def test_one_sprinkling_gives_its_own_value_and_no_error() -> None:
    for value in values(bare()):
        assert value.mean == value.present
        assert math.isnan(value.error)
        assert "(" not in value.text
    assert "no error is known" in readings_html(bare())


def test_averages_carry_the_digits_that_their_error_allows() -> None:
    scene = full()
    first = values(scene)[0]
    assert scene.average is not None
    assert first.mean == scene.average.regions[0].mean
    assert first.count == 3
    assert first.text.endswith(")")


def test_mutual_information_stands_under_both_union_rules() -> None:
    pairs = [v for v in values(bare()) if v.name == "I(A:B)"]
    assert [v.rule for v in pairs] == ["support", "direct_sum"]
    html = readings_html(bare())
    assert "by support | direct sum" in html
    for value in pairs:
        assert value.text in html


def test_only_the_nearest_pairs_count_as_near() -> None:
    scene = bare(Setup(points=SMALL.points, region_count=3, half_width=0.25, separation=0.1))
    assert {v.name for v in values(scene) if v.kept is None and not v.far} == {"I(A:B)", "I(B:C)"}
    assert {v.name for v in values(scene) if v.far} == {"I(A:C)"}


def test_refused_entropy_shows_no_number_and_its_mark() -> None:
    scene = bare()
    region = replace(
        scene.result.regions[0], entropy=math.nan, status="refused", note="rank makes S = 0"
    )
    result = replace(scene.result, regions=(region, scene.result.regions[1]))
    marked = scene._replace(result=result)
    assert values(marked)[0].text == "–"
    assert "refused" in readings_html(marked)
    assert "rank makes S = 0" in table_rows(marked)[0][-1]


def test_unmet_certificate_is_marked() -> None:
    scene = bare()
    certificate = scene.result.certificate._replace(met=False, reasons=("residual too large",))
    marked = scene._replace(result=replace(scene.result, certificate=certificate))
    assert "certificate not met" in readings_html(marked)
    assert "certificate not met" not in readings_html(scene)


def test_table_has_a_row_for_every_number_and_no_tabs() -> None:
    rows = table_rows(full())
    assert len(rows) == len(values(full()))
    assert all(len(row) == len(COLUMNS) for row in rows)
    assert not any("\t" in cell for row in rows for cell in row)


@pytest.mark.parametrize("kept", [False, True])
def test_readings_are_closed_markup(kept: bool) -> None:
    html = readings_html(full()._replace(reference=bare() if kept else None))
    assert html.count("<div") == html.count("</div>")
    assert html.startswith("<dl")
