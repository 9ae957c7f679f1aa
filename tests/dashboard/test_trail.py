"""States of a page as addresses, without a browser."""

from __future__ import annotations

import base64
from collections.abc import Iterator
from dataclasses import replace
from typing import Any
from urllib.parse import parse_qsl, urlencode

import holoviews as hv
import pytest
from bokeh.document import Document
from panel.io.state import set_curdoc
from tests.dashboard.scenes import SMALL, STAGES, bare

from lozenge_dashboard.bundle_rows import layout_of
from lozenge_dashboard.campaign_files import sample_columns
from lozenge_dashboard.exchange import as_preset
from lozenge_dashboard.jobs import Workshop
from lozenge_dashboard.picture import Picture
from lozenge_dashboard.server import Server
from lozenge_dashboard.session import Session
from lozenge_dashboard.trail import POINT_FILES, Opening, Shelf, Trail, named, opening_of
from lozenge_dashboard.views.catalogue import register_all
from lozenge_engine.address import query_of
from lozenge_engine.bundle import Bundle, pack
from lozenge_engine.plan import Axis, CampaignPlan
from lozenge_engine.pointfile import PointFile, parse_points
from lozenge_engine.presets import Preset, ViewState, dumps, shipped

FIRST = Preset(title="Small", sentence="A small one.", setup=SMALL)
POINTS = b"t,x\n" + b"".join(
    f"{0.045 * a + 0.003 * b:.4f},{0.045 * b - 0.002 * a:.4f}\n".encode()
    for a in range(-9, 10)
    for b in range(-9, 10)
)


def with_seed(seed: int, preset: Preset = FIRST) -> Preset:
    return replace(preset, setup=SMALL.with_(points=replace(SMALL.points, seed=seed)))


def changed(query: str, **values: str) -> str:
    return urlencode(dict(parse_qsl(query)) | values)


# ---------------------------------------------------------------- what an address opens


def test_address_opens_its_state_and_marks_differences_from_the_preset_it_came_from() -> None:
    state = with_seed(9)
    found = opening_of(
        query_of(state), shipped()["nested-diamond"], origins=named([FIRST]), shelf=Shelf()
    )
    assert found.preset == state
    assert (found.origin, found.reason) == (FIRST, "")


def test_address_of_an_unknown_preset_is_its_own_origin() -> None:
    state = replace(with_seed(9), title="Somebody's")
    found = opening_of(query_of(state), FIRST, origins=named([FIRST]), shelf=Shelf())
    assert found.origin == found.preset == state


def test_every_fault_is_named_and_the_rest_holds() -> None:
    query = changed(query_of(with_seed(9)), half_width="wide", theme="blue")
    found = opening_of(query, FIRST, origins={}, shelf=Shelf())
    assert found.preset.setup.points.seed == 9
    assert "half_width" in found.reason
    assert "view.theme" in found.reason
    assert found.given == query


@pytest.mark.parametrize("query", ["v=99&seed=1", "seed=1", "%ff", "v=1&v=1", "x" * 9000])
def test_address_that_cannot_be_read_opens_the_first_screen_and_says_so(query: str) -> None:
    found = opening_of(query, FIRST, origins={}, shelf=Shelf())
    assert found.preset == FIRST
    assert "Nothing of it was taken" in found.reason


def test_shelf_keeps_the_newest_points_only() -> None:
    shelf = Shelf()
    file = parse_points(POINTS, name="own.csv")
    for k in range(POINT_FILES + 1):
        shelf.put(file._replace(sha256=f"{k:064x}"))
    half = file.points.u.size / 2

    def held(k: int) -> PointFile | None:
        source = replace(
            SMALL.points, kind="file", file="own.csv", density=half, sha256=f"{k:064x}"
        )
        return shelf.of(replace(FIRST, setup=SMALL.with_(points=source)))

    assert held(0) is None
    assert held(1) is not None


# ---------------------------------------------------------------- the list of states


def test_equal_states_make_no_step_and_a_new_one_makes_one() -> None:
    trail = Trail(Opening(FIRST, FIRST), FIRST, origins=[], shelf=Shelf())
    for seed in (5, 5, 6, 6, 7):
        trail.note(seed, lambda seed=seed: with_seed(seed))  # type: ignore[misc]
    assert trail.state() == {"step": 2, "query": query_of(with_seed(7)), "refusal": ""}


def test_state_without_an_address_says_why_and_keeps_the_last_one() -> None:
    trail = Trail(Opening(FIRST, FIRST), FIRST, origins=[], shelf=Shelf())
    trail.note(1, lambda: FIRST)
    trail.note(2, lambda: replace(FIRST, title="two\nlines"))
    assert "no address" in trail.state()["refusal"]
    assert trail.state()["query"] == query_of(FIRST)


# ---------------------------------------------------------------- a page


class Pages:
    """Pages of one server."""

    def __init__(self) -> None:
        self.server = Server(STAGES, Workshop(), shipped(), FIRST, Shelf())
        self.made: list[Session] = []

    def open(self, query: str = "") -> Session:
        with set_curdoc(Document()):
            self.made.append(Session(self.server, self.server.opening(query)))
        return self.made[-1]


@pytest.fixture
def pages() -> Iterator[Pages]:
    hv.extension("bokeh")
    register_all()
    made = Pages()
    yield made
    for session in made.made:
        session.close()
    made.server.workshop.close()


def put(session: Session, name: str, value: Any, *, settled: bool = True) -> dict[str, Any]:
    session.receive({"kind": "set", "name": name, "value": value, "settled": settled, "id": 1})
    return trail_of(session)


def trail_of(session: Session) -> dict[str, Any]:
    return dict(session.board.controls.state["trail"])  # type: ignore[index]


def heading(session: Session) -> dict[str, Any]:
    return dict(session.board.controls.state["page"])  # type: ignore[index]


def go(session: Session, step: int, query: str) -> None:
    session.receive({"kind": "go", "step": step, "query": query, "id": 2})


def give(session: Session, purpose: str, name: str, data: bytes) -> None:
    session.receive(
        {
            "kind": "file",
            "purpose": purpose,
            "name": name,
            "size": len(data),
            "first": True,
            "last": True,
            "data": base64.b64encode(data).decode(),
        }
    )


def test_page_opens_with_its_own_address(pages: Pages) -> None:
    assert trail_of(pages.open()) == {"step": 0, "query": query_of(FIRST), "refusal": ""}


def test_address_of_a_page_opens_the_same_state_on_another(pages: Pages) -> None:
    session = pages.open()
    put(session, "separation", 0.2)
    put(session, "union_rule", "direct_sum")
    session.receive({"kind": "act", "name": "theme", "id": 1})
    session.receive_view("scaling", {"kind": "focus"})
    query = trail_of(session)["query"]
    other = pages.open(query)
    assert other._screen() == session._screen()
    assert trail_of(other) == {"step": 0, "query": query, "refusal": ""}
    assert other.desk.preset == FIRST
    assert heading(other)["changed"]


def test_dragging_changes_no_address_and_its_end_makes_one_step(pages: Pages) -> None:
    session = pages.open()
    before = trail_of(session)
    for value in (0.11, 0.12, 0.13):
        assert put(session, "separation", value, settled=False) == before
    session._gathered()
    assert trail_of(session) == before
    after = put(session, "separation", 0.13)
    assert after["step"] == 1
    assert dict(parse_qsl(after["query"]))["separation"] == "0.13"


def test_refused_value_makes_no_step(pages: Pages) -> None:
    session = pages.open()
    before = trail_of(session)
    assert put(session, "half_width", 0.9) == before
    assert put(session, "seed", "many") == before


CHANGES: list[tuple[str, Any]] = [
    ("separation", 0.2),
    ("elements", 500),
    ("seed", 77),
    ("truncation_mode", "custom"),
    ("kind", "lattice"),
    ("curvature", "positive"),
    ("regions", "list"),
    ("region_count", 1),
    ("order", 2.0),
    ("sprinklings", 4),
    ("density_points", 5),
    ("union_rule", "direct_sum"),
]


def test_every_change_can_be_undone_and_redone(pages: Pages) -> None:
    session = pages.open()
    first, shown = trail_of(session), session._screen()
    for name, value in CHANGES:
        second = put(session, name, value)
        assert second["step"] == 1, name
        there = session.desk.as_preset(session._screen()[1], None)
        go(session, 0, first["query"])
        assert session._screen() == shown
        assert trail_of(session) == first
        assert not heading(session)["changed"]
        go(session, 1, second["query"])
        assert session.desk.as_preset(session._screen()[1], None) == there
        assert trail_of(session) == second
        go(session, 0, first["query"])


def test_change_after_going_back_is_the_next_step_from_there(pages: Pages) -> None:
    session = pages.open()
    first = trail_of(session)
    put(session, "separation", 0.2)
    put(session, "separation", 0.25)
    go(session, 0, first["query"])
    assert put(session, "separation", 0.3)["step"] == 1


def test_going_back_to_another_preset_brings_its_differences_back(pages: Pages) -> None:
    session = pages.open()
    changed_one = put(session, "separation", 0.2)
    session.receive({"kind": "act", "name": "shipped", "value": "nested-diamond", "id": 1})
    assert trail_of(session)["step"] == 2
    go(session, 1, changed_one["query"])
    assert session.desk.preset == FIRST
    assert heading(session)["changed"]


def test_fault_stands_in_the_heading_and_the_address_stays_until_something_changes(
    pages: Pages,
) -> None:
    query = changed(query_of(with_seed(9)), half_width="wide")
    session = pages.open(query)
    assert "half_width" in heading(session)["error"]
    assert session.bench.setup().points.seed == 9
    assert trail_of(session) == {"step": 0, "query": query, "refusal": ""}
    assert put(session, "separation", 0.2)["step"] == 1
    assert heading(session)["error"] == ""
    go(session, 0, query)
    assert "half_width" in heading(session)["error"]


# ---------------------------------------------------------------- files


def test_imported_points_are_named_in_the_address_and_asked_for_elsewhere(pages: Pages) -> None:
    session = pages.open()
    give(session, "points", "own.csv", POINTS)
    assert heading(session)["error"] == ""
    query = trail_of(session)["query"]
    sha256 = parse_points(POINTS, name="own.csv").sha256
    assert dict(parse_qsl(query))["sha256"] == sha256

    again = pages.open(query)  # the server has them
    assert (heading(again)["error"], again._screen()) == ("", session._screen())

    pages.server.shelf._held.clear()
    asking = pages.open(query)
    error = heading(asking)["error"]
    assert "own.csv" in error
    assert sha256[:12] in error
    assert trail_of(asking) == {"step": 0, "query": query, "refusal": ""}
    give(asking, "points", "other.csv", POINTS + b"0.4003,0.01\n")
    assert "other points" in heading(asking)["error"]
    give(asking, "points", "renamed.csv", POINTS)
    assert heading(asking)["error"] == ""
    points = session.bench.setup().points
    renamed = session.bench.setup().with_(points=replace(points, file="renamed.csv"))
    assert asking.bench.setup() == renamed


def test_undo_brings_imported_points_back(pages: Pages) -> None:
    session = pages.open()
    give(session, "points", "own.csv", POINTS)
    imported = trail_of(session)
    shown = session._screen()
    assert put(session, "kind", "poisson")["step"] == 2
    go(session, 1, imported["query"])
    assert session._screen() == shown


def test_bundle_opens_its_preset_and_says_what_else_it_holds(pages: Pages) -> None:
    session = pages.open()
    sent = as_preset(with_seed(5), SMALL, ViewState(theme="dark"), bare().result)
    data = pack(Bundle(sent, "", {"python": "3"}, {"counts.svg": b"<svg/>"}))
    give(session, "bundle", "sent.zip", data)
    assert (session.desk.preset, session.theme) == (sent, "dark")
    assert heading(session)["agreement"] == "The bundle holds 1 figure."
    session._compare(Picture(session.bench.setup(), bare().result, bare().continuum))
    session._push()
    assert "Sender's numbers: same points" in heading(session)["agreement"]
    assert "1 figure" in heading(session)["agreement"]
    put(session, "separation", 0.2)
    assert heading(session)["agreement"] == ""


def with_samples(rows: int, *, column: str = "") -> bytes:
    """A bundle whose samples have the campaign's columns and so many rows."""
    plan = CampaignPlan(axes=(Axis(name="density", values=(60.0, 90.0)),), realisations=3)
    sent = replace(FIRST, campaign=plan)
    layout = layout_of(sent)
    columns = sample_columns(layout)
    own = layout.sprinklings[0]
    row = [own.kind, repr(own.density), "0", *("0" for _ in columns[3:])]
    head = [*columns[:-1], column or columns[-1]]
    text = "".join(",".join(line) + "\n" for line in (head, *[row] * rows))
    return pack(Bundle(sent, text, {"python": "3"}, {}))


@pytest.mark.parametrize(("rows", "words"), [(1, "1 sample"), (253, "253 samples")])
def test_samples_of_a_bundle_are_named(pages: Pages, rows: int, words: str) -> None:
    session = pages.open()
    give(session, "bundle", "sent.zip", with_samples(rows))
    assert heading(session)["agreement"] == (
        f"The bundle holds {words}: lozenge verify checks them."
    )


def test_samples_of_another_campaign_are_refused(pages: Pages) -> None:
    session = pages.open()
    before = session._screen(), trail_of(session)
    give(session, "bundle", "sent.zip", with_samples(2, column="odd"))
    assert "samples.csv" in heading(session)["error"]
    assert (session._screen(), trail_of(session)) == before


@pytest.mark.parametrize("data", [b"no zip", b"PK\x03\x04", dumps(FIRST).encode()])
def test_what_is_no_bundle_is_refused_and_the_page_keeps_its_state(
    pages: Pages, data: bytes
) -> None:
    session = pages.open()
    before = session._screen(), trail_of(session)
    give(session, "bundle", "bad.zip", data)
    assert "bad.zip" in heading(session)["error"]
    assert (session._screen(), trail_of(session)) == before
