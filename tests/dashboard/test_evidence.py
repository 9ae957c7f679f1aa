"""The evidence page without a browser: its column, its queue of views, what it says."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any, NamedTuple

import holoviews as hv
import numpy as np
import pytest
from bokeh.document import Document
from panel.io.state import set_curdoc

from lozenge_dashboard.errands import Errands
from lozenge_dashboard.evidence_column import GROUPS, fields_of, put_plan
from lozenge_dashboard.evidence_session import Asked, EvidenceSession
from lozenge_dashboard.evidence_standing import Mark, Standing
from lozenge_dashboard.evidence_text import asked_words, line_html, rows
from lozenge_dashboard.evidence_work import DEPENDS, ORDER, TASKS, Ask, first_plan
from lozenge_dashboard.jobs import Progress
from lozenge_dashboard.palette import LIGHT
from lozenge_dashboard.records import EvidenceChoices, EvidenceScene
from lozenge_dashboard.views import due
from lozenge_dashboard.views.evidence import EVIDENCE_VIEWS, RECORDS, TITLES, register_evidence
from lozenge_engine.due import DueRecord, DueRow
from lozenge_engine.errors import InputError
from lozenge_engine.evidence import EvidencePlan
from lozenge_engine.presets import parse, shipped
from lozenge_engine.stages import Stages
from lozenge_engine.verdict import Slope

# ---------------------------------------------------------------- the plan


def test_alphas_are_equally_spaced_in_the_logarithm_and_hold_both_ends() -> None:
    plan = EvidencePlan(alpha_low=0.3, alpha_high=2.7, alphas=7)
    values = np.array(plan.alpha_values())
    assert (values[0], values[-1], values.size) == (0.3, 2.7, 7)
    np.testing.assert_allclose(np.diff(np.log(values)), np.log(9) / 6, rtol=1e-12)
    assert EvidencePlan(alphas=2).alpha_values() == (0.25, 4.0)


@pytest.mark.parametrize(
    ("given", "says"),
    [
        ({"alpha_low": 0.2}, "alpha_low: given 0.2; allowed is 0.25 to 4"),
        ({"alpha_low": 2.0, "alpha_high": 2.0}, "above alpha_low, which is 2"),
        ({"alphas": 1}, "2 to 200"),
        ({"alphas": 4.0}, "a whole number"),
        ({"stage": "third"}, "patch, regions, both"),
        ({"rules": ()}, "rules: given none"),
        ({"rules": ("root_count", "root_count")}, "each once"),
        ({"rules": ("none",)}, "rules: given none; allowed is one to four"),
        ({"delta": 0.02}, "0.03 to 0.10"),
        ({"realisations": 0}, "1 to 1000"),
        ({"level": "deep"}, "level: given deep"),
        ({"operator": "cone"}, "patch, region, union"),
        ({"region": 8}, "0 to 7"),
        ({"rank": 0}, "1 to 1000000"),
        ({"uncut_space": 1}, "true or false"),
        ({"cut_quantity": "volume"}, "entropy, mutual, slope, kept"),
    ],
)
def test_plan_refuses_what_it_cannot_take(given: dict[str, Any], says: str) -> None:
    with pytest.raises(InputError, match=r".") as refused:
        EvidencePlan(**given)
    assert says in str(refused.value)


def test_rules_are_kept_in_one_order_so_that_equal_plans_are_equal() -> None:
    assert EvidencePlan(rules=("equal_share", "root_count")) == EvidencePlan(
        rules=("root_count", "equal_share")
    )


# ---------------------------------------------------------------- the column


@pytest.mark.parametrize(
    ("name", "sent", "becomes"),
    [
        ("delta", 7.5, 0.075),
        ("rank", "3", 3),
        ("alphas", 12.0, 12),
        ("region", "1", 1),
        ("rules", ["fixed_number", "root_count"], ("root_count", "fixed_number")),
        ("uncut_space", True, True),
        ("alpha_high", 3.5, 3.5),
    ],
)
def test_typed_value_reaches_the_plan(name: str, sent: object, becomes: object) -> None:
    assert getattr(put_plan(EvidencePlan(), name, sent), name) == becomes


@pytest.mark.parametrize(
    ("name", "sent", "says"),
    [
        ("delta", 2, "departure δ: given 2; allowed is 3 to 10 %"),
        ("delta", "much", "departure δ: given much"),
        ("rank", "first", "rank: given first"),
        ("rank", 1.5, "a whole number"),
        ("rules", [], "one to four"),
    ],
)
def test_refused_value_says_what_is_allowed(name: str, sent: object, says: str) -> None:
    with pytest.raises(InputError) as refused:
        put_plan(EvidencePlan(), name, sent)
    assert says in str(refused.value)


def test_every_field_of_the_plan_has_a_control_or_a_switch() -> None:
    controls = {field.name for group in GROUPS for field in group.fields}
    switches = {"cut_quantity", "mode_part", "state_check"}
    assert controls | switches == set(EvidencePlan.__dataclass_fields__)


def test_fields_say_why_they_cannot_act() -> None:
    one = fields_of(EvidencePlan(), regions=1, errors={"rank": "no"}, ranks=36, closed_form=False)
    assert one["operator"]["closed"] == {"union": "one region has no union"}
    assert one["region"]["hidden"]
    assert one["rank"]["error"] == "no"
    assert set(one["level"]["closed"]) == {"exact", "smooth"}
    assert one["rank"]["note"] == "36 positive modes"
    plan = EvidencePlan(operator="region", delta=0.07)
    two = fields_of(plan, regions=2, errors={}, ranks=None, closed_form=True)
    assert not two["region"]["hidden"]
    assert "closed" not in two["level"]
    assert set(two["region"]["closed"]) == {2, 3, 4, 5, 6, 7}
    assert two["delta"]["value"] == 7
    json.dumps(two)


# ---------------------------------------------------------------- what a view depends on


def test_every_view_has_its_task_its_record_and_its_name() -> None:
    names = {view.name for view in EVIDENCE_VIEWS}
    assert names == set(ORDER) == set(TASKS) == set(RECORDS) == set(TITLES) == set(DEPENDS)
    assert set(RECORDS.values()) < set(EvidenceScene._fields)
    assert names < set(EvidenceChoices._fields)
    for view in EVIDENCE_VIEWS:
        default = getattr(EvidenceChoices(), view.name)
        assert default in dict(view.options or [("", "")])


def test_closed_form_is_taken_where_there_is_one() -> None:
    setup = shipped()["two-equal-regions"].setup
    assert first_plan(setup).level == "exact"
    assert first_plan(setup.with_(mass=1.0)).level == "preview"
    bent = replace(setup.points, curvature="positive", radius=2.0)
    assert first_plan(setup.with_(points=bent)).level == "preview"


def test_mode_does_not_depend_on_the_cut_study_nor_that_on_the_mode() -> None:
    setup = shipped()["two-equal-regions"].setup
    before = Ask(setup, EvidencePlan())
    rank = before._replace(plan=replace(before.plan, rank=2))
    assert [view for view in ORDER if rank.key(view) != before.key(view)] == ["modeshape"]
    alphas = before._replace(plan=replace(before.plan, alphas=9))
    assert [view for view in ORDER if alphas.key(view) != before.key(view)] == ["cutstudy"]
    results = before._replace(results=Path("a.sqlite"))
    assert [view for view in ORDER if results.key(view) != before.key(view)] == ["due"]
    slope = before._replace(plan=replace(before.plan, cut_quantity="slope"))
    assert [view for view in ORDER if slope.key(view) != before.key(view)] == ["cutstudy"]
    kept = before._replace(plan=replace(before.plan, cut_quantity="kept"))
    assert [view for view in ORDER if kept.key(view) != before.key(view)] == []


# ---------------------------------------------------------------- how a view stands


def test_view_says_how_it_stands_and_what_to_do() -> None:
    key = ("a",)
    assert Standing("idle", key, key).mark("") == Mark()
    assert Standing("waiting", key).mark("")[:2] == ("waiting", "cancel")
    running = Standing("running", key, ("b",), "modes, 2 s").mark("")
    assert running == Mark("computing … modes, 2 s", "cancel")
    failed = Standing("failed", key, ("b",), "too deep").mark("")
    assert failed == Mark("earlier", "compute", "too deep", error=True)
    assert Standing("offered", key).mark("press Compute") == Mark("", "compute", "press Compute")
    cancelled = Standing("cancelled", key).mark("")
    assert cancelled.action == "compute"
    assert "Compute starts it again" in cancelled.text


def test_part_of_what_is_asked_is_not_marked_as_an_earlier_picture() -> None:
    for state in ("waiting", "running", "cancelled"):
        assert Standing(state, ("a",), ()).mark("").fresh
        assert not Standing(state, ("a",), ("b",)).mark("").fresh
    assert Standing("cancelled", ("a",), ()).mark("").stale == "not finished"


# ---------------------------------------------------------------- a page


class Line(Errands):
    """Errands that are only written down."""

    def __init__(self) -> None:
        super().__init__()
        self.asked: dict[str, Ask] = {}
        self.cancelled: list[str] = []
        self.removed = False

    def request(self, page: object, name: str, task: Any, ask: Any, **_: Any) -> None:
        assert task is TASKS[name]
        self.asked[name] = ask

    def cancel(self, page: object, name: str) -> None:
        self.cancelled.append(name)

    def remove(self, page: object) -> None:
        self.removed = True


class Page(NamedTuple):
    session: EvidenceSession
    line: Line

    def state(self) -> dict[str, Any]:
        return dict(self.session.board.controls.state)

    def act(self, name: str, value: object = None) -> None:
        self.session.receive({"kind": "act", "name": name, "value": value, "id": 1})

    def set(self, name: str, value: object) -> None:
        self.session.receive({"kind": "set", "name": name, "value": value, "id": 2})

    def head(self, view: str) -> tuple[str, str]:
        head = self.session.board.frames[view].head
        return head.stale, head.action

    def foot(self, view: str) -> str:
        return str(self.session.board.frames[view].foot.object)

    def fail(self, view: str, error: Exception) -> None:
        self.session._done(view, self.session.views[view].wanted, error)


@pytest.fixture
def opened(tmp_path: Path) -> Callable[..., Page]:
    """Makes pages that are open in no browser; what the process would do is written down."""
    pages: list[Page] = []
    hv.extension("bokeh")
    register_evidence()

    def make(name: str = "two-equal-regions", *, density: float = 1000.0, file: str = "") -> Page:
        preset = shipped()[name]
        source = replace(preset.setup.points, density=density)
        preset = replace(preset, setup=preset.setup.with_(points=source))
        with set_curdoc(Document()):
            line = Line()
            asked = Asked(preset, file=file)
            session = EvidenceSession(line, asked, folder=tmp_path, stages=Stages())
            session.picked.request = lambda work: None  # type: ignore[method-assign]
            session.draw_ahead()
            session.open()
        pages.append(Page(session, line))
        return pages[-1]

    yield make  # type: ignore[misc]
    for page in pages:
        page.session.close()
        assert page.line.removed


def test_open_page_asks_for_every_view_and_says_so(opened: Callable[..., Page]) -> None:
    page = opened()
    assert set(page.line.asked) == set(ORDER) - {"modeshape"}
    assert page.head("cutstudy") == ("waiting", "cancel")
    assert page.state()["queue"] == {"text": "6 waiting", "busy": True, "missing": False}


def test_one_region_has_no_pair_and_that_is_no_error(opened: Callable[..., Page]) -> None:
    page = opened("nested-diamond")
    assert "mutual" not in page.line.asked
    assert page.head("mutual") == ("", "")
    assert "add a region on the bench" in page.foot("mutual")
    assert "refusal" not in page.foot("mutual")
    page.act("compute")
    assert "mutual" not in page.line.asked


def test_large_set_waits_for_its_button(opened: Callable[..., Page]) -> None:
    page = opened(density=4000.0)
    assert page.line.asked == {}
    assert page.head("due")[1] == "compute"
    assert "8\u202f000 elements take a while: press Compute." in page.foot("due")
    page.session.receive_view("due", {"kind": "act", "name": "compute"})
    assert set(page.line.asked) == {"due"}
    assert page.head("due") == ("waiting", "cancel")
    assert page.head("mutual")[1] == "compute"
    page.act("compute")
    assert set(page.line.asked) == set(ORDER) - {"modeshape"}


def test_refused_control_keeps_the_plan_and_says_why(opened: Callable[..., Page]) -> None:
    page = opened()
    before = page.session.plan
    page.set("alpha_low", 9)
    assert page.session.plan == before
    assert "0.25 to 4" in page.state()["fields"]["alpha_low"]["error"]
    page.set("alpha_low", 0.5)
    assert "error" not in page.state()["fields"]["alpha_low"]
    assert page.line.asked["cutstudy"].plan.alpha_low == 0.5


def test_change_asks_again_only_for_what_it_concerns(opened: Callable[..., Page]) -> None:
    page = opened()
    page.line.asked.clear()
    page.set("delta", 8)
    assert set(page.line.asked) == {"thresholds"}
    assert page.line.cancelled == ["thresholds"]


def test_error_stands_in_its_view_until_something_changes(opened: Callable[..., Page]) -> None:
    page = opened()
    page.fail("thresholds", InputError("rule: given none; allowed is a cut; choose one."))
    assert page.head("thresholds") == ("no result", "compute")
    assert "given none; allowed is a cut" in page.foot("thresholds")
    assert "refusal" in page.foot("thresholds")
    assert page.state()["queue"]["missing"]
    page.line.asked.clear()
    page.set("rank", 2)
    assert page.line.asked == {}
    page.set("delta", 4)
    assert set(page.line.asked) == {"thresholds"}


def test_late_answer_to_an_earlier_question_is_not_shown(opened: Callable[..., Page]) -> None:
    page = opened()
    earlier = page.session.views["thresholds"].wanted
    page.set("delta", 4)
    page.session._done("thresholds", earlier, InputError("too late"))
    assert page.head("thresholds") == ("waiting", "cancel")
    assert "too late" not in page.foot("thresholds")


def test_few_sprinklings_come_first_and_then_those_that_are_wanted(
    opened: Callable[..., Page],
) -> None:
    page = opened()
    assert page.line.asked["due"].plan.realisations == 2
    page.line.asked.clear()
    key = page.session.views["due"].wanted
    page.session._done("due", key, record())
    assert page.line.asked["due"].plan.realisations == 8
    assert page.head("due") == ("more to come", "cancel")
    assert page.session.board.frames["due"].head.fresh
    page.session._done("due", key, record())
    assert page.head("due") == ("", "")
    page.set("realisations", 2)
    page.session._done("due", page.session.views["due"].wanted, record())
    assert page.head("due") == ("", "")


def test_cancelled_view_says_how_to_go_on(opened: Callable[..., Page]) -> None:
    page = opened()
    key = page.session.views["mutual"].wanted
    page.session._progressed("mutual", key, Progress("twin", 0.2, 3.0))
    assert page.head("mutual") == ("computing … twin, 3 s", "cancel")
    page.session.receive_view("mutual", {"kind": "act", "name": "cancel"})
    assert page.line.cancelled == ["mutual"]
    assert page.head("mutual") == ("cancelled", "compute")
    assert "Compute starts it again" in page.foot("mutual")
    page.session._progressed("mutual", key, Progress("twin", 0.4, 4.0))
    assert page.head("mutual") == ("cancelled", "compute")


def test_cancel_all_stops_what_runs_and_what_waits(opened: Callable[..., Page]) -> None:
    page = opened()
    page.act("halt")
    assert {page.head(name) for name in ORDER} == {("cancelled", "compute")}
    assert page.state()["queue"] == {
        "text": "Not everything is computed.",
        "busy": False,
        "missing": True,
    }


def test_switch_of_a_view_is_kept_in_the_saved_preset(opened: Callable[..., Page]) -> None:
    page = opened()
    sent: list[tuple[str, str]] = []
    page.session.board.controls.download = lambda *file: sent.append(file)  # type: ignore
    page.session.receive_view("modeshape", {"kind": "choose", "value": "modulus"})
    page.set("rules", ["equal_share"])
    page.act("theme")
    page.act("save")
    saved = parse(sent[0][1])
    assert saved.evidence == EvidencePlan(
        rules=("equal_share",), mode_part="modulus", level="exact"
    )
    assert saved.view.theme == page.session.theme
    assert saved.setup == page.session.preset.setup


def test_results_file_that_is_not_there_is_said_where_files_are_chosen(
    opened: Callable[..., Page], tmp_path: Path
) -> None:
    page = opened(file="gone.sqlite")
    assert page.state()["due"]["error"].startswith("gone.sqlite is not in this folder")
    page.act("file", "../else.sqlite")
    assert page.state()["due"]["error"]
    (tmp_path / "here.sqlite").write_bytes(b"")
    page.session._look()
    assert page.state()["due"]["names"] == ["here.sqlite"]
    page.act("file", "here.sqlite")
    assert page.state()["due"]["error"] == ""
    assert page.line.asked["due"].results == tmp_path / "here.sqlite"


def test_sentence_says_what_the_bench_sent() -> None:
    preset = shipped()["two-equal-regions"]
    text = asked_words(preset)
    assert preset.title in text
    assert "2 regions, h = 0.25, gap 0.15, 2\u202f800 elements (Poisson sprinkling)" in text
    assert "cut in both stages" in text


# ---------------------------------------------------------------- slopes side by side


def record() -> DueRecord:
    """Two geometries, the second without data."""
    x = np.linspace(2.0, 3.0, 4)
    none = np.full(4, np.nan)
    one = DueRow(
        label="region_count 1",
        axis="density",
        regions=shipped()["nested-diamond"].setup.regions(),
        mass=0.0,
        order=1.0,
        reference=1 / 3,
        no_reference="",
        density=np.geomspace(500, 4000, 4),
        x=x,
        placement=np.zeros(4, dtype=np.int64),
        used=np.array([False, True, True, True]),
        data=np.array([2.0, 2.1, np.nan, 2.4]),
        data_error=np.array([0.05, 0.01, np.nan, 0.02]),
        twin=np.array([1.7, 2.08, 2.2, 2.36]),
        twin_error=np.full(4, 0.002),
        minus=np.array([0.3, 0.02, np.nan, 0.04]),
        minus_error=np.array([0.05, 0.01, np.nan, 0.02]),
        data_slope=Slope(0.34, 0.01, 1.5, 2),
        twin_slope=Slope(0.335, 0.002),
        chain_slope=Slope(1 / 3, 1e-4),
        minus_slope=Slope(0.005, 0.011),
        constant=Slope(0.03, 0.006),
        chain=None,
        settled=True,
        why="four sizes",
        verdict="the twin explains it",
    )
    two = one._replace(
        label="region_count 2",
        data_slope=Slope(note="no data"),
        data=none,
        minus=none,
        minus_error=none,
        reference=2 / 3,
    )
    return DueRecord("own", "preview", (one, two), (), (), True, 1.0)


def shown(data: due.Due) -> tuple[Any, Any, list[str]]:
    """Marks in sight, and the words."""
    return data.marks.x[2:], data.marks.fill[2:], [str(text) for text in data.words.text[2:]]


def test_slopes_are_drawn_where_they_are_known() -> None:
    scene = EvidenceScene(shipped()["nested-diamond"].setup, EvidencePlan(), due=record())
    data = due.read(scene, EvidenceChoices(), LIGHT)
    x, _, words = shown(data)
    np.testing.assert_array_equal(x, [0.34])
    assert words == [
        "data 0.340(10)",
        "twin 0.335(2)",
        "chain 0.3333(5)",
        "twin 0.335(2)",
        "chain 0.3333(5)",
    ]
    assert [text for _, text in data.ticks] == ["K = 1", "K = 2"]
    dashed = data.lines.x0[data.lines.dash == "dashed"]
    np.testing.assert_allclose(dashed, [1 / 3, 2 / 3])
    said = due.caution(scene, EvidenceChoices())
    assert "K = 1: the twin explains it; K = 2: the twin explains it; the table says why." in said
    assert "Dashed: 1/3, 2/3." in said


def test_difference_shows_what_its_fit_leaves_out_as_hollow() -> None:
    scene = EvidenceScene(shipped()["nested-diamond"].setup, EvidencePlan(), due=record())
    data = due.read_minus(scene, EvidenceChoices(due="minus"), LIGHT)
    _, fill, words = shown(data)
    np.testing.assert_array_equal(fill, [0.0, 1.0, 0.0, 1.0])
    assert words == ["K = 1, constant 0.030(6), slope 0.005(11)"]


def test_table_says_how_each_number_was_made() -> None:
    scene = EvidenceScene(shipped()["nested-diamond"].setup, EvidencePlan(), due=record())
    lines = rows(scene)
    assert ("b from data, K = 1", "0.340(10)", "χ²/dof 1.5/2") in lines
    assert ("b from data, K = 2", "–", "no data") in lines
    assert ("due to, K = 1", "the twin explains it", "four sizes") in lines
    line = line_html(scene, "slopes: twin, 2 s")
    assert "0.340(10)" in line
    assert "twin 0.335(2)" in line
    assert "slopes: twin, 2 s" in line


def test_views_before_their_record_are_blank() -> None:
    scene = EvidenceScene(shipped()["nested-diamond"].setup, EvidencePlan())
    for read in (due.read, due.read_minus):
        assert read(scene, EvidenceChoices(), LIGHT) is due.BLANK
