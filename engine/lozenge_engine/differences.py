"""What tells the campaigns of two presets apart."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

from lozenge_engine.design import identity
from lozenge_engine.document import path_text, shown
from lozenge_engine.errors import refuse
from lozenge_engine.plan import CampaignPlan
from lozenge_engine.presets import Preset
from lozenge_engine.sections import sections_of

__all__ = ["campaign_in", "check_same"]


def campaign_in(preset: Preset) -> CampaignPlan:
    """The campaign of a preset that must have one.

    Parameters
    ----------
    preset : Preset
        What a campaign is to be run from.

    Returns
    -------
    CampaignPlan
        Its section campaign.

    Raises
    ------
    InputError
        If there is none.
    """
    if preset.campaign is None:
        raise refuse(
            "preset",
            given="no campaign",
            allowed="a preset with the section campaign",
            do="add its axes",
        )
    return preset.campaign


def check_same(path: Path, stored: Preset, given: Preset) -> None:
    """Refuse the preset of another campaign, and say what differs.

    Parameters
    ----------
    path : Path
        The results file, for the refusal.
    stored, given : Preset
        The file's own and another, each with a campaign.

    Raises
    ------
    InputError
        If their samples are not the same.
    """
    mine, other = (identity(preset.setup, campaign_in(preset)) for preset in (stored, given))
    if mine == other:
        return
    here, there = _what_counts(stored), _what_counts(given)
    keys = [key for key in {**here, **there} if here.get(key) != there.get(key)]
    more = f" and {len(keys) - 2} more" if len(keys) > 2 else ""
    theirs, ours = (
        ", ".join(f"{key} {side.get(key, 'not set')}" for key in keys[:2]) + more
        for side in (there, here)
    )
    raise refuse(
        str(path),
        given=f"another preset: {theirs}",
        allowed=f"the campaign of this file: {ours}",
        do="resume it with its own preset, or name another results file",
    )


def _leaves(value: Any, path: tuple[str | int, ...] = ()) -> Iterator[tuple[str, str]]:
    if isinstance(value, Mapping):
        for key, item in value.items():
            yield from _leaves(item, (*path, key))
    elif isinstance(value, list | tuple) and any(isinstance(v, Mapping) for v in value):
        for k, item in enumerate(value):
            yield from _leaves(item, (*path, k))
    else:
        yield path_text(path), shown(value)


def _what_counts(preset: Preset) -> dict[str, str]:
    """What the samples depend on, as text by key; compare `lozenge_engine.design.identity`."""
    plan = campaign_in(preset)
    sections = sections_of(preset.setup)
    parts = {key: sections[key] for key in ("points", "mass", "regions", "truncation", "order")}
    axes = {f"axis {axis.name}": list(axis.values) for axis in plan.axes}
    order = [axis.name for axis in plan.axes]
    return dict(_leaves({**parts, "axes": order, "placements": plan.placements})) | {
        key: shown(values) for key, values in axes.items()
    }
