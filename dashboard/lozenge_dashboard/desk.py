"""What is open on a page: the setup at work, the preset it came from, files in and out."""

from __future__ import annotations

from typing import Any, Literal

from lozenge_dashboard.exchange import PAGE_HIGH, Uploads, as_preset, check_size, too_many
from lozenge_dashboard.settings import SETTINGS
from lozenge_engine.bench import Bench
from lozenge_engine.config import Setup
from lozenge_engine.errors import InputError
from lozenge_engine.pointfile import PointFile, parse_points
from lozenge_engine.presets import Preset, ViewState, parse
from lozenge_engine.result import Result

__all__ = ["Desk"]


class Desk:
    """The setup of one page; what is refused changes nothing and leaves its reason.

    Parameters
    ----------
    preset : Preset
        To open with.
    fallback : Preset
        Opened if the first one is refused.
    points : PointFile or None
        Imported points that the preset asks for.

    Attributes
    ----------
    bench : Bench
        The setup at work.
    preset : Preset
        The one that was opened last.
    errors : dict of str to str
        Reasons of refusals by the control that they stand at; ``preset`` for files.
    """

    def __init__(
        self, preset: Preset, fallback: Preset, *, points: PointFile | None = None
    ) -> None:
        self.bench = Bench()
        self.errors: dict[str, str] = {}
        self._uploads = Uploads()
        self._wanted: Preset | None = None
        try:
            check_size(preset.setup)
            self.bench.load(preset.setup, points=points)
        except InputError as error:
            self.errors["preset"] = str(error)
            self._wanted, preset = preset, fallback
            self.bench.load(preset.setup)
        self.preset = preset

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
        try:
            check_size(preset.setup)
            self.bench.load(preset.setup)
        except InputError as error:
            self.errors["preset"] = str(error)
            self._wanted = preset
            return False
        self.preset, self._wanted = preset, None
        self.errors.clear()
        return True

    def take(self, message: dict[str, Any]) -> Literal["preset", "points"] | None:
        """Take a part of a file; the last one opens it.

        Parameters
        ----------
        message : dict
            As for `lozenge_dashboard.exchange.Uploads.take`.

        Returns
        -------
        {"preset", "points"} or None
            What was opened, if anything was.
        """
        self.errors.pop("preset", None)
        try:
            upload = self._uploads.take(message)
            if upload is None:
                return None
            if upload.purpose == "points":
                return self._open_points(upload.data, upload.name)
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
        if waiting is not None and waiting.setup.points.sha256 == file.sha256:
            self.bench.load(waiting.setup, points=file)
            return "preset" if self.open(waiting) else None
        self.bench.import_points(file)
        self.errors.clear()
        return "points"

    def as_preset(self, view: ViewState, result: Result | None) -> Preset:
        """The present setup as a preset, with the numbers of its result if it is known."""
        return as_preset(self.preset, self.bench.setup(), view, result)
