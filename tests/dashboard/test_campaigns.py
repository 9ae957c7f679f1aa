"""Campaigns on the page's side: what is proposed, what runs on the server, what is shown of it."""

from __future__ import annotations

import math
import re
import threading
import time
from collections.abc import Callable, Iterator
from concurrent.futures import Executor, Future
from dataclasses import replace
from pathlib import Path
from typing import Any

import holoviews as hv
import numpy as np
import pytest
from bokeh.document import Document
from panel.io.state import set_curdoc

from lozenge_dashboard import campaign_board
from lozenge_dashboard.campaign_board import (
    Asked,
    forecast_words,
    foreseen,
    refusal_words,
    sharing_words,
    worker_caution,
)
from lozenge_dashboard.campaign_column import Changes, column_state
from lozenge_dashboard.campaign_session import CampaignSession
from lozenge_dashboard.campaign_text import columns, line_html, rows, words_html
from lozenge_dashboard.campaigns import Campaigns, Status, Watch, checked_name
from lozenge_dashboard.palette import DARK, LIGHT, MARKERS
from lozenge_dashboard.proposal import Proposal, free_name, suggest
from lozenge_dashboard.records import CampaignChoices
from lozenge_dashboard.typed import idle, put, put_more, refusals, standing
from lozenge_dashboard.views.campaign import Curve, caution, curves, read
from lozenge_dashboard.views.catalogue import Figure
from lozenge_dashboard.views.effort import (
    CAMPAIGN_VIEWS,
    counts_caution,
    read_counts,
    read_error,
    register_campaign,
)
from lozenge_dashboard.views.marks import Layer
from lozenge_dashboard.views.slope import read_slope
from lozenge_engine import campaign, store
from lozenge_engine.config import PointSource, Setup
from lozenge_engine.design import child_seed
from lozenge_engine.errors import InputError
from lozenge_engine.forecast import forecast
from lozenge_engine.plan import Axis, CampaignPlan, Target
from lozenge_engine.presets import Preset, shipped
from lozenge_engine.realisation import Record

ONE = Setup(region_count=1, half_width=0.5, points=PointSource(density=100.0))
TWO = Setup(region_count=2, half_width=0.3, separation=0.2, points=PointSource(density=100.0))
LADDER = Axis(name="density", values=(40.0, 60.0, 90.0, 130.0))
PATIENCE = 90.0
"""Seconds; worker processes take their time to start on a busy machine."""


def preset(setup: Setup = ONE, **plan: Any) -> Preset:
    """A small campaign."""
    values: dict[str, Any] = {"axes": (LADDER,), "realisations": 5, "smallest_region": 25} | plan
    return Preset(title="Try", sentence="Invented.", setup=setup, campaign=CampaignPlan(**values))


class Here(Executor):
    """Calls at once, in this thread."""

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        future: Future[Any] = Future()
        future.set_result(fn(*args, **kwargs))
        return future


def failed_record(results: store.Results, sprinkling: int, realisation: int, why: str) -> Record:
    """A realisation that failed."""
    own, points = results.design.sprinklings[sprinkling], results.design.setup.points
    seed = child_seed(points.seed, kind=own.kind, density=own.density, realisation=realisation)
    return Record(sprinkling, realisation, seed, 0.0, 0, math.nan, (), why)


def watched(path: Path, wanted: Preset, *, failed: tuple[tuple[int, int], ...] = ()) -> Watch:
    """A results file that was run to its end, with failed realisations added."""
    with store.create(path, wanted, predicted=[]) as results:
        campaign.run(results, executor=Here(), capacity=1)
        for g, r in failed:
            results.add(failed_record(results, g, r, "no <memory>"), elapsed=1.0)
    return Campaigns(path.parent).watch(path.name)


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("results")


@pytest.fixture(scope="module")
def ladder(folder: Path) -> Watch:
    """Densities of one region with a target on b, two failures."""
    target = Target(quantity="slope", error=0.5, relative=True)
    return watched(
        folder / "ladder.sqlite", preset(target=target), failed=((0, 50), (0, 51), (2, 60))
    )


@pytest.fixture(scope="module")
def lonely(folder: Path) -> Watch:
    """One realisation of every point."""
    return watched(folder / "lonely.sqlite", preset(realisations=1))


@pytest.fixture(scope="module")
def gaps(folder: Path) -> Watch:
    """Separations of two regions in two placement classes."""
    axis = Axis(name="separation", values=(0.0, 0.2, 0.4))
    wanted = preset(TWO, axes=(axis,), placements=((0.0, 0.0), (0.1, 0.0)))
    return watched(folder / "gaps.sqlite", wanted)


@pytest.fixture(scope="module")
def counted(folder: Path) -> Watch:
    """Densities of one and of two regions."""
    axes = (LADDER, Axis(name="region_count", values=(1, 2)))
    return watched(folder / "counted.sqlite", preset(TWO, axes=axes, smallest_region=7))


@pytest.fixture(scope="module")
def modes(folder: Path) -> Watch:
    """Truncations, an axis of words."""
    axis = Axis(name="truncation_mode", values=("two_stages", "equal_share"))
    return watched(folder / "modes.sqlite", preset(TWO, axes=(axis,)))


# ---------------------------------------------------------------- what is proposed


def proposed(name: str = "nested-diamond", folder: Path = Path("/nowhere")) -> Proposal:
    """The first proposal for a shipped preset without its own campaign."""
    return suggest(replace(shipped()[name], campaign=None), cores=2, folder=folder)


@pytest.mark.parametrize("name", sorted(shipped()))
@pytest.mark.parametrize("own", [True, False])
def test_first_proposal_makes_a_plan(name: str, own: bool) -> None:
    base = shipped()[name]
    proposal = suggest(base if own else replace(base, campaign=None), cores=2, folder=Path("/no"))
    assert proposal.misfits() == {}
    made = proposal.preset().campaign
    assert made is not None
    if own and base.campaign is not None:
        assert made.axes == base.campaign.axes
        assert made.target == base.campaign.target


def test_density_ladder_is_the_sweeps_and_even_in_the_logarithm() -> None:
    proposal = proposed()
    (axis,) = proposal.axes()
    plan = proposal.base.setup.sweeps
    assert (axis.values[0], axis.values[-1]) == (plan.density_low, plan.density_high)
    assert np.ptp(np.diff(np.log(axis.values))) < 1e-9


def test_half_widths_are_multiples_of_the_present_one() -> None:
    proposal = put(proposed("two-equal-regions"), "axis", "half_width")
    (axis,) = proposal.axes()
    setup = proposal.base.setup
    assert axis.values[-1] == pytest.approx(setup.sweeps.size_high * setup.half_width)


def test_separations_are_even_and_fit() -> None:
    proposal = put(put(proposed("two-equal-regions"), "axis", "separation"), "wanted", "entropy")
    (axis,) = proposal.axes()
    assert np.ptp(np.diff(axis.values)) < 1e-9
    assert proposal.misfits() == {}
    assert forecast(proposal.preset(), workers=1).left_out == ()


def test_region_counts_are_a_second_axis() -> None:
    proposal = put(proposed("two-equal-regions"), "counts", "1, 2;3")
    assert proposal.axes()[1] == Axis(name="region_count", values=(1, 2, 3))


@pytest.mark.parametrize(
    ("name", "value", "place"),
    [
        ("counts", "two", "counts"),
        ("low", 5e4, "low"),
        ("placements", [[0, 0], [0, 0]], "placements"),
        ("wanted", "mutual_information", "wanted"),
    ],
)
def test_what_makes_no_plan_is_said_at_its_control(name: str, value: object, place: str) -> None:
    assert list(put(proposed(), name, value).misfits()) == [place]


def test_slope_along_separation_is_refused_at_what_is_wanted() -> None:
    proposal = put(proposed("two-equal-regions"), "axis", "separation")
    assert "density or half-width" in proposal.misfits()["wanted"]


@pytest.mark.parametrize(
    ("name", "value"),
    [
        ("realisations", "many"),
        ("realisations", 2.5),
        ("realisations", 0),
        ("percent", math.nan),
        ("percent", -2),
        ("absolute", 0),
        ("minutes", "soon"),
        ("workers", 0),
        ("low", "low"),
        ("low", 9e5),
        ("high", 0),
        ("minutes", 0),
        ("axis", "colour"),
        ("placements", [["here", 0]]),
        ("placements", [[math.inf, 0]]),
    ],
)
def test_value_that_is_none_is_refused(name: str, value: object) -> None:
    with pytest.raises(InputError, match="allowed is"):
        put(proposed(), name, value)


def test_empty_budget_is_no_limit() -> None:
    made = put(proposed(), "minutes", "").preset().campaign
    assert made is not None
    assert made.budget is None


@pytest.mark.parametrize(
    "name", ["../up", "a/b", "a\\b", "c:x", "", "  ", ".hidden", "x\ny", "n" * 200, 7, None]
)
def test_only_a_bare_file_name_is_taken(name: object) -> None:
    with pytest.raises(InputError, match="results file"):
        checked_name(name)


def test_suffix_is_added_once() -> None:
    assert checked_name(" run 1 ") == "run 1.sqlite"
    assert checked_name("run.sqlite") == "run.sqlite"


def test_proposed_name_is_free(tmp_path: Path) -> None:
    proposal = proposed(folder=tmp_path)
    (tmp_path / proposal.file).touch()
    assert free_name(proposal, tmp_path) != proposal.file


def said(name: str, value: object, proposal: Proposal | None = None) -> str:
    """The refusal of a value."""
    with pytest.raises(InputError) as refusal:
        put(proposal or proposed("two-equal-regions"), name, value)
    return str(refusal.value)


def test_refusals_have_the_labels_and_units_of_the_screen() -> None:
    widths = put(proposed("two-equal-regions"), "axis", "half_width")
    assert said("low", -5).startswith("from: given -5; allowed is a number from 1 to 500 000")
    assert said("low", -5, widths).startswith("from: given -5; allowed is a number above 0")
    assert said("high", "abc").startswith("to: given abc; allowed is a number")
    assert said("points", 0).startswith("values: given 0; allowed is a whole number")
    assert "0.0001 to 1000 %" in said("percent", -2)
    assert "error to reach" in said("percent", -2)
    assert "of minutes" in said("minutes", 0)
    assert said("file", " ").startswith("results file: given nothing; allowed is a file name")


def test_ends_the_wrong_way_round_name_both_controls() -> None:
    refusal = put(proposed(), "low", 5e4).misfits()["low"]
    assert refusal.startswith("from: given 50000, and")
    assert "“to”" in refusal


@pytest.mark.parametrize("axis", ["density", "half_width"])
def test_shift_that_fits_nowhere_is_refused_once_and_whole(axis: str) -> None:
    proposal = put(put(proposed("two-equal-regions"), "axis", axis), "placements", [[0.9, 0]])
    refusal = proposal.misfits()["placements"]
    assert refusal.startswith("shift t 0.9, shift x 0, region")
    assert refusal.count("given") == refusal.count("allowed is") == 1
    assert "..." not in refusal
    assert "half_width" not in refusal
    assert put(proposal, "placements", [[0.9, 0], [0, 0]]).misfits() == {}


def test_count_of_the_preset_axis_is_not_asked_for() -> None:
    base = replace(shipped()["nested-diamond"], campaign=preset().campaign)
    own = suggest(base, cores=2, folder=Path("/no"))
    assert put(own, "counts", "many").misfits() == {}


def test_name_of_a_file_that_exists_is_refused_before_the_start(tmp_path: Path) -> None:
    server, proposal = Campaigns(tmp_path), put(proposed(), "file", "mine")
    assert refusals(proposal, {}, server, acting=False) == {}
    (tmp_path / "mine.sqlite").touch()
    found = refusals(proposal, {"more_error": "no", "low": "no"}, server, acting=False)
    assert list(found) == ["low", "file"]
    assert "mine.sqlite, which exists" in found["file"]
    assert refusals(proposal, {}, server, acting=True) == {}


# ---------------------------------------------------------------- what the column shows


def state_of(proposal: Proposal, plan: CampaignPlan | None = None) -> dict[str, Any]:
    return column_state(
        proposal,
        plan=plan,
        changes=Changes(),
        errors={"low": "no"},
        page={},
        opened={},
        forecast={},
        start="",
    )


def test_only_one_error_is_asked_for_and_none_for_a_count() -> None:
    fields = state_of(proposed())["fields"]
    assert (fields["percent"]["hidden"], fields["absolute"]["hidden"]) == (False, True)
    fields = state_of(put(proposed(), "wanted", "count"))["fields"]
    assert fields["percent"]["hidden"]
    assert fields["absolute"]["hidden"]


def test_errors_stand_at_their_control() -> None:
    assert state_of(proposed())["fields"]["low"]["error"] == "no"


def test_one_region_closes_the_axis_of_separation() -> None:
    assert "one region" in state_of(proposed())["fields"]["axis"]["closed"]["separation"]


def test_density_axis_shows_elements_values_and_spacing() -> None:
    fields = state_of(put(put(proposed(), "low", 200), "high", 1600))["fields"]
    assert "N = 2 × density: 400 to 3\u202f200" in fields["high"]["note"]
    assert fields["points"]["note"].startswith("200, ")
    assert "in the logarithm" in fields["points"]["note"]
    for word in re.findall(r"[\d.]+", fields["points"]["note"]):
        assert len(word.replace(".", "")) <= 4
    many = state_of(put(proposed(), "points", 60))["fields"]["points"]["note"]
    assert many.count(",") == 7


def test_half_width_axis_says_what_scales_along() -> None:
    fields = state_of(put(proposed("two-equal-regions"), "axis", "half_width"))["fields"]
    assert "Sizes and gaps scale together" in fields["axis"]["note"]
    assert fields["high"]["note"] == ""


def test_changes_of_the_open_campaign_keep_its_identity() -> None:
    plan = preset(target=Target(quantity="slope", error=0.02, relative=True)).campaign
    assert plan is not None
    changed = Changes(realisations=70.0, minutes=2.0, error=1.0).applied(plan)
    assert (changed.realisations, changed.budget) == (70, 120.0)
    assert changed.target == Target(quantity="slope", error=0.01, relative=True)
    assert changed.axes == plan.axes
    with pytest.raises(InputError, match="realisations"):
        Changes(realisations=0.0).applied(plan)


def test_prediction_says_time_memory_and_what_is_left_out() -> None:
    axis = Axis(name="half_width", values=(0.2, 0.3, 0.45))
    said = forecast_words(forecast(preset(TWO, axes=(axis,)), workers=2))
    assert "with 2 workers" in said["text"]
    assert "MB" in said["text"]
    assert len(said["left_out"]) == 1


@pytest.fixture
def two_cores(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(campaign_board, "cores", lambda: 2)


def test_workers_beyond_the_cores_save_no_time_and_take_memory(two_cores: None) -> None:
    few, many = (foreseen(preset(TWO), workers=n) for n in (2, 9))
    assert (few.workers, many.workers) == (2, 9)
    assert many.seconds == few.seconds < foreseen(preset(TWO), workers=1).seconds
    assert many.peak_bytes == pytest.approx(forecast(preset(TWO), workers=9).peak_bytes)
    assert "with 9 workers on 2 cores" in forecast_words(many)["text"]
    assert "cores" not in forecast_words(few)["text"]


def test_workers_are_cautioned_against_this_machine(two_cores: None) -> None:
    assert worker_caution(2, 1e9, memory=2e9) == ""
    assert worker_caution(3, 1e9, memory=2e9) == "2 cores here: more workers are not faster"
    assert "3.0 GB of memory predicted, 2.0 GB here" in worker_caution(2, 3e9, memory=2e9)
    assert "memory" in worker_caution(2, 1e18)


def test_cost_of_campaigns_side_by_side_is_said(two_cores: None) -> None:
    assert sharing_words([], workers=2, busy=0) == ""
    assert "2 times as long" in sharing_words(["a.sqlite"], workers=2, busy=2)
    assert "1.5 times as long" in sharing_words(["a.sqlite"], workers=1, busy=2)
    assert "on other cores" in sharing_words(["a.sqlite"], workers=1, busy=1)


def test_errors_lose_the_folder_and_what_is_said_twice(tmp_path: Path) -> None:
    assert (
        refusal_words(InputError(f"{tmp_path}/a.sqlite: given x"), tmp_path) == "a.sqlite: given x"
    )
    inner = "half_width 0.5: region A: given out; allowed is in; move it."
    wrapped = f"axes: given {inner}; allowed is at least one point that fits; change the axes."
    assert refusal_words(InputError(wrapped), tmp_path) == inner.replace("half_width", "half-width")
    assert refusal_words(OSError("full"), tmp_path) == "OSError: full"


# ---------------------------------------------------------------- the open campaign


@pytest.mark.parametrize("value", [0, -1, math.nan, "soon", True])
def test_budget_of_nothing_is_refused_for_the_open_campaign(ladder: Watch, value: object) -> None:
    with pytest.raises(InputError, match=r"budget, this file: .* number of minutes from 1/60"):
        put_more(Changes(), "minutes", value, ladder)


def test_budget_that_is_used_already_is_refused(ladder: Watch) -> None:
    used = ladder._replace(elapsed=600.0)
    with pytest.raises(InputError, match="used already"):
        put_more(Changes(), "minutes", 10, used)
    assert put_more(Changes(), "minutes", 11, used) == Changes(minutes=11)
    assert put_more(Changes(minutes=11), "minutes", "", used) == Changes()


def test_fewer_realisations_than_there_are_refused(ladder: Watch) -> None:
    # Five, and two failed ones of the first sprinkling.
    for value in (6, 7):
        with pytest.raises(InputError, match="7 realisations of a sprinkling are there already"):
            put_more(Changes(), "realisations", value, ladder)
    with pytest.raises(InputError, match="whole number"):
        put_more(Changes(), "realisations", 8.5, ladder)
    assert put_more(Changes(), "realisations", 8, ladder) == Changes(realisations=8)
    assert put_more(Changes(realisations=8), "realisations", 5, ladder) == Changes()


def test_error_of_the_open_campaign_is_in_the_units_typed(ladder: Watch) -> None:
    assert put_more(Changes(), "error", 3, ladder) == Changes(error=3)
    assert put_more(Changes(error=3), "error", 50, ladder) == Changes()
    with pytest.raises(InputError, match=r"error to reach, this file: given 0; .* 1000 %"):
        put_more(Changes(), "error", 0, ladder)


def test_campaign_with_nothing_left_to_do_says_why(ladder: Watch, lonely: Watch) -> None:
    assert "type a larger number" in idle(lonely, lonely.plan)
    assert idle(lonely, replace(lonely.plan, realisations=2)) == ""
    more = replace(ladder.plan, realisations=100)
    near = ladder._replace(estimates=ladder.estimates._replace(error=0.4))
    # Few realisations may come close by chance: the pilot goes on.
    assert idle(near, more) == ""
    piloted = near._replace(counts=((40, 0),) * 4)
    assert idle(piloted, more) == "target reached: ask for a smaller error"
    smaller = replace(more, target=Target(quantity="slope", error=0.3, relative=True))
    assert idle(piloted, smaller) == ""
    assert "used up" in idle(piloted._replace(elapsed=60.0), replace(smaller, budget=60.0))


def test_buttons_of_the_open_campaign(lonely: Watch) -> None:
    def of(status: Status | None = None, **changed: Any) -> dict[str, Any]:
        given = {"changes": Changes(), "refused": False, "acting": False} | changed
        return standing(lonely, status or Status(), **given)

    done = of()
    assert (done["can_pause"], done["can_resume"], done["can_more"]) == (False, False, False)
    assert "larger number" in done["why_resume"]
    assert "type another number" in done["why_more"]
    typed = of(changes=Changes(realisations=3))
    assert (typed["can_resume"], typed["can_more"]) == (True, True)
    assert "refused" in of(changes=Changes(realisations=3), refused=True)["why_more"]
    running = of(Status(running=True), changes=Changes(realisations=3))
    assert (running["can_pause"], running["can_resume"], running["can_more"]) == (True, False, True)
    assert not of(Status(running=True, stopping=True))["can_pause"]
    assert not of(changes=Changes(realisations=3), acting=True)["can_more"]


# ---------------------------------------------------------------- a page


def page_of(folder: Path, *, file: str = "", note: str = "") -> CampaignSession:
    """A page's session without a browser."""
    with set_curdoc(Document()):
        base = replace(shipped()["nested-diamond"], campaign=None)
        return CampaignSession(Campaigns(folder), Asked(base, file, "light", note))


def column_of(session: CampaignSession) -> dict[str, Any]:
    state = session.board.controls.state
    assert state is not None
    return dict(state)


def typed(session: CampaignSession, name: str, value: object) -> dict[str, Any]:
    """What the column shows once a value was typed."""
    session.receive({"kind": "set", "name": name, "value": value, "id": 1})
    return column_of(session)


def test_refusal_of_the_start_stands_at_the_button_until_something_changes(tmp_path: Path) -> None:
    session = page_of(tmp_path)
    session.receive({"kind": "act", "name": "start", "id": 1})
    session.actions.close()
    session._acted(("a.sqlite", InputError(f"{tmp_path}/a.sqlite: given a full disk")))
    state = column_of(session)
    assert state["forecast"]["failed"] == "a.sqlite: given a full disk"
    assert state["open"]["error"] == ""
    assert typed(session, "realisations", 7)["forecast"]["failed"] == ""
    session.close()
    session.campaigns.close()


def test_start_names_the_fields_that_are_refused(tmp_path: Path) -> None:
    session = page_of(tmp_path)
    assert column_of(session)["start"] == ""
    typed(session, "low", -5)
    assert typed(session, "minutes", 0)["start"] == "refused above: from, budget"
    # What is refused in a box that is hidden now hinders nothing.
    typed(session, "minutes", 5)
    typed(session, "low", 100)
    assert typed(session, "percent", -1)["start"] == "refused above: error to reach"
    assert typed(session, "wanted", "count")["start"] == ""
    session.close()


@pytest.mark.parametrize("name", ["nosuch.sqlite", "../up.sqlite"])
def test_file_of_the_address_that_cannot_be_shown_is_said_at_the_list(
    tmp_path: Path, name: str
) -> None:
    (tmp_path / "here").mkdir()
    (tmp_path / "up.sqlite").touch()
    session = page_of(tmp_path / "here", file=name, note="unknown")
    state = column_of(session)
    assert name in state["open"]["error"]
    assert str(tmp_path) not in state["open"]["error"]
    assert (session.shown, state["open"]["name"]) == ("", "")
    assert state["page"]["error"] == "unknown"
    session.close()


# ---------------------------------------------------------------- what runs


def until(check: Callable[[], bool]) -> None:
    """Wait for something that a campaign does."""
    end = time.monotonic() + PATIENCE
    while not check():
        assert time.monotonic() < end, "it did not happen"
        time.sleep(0.02)


@pytest.fixture
def campaigns(tmp_path: Path) -> Iterator[Campaigns]:
    server = Campaigns(tmp_path)
    yield server
    server.close()
    assert server.running() == []


def entropies(path: Path) -> list[list[float]]:
    """All rows of all sprinklings."""
    with store.inspect(path) as results:
        return [
            [float(x) for column in results.table(g).entropy for x in column.ravel()]
            for g in range(len(results.design.sprinklings))
        ]


def test_paused_and_resumed_campaign_ends_like_an_undisturbed_one(
    campaigns: Campaigns, tmp_path: Path
) -> None:
    wanted = preset(realisations=25)
    campaigns.start("a.sqlite", wanted, workers=2)
    until(lambda: sum(done for done, _ in campaigns.watch("a.sqlite").counts) > 4)
    campaigns.pause("a.sqlite")
    until(lambda: not campaigns.status("a.sqlite").running)
    assert "paused" in campaigns.status("a.sqlite").text
    assert 4 < sum(done for done, _ in campaigns.watch("a.sqlite").counts) < 100
    campaigns.resume("a.sqlite", workers=1)
    until(lambda: not campaigns.status("a.sqlite").running)
    assert not campaigns.status("a.sqlite").failed
    watched(tmp_path / "b.sqlite", wanted)
    assert entropies(tmp_path / "a.sqlite") == entropies(tmp_path / "b.sqlite")


def test_more_realisations_are_taken_while_it_runs_and_after(campaigns: Campaigns) -> None:
    campaigns.start("a.sqlite", preset(realisations=30), workers=1)
    plan = campaigns.watch("a.sqlite").plan
    campaigns.resume("a.sqlite", workers=1, plan=replace(plan, realisations=31))
    until(lambda: not campaigns.status("a.sqlite").running)
    assert campaigns.watch("a.sqlite").counts == ((31, 0),) * 4
    campaigns.resume("a.sqlite", workers=1, plan=replace(plan, realisations=33))
    until(lambda: not campaigns.status("a.sqlite").running)
    assert campaigns.watch("a.sqlite").counts == ((33, 0),) * 4


def test_workers_that_run_are_counted(campaigns: Campaigns) -> None:
    assert campaigns.busy() == 0
    campaigns.start("a.sqlite", preset(realisations=3000), workers=1)
    assert campaigns.busy() == 1
    campaigns.pause("a.sqlite")
    until(lambda: not campaigns.status("a.sqlite").running)
    assert campaigns.busy() == 0


def test_existing_file_is_not_started_again(campaigns: Campaigns, tmp_path: Path) -> None:
    (tmp_path / "a.sqlite").write_bytes(b"mine")
    with pytest.raises(InputError, match="exists"):
        campaigns.start("a.sqlite", preset(), workers=1)
    assert (tmp_path / "a.sqlite").read_bytes() == b"mine"
    assert campaigns.status("a.sqlite") == Status()


def test_what_is_no_results_file_is_refused_in_words(campaigns: Campaigns, tmp_path: Path) -> None:
    (tmp_path / "a.sqlite").write_bytes(b"not a database at all" * 100)
    for act in (campaigns.watch, lambda name: campaigns.resume(name, workers=1)):
        with pytest.raises(InputError, match="allowed is"):
            act("a.sqlite")


def test_file_that_runs_elsewhere_is_refused_and_can_be_watched(
    campaigns: Campaigns, tmp_path: Path
) -> None:
    other = Campaigns(tmp_path)
    try:
        other.start("a.sqlite", preset(realisations=3000), workers=1)
        with pytest.raises(InputError):
            campaigns.resume("a.sqlite", workers=1)
        until(lambda: campaigns.watch("a.sqlite").estimates.done > 0)
        assert not campaigns.status("a.sqlite").running
    finally:
        other.close()


def test_reading_is_shared_until_the_file_changes(campaigns: Campaigns, tmp_path: Path) -> None:
    watched(tmp_path / "a.sqlite", preset(realisations=2))
    first = campaigns.watch("a.sqlite")
    time.sleep(0.05)
    assert campaigns.watch("a.sqlite") is first
    with store.resume(tmp_path / "a.sqlite") as results:
        results.add(failed_record(results, 0, 9, "failed"), elapsed=2.0)
    assert campaigns.watch("a.sqlite").estimates.failed == 1


def test_failure_of_a_run_is_kept_for_the_page(
    campaigns: Campaigns, monkeypatch: pytest.MonkeyPatch
) -> None:
    def broken(*_: object, **__: object) -> None:
        raise InputError("results file: given a full disk; allowed is room; make room.")

    monkeypatch.setattr(campaign, "run", broken)
    campaigns.start("a.sqlite", preset(), workers=1)
    until(lambda: not campaigns.status("a.sqlite").running)
    status = campaigns.status("a.sqlite")
    assert status.failed
    assert "full disk" in status.text
    assert "full disk" in words_html(campaigns.watch("a.sqlite"), status)


def test_closing_ends_the_threads(tmp_path: Path) -> None:
    server = Campaigns(tmp_path)
    server.start("a.sqlite", preset(realisations=3000), workers=1)
    server.close()
    until(lambda: not any(t.name == "campaign" and t.is_alive() for t in threading.enumerate()))


# ---------------------------------------------------------------- what is shown

FIGURES = [figure for view in CAMPAIGN_VIEWS for figure in view.figures.values()]
CHOICES = (CampaignChoices(), CampaignChoices(quantity="mutual"))
ALL = ("ladder", "lonely", "gaps", "counted", "modes")


@pytest.fixture(scope="module", autouse=True)
def bokeh() -> None:
    """The plotting backend, as the page sets it up."""
    hv.extension("bokeh")
    register_campaign()


@pytest.mark.parametrize("name", ALL)
@pytest.mark.parametrize("figure", FIGURES, ids=lambda f: f.group)
@pytest.mark.parametrize("choices", CHOICES, ids=lambda c: c.quantity)
def test_patched_sources_hold_what_holoviews_would_draw(
    figure: Figure, name: str, choices: CampaignChoices, request: pytest.FixtureRequest
) -> None:
    data = figure.read(request.getfixturevalue(name), choices, DARK)
    drawn = hv.render(figure.draw(data))
    blank = hv.render(figure.draw(figure.blank))
    layers = [part for part in data if isinstance(part, Layer)]
    for renderer, empty, layer in zip(drawn.renderers, blank.renderers, layers, strict=True):
        sent, slow = layer.source(), renderer.data_source.data
        assert set(sent) == set(slow) == set(empty.data_source.data)
        for key, column in sent.items():
            assert list(column) == list(slow[key]), key


@pytest.mark.parametrize("name", ALL)
@pytest.mark.parametrize("figure", FIGURES, ids=lambda f: f.group)
def test_marks_lie_within_the_limits(
    figure: Figure, name: str, request: pytest.FixtureRequest
) -> None:
    for choices in CHOICES:
        data = figure.read(request.getfixturevalue(name), choices, LIGHT)
        x, y = data.marks.x[2:].astype(float), data.marks.y[2:].astype(float)
        low_x, high_x, low_y, high_y = data.limits
        assert low_x < high_x
        assert low_y < high_y
        assert np.all((x >= low_x) & (x <= high_x) & (y >= low_y) & (y <= high_y))


def marks_of(data: Any, colour: str) -> list[int]:
    """Rows of the marks in one colour."""
    return [k for k, own in enumerate(data.marks.colour) if own == colour]


def test_points_left_out_of_the_fit_are_hollow_and_said(ladder: Watch) -> None:
    (curve,) = curves(ladder)
    data = read(ladder, CampaignChoices(), LIGHT)
    own = marks_of(data, LIGHT.ink)
    assert [bool(data.marks.fill[k]) for k in own] == list(curve.used)
    assert not all(curve.used)
    assert any(curve.used)
    assert "hollow" in caution(ladder, CampaignChoices()).lower()


def test_error_bars_span_one_standard_error(ladder: Watch) -> None:
    data = read(ladder, CampaignChoices(), LIGHT)
    cells = ladder.estimates.cells
    bars = {
        (round(float(x0), 9), round(float(y0), 9), round(float(y1), 9))
        for x0, y0, x1, y1 in zip(*data.lines[:4], strict=True)
        if x0 == x1
    }
    for cell in cells:
        x = ladder.design.cells[cell.cell].x
        low, high = (cell.entropy.mean + s * cell.entropy.error for s in (-1, 1))
        assert (round(x, 9), round(low, 9), round(high, 9)) in bars


def test_one_realisation_has_no_error_bar_and_says_so(lonely: Watch) -> None:
    data = read(lonely, CampaignChoices(), LIGHT)
    assert len(marks_of(data, LIGHT.ink)) == 4
    # The two unseen rows are all there is: no bar and no fit is invented.
    assert len(data.lines.x0) == 2
    assert "one realisation: no error is known" in caution(lonely, CampaignChoices()).lower()
    assert "no error is known" in words_html(lonely, Status())
    assert all("error not known" in row[4] for row in rows(lonely))


def test_fit_line_has_the_slope_of_the_fit(ladder: Watch) -> None:
    report = ladder.estimates.fits[0].report
    assert report is not None
    data = read(ladder, CampaignChoices(), LIGHT)
    slopes = [
        (y1 - y0) / (x1 - x0)
        for x0, y0, x1, y1, colour in zip(*data.lines[:5], strict=True)
        if colour == LIGHT.ink and x1 - x0 > 0.2
    ]
    assert slopes == [pytest.approx(report.fit.slope)]


def test_placement_classes_have_a_marker_each(gaps: Watch) -> None:
    data = read(gaps, CampaignChoices(quantity="mutual"), LIGHT)
    used = {data.marks.marker[k] for k in marks_of(data, LIGHT.ink)}
    assert used == set(MARKERS[:2])
    assert "shift 0.1, 0" in set(data.words.text)
    assert data.labels == ("separation d (patch half-widths)", "mutual information I (nats)")


def test_second_axis_makes_curves_of_their_own(counted: Watch) -> None:
    found = curves(counted)
    assert [curve.label for curve in found] == ["region_count 1", "region_count 2"]
    assert all(isinstance(curve, Curve) and len(curve.cells) == 4 for curve in found)


def test_axis_of_words_has_its_words_as_ticks(modes: Watch) -> None:
    data = read(modes, CampaignChoices(), LIGHT)
    assert [text for _, text in data.x_ticks] == ["two stages", "equal share"]


def test_slopes_are_those_of_the_report(ladder: Watch) -> None:
    report = ladder.estimates.fits[0].report
    assert report is not None
    data = read_slope(ladder, CampaignChoices(), LIGHT)
    shown = sorted(float(data.marks.y[k]) for k in marks_of(data, LIGHT.ink))
    assert shown == pytest.approx(sorted(line.slope for _, line in report.by_smallest))


def test_failed_realisations_stand_apart(ladder: Watch) -> None:
    data = read_counts(ladder, CampaignChoices(), LIGHT)
    lengths = [
        round(float(x1 - x0))
        for x0, x1, colour in zip(data.lines.x0, data.lines.x1, data.lines.colour, strict=True)
        if colour == LIGHT.alarm
    ]
    assert lengths == [2, 1]
    assert any(str(text).endswith("2 failed") for text in data.words.text)
    assert "3 failed" in counts_caution(ladder, CampaignChoices())


def test_error_curve_falls_towards_the_wanted_one(ladder: Watch) -> None:
    data = read_error(ladder, CampaignChoices(), LIGHT)
    history = ladder.estimates.history
    shown = data.marks.y[2:].astype(float)
    assert shown == pytest.approx(np.log10([100 * e for _, e in history]))
    goal = [y for y, c in zip(data.lines.y0, data.lines.colour, strict=True) if c == LIGHT.accent]
    assert goal == [pytest.approx(math.log10(50))]
    assert data.labels[1] == "error of b reached (%)"


def test_table_has_a_row_for_each_point_and_class(gaps: Watch, ladder: Watch) -> None:
    assert len(rows(gaps)) == 6
    for watch in (gaps, ladder):
        assert {len(row) for row in rows(watch)} == {len(columns(watch))}
    assert [row[-1] for row in rows(ladder)] == [
        "yes" if used else "left out" for used in curves(ladder)[0].used
    ]


def test_words_of_files_are_escaped(ladder: Watch) -> None:
    said = words_html(ladder, Status(text="<b>bad</b>", failed=True))
    assert "no &lt;memory&gt;" in said
    assert "<b>bad" not in said
    assert "<b>" not in line_html(ladder._replace(name="<b>x</b>"), Status())


def test_fit_is_explained_with_its_regime(ladder: Watch) -> None:
    said = words_html(ladder, Status())
    report = ladder.estimates.fits[0].report
    assert report is not None
    assert "95 % interval" in said
    assert "Regime" in said
    assert ("Settled" if report.settled else "Not settled") in said
