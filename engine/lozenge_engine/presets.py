"""Preset files: a whole screen as one JSON document, with the sender's numbers if wanted.

A preset is checked three times: as JSON (`document`), against the JSON Schema that ships with the
presets (`schema`), and by the engine's own values (`config`).  What is written is byte-stable:
a fixed order of keys, two spaces, floats in their shortest form, a newline at the end.
"""

from __future__ import annotations

import json
from dataclasses import asdict, dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

from lozenge_engine.agreement import Agreement, Sender, compare_numbers
from lozenge_engine.config import Setup
from lozenge_engine.document import parse_json, read_bytes, write_bytes
from lozenge_engine.errors import refuse
from lozenge_engine.evidence import EvidencePlan
from lozenge_engine.placement import gaps
from lozenge_engine.plan import CampaignPlan
from lozenge_engine.schema import FORMAT, FORMAT_KEY, check_document, folder
from lozenge_engine.sections import (
    DEFAULT,
    at,
    campaign_of,
    campaign_section,
    evidence_of,
    evidence_section,
    sections_of,
    setup_of,
)

if TYPE_CHECKING:
    from lozenge_engine.result import Result

__all__ = [
    "FIRST",
    "SHIPPED",
    "VIEWS",
    "Preset",
    "Sender",
    "ViewName",
    "ViewState",
    "canonical",
    "compare",
    "dumps",
    "parse",
    "read",
    "shipped",
    "write",
]

SHIPPED = (
    "nested-diamond",
    "two-equal-regions",
    "three-equal-regions",
    "unequal-pair",
    "corner-region",
    "volume-law",
    "rows-of-fifths",
    "rows-of-tenths",
)
"""Names of the presets that come with the program."""
FIRST = "two-equal-regions"
"""The one that opens when none is named."""

VIEWS = ("sprinkling", "spectrum", "counts", "entropies", "scaling", "separation")

ViewName = Literal["sprinkling", "spectrum", "counts", "entropies", "scaling", "separation"]


@dataclass(frozen=True, slots=True, kw_only=True)
class ViewState:
    """How the page is arranged.

    Parameters
    ----------
    theme : {"light", "dark"}
        Colours of the page.
    focus : str or None
        The one view that is given the room: one of `VIEWS`, or None.
    union_rule : {"support", "direct_sum"}
        Union rule that the curves follow.
    scaling_axis : {"density", "size"}
        Which of the two sweeps the scaling view shows.
    twin, chain : bool
        Whether the continuum twin is laid over the views, the harmonic chain over the scaling view.
    difference : bool
        Whether the scaling view shows data minus twin; only with the twin.
    """

    theme: Literal["light", "dark"] = "light"
    focus: ViewName | None = None
    union_rule: Literal["support", "direct_sum"] = "support"
    scaling_axis: Literal["density", "size"] = "density"
    twin: bool = False
    chain: bool = False
    difference: bool = False

    def __post_init__(self) -> None:
        if self.difference and not self.twin:
            raise refuse(
                "view.difference",
                given="true without the twin",
                allowed="true where view.twin is true",
                do="set view.twin to true",
            )


@dataclass(frozen=True, slots=True, kw_only=True)
class Preset:
    """A whole screen: what is computed, swept and shown.

    Parameters
    ----------
    title, sentence : str
        One line each, at most 120 and 400 characters.
    invented : bool
        Whether the scenario they speak of is made up.
    setup : Setup
        Engine and sweep settings; brought to its `canonical` form.
    campaign : CampaignPlan or None
        What a campaign over this setup is to find out.
    evidence : EvidencePlan or None
        What the evidence page is to compute; None for its defaults.
    view : ViewState
        Arrangement of the page.
    sender : Sender or None
        Numbers to compare with.
    """

    title: str
    sentence: str
    invented: bool = False
    setup: Setup = field(default_factory=Setup)
    campaign: CampaignPlan | None = None
    evidence: EvidencePlan | None = None
    view: ViewState = field(default_factory=ViewState)
    sender: Sender | None = None

    def __post_init__(self) -> None:
        object.__setattr__(self, "setup", canonical(self.setup))


def canonical(setup: Setup) -> Setup:
    """Reset what has no effect, so that equal screens are equal values and equal files.

    A list of regions is stored as it is computed, its gaps scaled to the separation; the row's
    count, half-width and separation become those of the list (its smallest half-width, its mean
    gap).  The rules of the two stages belong to the mode ``custom``, alpha and number to every
    other mode; a file name and a hash belong to imported points.

    Parameters
    ----------
    setup : Setup
        What a user set.

    Returns
    -------
    Setup
        With the same configuration.
    """
    changes: dict[str, Any] = {}
    if setup.region_list is not None:
        regions = setup.regions()
        changes["region_list"] = regions
        changes["region_count"] = len(regions)
        changes["half_width"] = min(region.half_width for region in regions)
        old = gaps(regions)
        changes["separation"] = max(0.0, sum(old) / len(old)) if old else DEFAULT.separation
    if setup.truncation_mode == "custom":
        changes |= {"alpha": DEFAULT.alpha, "number": DEFAULT.number}
    else:
        changes |= {"patch_rule": DEFAULT.patch_rule, "region_rule": DEFAULT.region_rule}
    points = setup.points
    if points.kind != "file" and points.file is not None:
        changes["points"] = replace(points, file=None)
    return setup.with_(**changes)


# ------------------------------------------------------------------ value -> text


def dumps(preset: Preset) -> str:
    """Write a preset as text.

    Parameters
    ----------
    preset : Preset
        What to write.

    Returns
    -------
    str
        JSON that `parse` turns back into an equal preset, byte for byte the same each time.

    Raises
    ------
    InputError
        If it holds what a preset file cannot, such as a title of several lines.
    """
    text = json.dumps(_document(preset), indent=2, ensure_ascii=False) + "\n"
    parse(text)
    return text


def _document(preset: Preset) -> dict[str, Any]:
    """The preset as plain values, in the order of the file."""
    document: dict[str, Any] = {
        FORMAT_KEY: FORMAT,
        "title": preset.title,
        "sentence": preset.sentence,
        "invented": preset.invented,
        **sections_of(preset.setup),
    }
    if preset.campaign is not None:
        document["campaign"] = campaign_section(preset.campaign)
    if preset.evidence is not None:
        document["evidence"] = evidence_section(preset.evidence)
    # Switches that are off are left out, so that older files stay as they are.
    document["view"] = {k: v for k, v in asdict(preset.view).items() if v is not False}
    if preset.sender is not None:
        document["sender"] = {
            "points_sha256": preset.sender.points_sha256,
            "versions": dict(preset.sender.versions),
            "numbers": dict(preset.sender.numbers),
        }
    return document


def write(path: Path | str, preset: Preset) -> None:
    """Write a preset file, whole or not at all.

    Parameters
    ----------
    path : Path or str
        The file; what it held is replaced.
    preset : Preset
        What to write.

    Raises
    ------
    InputError
        If the preset or the path cannot be written; an existing file then stays as it was.
    """
    write_bytes(Path(path), dumps(preset).encode("utf-8"))


# ------------------------------------------------------------------ text -> value


def parse(text: str | bytes) -> Preset:
    """Read a preset from text.

    Parameters
    ----------
    text : str or bytes
        JSON, at most 1 MB; bytes are UTF-8.

    Returns
    -------
    Preset
        Checked in full.

    Raises
    ------
    InputError
        With the path of the offending key, what was given, what is allowed and what to do.
    """
    document = parse_json(text)
    check_document(document)
    campaign = document.get("campaign")
    evidence = document.get("evidence")
    sender = document.get("sender")
    return Preset(
        title=document["title"],
        sentence=document["sentence"],
        invented=document["invented"],
        setup=setup_of(document),
        campaign=None if campaign is None else campaign_of(campaign),
        evidence=None if evidence is None else evidence_of(evidence),
        view=ViewState(**document["view"]),
        sender=Sender(**sender) if sender else None,
    )


def read(path: Path | str) -> Preset:
    """Read a preset file.

    Parameters
    ----------
    path : Path or str
        The file; its size is looked at before it is read.

    Returns
    -------
    Preset
        Checked in full.

    Raises
    ------
    InputError
        If the file cannot be read or `parse` refuses its text.
    """
    data = read_bytes(Path(path))
    with at(str(path)):
        return parse(data)


def shipped() -> dict[str, Preset]:
    """Read the presets that come with the program.

    Returns
    -------
    dict of str to Preset
        By name, in the order of `SHIPPED`.
    """
    return {name: read(folder() / f"{name}.json") for name in SHIPPED}


# --------------------------------------------------------------------- comparison


def compare(preset: Preset, result: Result) -> Agreement:
    """Compare a result with the numbers that its preset carries.

    Parameters
    ----------
    preset : Preset
        The preset as it was loaded.
    result : Result
        Computed from it, on its own points or on others.

    Returns
    -------
    Agreement
        The text reads "same points, S equal to 3e-13", or says what differs; a preset without
        numbers agrees with everything.
    """
    if preset.sender is None:
        return Agreement("the preset carries no numbers to compare with", True, None)
    return compare_numbers(preset.sender, Sender.of(result))
