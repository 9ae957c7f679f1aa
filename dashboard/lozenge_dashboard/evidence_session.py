"""One evidence page: what is asked, what is computed of it, and what is shown.

The process that computes belongs to the server (`lozenge_dashboard.errands`); closing a page
stops what it waits for.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from functools import partial
from pathlib import Path
from typing import Any, Literal, NamedTuple, cast

import panel as pn
from bokeh.document import Document

from lozenge_dashboard.campaigns import checked_name, results_names
from lozenge_dashboard.controls import LIVE_HIGH
from lozenge_dashboard.errands import Errands
from lozenge_dashboard.evidence_board import EvidenceBoard
from lozenge_dashboard.evidence_column import column_state, put_plan
from lozenge_dashboard.evidence_standing import Standing
from lozenge_dashboard.evidence_text import asked_words
from lozenge_dashboard.evidence_work import ORDER, TASKS, Ask, first_plan, has_closed_form, lacking
from lozenge_dashboard.exchange import file_name
from lozenge_dashboard.jobs import Flight, Progress, keyed
from lozenge_dashboard.palette import LOOKS
from lozenge_dashboard.records import EvidenceChoices, EvidenceScene
from lozenge_dashboard.turn import Turn
from lozenge_dashboard.views.evidence import RECORDS, TITLES
from lozenge_engine.errors import InputError
from lozenge_engine.notation import duration, thousands
from lozenge_engine.pointfile import PointFile
from lozenge_engine.presets import Preset, dumps
from lozenge_engine.stages import Stages

__all__ = ["Asked", "EvidenceSession"]

PERIOD = 2000
"""Milliseconds between two looks at the folder's results files."""
OWN_DATA = "Without one, data are sprinklings of the bench's density ladder."
PICKED = "modeshape"
"""The view that does not wait for the others."""
KEPT_IN_PLAN = {
    "cutstudy": "cut_quantity",
    "modeshape": "mode_part",
    "statecheck": "state_check",
}
"""Switches of views that a preset keeps."""


class Asked(NamedTuple):
    """What the address of the page names."""

    preset: Preset
    points: PointFile | None = None
    file: str = ""
    note: str = ""
    """That something of the address is not known."""


class EvidenceSession:
    """State of one evidence page.

    Parameters
    ----------
    errands : Errands
        The server's.
    asked : Asked
        What the page opens with.
    folder : Path
        Where results files lie.
    stages : Stages
        The server's, which may hold the bench's modes already.
    """

    def __init__(self, errands: Errands, asked: Asked, *, folder: Path, stages: Stages) -> None:
        self.errands, self.folder, self.stages = errands, folder, stages
        self.preset, self.points, self.note = asked.preset, asked.points, asked.note
        self.plan = asked.preset.evidence or first_plan(asked.preset.setup)
        view = asked.preset.view
        self.theme, self.focus = view.theme, cast(str | None, None)
        chosen = {name: getattr(self.plan, field) for name, field in KEPT_IN_PLAN.items()}
        self.choices = EvidenceChoices(**chosen, union_rule=view.union_rule)
        self.scene = EvidenceScene(asked.preset.setup, self.plan)
        self.views = {name: Standing() for name in ORDER}
        self.errors: dict[str, str] = {}
        self.file = self.file_error = ""
        self.names: list[str] = []
        self._answered, self._opened = 0, False
        self._choose(asked.file)
        self.turn = Turn(cast(Document, pn.state.curdoc))
        # A mode is picked and drawn at once, also while the process computes something else.
        self.picked = Flight(
            self.turn.later(lambda outcome: self._done(PICKED, *outcome)),
            self.turn.later(lambda progress: self._progressed(PICKED, None, progress)),
        )
        self.board = EvidenceBoard(self.receive, self.receive_view, state=self._state())
        self.board.arrange(self.choices, self.focus, self.turn.document)

    # ------------------------------------------------------------ beginning and end

    def draw_ahead(self) -> None:
        """Style the figures before the page is sent."""
        self.turn.document.title = "Lozenge: evidence"
        self.board.restyle(LOOKS[self.theme], self.turn.document)
        self._refresh()
        self._mark()

    def open(self) -> None:
        """Begin to compute; look at the folder from now on."""
        self._opened = True
        for name in self._order():
            self._request(name)
        self._look()
        self.turn.document.add_periodic_callback(self._look, PERIOD)

    def close(self) -> None:
        """Forget the page and stop what it waits for."""
        self.errands.remove(self)
        self.picked.close()

    # ------------------------------------------------------------ what the user does

    def receive(self, message: dict[str, Any]) -> None:
        """Take a message of the column."""
        self._answered = message.get("id", self._answered)
        with self.turn.together():
            if message.get("kind") == "set":
                self._set(message["name"], message["value"])
            elif message.get("kind") == "act":
                self._act(message["name"], message.get("value"))
            self._mark()

    def receive_view(self, name: str, message: dict[str, Any]) -> None:
        """Take a message of a view's head."""
        kind = message.get("kind")
        with self.turn.together():
            if kind == "focus":
                self.focus = None if self.focus == name else name
                self.errands.first(self, name)
            elif kind == "choose":
                self._switch(name, message["value"])
            elif kind == "act" and message.get("name") == "cancel":
                self._cancel(name)
            elif kind == "act":
                self._want(name)
            self.board.arrange(self.choices, self.focus, self.turn.document)
            self._paint()
            self._mark()

    def _switch(self, name: str, value: Any) -> None:
        """Turn a view's switch; a preset keeps some of them."""
        self.choices = self.choices._replace(**{name: value})
        if name in KEPT_IN_PLAN:
            self.plan = replace(self.plan, **{KEPT_IN_PLAN[name]: value})
            self._refresh(first=name)

    def _set(self, name: str, value: Any) -> None:
        """Change one control, or say at it why not."""
        try:
            self.plan = put_plan(self.plan, name, value)
        except InputError as error:
            self.errors[name] = str(error)
            return
        self.errors.pop(name, None)
        if name in ("alpha_low", "alpha_high"):
            self.errors.pop("alpha_low", None)
            self.errors.pop("alpha_high", None)
        self._refresh(first="modeshape")

    def _act(self, name: str, value: Any) -> None:
        """Do what a button says."""
        if name == "theme":
            self.theme = "light" if self.theme == "dark" else "dark"
            self.board.restyle(LOOKS[self.theme], self.turn.document)
            self._paint()
        elif name == "save":
            self._save()
        elif name == "file":
            self._choose(str(value or ""))
            self._refresh(first="due")
        elif name == "halt":
            for view, standing in self.views.items():
                if standing.busy:
                    self._cancel(view)
        elif name == "compute":
            for view in self._order():
                if self.views[view].state in ("offered", "cancelled", "failed"):
                    self._want(view)

    def _choose(self, name: str) -> None:
        """Take the results file for slopes from data, or say why not."""
        self.file = self.file_error = ""
        try:
            bare = checked_name(name) if name else ""
        except InputError as error:
            self.file_error = str(error)
            return
        if bare and not (self.folder / bare).exists():
            self.file_error = f"{bare} is not in this folder: choose a file of the list."
        else:
            self.file = bare

    def _save(self) -> None:
        """Let the browser download the bench's screen with this page's settings."""
        view = replace(self.preset.view, theme=self.theme)
        preset = replace(self.preset, evidence=self.plan, view=view)
        try:
            self.board.controls.download(file_name(preset), dumps(preset))
            self.errors.pop("preset", None)
        except InputError as error:
            self.errors["preset"] = str(error)

    # ------------------------------------------------------------ what is computed

    def ask(self) -> Ask:
        """What the page asks now."""
        results = self.folder / self.file if self.file else None
        return Ask(self.preset.setup, self.plan, self.points, results)

    def _order(self) -> tuple[str, ...]:
        """The views, what has the room first."""
        return tuple(sorted(ORDER, key=lambda name: name != self.focus))

    @property
    def live(self) -> bool:
        """Whether views are computed without being asked for."""
        return 2 * self.preset.setup.points.density <= LIVE_HIGH

    def _refresh(self, *, first: str = "") -> None:
        """Ask for what is not shown and not asked for yet; offer it where it would take long."""
        ask = self.ask()
        for name in sorted(self._order(), key=lambda name: name != first):
            now, key = self.views[name], ask.key(name)
            if now.wanted == key and now.state != "idle":
                continue
            if now.busy:
                self._stop(name)
            if key == now.shown or lacking(name, ask.setup):
                self.views[name] = Standing("idle", key, now.shown, lacking(name, ask.setup))
            else:
                self._await(name, "waiting" if self.live else "offered")

    def _await(self, name: str, state: Literal["waiting", "offered"]) -> None:
        """Let a view wait for what is asked now, a few sprinklings first."""
        ask, shown = self.ask(), self.views[name].shown
        self.views[name] = Standing(state, ask.key(name), shown, rough=ask.takes_more(name))
        self._request(name)

    def _want(self, name: str) -> None:
        """Compute a view because its button was pressed."""
        if not self.views[name].busy:
            self._await(name, "waiting")
        if name == self.focus:
            self.errands.first(self, name)

    def _cancel(self, name: str) -> None:
        """Stop what a view waits for, because its button was pressed."""
        self._stop(name)
        self.views[name] = self.views[name]._replace(state="cancelled", text="")

    def _stop(self, name: str) -> None:
        """Stop what a view waits for."""
        if name == PICKED:
            self.picked.cancel()
        else:
            self.errands.cancel(self, name)

    def _request(self, name: str) -> None:
        """Hand a view that waits to the process, once the browser has the page."""
        if not self._opened or self.views[name].state != "waiting":
            return
        if name == PICKED:
            task = partial(TASKS[name], self.ask(), stages=self.stages, publish=None)
            self.picked.request(partial(keyed, self.views[name].wanted, task))
        else:
            key, later = self.views[name].wanted, self.turn.later
            told: dict[str, Callable[[Any], None]] = {
                "done": later(lambda outcome: self._done(name, key, outcome)),
                "part": later(lambda record: self._part(name, key, record)),
                "progress": later(lambda progress: self._progressed(name, key, progress)),
            }
            ask = self.ask().rough() if self.views[name].rough else self.ask()
            self.errands.request(self, name, TASKS[name], ask, **told)

    def _done(self, name: str, key: object, outcome: Any) -> None:
        """Show a finished record, or say in its view why there is none."""
        now = self.views[name]
        if now.wanted != key or not now.busy:
            return
        if isinstance(outcome, Exception):
            self.views[name] = now._replace(state="failed", text=_said(outcome))
        elif now.rough:
            self.views[name] = Standing("waiting", now.wanted, ())
            self._take(name, outcome)
            self._request(name)
        else:
            self.views[name] = Standing("idle", now.wanted, now.wanted)
            self._take(name, outcome)
        self._mark()

    def _part(self, name: str, key: object, record: Any) -> None:
        """Show what is known so far of a record."""
        now = self.views[name]
        if now.wanted == key and now.busy:
            self.views[name] = now._replace(state="running", shown=())
            self._take(name, record)
            self._mark()

    def _progressed(self, name: str, key: object, progress: Progress) -> None:
        """Say what is computed and for how long."""
        now = self.views[name]
        if key in (now.wanted, None) and now.busy:
            text = ", ".join(filter(None, (progress.stage, duration(progress.seconds))))
            self.views[name] = now._replace(state="running", text=text)
            self._mark()

    # ------------------------------------------------------------ what is shown

    def _take(self, name: str, record: Any) -> None:
        """Show a record."""
        self.scene = self.scene._replace(plan=self.plan, **{RECORDS[name]: record})
        self.board.show(name, self.scene, self.choices, LOOKS[self.theme], self.turn.document)

    def _paint(self) -> None:
        """Draw every view that has a record."""
        for name in ORDER:
            self.board.show(name, self.scene, self.choices, LOOKS[self.theme], self.turn.document)

    def _look(self) -> None:
        """See which results files the folder holds."""
        names = results_names(self.folder)
        if names != self.names:
            self.names = names
            self._mark()

    def _mark(self) -> None:
        """Say in every view, on top and in the column how everything stands."""
        elements = thousands(round(2 * self.preset.setup.points.density))
        offer = f"{elements} elements take a while: press Compute."
        for name, standing in self.views.items():
            if not self._soon(name):
                self.board.mark(name, standing.mark(offer))
        self.board.say(self.scene, self._doing())
        state = self._state()
        if state != self.board.controls.state:
            self.board.controls.state = state

    def _soon(self, name: str) -> bool:
        """Whether the next picture follows before there is time to read that it will."""
        now = self.views[name]
        return name == PICKED and now.state == "waiting" and now.shown is not None

    def _doing(self) -> str:
        """What is being computed, in words; empty if nothing is."""
        running = [name for name, now in self.views.items() if now.state == "running"]
        waiting = sum(now.state == "waiting" for now in self.views.values()) - self._soon(PICKED)
        parts = [f"{TITLES[name]}: {self.views[name].text}" for name in running]
        if waiting:
            parts.append(f"{waiting} waiting")
        return "; ".join(parts)

    def _state(self) -> dict[str, Any]:
        """Everything that the column shows."""
        mode = self.scene.mode if self.views[PICKED].state == "idle" else None
        asked = {"offered", "cancelled", "failed"}
        state = column_state(
            self.plan,
            regions=len(self.preset.setup.regions()),
            errors=self.errors,
            ranks=mode.ranks if mode is not None else None,
            closed_form=has_closed_form(self.preset.setup),
            doing=self._doing(),
            missing=any(now.state in asked for now in self.views.values()),
        )
        page = {
            "sentence": asked_words(self.preset),
            "theme": self.theme,
            "focus": self.focus,
            "error": self.errors.get("preset", self.note),
        }
        due = {
            "names": self.names,
            "name": self.file,
            "note": "" if self.file else OWN_DATA,
            "error": self.file_error,
        }
        return {**state, "page": page, "due": due, "answered": self._answered}


def _said(error: Exception) -> str:
    """An error in words."""
    known = isinstance(error, InputError | RuntimeError)
    return str(error) if known else f"{type(error).__name__}: {error}"
