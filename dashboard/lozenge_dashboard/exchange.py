"""Files to and from the browser: presets and points, and what the page takes of them."""

from __future__ import annotations

import base64
import binascii
import re
from pathlib import Path
from typing import Any, NamedTuple

from lozenge_dashboard.controls import BUNDLE_LIMIT, POINTS_LIMIT, PRESET_LIMIT
from lozenge_engine.config import Setup
from lozenge_engine.errors import InputError, refuse
from lozenge_engine.notation import thousands
from lozenge_engine.pointfile import PointFile, parse_points
from lozenge_engine.presets import Preset, Sender, ViewState
from lozenge_engine.result import Result

__all__ = [
    "PAGE_HIGH",
    "Upload",
    "Uploads",
    "as_preset",
    "check_size",
    "file_name",
    "points_beside",
    "too_many",
]

PAGE_HIGH = 20_000
"""Most elements that the page computes; above it the command line does."""


LIMITS = {"preset": PRESET_LIMIT, "points": POINTS_LIMIT, "bundle": BUNDLE_LIMIT}
"""Largest file of each purpose, in bytes."""


class Upload(NamedTuple):
    """A whole file; `purpose` is ``preset``, ``points`` or ``bundle``."""

    purpose: str
    name: str
    data: bytes


class Uploads:
    """Files that arrive in parts, one at a time for each purpose."""

    def __init__(self) -> None:
        self._held: dict[str, bytearray] = {}

    def take(self, message: dict[str, Any]) -> Upload | None:
        """Take a part.

        Parameters
        ----------
        message : dict
            `purpose`, `name`, `size`, `first`, `last` and `data`, the part in base64; None as
            data says that the browser found the file too large to send.

        Returns
        -------
        Upload or None
            The file, with its last part.

        Raises
        ------
        InputError
            If the file is too large or a part is not base64.
        """
        purpose = message["purpose"] if message["purpose"] in LIMITS else "preset"
        limit = LIMITS[purpose]
        if message["first"]:
            self._held[purpose] = bytearray()
        held = self._held.setdefault(purpose, bytearray())
        if message["data"] is None or len(held) + len(message["data"]) * 3 // 4 > limit + 3:
            self._held.pop(purpose)
            smaller = "choose a smaller file"
            raise refuse(
                "file",
                given=f"{message['size']} bytes",
                allowed=f"at most {limit} bytes",
                do="check it with lozenge verify" if purpose == "bundle" else smaller,
            )
        try:
            held += base64.b64decode(message["data"], validate=True)
        except (binascii.Error, ValueError) as error:
            raise refuse(
                "file", given="a damaged part", allowed="base64", do="open it again"
            ) from error
        if not message["last"]:
            return None
        return Upload(purpose, str(message["name"])[:200], bytes(self._held.pop(purpose)))


def as_preset(loaded: Preset, setup: Setup, view: ViewState, result: Result | None) -> Preset:
    """The present screen as a preset under the loaded one's title, with its numbers if known."""
    sender = None
    if result is not None:
        sender = Sender(
            numbers=result.numbers(),
            points_sha256=result.points_sha256,
            versions=dict(result.versions),
        )
    return Preset(
        title=loaded.title,
        sentence=loaded.sentence,
        invented=loaded.invented,
        setup=setup,
        campaign=loaded.campaign,
        evidence=loaded.evidence,
        view=view,
        sender=sender,
    )


def file_name(preset: Preset) -> str:
    """A file name from a preset's title."""
    return (re.sub(r"[^a-z0-9]+", "-", preset.title.lower()).strip("-") or "preset") + ".json"


def too_many(elements: int) -> InputError:
    """The refusal of more elements than the page takes."""
    return refuse(
        "elements",
        given=thousands(elements),
        allowed=f"at most {thousands(PAGE_HIGH)} in the page",
        do="use the command line for more: lozenge run PRESET",
    )


def check_size(setup: Setup) -> None:
    """Refuse what the page would be too slow for."""
    elements = round(2 * setup.points.density)
    if elements > PAGE_HIGH:
        raise too_many(elements)


def points_beside(preset: Preset, path: Path | None) -> PointFile | None:
    """The points that a preset file asks for, from its own folder if they are there."""
    source = preset.setup.points
    if source.kind != "file" or path is None or not source.file:
        return None
    beside = path.parent / Path(source.file).name
    if not beside.is_file():
        return None
    return parse_points(beside.read_bytes(), name=beside.name)
