"""The control column: what can be set, in the order in which the computation runs."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any, ClassVar, NamedTuple

import param
from panel.custom import JSComponent

from lozenge_engine.geometry import MAX_REGIONS

__all__ = [
    "ASSETS",
    "BUNDLE_LIMIT",
    "FIELDS_JS",
    "GROUPS",
    "POINTS_LIMIT",
    "PRESET_LIMIT",
    "VIEW_FIELDS",
    "Controls",
    "Field",
    "Group",
    "as_plain",
]

ASSETS = Path(__file__).parent / "assets"
FIELDS_JS = "".join(
    (ASSETS / name).read_text(encoding="utf-8") for name in ("fields.js", "lost.js")
)
"""Native inputs, which every column of controls is made of, and what it says of a lost server."""
LIVE_LOW, LIVE_HIGH = 200, 5000
"""Ends of the elements' slider: what is computed while it is dragged."""
POINTS_LIMIT = 40_000_000
PRESET_LIMIT = 1_000_000
BUNDLE_LIMIT = 20_000_000
"""Largest files that are sent to the server, in bytes."""

RULES = (
    ("none", "none"),
    ("root_count", "own count"),
    ("union_count", "union's count"),
    ("equal_share", "equal share"),
    ("fixed_number", "fixed number"),
)


class Field(NamedTuple):
    """One control.

    Attributes
    ----------
    name : str
        Key of `lozenge_dashboard.settings.SETTINGS`, or of the view state.
    kind : str
        ``slider``, ``number``, ``choice``, ``radio`` or ``regions``.
    label, hint : str
        Its name, and what it does to the physics in one sentence.
    unit : str
        Unit, for numbers.
    low, high, step : float
        Ends and step of a slider, where they are fixed.
    log, whole : bool
        Whether a slider is logarithmic; whether the value is a whole number.
    options : tuple of (value, label)
        For choices.
    """

    name: str
    kind: str
    label: str
    hint: str
    unit: str = ""
    low: float = 0.0
    high: float = 1.0
    step: float = 0.001
    log: bool = False
    whole: bool = False
    options: tuple[tuple[Any, str], ...] = ()


class Group(NamedTuple):
    """Controls under one title; `cost` names the stage whose price stands beside it."""

    title: str
    fields: tuple[Field, ...]
    files: tuple[dict[str, Any], ...] = ()
    folded: bool = False


def _rule_fields(stage: str, title: str, kinds: tuple[str, ...]) -> tuple[Field, ...]:
    """The controls of one stage of a custom truncation."""
    options = tuple((value, label) for value, label in RULES if value in kinds)
    return (
        Field(
            f"{stage}_kind",
            "choice",
            f"{title} rule",
            f"Which modes of the {title} are kept.",
            options=options,
        ),
        Field(
            f"{stage}_alpha",
            "number",
            f"{title} multiple α",
            f"Multiplies the threshold √n/4π of the {title}.",
        ),
        Field(
            f"{stage}_number",
            "number",
            f"{title} number",
            f"Positive modes kept on the {title}.",
            whole=True,
        ),
    )


POINTS = Group(
    "Points",
    (
        Field(
            "elements",
            "slider",
            "elements, mean",
            "Expected elements of a flat patch, twice the density: how fine the spacetime is.",
            low=LIVE_LOW,
            high=LIVE_HIGH,
            log=True,
            whole=True,
        ),
        Field(
            "kind",
            "choice",
            "point set",
            "How elements are placed: sprinkled, with or without a fluctuating count, or laid "
            "evenly, without the noise of a sprinkling.",
            options=(
                ("poisson", "Poisson sprinkling"),
                ("fixed", "fixed count"),
                ("lattice", "turned lattice"),
                ("sobol", "Sobol set"),
                ("file", "from file"),
            ),
        ),
        Field(
            "oversampling",
            "number",
            "oversampling",
            "How many times more points are laid and cut at the same wavenumber: the more, the "
            "nearer to the continuum.",
            "times",
            whole=True,
        ),
        Field("seed", "number", "seed", "Another seed is another sprinkling.", whole=True),
        Field(
            "curvature",
            "choice",
            "curvature",
            "Metric of the patch: the causal order stays, elements follow the volume.",
            options=(
                ("flat", "flat"),
                ("positive", "positive (1/cos² t)"),
                ("negative", "negative (1/cos² x)"),
            ),
        ),
        Field(
            "radius",
            "number",
            "curvature radius",
            "The smaller, the more the volume grows towards the patch's corners.",
            "half-widths",
        ),
        Field(
            "mass",
            "slider",
            "mass m",
            "Mass of the field: entropy stops growing once m ℓ exceeds 1.",
            unit="1/half-width",
            step=0.05,
        ),
    ),
    files=(
        {
            "name": "points",
            "label": "Open points (CSV: t, x)",
            "accept": ".csv,text/csv",
            "hint": "Takes your own elements; the file may also be dropped on this column.",
        },
    ),
)
REGIONS = Group(
    "Regions",
    (
        Field(
            "region_count",
            "radio",
            "count K",
            "Number of equal diamonds in a row: each adds two ends to the law.",
            options=tuple((k, str(k)) for k in range(1, MAX_REGIONS + 1)),
        ),
        Field(
            "half_width",
            "slider",
            "half-width h",
            "Size of each diamond: ℓ = 2h is the length whose logarithm S follows.",
            low=0.02,
            step=0.005,
        ),
        Field(
            "separation",
            "slider",
            "separation d",
            "Gap between neighbouring corners: mutual information falls with it.",
            step=0.005,
        ),
        Field("regions", "regions", "list", "Regions of your own: centre, half-width, boost."),
    ),
)
MODES = Group(
    "Modes that count",
    (
        Field(
            "truncation_mode",
            "choice",
            "truncation",
            "Which modes count as continuum modes, on the patch and on the regions.",
            options=(
                ("two_stages", "both stages"),
                ("patch_only", "patch only"),
                ("regions_only", "regions only"),
                ("none", "none"),
                ("union_count", "union's count"),
                ("equal_share", "equal share"),
                ("fixed_number", "fixed number"),
                ("custom", "per stage"),
            ),
        ),
        Field(
            "alpha",
            "slider",
            "multiple α",
            "Multiplies the threshold √n/4π: below 1 more modes count.",
            low=0.25,
            high=4.0,
            log=True,
        ),
        Field("number", "number", "modes", "Positive modes kept on each region.", whole=True),
        *_rule_fields("patch", "patch", ("none", "root_count", "fixed_number")),
        *_rule_fields("region", "regions", tuple(value for value, _ in RULES)),
        Field(
            "union_rule",
            "radio",
            "union",
            "Which union rule the curves follow; the readings show both.",
            options=(("support", "by support"), ("direct_sum", "direct sum")),
        ),
        Field(
            "order",
            "slider",
            "Rényi order q",
            "1 is the von Neumann entropy; larger orders weigh the strongest modes.",
            low=0.5,
            high=4.0,
            step=0.1,
        ),
    ),
)
AVERAGING = Group(
    "Averaging",
    (
        Field(
            "sprinklings",
            "number",
            "sprinklings",
            "More sprinklings make the standard error smaller, as one over their root.",
            whole=True,
        ),
    ),
)
SWEEPS = Group(
    "Sweeps",
    (
        Field("density_low", "number", "density from", "Lowest density of the ladder.", "per area"),
        Field("density_high", "number", "density to", "Highest density of the ladder.", "per area"),
        Field("density_points", "number", "densities", "Rungs of the ladder.", whole=True),
        Field("size_low", "number", "size from", "Smallest multiple of the half-widths.", "× h"),
        Field("size_high", "number", "size to", "Largest multiple of the half-widths.", "× h"),
        Field("size_points", "number", "sizes", "Points of the size sweep.", whole=True),
        Field(
            "separation_points",
            "number",
            "separations",
            "Points from touching to the edge.",
            whole=True,
        ),
        Field(
            "smallest_region",
            "number",
            "least elements",
            "Regions with fewer are left out of fits: they are not in the scaling regime.",
            whole=True,
        ),
    ),
    folded=True,
)
REFERENCES = Group(
    "References",
    (
        Field(
            "twin",
            "radio",
            "continuum twin",
            "The same geometry without sprinkling noise, as lines: quasi-uniform points of at "
            "least four times the density, cut at the same wavenumber.",
            options=((False, "off"), (True, "on")),
        ),
    ),
)
VIEW_FIELDS = ("union_rule", "twin")
"""Controls that belong to the view and not to what is computed."""
GROUPS = (POINTS, REGIONS, MODES, AVERAGING, REFERENCES, SWEEPS)


def as_plain(group: Group) -> dict[str, Any]:
    """A group as plain values, for the browser."""
    return {**group._asdict(), "fields": [field._asdict() for field in group.fields]}


class Controls(JSComponent):
    """The column in the browser: native inputs, all fed from one `state`.

    Messages from the browser go to the callable given as `receive`.
    """

    groups = param.List(doc="The groups, as plain values; they do not change.")
    shipped = param.List(doc="Names and titles of the shipped presets.")
    preset_limit = param.Integer(PRESET_LIMIT, doc="Largest preset file, in bytes.")
    points_limit = param.Integer(POINTS_LIMIT, doc="Largest points file, in bytes.")
    bundle_limit = param.Integer(BUNDLE_LIMIT, doc="Largest bundle, in bytes.")
    state = param.Dict(
        doc="`fields` by name (value, low, high, disabled, closed, error, preset, hidden), "
        "`costs` by group, `page` (heading), `job` (work in progress) and `trail` (the address)."
    )

    campaign = param.String(doc="Address of the campaign page for this screen.")
    evidence = param.String(doc="Address of the evidence page for this screen.")

    _esm: ClassVar[str] = FIELDS_JS + "".join(
        (ASSETS / name).read_text(encoding="utf-8") for name in ("trail.js", "controls.js")
    )
    _stylesheets: ClassVar[list[str]] = [(ASSETS / "controls.css").read_text(encoding="utf-8")]

    def __init__(self, receive: Callable[[dict[str, Any]], None], **params: Any) -> None:
        self._receive = receive
        super().__init__(groups=[as_plain(group) for group in GROUPS], **params)

    def _handle_msg(self, data: Any) -> None:
        self._receive(data)

    def download(self, name: str, text: str) -> None:
        """Let the browser save a text file."""
        self._send_msg({"kind": "download", "name": name, "text": text})
