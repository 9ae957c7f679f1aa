"""The switches of the views: what they say, what a preset holds of them, what a click changes."""

from __future__ import annotations

from typing import Any

from lozenge_dashboard.palette import ThemeName
from lozenge_dashboard.records import Choices
from lozenge_engine.presets import ViewName, ViewState

__all__ = ["TOGGLES", "choices_of", "switched", "view_of"]

TOGGLES = ("twin", "chain", "difference")
"""What is on or off."""


def choices_of(view: ViewState, before: Choices | None = None) -> Choices:
    """The switches that a preset holds; the others stay."""
    return (before or Choices())._replace(
        union_rule=view.union_rule,
        scaling=view.scaling_axis,
        **{name: getattr(view, name) for name in TOGGLES},
    )


def view_of(choices: Choices, *, theme: ThemeName, focus: ViewName | None) -> ViewState:
    """What a preset holds of a page."""
    return ViewState(
        theme=theme,
        focus=focus,
        union_rule=choices.union_rule,
        scaling_axis=choices.scaling,
        **{name: getattr(choices, name) for name in TOGGLES},
    )


def switched(choices: Choices, name: str, value: Any) -> Choices:
    """Change one switch, and those that go with it: there is no difference without a twin."""
    if name in TOGGLES:
        value = bool(value)
    changed = choices._replace(**{name: value})
    if name == "difference" and value:
        return changed._replace(twin=True)
    if name == "twin" and not value:
        return changed._replace(difference=False)
    return changed
