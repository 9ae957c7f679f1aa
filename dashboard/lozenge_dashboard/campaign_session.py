"""One campaign page: what the user wants, and what the open results file says.

The campaigns belong to the server (`lozenge_dashboard.campaigns`); a page starts, pauses and
looks at them, and may be closed at any time.
"""

from __future__ import annotations

import functools
from collections.abc import Callable
from dataclasses import replace
from typing import Any, NamedTuple, cast

import panel as pn
from bokeh.document import Document

from lozenge_dashboard.campaign_board import CampaignBoard
from lozenge_dashboard.campaign_column import Changes, column_state, forecast_words
from lozenge_dashboard.campaign_text import state_words
from lozenge_dashboard.campaigns import Campaigns, Status, Watch
from lozenge_dashboard.jobs import Flight
from lozenge_dashboard.palette import LOOKS, ThemeName
from lozenge_dashboard.proposal import checked_name, free_name, suggest
from lozenge_dashboard.records import CampaignChoices
from lozenge_dashboard.turn import Turn
from lozenge_dashboard.typed import put
from lozenge_engine.errors import InputError, refuse
from lozenge_engine.forecast import Forecast, forecast
from lozenge_engine.plan import CampaignPlan
from lozenge_engine.presets import Preset
from lozenge_engine.workers import cores

__all__ = ["Asked", "CampaignSession"]

PERIOD = 1000
"""Milliseconds between two looks at the records."""
REST = 4.0
"""A file is read again after this many times what reading it took."""
NO_FORECAST: dict[str, Any] = {"text": "", "rows": [], "note": "", "left_out": [], "error": ""}


class Asked(NamedTuple):
    """What the address of the page names."""

    preset: Preset
    file: str
    theme: ThemeName


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
        self.file_error = ""
        self.shown = asked.file or next(iter(campaigns.running()), "")
        self.watch: Watch | None = None
        self.changes = Changes()
        self.forecast = dict(NO_FORECAST)
        self.acting = ""
        self._answered = 0
        self._reading = False
        self._version: object = None
        self._rest = 0
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
        if name.startswith("more_"):
            self._set_more(name, value)
            return
        try:
            proposal = put(self.proposal, name, value)
        except InputError as error:
            self.errors[name] = str(error)
            return
        self.errors.pop(name, None)
        if name == "axis":  # its ends are other numbers now
            for end in ("low", "high", "points"):
                self.errors.pop(end, None)
        if not proposal.named:
            proposal = proposal._replace(file=free_name(proposal, self.campaigns.folder))
        self.proposal = proposal
        self._predict()

    def _set_more(self, name: str, value: Any) -> None:
        """Take a number for the open campaign; the plan checks it when it is used."""
        kind = name.removeprefix("more_")
        try:
            if value == "" and kind == "minutes":
                value = 0.0
            if isinstance(value, bool) or not isinstance(value, int | float):
                raise refuse(kind, given=value, allowed="a number", do="type a number")
            changes = Changes(**{**self.changes._asdict(), kind: value})
            if self.watch is not None:
                changes.applied(self.watch.plan)
        except InputError as error:
            self.errors[name] = str(error)
            return
        self.errors.pop(name, None)
        self.changes = changes

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
        try:
            self.shown = checked_name(name)
        except InputError as error:
            self.file_error = str(error)
            return
        self.watch, self._version, self._rest, self.file_error = None, None, 0, ""
        self._forget_changes()
        self._paint()
        self._look()

    def _forget_changes(self) -> None:
        self.changes = Changes()
        for name in [name for name in self.errors if name.startswith("more_")]:
            del self.errors[name]

    def _start(self) -> None:
        """Make the results file and run."""
        if self._hindrance():
            return
        name, workers = checked_name(self.proposal.file), self.proposal.workers
        preset = self.proposal.preset()
        self._do(name, "starting …", lambda: self.campaigns.start(name, preset, workers=workers))

    def _go_on(self, plan: CampaignPlan | None) -> None:
        """Resume the open campaign, with other numbers if a plan is given."""
        name, workers = self.shown, self.proposal.workers
        self._do(
            name,
            "opening …",
            lambda: self.campaigns.resume(name, workers=workers, plan=plan),
        )

    def _do(self, name: str, saying: str, what: Callable[[], None]) -> None:
        """Do what may take a moment, off the event loop."""
        self.acting, self.file_error = saying, ""
        self.actions.request(functools.partial(_done, name, what))

    def _acted(self, outcome: tuple[str, Exception | None] | Exception) -> None:
        """Show the campaign that was started or went on, or say why it did not."""
        self.acting = ""
        name, error = outcome if isinstance(outcome, tuple) else ("", outcome)
        if error is not None:
            self.file_error = _words(error)
        else:
            if name != self.shown:
                self._show(name)
                named = self.proposal._replace(named=False)
                self.proposal = named._replace(file=free_name(named, self.campaigns.folder))
            self._forget_changes()
        self._push()
        self._look()

    # ------------------------------------------------------------ the prediction

    def _predict(self) -> None:
        """Predict what the new campaign takes, if it makes a plan."""
        if self.errors_now():
            self.forecast = self.forecast | {"older": True}
            return
        preset, workers = self.proposal.preset(), self.proposal.workers
        self.forecast = self.forecast | {"older": True}
        self.predictions.request(lambda _report: (preset, forecast(preset, workers=workers)))

    def _predicted(self, outcome: tuple[Preset, Forecast] | Exception) -> None:
        if isinstance(outcome, Exception):
            self.forecast = NO_FORECAST | {"error": _words(outcome)}
        else:
            self.forecast = forecast_words(outcome[1])
        self._push()

    def errors_now(self) -> dict[str, str]:
        """Why the controls make no plan, by control."""
        own = {k: v for k, v in self.errors.items() if not k.startswith("more_")}
        return {**self.proposal.misfits(), **own}

    def _hindrance(self) -> str:
        """Why the new campaign cannot start; empty if it can."""
        if self.acting:
            return self.acting
        if self.errors_now():
            return "something above is refused"
        return "nothing can be computed" if self.forecast.get("error") else ""

    def _shared(self) -> str:
        """That another campaign of this server would run beside the new one."""
        names = ", ".join(self.campaigns.running())
        return f"{names} runs too: they will share the processors." if names else ""

    # ------------------------------------------------------------ the records

    def _look(self) -> None:
        """Read the open file if it may hold something new; say how it stands."""
        if self.shown:
            self._rest -= 1
            version = self.campaigns.version(self.shown)
            if not self._reading and version != self._version and self._rest <= 0:
                self._reading, self._version = True, version
                name = self.shown
                self.readings.request(lambda _report: _read(self.campaigns, name))
        with self.turn.together():
            self._push()

    def _read(self, outcome: tuple[str, Watch | Exception] | Exception) -> None:
        """Show what was read, or why it cannot be."""
        self._reading = False
        name, found = outcome if isinstance(outcome, tuple) else (self.shown, outcome)
        if name != self.shown:
            self._version = None  # the other file was opened meanwhile
            return
        if isinstance(found, Exception):
            self.watch, self.file_error = None, _words(found)
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
        self.board.show(
            self.watch,
            self._status(),
            self.choices,
            LOOKS[self.theme],
            self.turn.document,
        )

    def _status(self) -> Status:
        if self.watch is None and self.file_error:
            return Status(text=self.file_error, failed=True)
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
        readable = self.watch is not None and not self.acting
        opened = {
            "names": self.campaigns.names(),
            "running": self.campaigns.running(),
            "name": self.shown if self.watch is not None else "",
            "text": self.acting or (f"{self.shown}: {state_words(self.watch, status)}"),
            "error": self.file_error,
            "can_pause": status.running and not status.stopping,
            "can_resume": readable and not status.running,
            "can_more": readable
            and self.changes != Changes()
            and not any(name.startswith("more_") for name in self.errors),
        }
        page = {
            "sentence": f"of the preset “{self.proposal.base.title}”",
            "theme": self.theme,
            "focus": self.focus,
            "file": self.shown if self.watch is not None else "",
            "error": "",
        }
        state = column_state(
            self.proposal,
            plan=self.watch.plan if self.watch is not None else None,
            changes=self.changes,
            errors={**self.errors, **self.errors_now()},
            page=page,
            opened=opened,
            forecast={"older": False, **self.forecast, "shared": self._shared()},
            start=self._hindrance(),
        )
        return {**state, "answered": self._answered}


def _read(campaigns: Campaigns, name: str) -> tuple[str, Watch | Exception]:
    """What a results file holds, or why it cannot be read."""
    try:
        return name, campaigns.watch(name)
    except Exception as error:  # noqa: BLE001 (shown in the page: nobody else would hear it)
        return name, error


def _done(name: str, what: Callable[[], None], _report: object) -> tuple[str, Exception | None]:
    """Whether something could be done with a results file."""
    try:
        what()
    except Exception as error:  # noqa: BLE001 (shown in the page: nobody else would hear it)
        return name, error
    return name, None


def _words(error: Exception) -> str:
    return str(error) if isinstance(error, InputError) else f"{type(error).__name__}: {error}"
