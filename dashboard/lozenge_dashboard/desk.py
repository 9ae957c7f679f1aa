"""What is open on a page: the setup at work, the preset it came from, files in and out."""

from __future__ import annotations

from typing import Any, Literal

from lozenge_dashboard.exchange import PAGE_HIGH, Uploads, as_preset, check_size, too_many
from lozenge_dashboard.settings import SETTINGS
from lozenge_dashboard.trail import Opening
from lozenge_engine.bench import Bench
from lozenge_engine.config import Setup
from lozenge_engine.errors import InputError
from lozenge_engine.pointfile import parse_points
from lozenge_engine.presets import Preset, ViewState, parse
from lozenge_engine.result import Result

__all__ = ["Desk"]


class Desk:
    """The setup of one page; what is refused changes nothing and leaves its reason.

    Parameters
    ----------
    opening : Opening
        To open with.
    fallback : Preset
        Opened if that is refused.

    Attributes
    ----------
    bench : Bench
        The setup at work.
    preset : Preset
        The one that was opened last.
    view : ViewState
        Arrangement of the page that was opened with it.
    note : str
        What else was in the file that was opened last.
    errors : dict of str to str
        Reasons of refusals by the control that they stand at; ``preset`` for files and addresses.
    """

    def __init__(self, opening: Opening, fallback: Preset) -> None:
        self.bench = Bench()
        self.errors: dict[str, str] = {}
        self.note = ""
        self._uploads = Uploads()
        self._wanted: Opening | None = None
        self.preset, self.view = fallback, fallback.view
        if not self.arrive(opening):
            self.bench.load(fallback.setup)

    def put(self, name: str, value: Any) -> Setup | None:
        """Set one control; the setup that this makes, or None if the value is refused."""
        try:
            setup = SETTINGS[name].put(self.bench.setup(), value)
            check_size(setup)
            self.bench.load(setup)
        except InputError as error:
            self.errors[name] = str(error)
            return None
        self.errors.clear()
        return setup

    def open(self, preset: Preset) -> bool:
        """Open a preset; False if it is refused, and then it waits for its points."""
        return self.arrive(Opening(preset, preset))

    def arrive(self, opening: Opening) -> bool:
        """Show a state; False if it is refused, and then it waits for its points."""
        setup = opening.preset.setup
        self.note = ""
        try:
            check_size(setup)
            if opening.missing and not self._holds(setup):
                raise InputError(opening.missing)
            self.bench.load(setup, points=opening.points)
        except InputError as error:
            self.errors["preset"] = " ".join(filter(None, (str(error), opening.reason)))
            self._wanted = opening
            return False
        self.preset, self.view, self._wanted = opening.origin, opening.preset.view, None
        self.errors.clear()
        if opening.reason:
            self.errors["preset"] = opening.reason
        return True

    def _holds(self, setup: Setup) -> bool:
        """Whether the points that a setup asks for are here."""
        return self.bench.file is not None and self.bench.file.sha256 == setup.points.sha256

    def take(self, message: dict[str, Any]) -> Literal["preset", "points"] | None:
        """Take a part of a file; the last one opens it.

        Parameters
        ----------
        message : dict
            As for `lozenge_dashboard.exchange.Uploads.take`.

        Returns
        -------
        {"preset", "points"} or None
            What was opened, if anything was; a bundle opens its preset.
        """
        self.errors.pop("preset", None)
        try:
            upload = self._uploads.take(message)
            if upload is None:
                return None
            if upload.purpose == "points":
                return self._open_points(upload.data, upload.name)
            if upload.purpose == "bundle":
                return self._open_bundle(upload.data)
            return "preset" if self.open(parse(upload.data)) else None
        except InputError as error:
            self.errors["preset"] = f"{str(message['name'])[:200]}: {error}"
            return None

    def _open_points(self, data: bytes, name: str) -> Literal["preset", "points"] | None:
        """Use imported points, for the preset that waits for them or for the present setup."""
        file = parse_points(data, name=name)
        count = file.points.u.size
        if count > PAGE_HIGH:
            raise too_many(count)
        waiting = self._wanted
        if waiting is not None and waiting.preset.setup.points.sha256 == file.sha256:
            return "preset" if self.arrive(waiting._replace(points=file)) else None
        self.bench.import_points(file)
        self.errors.clear()
        if waiting is not None and waiting.missing:
            self.errors["preset"] = (
                f"{name} holds other points (hash {file.sha256[:12]} …), used on this screen. "
                + waiting.missing
            )
        return "points"

    def _open_bundle(self, data: bytes) -> Literal["preset"] | None:
        """Open a bundle's preset, and say what else it holds."""
        from lozenge_dashboard.bundle_rows import count_rows
        from lozenge_engine.bundle import unpack

        bundle = unpack(data)
        rows = count_rows(bundle)
        if not self.open(bundle.preset):
            return None
        parts = [(rows, "sample"), (len(bundle.figures), "figure")]
        held = " and ".join(f"{n} {what}{'s' * (n != 1)}" for n, what in parts if n)
        checks = ": lozenge verify checks them" if rows else ""
        self.note = f"The bundle holds {held}{checks}." if held else ""
        return "preset"

    def as_preset(self, view: ViewState, result: Result | None) -> Preset:
        """The present setup as a preset, with the numbers of its result if it is known."""
        return as_preset(self.preset, self.bench.setup(), view, result)
