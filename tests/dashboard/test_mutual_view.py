"""The view of mutual information against the cross ratio."""

from __future__ import annotations

import holoviews as hv
import numpy as np
import pytest

from lozenge_dashboard.palette import DARK, LIGHT
from lozenge_dashboard.records import EvidenceChoices, EvidenceScene
from lozenge_dashboard.views import mutual
from lozenge_dashboard.views.evidence import register_evidence
from lozenge_engine.config import Setup
from lozenge_engine.evidence import EvidencePlan
from lozenge_engine.mutualcurves import MutualCurve, MutualRecord

ETA = np.linspace(0.1, 1.0, 10)
LINEAR, LOG = EvidenceChoices(), EvidenceChoices(mutual="log")


@pytest.fixture(scope="module", autouse=True)
def bokeh() -> None:
    """The plotting backend, as the page sets it up."""
    hv.extension("bokeh")
    register_evidence()


def record(*, done: int = 8, planned: int = 8) -> MutualRecord:
    """Curves of every kind; the data by direct sum dip below zero."""
    error = np.full(10, 0.02)
    curves = [
        MutualCurve("chain", "", "chain", ETA[:9], ETA[:9] / 3, np.full(9, 1e-5)),
        MutualCurve("currents", "", "currents", ETA[:9], ETA[:9] ** 2 / 30, np.full(9, 1e-5)),
        MutualCurve("far", "", "currents", ETA[:3], ETA[:3] ** 2 / 30, np.zeros(3)),
        MutualCurve("data", "support", "field", ETA, ETA / 2, error),
        MutualCurve("data", "direct_sum", "field", ETA, ETA / 2 - 0.06, error),
        MutualCurve("twin", "support", "twin", ETA, ETA / 3, error),
        MutualCurve("twin", "direct_sum", "twin", ETA, ETA / 3, error),
    ]
    return MutualRecord(
        (0.6, 0.6),
        1 - ETA,
        ETA,
        0.5,
        500.0,
        tuple(curves),
        done,
        planned,
        error,
        "preview",
        (),
        1.0,
    )


def scene(made: MutualRecord | None) -> EvidenceScene:
    return EvidenceScene(setup=Setup(), plan=EvidencePlan(), mutual=made)


@pytest.mark.parametrize("choices", [LINEAR, LOG], ids=["linear", "log"])
@pytest.mark.parametrize("look", [LIGHT, DARK], ids=["light", "dark"])
def test_figure_holds_what_is_sent_to_it(choices, look) -> None:
    data = mutual.read(scene(record()), choices, look)
    draw = mutual.draw_log if choices.mutual == "log" else mutual.draw
    drawn = hv.render(draw(data))
    assert len(drawn.renderers) == 3
    for renderer, layer in zip(drawn.renderers, data[:3], strict=True):
        for name, column in layer.source().items():
            assert list(column) == list(renderer.data_source.data[name]), name


def test_data_are_marks_and_references_are_lines() -> None:
    data = mutual.read(scene(record()), LINEAR, LIGHT)
    drawn = set(zip(data.marks.x[2:].tolist(), data.marks.y[2:].tolist(), strict=True))
    assert {(x, x / 2) for x in ETA.tolist()} <= drawn
    assert not {(x, x / 3) for x in ETA.tolist()} & drawn
    assert {"dashed", "dotdash", "dotted"} <= set(data.lines.dash.tolist())


def test_every_curve_has_its_word_and_its_algebra() -> None:
    words = " ".join(mutual.read(scene(record()), LINEAR, LIGHT).words.text.tolist())
    for part in ("by support", "direct sum", "twin", "chain: q and p", "smaller algebra"):
        assert part in words


def test_the_rule_that_the_page_follows_is_in_full_ink() -> None:
    for rule, marker in (("support", "diamond"), ("direct_sum", "x")):
        data = mutual.read(scene(record()), LINEAR._replace(union_rule=rule), LIGHT)
        inked = {m for m, c in zip(data.marks.marker, data.marks.colour, strict=True)
                 if c == LIGHT.ink}  # fmt: skip
        assert inked == {marker}


def test_a_logarithmic_axis_leaves_out_what_is_not_positive_and_says_so() -> None:
    data = mutual.read(scene(record()), LOG, LIGHT)
    seen = data.marks.y[2:]
    assert (seen > 0).all()
    assert min(data.limits) > 0
    assert "1 values at or below zero not drawn" in mutual.caution(scene(record()), LOG)
    assert "below zero" not in mutual.caution(scene(record()), LINEAR)


def test_the_line_below_says_how_far_it_is_and_what_touching_gives() -> None:
    text = mutual.caution(scene(record(done=3)), LINEAR)
    assert text.startswith("3 of 8 sprinklings")
    assert "0.50(2)" in text
    assert "cutoff" in text
    assert "no error is known" in mutual.caution(scene(record(done=1, planned=1)), LINEAR)


def test_without_a_record_it_is_blank() -> None:
    assert mutual.read(scene(None), LINEAR, LIGHT) is mutual.BLANK
    one = EvidenceScene(setup=Setup(region_count=1), plan=EvidencePlan())
    assert "no partner" in mutual.caution(one, LINEAR)
    assert mutual.caution(scene(None), LINEAR) == "Waiting."
