"""One campaign page: what the user wants, and what the open results file says.

The campaigns belong to the server (`lozenge_dashboard.campaigns`); a page starts, pauses and
looks at them, and may be closed at any time.
"""

from __future__ import annotations

import functools
from collections.abc import Callable
from dataclasses import replace
from typing import Any, cast

import panel as pn
from bokeh.document import Document

from lozenge_dashboard.campaign_board import (
    NO_FORECAST,
    Asked,
    CampaignBoard,
    forecast_words,
    foreseen,
    read_file,
    refusal_words,
    sharing_words,
    tried,
    worker_caution,
)
from lozenge_dashboard.campaign_column import Changes, column_state, label_of
from lozenge_dashboard.campaigns import Campaigns, Status, Watch, checked_name
from lozenge_dashboard.jobs import Flight
from lozenge_dashboard.palette import LOOKS
from lozenge_dashboard.proposal import free_name, suggest
from lozenge_dashboard.records import CampaignChoices
from lozenge_dashboard.turn import Turn
from lozenge_dashboard.typed import HIDDEN_BY, put, put_more, refusals, standing
from lozenge_engine.errors import InputError
from lozenge_engine.forecast import Forecast
from lozenge_engine.plan import CampaignPlan
from lozenge_engine.presets import Preset
from lozenge_engine.workers import cores

__all__ = ["Asked", "CampaignSession"]

PERIOD = 1000
"""Milliseconds between two looks at the records."""
REST = 10.0
"""A file is read again after this many times what reading it took."""


class CampaignSession:
    """State of one campaign page.

    Parameters
    ----------
    campaigns : Campaigns
        The server's.
    asked : Asked
        What the page opens with.
    """

    def __init__(self, campaigns: Campaigns, asked: Asked) -> None:
        self.campaigns = campaigns
        self.proposal = suggest(asked.preset, cores=cores(), folder=campaigns.folder)
        self.theme = asked.theme
        self.focus: str | None = None
        self.choices = CampaignChoices()
        self.errors: dict[str, str] = {}
        self.file_error = self.start_error = ""
        self.note = asked.note
        self.watch: Watch | None = None
        self.changes = Changes()
        self.forecast = dict(NO_FORECAST)
        self.acting = ""
        self._answered = 0
        self._starting = False
        self._reading = False
        self._version: object = None
        self._rest = 0
        self._choose(asked.file or next(iter(campaigns.running()), ""))
        self._said: object = None
        self.turn = Turn(cast(Document, pn.state.curdoc))
        later = self.turn.later
        self.predictions = Flight(later(self._predicted), lambda _progress: None)
        self.readings = Flight(later(self._read), lambda _progress: None)
        self.actions = Flight(later(self._acted), lambda _progress: None)
        self.board = CampaignBoard(self.receive, self.receive_view, state=self._state())
        self.board.arrange(self.choices, self.focus, self.turn.document)

    # ------------------------------------------------------------ beginning and end

    def draw_ahead(self) -> None:
        """Style the figures before the page is sent."""
        self.turn.document.title = "Lozenge: campaign"
        self.board.restyle(LOOKS[self.theme], self.turn.document)
        self._paint()

    def open(self) -> None:
        """Predict, read, and look at the records from now on."""
        self._predict()
        self._look()
        self.turn.document.add_periodic_callback(self._look, PERIOD)

    def close(self) -> None:
        """Forget the page; campaigns go on."""
        for flight in (self.predictions, self.readings, self.actions):
            flight.close()

    # ------------------------------------------------------------ what the user does

    def receive(self, message: dict[str, Any]) -> None:
        """Take a message of the column."""
        self._answered = message.get("id", self._answered)
        self.start_error = ""
        with self.turn.together():
            if message.get("kind") == "set":
                self._set(message["name"], message["value"])
            elif message.get("kind") == "act":
                self._act(message["name"], message.get("value"))
            self._push()

    def receive_view(self, name: str, message: dict[str, Any]) -> None:
        """Take a message of a view's head."""
        with self.turn.together():
            if message.get("kind") == "focus":
                self.focus = None if self.focus == name else name
            elif message.get("kind") == "choose":
                self.choices = self.choices._replace(**{name: message["value"]})
            self.board.arrange(self.choices, self.focus, self.turn.document)
            self._paint()
            self._push()

    def _set(self, name: str, value: Any) -> None:
        """Change one control, or say at it why not."""
        if self.watch is not None:
            self.file_error = ""
        if name.startswith("more_"):
            self._set_more(name, value)
            return
        try:
            proposal = put(self.proposal, name, value)
        except InputError as error:
            self.errors[name] = str(error)
            return
        self.errors.pop(name, None)
        for other in HIDDEN_BY.get(name, ()):
            self.errors.pop(other, None)
        if not proposal.named:
            proposal = proposal._replace(file=free_name(proposal, self.campaigns.folder))
        self.proposal = proposal
        if name != "file":
            self._predict()

    def _set_more(self, name: str, value: Any) -> None:
        """Take a number for the open campaign."""
        if self.watch is None:
            return
        try:
            kind = name.removeprefix("more_")
            self.changes = put_more(self.changes, kind, value, self.watch)
        except InputError as error:
            self.errors[name] = str(error)
            return
        self.errors.pop(name, None)

    def _act(self, name: str, value: Any) -> None:
        """Do what a button says."""
        if name == "theme":
            self.theme = "light" if self.theme == "dark" else "dark"
            self.board.restyle(LOOKS[self.theme], self.turn.document)
            self._paint()
        elif name == "open" and value:
            self._show(str(value))
        elif name == "start":
            self._start()
        elif name == "pause" and self.shown:
            self.campaigns.pause(self.shown)
        elif name == "resume" and self.shown:
            typed = self.watch is not None and self.changes != Changes()
            self._go_on(self.changes.applied(self.watch.plan) if typed and self.watch else None)
        elif name == "more" and self.watch is not None:
            self._go_on(self.changes.applied(self.watch.plan))
        elif name == "adopt" and self.watch is not None:
            preset = replace(self.watch.preset, campaign=self.watch.plan)
            self.proposal = suggest(preset, cores=cores(), folder=self.campaigns.folder)
            self.errors.clear()
            self._predict()

    def _show(self, name: str) -> None:
        """Look at another results file."""
        self.watch, self._version, self._rest = None, None, 0
        self._choose(name)
        self._forget_changes()
        self._paint()
        self._look()

    def _choose(self, name: str) -> None:
        """Take the name of a file to show, or say where files are chosen why not."""
        self.shown = self.file_error = ""
        try:
            bare = checked_name(name) if name else ""
        except InputError as error:
            self.file_error = str(error)
            return
        if bare and not (self.campaigns.folder / bare).exists():
            self.file_error = f"{bare} is not in this folder: choose a file of the list."
        else:
            self.shown = bare

    def _forget_changes(self) -> None:
        self.changes = Changes()
        for name in [name for name in self.errors if name.startswith("more_")]:
            del self.errors[name]

    def _start(self) -> None:
        """Make the results file and run."""
        if self._hindrance():
            return
        name, workers = checked_name(self.proposal.file), self.proposal.workers
        self._starting = True
        preset = self.proposal.preset()
        self._do(name, "starting …", lambda: self.campaigns.start(name, preset, workers=workers))

    def _go_on(self, plan: CampaignPlan | None) -> None:
        """Resume the open campaign, with other numbers if a plan is given."""
        name, workers = self.shown, self.proposal.workers
        resume = functools.partial(self.campaigns.resume, workers=workers, plan=plan)
        self._do(name, "opening …", lambda: resume(name))

    def _do(self, name: str, saying: str, what: Callable[[], None]) -> None:
        """Do what may take a moment, off the event loop."""
        self.acting, self.file_error = saying, ""
        self.actions.request(functools.partial(tried, name, what))

    def _acted(self, outcome: tuple[str, Exception | None] | Exception) -> None:
        """Show the campaign that was started or went on, or say why it did not."""
        self.acting = ""
        name, error = outcome if isinstance(outcome, tuple) else ("", outcome)
        words = refusal_words(error, self.campaigns.folder) if error is not None else ""
        if self._starting:
            self.start_error = words
        else:
            self.file_error = words
        if error is None:
            if self._starting:
                self.proposal = self.proposal._replace(named=False)
                self._rename()
            if name != self.shown:
                self._show(name)
            self._forget_changes()
        self._starting = False
        self._push()
        self._look()

    # ------------------------------------------------------------ the prediction

    def _predict(self) -> None:
        """Predict what the new campaign takes, if it makes a plan."""
        if set(self.errors_now()) - {"file"}:
            self.forecast = self.forecast | {"older": True}
            return
        preset, workers = self.proposal.preset(), self.proposal.workers
        self.forecast = self.forecast | {"older": True}
        self.predictions.request(lambda _report: (preset, foreseen(preset, workers=workers)))

    def _predicted(self, outcome: tuple[Preset, Forecast] | Exception) -> None:
        if isinstance(outcome, Exception):
            self.forecast = NO_FORECAST | {"error": refusal_words(outcome, self.campaigns.folder)}
        else:
            self.forecast = forecast_words(outcome[1])
        self._push()

    def errors_now(self) -> dict[str, str]:
        """Why the controls make no plan, by control."""
        return refusals(self.proposal, self.errors, self.campaigns, acting=bool(self.acting))

    def _hindrance(self) -> str:
        """Why the new campaign cannot start; empty if it can."""
        if self.acting:
            return self.acting
        if labels := list(map(label_of, self.errors_now())):
            return f"refused above: {', '.join(labels)}"
        refused = self.forecast["error"] and not self.forecast.get("older")  # of these numbers
        return "nothing can be computed" if refused else ""

    # ------------------------------------------------------------ the records

    def _look(self) -> None:
        """Read the open file if it may hold something new; say how it stands."""
        if not (self.proposal.named or self.acting):
            self._rename()
        if self.shown:
            self._rest -= 1
            version = self.campaigns.version(self.shown)
            if not self._reading and version != self._version and self._rest <= 0:
                self._reading, self._version = True, version
                name = self.shown
                self.readings.request(lambda _report: read_file(self.campaigns, name))
        with self.turn.together():
            self._push()

    def _rename(self) -> None:
        """Propose another name if a file of the proposed one has come up."""
        if (self.campaigns.folder / self.proposal.file).exists():
            name = free_name(self.proposal, self.campaigns.folder)
            self.proposal = self.proposal._replace(file=name)

    def _read(self, outcome: tuple[str, Watch | Exception] | Exception) -> None:
        """Show what was read, or why it cannot be."""
        self._reading = False
        name, found = outcome if isinstance(outcome, tuple) else (self.shown, outcome)
        if name != self.shown:
            self._version = None  # the other file was opened meanwhile
            return
        if isinstance(found, Exception):
            self.watch, self.file_error = None, refusal_words(found, self.campaigns.folder)
        else:
            target = found.plan.target
            if self.watch is None and target is not None:
                mutual = target.quantity == "mutual_information"
                self.choices = CampaignChoices("mutual" if mutual else "entropy")
                self.board.arrange(self.choices, self.focus, self.turn.document)
            self.watch = found
            self._rest = round(REST * found.seconds * 1000 / PERIOD)
        self._paint()
        self._push()

    def _paint(self) -> None:
        """Draw what was read."""
        look = LOOKS[self.theme]
        self.board.show(self.watch, self._status(), self.choices, look, self.turn.document)

    def _status(self) -> Status:
        if self.watch is None and self.file_error:
            return Status()  # said where files are chosen
        if self.watch is None and self.shown:
            return self.campaigns.status(self.shown)._replace(text=f"reading {self.shown} …")
        return self.campaigns.status(self.shown) if self.shown else Status()

    def _push(self) -> None:
        """Send the state of the column and the line, if they changed."""
        status = self._status()
        if (self.watch, status) != self._said:
            self._said = (self.watch, status)
            self.board.say(self.watch, status)
        state = self._state()
        if state != self.board.controls.state:
            self.board.controls.state = state

    def _state(self) -> dict[str, Any]:
        status = self.campaigns.status(self.shown) if self.shown else Status()
        refused = any(name.startswith("more_") for name in self.errors)
        errors, workers = self.errors_now(), self.proposal.workers
        shared = sharing_words(
            self.campaigns.running(), workers=workers, busy=self.campaigns.busy()
        )
        opened = {
            "names": self.campaigns.names(),
            "running": self.campaigns.running(),
            "name": self.shown if self.watch is not None else "",
            "text": self.acting,
            "touched": refused or self.changes != Changes(),
            "error": self.file_error,
            **standing(self.watch, status, self.changes, refused=refused, acting=bool(self.acting)),
        }
        page = {
            "sentence": f"of the preset “{self.proposal.base.title}”",
            "theme": self.theme,
            "focus": self.focus,
            "file": self.shown if self.watch is not None else "",
            "error": self.note,
        }
        state = column_state(
            self.proposal,
            plan=self.watch.plan if self.watch is not None else None,
            changes=self.changes,
            errors={**self.errors, **errors},
            page=page,
            opened=opened,
            forecast={
                "older": False,
                **self.forecast,
                "shared": shared,
                "failed": self.start_error,
            },
            start=self._hindrance(),
        )
        if "workers" not in errors:
            fields = state["fields"]
            fields["workers"]["caution"] = worker_caution(workers, self.forecast["peak"])
        return {**state, "answered": self._answered}
