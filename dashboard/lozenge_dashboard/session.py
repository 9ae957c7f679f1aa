"""One page: from what the user does to what the views show."""

from __future__ import annotations

from typing import Any, cast

import panel as pn
from bokeh.document import Document

from lozenge_dashboard.behind import Backdrop, Wanted
from lozenge_dashboard.board import Board
from lozenge_dashboard.column import Heading, Job, column_state
from lozenge_dashboard.controls import VIEW_FIELDS
from lozenge_dashboard.desk import Desk
from lozenge_dashboard.exchange import file_name
from lozenge_dashboard.jobs import Flight, Progress
from lozenge_dashboard.palette import LOOKS
from lozenge_dashboard.picture import Picture, at_once, modes_key, picture_of
from lozenge_dashboard.records import Scene
from lozenge_dashboard.server import Server
from lozenge_dashboard.switches import choices_of, switched, view_of
from lozenge_dashboard.trail import Opening
from lozenge_dashboard.turn import Turn
from lozenge_engine.config import Config, Setup
from lozenge_engine.errors import InputError
from lozenge_engine.notation import duration
from lozenge_engine.pipeline import predict
from lozenge_engine.presets import FIRST, Preset, ViewState, compare, dumps

__all__ = ["Session"]

FRONT = ("sprinkling", "spectrum", "counts", "entropies")
SWEEPS = ("scaling", "separation")


class Session:
    """State of one page.

    Parameters
    ----------
    server : Server
        What all pages share.
    opening : Opening
        The screen to open with.
    """

    def __init__(self, server: Server, opening: Opening) -> None:
        self.server = server
        self.desk = Desk(opening, server.shipped[FIRST])
        self.bench = self.desk.bench
        self.trail = server.trail(opening)
        view = self.desk.view
        self.theme = view.theme
        self.focus = view.focus
        self.choices = choices_of(view)
        self.scene: Scene | None = None
        self.kept: Scene | None = None
        self.failure = ""
        self.agreement, self.differs = "", False
        self.job = Job()
        self.seconds: dict[str, float] = {}
        self.settled = True
        self._pressed: Config | None = None
        self._modes_of: object = None
        self._answered = 0
        self._computing = False
        self._stand(opening)
        self.turn = Turn(cast(Document, pn.state.curdoc))  # a page is made in its own document
        self.picture = Flight(self.turn.later(self._pictured), self.turn.later(self._progressed))
        self.backdrop = Backdrop(server.workshop, later=self.turn.later, show=self._gathered)
        self.board = Board(
            self.receive,
            self.receive_view,
            shipped=[(name, p.title) for name, p in server.shipped.items()],
            state=self._state(),
        )
        self.board.arrange(self.choices, self.focus, self.turn.document)

    # ------------------------------------------------------------ beginning and end

    def draw_ahead(self) -> None:
        """Put the first picture into the page before it is sent, if it is there at once."""
        self.board.restyle(LOOKS[self.theme], self.turn.document)
        setup = self.bench.setup()
        if setup.rules()[0].kind == "none" or not self._live(setup):
            return
        work = picture_of(setup, points=self.bench.file, stages=self.server.stages)
        try:
            self._take(work(lambda _stage, _fraction: None))
        except InputError as error:
            self._failed(error)
        self._push()

    def open(self) -> None:
        """Go on from the first picture, or compute it, once the browser has the page."""
        if self.scene is None:
            self._request()
        else:
            self._settle()

    def close(self) -> None:
        """Forget the page."""
        self.picture.close()
        self.backdrop.close()

    # ------------------------------------------------------------ what the user does

    def receive(self, message: dict[str, Any]) -> None:
        """Take a message of the controls."""
        kind = message.get("kind")
        self._answered = message.get("id", self._answered)
        with self.turn.together():
            if kind == "set":
                self._set(message["name"], message["value"], settled=bool(message["settled"]))
            elif kind == "act":
                self._act(message["name"], message.get("value"))
            elif kind == "file":
                self._take_part(message)
            elif kind == "go":
                self._go(self.trail.go(message))
            self._push()

    def receive_view(self, name: str, message: dict[str, Any]) -> None:
        """Take a message of a view's head."""
        with self.turn.together():
            if message.get("kind") == "focus":
                self.focus = None if self.focus == name else name  # type: ignore[assignment]
            elif message.get("kind") == "choose":
                self._switch(name, message["value"])
            elif message.get("kind") == "toggle":
                self._switch(message["name"], message["value"])
            self.board.arrange(self.choices, self.focus, self.turn.document)
            self._paint()
            self._push()

    def _switch(self, name: str, value: Any) -> None:
        """Change a switch; references that it asks for are queued."""
        self.choices = switched(self.choices, name, value)
        self._settle()

    def _set(self, name: str, value: Any, *, settled: bool) -> None:
        """Change one control, or say at it why not."""
        self.settled = settled
        if name in VIEW_FIELDS:
            self._switch(name, value)
            self.board.arrange(self.choices, self.focus, self.turn.document)
            return
        before = self.bench.setup()
        setup = self.desk.put(name, value)
        if setup is None:
            return
        if setup != before:
            self.agreement = self.desk.note = ""
            self._request()
        elif settled:
            self._settle()

    def _act(self, name: str, value: Any) -> None:
        """Do what a button says."""
        if name == "shipped" and value in self.server.shipped:
            self._open_preset(self.server.shipped[value])
        elif name == "theme":
            self.theme = "light" if self.theme == "dark" else "dark"
            self.board.restyle(LOOKS[self.theme], self.turn.document)
            self._paint()
        elif name == "keep":
            self.kept = None if self.kept else self.scene and self.scene._replace(reference=None)
            self._paint()
        elif name == "back":
            self._open_preset(self.desk.preset, arrange=False)
        elif name == "save":
            self._save()
        elif name == "compute":
            self._pressed = self.bench.config()
            self._request()
        elif name == "cancel":
            self._pressed = None
            self.picture.cancel()
            self._offer(self.bench.setup())
        elif name in ("halt", "resume"):
            self.backdrop.halt() if name == "halt" else self.backdrop.resume()
            self._settle()

    # ------------------------------------------------------------ presets and files

    def _open_preset(self, preset: Preset, *, arrange: bool = True) -> None:
        """Show a preset; if it is refused the page keeps its state."""
        if self.desk.open(preset):
            self._opened(arrange=arrange)

    def _opened(self, *, arrange: bool = True) -> None:
        """Look as the preset says that was opened."""
        self.agreement, self.settled = "", True
        self.trail.opened(self.desk.preset, self.bench.file)
        view = self.desk.view
        self.choices = choices_of(view, self.choices)
        if arrange:
            self.focus = view.focus
            if self.theme != view.theme:
                self._act("theme", None)
        self.board.arrange(self.choices, self.focus, self.turn.document)
        self._request()

    def _take_part(self, message: dict[str, Any]) -> None:
        """Take a part of a file; the last one opens it."""
        opened = self.desk.take(message)
        if opened == "points":
            self.desk.view = self._screen()[1]
        if opened is not None:
            self._opened(arrange=opened == "preset")

    def _go(self, opening: Opening) -> None:
        """Show what the browser went back or forward to."""
        if self.desk.arrive(opening):
            self._opened()
        self._stand(opening)

    def _stand(self, opening: Opening) -> None:
        """Leave an address as it is while it says more than could be taken of it."""
        if self.desk.errors.get("preset"):
            self.trail.stay(self._screen(), opening)

    def _screen(self) -> tuple[Setup, ViewState, str]:
        """What the address carries."""
        view = view_of(self.choices, theme=self.theme, focus=self.focus)
        return self.bench.setup(), view, self.desk.preset.title

    def _save(self) -> None:
        """Let the browser download the screen as a preset, with the numbers shown."""
        setup = self.bench.setup()
        shown = self.scene is not None and self.scene.setup == setup
        result = self.scene.result if shown and self.scene else None
        preset = self.desk.as_preset(self._screen()[1], result)
        try:
            self.board.controls.download(file_name(preset), dumps(preset))
        except InputError as error:
            self.desk.errors["preset"] = str(error)

    # ------------------------------------------------------------ the picture in front

    def _request(self) -> None:
        """Compute the present setup, or offer to."""
        setup = self.bench.setup()
        self.failure = ""
        if not self._live(setup):
            self._offer(setup)
            return
        if self._modes_of != modes_key(setup):  # else there is hardly time to read it
            self.board.stale_all("computing …")
        self.job = Job()
        work = picture_of(setup, points=self.bench.file, stages=self.server.stages)
        self.server.workshop.wait()
        self.backdrop.hold()
        self._computing = True
        self.picture.request(work)

    def _live(self, setup: Setup) -> bool:
        """Whether a setup is computed at once: small, asked for, or its modes are known."""
        known = self._pressed == setup.config() or self._modes_of == modes_key(setup)
        return known or at_once(setup)

    def _offer(self, setup: Setup) -> None:
        """Ask before a long computation, with its predicted time."""
        self.picture.cancel()
        self._computing = False
        self.job = Job.offer(round(2 * setup.points.density), predict(setup.config()).seconds)
        self.board.stale_all("earlier")
        self.board.status("")

    def _progressed(self, progress: Progress) -> None:
        """Say what is computed and for how long, unless it was stopped since."""
        if not self._computing:
            return
        self.board.stale_all("computing …")
        text = f"{progress.stage}, {duration(progress.seconds)}"
        self.board.status(text, busy=True)
        if progress.seconds > 1.0:
            whole = predict(self.bench.config()).seconds
            self.job = Job.running(text, progress.seconds / whole, whole)
            self._push()

    def _pictured(self, outcome: Picture | Exception) -> None:
        """Show a finished picture, or the error where the last good one stays."""
        newer = isinstance(outcome, Picture) and outcome.setup != self.bench.setup()
        self.job, self._computing = Job(), newer and self._computing
        self.board.status("")
        if isinstance(outcome, Exception):
            self._failed(outcome)
        else:
            self._take(outcome)
            if self.settled:
                self._settle()
        self._push()

    def _take(self, picture: Picture) -> None:
        """Show a picture in all views."""
        self.seconds |= picture.seconds
        self._modes_of = modes_key(picture.setup)
        self.scene = Scene(
            setup=picture.setup,
            result=picture.result,
            continuum=picture.continuum,
            **self.backdrop.parts(picture.setup),
        )
        self._compare(picture)
        self._mark_stale()
        self._paint()

    def _failed(self, error: Exception) -> None:
        """Keep the last good picture and say below the views why there is no newer one."""
        known = isinstance(error, InputError)
        self.failure = str(error) if known else f"{type(error).__name__}: {error}"
        self.board.stale_all("earlier")
        place = "spectrum" if "patch rule" in self.failure else "sprinkling"
        self.board.frames[place].say(self.failure, error=True)
        self.board.status("not computed")

    def _compare(self, picture: Picture) -> None:
        """Say whether the sender's numbers agree, when the picture is of the sender's setup."""
        preset = self.desk.preset
        if preset.sender is not None and self.bench.setup() == preset.setup == picture.setup:
            agreement = compare(preset, picture.result)
            self.agreement, self.differs = (
                f"Sender's numbers: {agreement.text}.",
                not agreement.agrees,
            )

    # ------------------------------------------------------------ what comes from behind

    def _settle(self) -> None:
        """Queue the sprinklings behind the picture, once the controls rest."""
        setup = self.bench.setup()
        if self.scene is not None and self.scene.setup == setup:
            self._paint()
            wanted = Wanted(setup, self.choices.twin, self.choices.chain)
            self.backdrop.settle(wanted, self.bench.file, first=self.choices.scaling)

    def _gathered(self) -> None:
        """Show what came from behind."""
        if self.scene is not None:
            self.scene = self.scene._replace(**self.backdrop.parts(self.scene.setup))
            self._mark_stale()
            self._paint()
        self._push()

    def _mark_stale(self) -> None:
        """Say which sweeps still show an earlier state; the views in front are up to date."""
        if self.scene is not None and self.scene.setup == self.bench.setup():
            self.board.stale(self.backdrop.stale(self.scene.setup, self.choices))

    # ------------------------------------------------------------ to the browser

    def _paint(self) -> None:
        """Draw the present scene in all views."""
        if self.scene is None:
            return
        scene = self.scene._replace(reference=self.kept)
        self.board.show(
            scene,
            self.choices,
            LOOKS[self.theme],
            self.turn.document,
            names=(*FRONT, *SWEEPS),
            settled=self.settled,
        )

    def _push(self) -> None:
        """Send the state of the controls."""
        self.board.controls.state = self._state()

    def _state(self) -> dict[str, Any]:
        if self.settled:
            screen = self._screen()
            self.trail.note(screen, lambda: self.desk.as_preset(screen[1], None))
        preset = self.desk.preset
        heading = Heading(
            title=preset.title,
            sentence=preset.sentence,
            agreement=" ".join(filter(None, (self.agreement, self.desk.note))),
            differs=self.differs,
            error=self.desk.errors.get("preset", "") or self.failure,
            keeping=self.kept is not None,
            theme=self.theme,
            focus=self.focus,
        )
        state = column_state(
            self.bench,
            preset.setup,
            view={n: (getattr(self.choices, n), getattr(preset.view, n)) for n in VIEW_FIELDS},
            errors=self.desk.errors,
            seconds=self.seconds,
            heading=heading,
            job=self.job,
            behind=self.backdrop.progress,
            twin=self.backdrop.twin_note(self.bench.setup(), twin=self.choices.twin),
        )
        return {**state, "answered": self._answered, "trail": self.trail.state()}
