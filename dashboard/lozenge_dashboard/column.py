"""What the control column shows: values, ends, and why a control cannot act now."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any, NamedTuple

from lozenge_dashboard.controls import GROUPS, LIVE_HIGH, LIVE_LOW, VIEW_FIELDS, Field
from lozenge_dashboard.settings import SETTINGS
from lozenge_engine.bench import Bench, Limits
from lozenge_engine.config import Setup
from lozenge_engine.notation import duration, thousands
from lozenge_engine.pipeline import DENSE_LIMIT

__all__ = ["Behind", "Heading", "Job", "TwinNote", "column_state"]

UNCUT = f"every mode is needed: at most {DENSE_LIMIT} elements"
STAGES_OF = {
    "Points": ("points", "order", "modes", "restriction", "cut", "entropies"),
    "Regions": ("restriction", "cut", "entropies"),
    "Modes that count": ("cut", "entropies"),
}
"""Stages that a change in a group runs again."""


class Heading(NamedTuple):
    """Head of the column."""

    title: str
    sentence: str
    agreement: str = ""
    differs: bool = False
    error: str = ""
    changed: bool = False
    keeping: bool = False
    theme: str = "light"
    focus: str | None = None


class Job(NamedTuple):
    """A long computation that waits or runs; no text: none does."""

    text: str = ""
    fraction: float | None = None
    can_compute: bool = False
    can_cancel: bool = False

    @classmethod
    def offer(cls, elements: int, seconds: float) -> Job:
        """One that waits for its button."""
        text = f"{thousands(elements)} elements: about {duration(seconds)}"
        return cls(text, None, can_compute=True)

    @classmethod
    def running(cls, text: str, fraction: float, seconds: float) -> Job:
        """One that runs, of a predicted length."""
        return cls(f"{text} of about {duration(seconds)}", min(fraction, 0.98), can_cancel=True)


class Behind(NamedTuple):
    """The sprinklings behind the picture; `action` is ``halt``, ``resume`` or empty."""

    text: str = ""
    action: str = ""


class TwinNote(NamedTuple):
    """What is said at the switch of the twin: how far it is, or why there is none."""

    text: str = ""
    refused: bool = False
    failed: bool = False

    def state(self) -> dict[str, str]:
        """As part of the control's state."""
        if not self.text:
            return {}
        return {"disabled" if self.refused else "caution" if self.failed else "note": self.text}


def column_state(
    bench: Bench,
    loaded: Setup,
    *,
    view: Mapping[str, tuple[Any, Any]],
    errors: Mapping[str, str],
    seconds: Mapping[str, float],
    heading: Heading,
    job: Job,
    behind: Behind,
    twin: TwinNote,
) -> dict[str, Any]:
    """Everything that the column shows.

    Parameters
    ----------
    bench : Bench
        The present parameters.
    loaded : Setup
        The preset's, from which differences are marked.
    view : mapping of str to (value, value)
        The controls that belong to the view (`VIEW_FIELDS`), now and in the preset.
    errors : mapping of str to str
        By control.
    seconds : mapping of str to float
        What each stage took when it last ran.
    heading, job, behind : Heading, Job, Behind
        The parts that are no controls.
    twin : TwinNote
        What is said at the switch of the twin.

    Returns
    -------
    dict
        For `lozenge_dashboard.controls.Controls.state`.
    """
    setup, limits = bench.setup(), bench.limits()
    fields: dict[str, dict[str, Any]] = {}
    for group in GROUPS:
        for field in group.fields:
            if field.name in VIEW_FIELDS:
                now, then = view[field.name]
            else:
                setting = SETTINGS[field.name]
                now, then = setting.get(setup), setting.get(loaded)
            fields[field.name] = _field_state(field, now, then, limits=limits, bench=bench)
            if field.name in errors:
                fields[field.name]["error"] = errors[field.name]
    fields["twin"] |= twin.state()
    differs = any("preset" in state for state in fields.values())
    return {
        "fields": fields,
        "costs": _costs(seconds),
        "page": heading._replace(changed=differs)._asdict(),
        "job": job._asdict(),
        "behind": behind._asdict(),
    }


def _costs(seconds: Mapping[str, float]) -> dict[str, str]:
    """What a change in each group costs now."""
    return {
        group: duration(sum(seconds.get(stage, 0.0) for stage in stages)) if seconds else ""
        for group, stages in STAGES_OF.items()
    }


def _field_state(
    field: Field, now: Any, then: Any, *, limits: Limits, bench: Bench
) -> dict[str, Any]:
    """State of one control."""
    setup = bench.setup()
    state: dict[str, Any] = {"value": now, "low": field.low, "high": field.high}
    if now != then:
        state["preset"] = "another list" if field.name == "regions" else then
    reason = limits.reasons.get(field.name)
    if field.name == "union_rule" and len(setup.regions()) < 2:
        reason = "one region has no union"
    if reason:
        state["disabled"] = reason
    state |= _ends(field.name, setup, limits)
    closed = _closed(field.name, setup, limits, bench)
    if closed:
        state["closed"] = closed
    if _hidden(field.name, setup):
        state["hidden"] = True
    return state


def _ends(name: str, setup: Setup, limits: Limits) -> dict[str, float]:
    """Ends of the sliders whose range follows the other controls."""
    if name == "separation":
        return {"low": 0.0, "high": max(limits.separation_high, 1e-6)}
    if name == "half_width":
        return {"high": max(limits.half_width_high, 0.021)}
    if name == "mass":
        return {"high": 0.3 * math.sqrt(setup.points.density)}
    if name == "elements":
        # The mass stays below 0.3 sqrt(density); without a first cut every mode is needed.
        low = math.ceil(2.0 * (setup.mass / 0.3) ** 2)
        uncut = setup.rules()[0].kind == "none"
        most = DENSE_LIMIT * 2.0 * setup.points.density / setup.points.expected_points()
        return {
            "low": min(max(LIVE_LOW, low), LIVE_HIGH - 1),
            "high": max(math.floor(most + 1e-6), LIVE_LOW + 1) if uncut else LIVE_HIGH,
        }
    return {}


def _closed(name: str, setup: Setup, limits: Limits, bench: Bench) -> dict[Any, str]:
    """Options that cannot be chosen now, with the reason."""
    if name == "region_count":
        return {
            k: f"{k} regions do not fit: lower half-width or separation"
            for k in range(limits.region_count_high + 1, 9)
        }
    if name == "kind" and bench.file is None:
        return {"file": "open a points file first"}
    if setup.points.expected_points() > DENSE_LIMIT:
        if name == "truncation_mode":
            return {"none": UNCUT, "regions_only": UNCUT}
        if name == "patch_kind":
            return {"none": UNCUT}
    return {}


def _hidden(name: str, setup: Setup) -> bool:
    """Whether a control belongs to a mode or rule that is not chosen."""
    for stage, rule in (("patch", setup.patch_rule), ("region", setup.region_rule)):
        if name.startswith(f"{stage}_") and name != "region_count":
            if setup.truncation_mode != "custom":
                return True
            if name.endswith("_alpha"):
                return rule.kind in ("none", "fixed_number")
            if name.endswith("_number"):
                return rule.kind != "fixed_number"
    hidden = {
        "oversampling": not setup.points.quasi_uniform,
        "radius": not setup.points.curved,
        "alpha": setup.truncation_mode in ("custom", "none"),
        "number": setup.truncation_mode != "fixed_number",
    }
    return hidden.get(name, False)
