"""The control column of the evidence page: what can be asked, and what it shows."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import replace
from typing import Any, ClassVar

import param
from panel.custom import JSComponent

from lozenge_dashboard.controls import ASSETS, FIELDS_JS, Field, Group, as_plain
from lozenge_engine.errors import refuse
from lozenge_engine.evidence import DELTA_HIGH, DELTA_LOW, RULES, EvidencePlan

__all__ = ["EvidenceControls", "column_state", "fields_of", "put_plan"]

TWIN = Group(
    "Twin and sprinklings",
    (
        Field(
            "level",
            "choice",
            "twin",
            "The continuum without sprinkling noise: quasi-uniform points of so many times the "
            "density, or the closed form, as it is or averaged over fluctuating counts.",
            options=(
                ("preview", "points, 4 ×"),
                ("refined", "points, to 16 ×"),
                ("long", "points, to 32 ×"),
                ("exact", "closed form"),
                ("smooth", "averaged form"),
            ),
        ),
        Field(
            "realisations",
            "number",
            "sprinklings",
            "Sprinklings that means and error bars are taken from.",
            whole=True,
        ),
    ),
)
CUTS = Group(
    "Cut study",
    (
        Field("alpha_low", "number", "α from", "Smallest multiple of the threshold √n/4π."),
        Field("alpha_high", "number", "α to", "Largest multiple of the threshold √n/4π."),
        Field("alphas", "number", "values", "Number of multiples, both ends included.", whole=True),
        Field(
            "stage",
            "radio",
            "stage that is moved",
            "Whether α moves the threshold of the patch, of the regions, or both.",
            options=(("patch", "patch"), ("regions", "regions"), ("both", "both")),
        ),
        Field(
            "rules",
            "set",
            "rules of the regions",
            "How the regions' modes are counted; each chosen rule has a curve.",
            options=(
                ("root_count", "own count"),
                ("union_count", "union's count"),
                ("equal_share", "equal share"),
                ("fixed_number", "fixed number"),
            ),
        ),
        Field(
            "uncut_space",
            "radio",
            "kept space from",
            "Operator whose modes span the regions' kept space; commutator and W stay cut.",
            options=((False, "cut operator"), (True, "uncut operator")),
        ),
    ),
)
LOST = Group(
    "Derived thresholds",
    (
        Field(
            "delta",
            "number",
            "departure δ",
            "Modes count as lost where the sprinkled spectrum leaves the twin's by more.",
            unit="%",
        ),
    ),
)
MODE = Group(
    "Mode",
    (
        Field(
            "operator",
            "radio",
            "operator",
            "Whose eigenvector is drawn: the patch's, one region's or all regions' together.",
            options=(("patch", "patch"), ("region", "region"), ("union", "union")),
        ),
        Field(
            "region",
            "choice",
            "region",
            "The region whose operator it is.",
            options=tuple((k, letter) for k, letter in enumerate("ABCDEFGH")),
        ),
        Field(
            "rank",
            "step",
            "rank",
            "Place of the mode's eigenvalue among the positive ones, the largest first.",
            whole=True,
        ),
    ),
)
GROUPS = (TWIN, CUTS, LOST, MODE)
NO_FORM = "known for the massless field on the flat patch only"
WHOLE = ("realisations", "alphas", "rank", "region")


class EvidenceControls(JSComponent):
    """The column in the browser, fed from one `state`; messages go to `receive`."""

    groups = param.List(doc="The groups, as plain values; they do not change.")
    state = param.Dict(doc="`fields` by name, `page`, `due` and `queue`.")

    _esm: ClassVar[str] = FIELDS_JS + (ASSETS / "evidence.js").read_text(encoding="utf-8")
    _stylesheets: ClassVar[list[str]] = [
        (ASSETS / "controls.css").read_text(encoding="utf-8"),
        (ASSETS / "evidence_column.css").read_text(encoding="utf-8"),
    ]

    def __init__(self, receive: Callable[[dict[str, Any]], None], **params: Any) -> None:
        self._receive = receive
        super().__init__(groups=[as_plain(group) for group in GROUPS], **params)

    def _handle_msg(self, data: Any) -> None:
        self._receive(data)

    def download(self, name: str, text: str) -> None:
        """Let the browser save a text file."""
        self._send_msg({"kind": "download", "name": name, "text": text})


# ---------------------------------------------------------------- what is typed


def put_plan(plan: EvidencePlan, name: str, value: Any) -> EvidencePlan:
    """Set one control.

    Parameters
    ----------
    plan : EvidencePlan
        Before.
    name : str
        The control.
    value : object
        What the browser sent.

    Returns
    -------
    EvidencePlan
        Afterwards.

    Raises
    ------
    InputError
        If the value is refused; it then names the control and its range.
    """
    if name in WHOLE and isinstance(value, float | str) and _is_whole(value):
        value = int(value)
    if name == "rules":
        value = tuple(rule for rule in RULES if rule in value)
    if name == "delta":
        low, high = 100 * DELTA_LOW, 100 * DELTA_HIGH
        if not isinstance(value, int | float) or not low <= value <= high:
            raise refuse(
                "departure δ", given=value, allowed=f"{low:g} to {high:g} %", do="type a number"
            )
        value = float(f"{value / 100:.12g}")
    return replace(plan, **{name: value})


def _is_whole(value: float | str) -> bool:
    """Whether what was sent is a whole number."""
    try:
        return float(value).is_integer()
    except ValueError:
        return False


# ---------------------------------------------------------------- what is shown


def fields_of(
    plan: EvidencePlan,
    *,
    regions: int,
    errors: Mapping[str, str],
    ranks: int | None,
    closed_form: bool,
) -> dict[str, dict[str, Any]]:
    """States of all controls.

    Parameters
    ----------
    plan : EvidencePlan
        What they say.
    regions : int
        Number of regions of the geometry.
    errors : mapping of str to str
        Why the last value was refused, by control.
    ranks : int or None
        Positive modes of the operator, where it is known.
    closed_form : bool
        Whether the continuum's modes are known: massless on the flat patch.

    Returns
    -------
    dict
        By control: value, and why it cannot act or what was refused.
    """
    fields: dict[str, dict[str, Any]] = {
        field.name: {"value": getattr(plan, field.name)}
        for group in GROUPS
        for field in group.fields
    }
    fields["rules"]["value"] = list(plan.rules)
    fields["delta"]["value"] = float(f"{100 * plan.delta:.6g}")
    fields["region"] |= {
        "hidden": plan.operator != "region",
        "closed": dict.fromkeys(range(regions, 8), f"there are {regions} regions"),
    }
    if regions == 1:
        fields["operator"]["closed"] = {"union": "one region has no union"}
    if not closed_form:
        fields["level"]["closed"] = dict.fromkeys(("exact", "smooth"), NO_FORM)
    if ranks is not None:
        fields["rank"]["note"] = f"{ranks} positive modes"
    for name, text in errors.items():
        if name in fields:
            fields[name]["error"] = text
    return fields


def column_state(
    plan: EvidencePlan,
    *,
    regions: int,
    errors: Mapping[str, str],
    ranks: int | None,
    closed_form: bool,
    doing: str,
    missing: bool,
) -> dict[str, Any]:
    """The controls, and how the computations stand.

    Parameters
    ----------
    plan, regions, errors, ranks, closed_form : EvidencePlan, int, mapping, int or None, bool
        As in `fields_of`.
    doing : str
        What is computed; empty if nothing is.
    missing : bool
        Whether a view does not show what is asked and is not being computed.

    Returns
    -------
    dict
        `fields` and `queue` of `EvidenceControls.state`.
    """
    fields = fields_of(plan, regions=regions, errors=errors, ranks=ranks, closed_form=closed_form)
    idle = "Not everything is computed." if missing else "Everything is computed."
    return {
        "fields": fields,
        "queue": {"text": doing or idle, "busy": bool(doing), "missing": missing},
    }
