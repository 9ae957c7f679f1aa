"""The parameters of the bench: what may be set, what has no effect now, what still fits."""

from __future__ import annotations

import html
from typing import Any, ClassVar, NamedTuple

import param

from lozenge_engine.config import (
    MAX_ELEMENTS,
    MAX_SEED,
    MODES,
    Averaging,
    Config,
    PointSource,
    Rule,
    Setup,
    SweepPlan,
)
from lozenge_engine.geometry import MAX_REGIONS, PATCH_AREA, largest_half_width, largest_separation
from lozenge_engine.placement import largest_mean_gap
from lozenge_engine.pointfile import PointFile
from lozenge_engine.source import (
    CURVATURES,
    MAX_OVERSAMPLING,
    MAX_RADIUS,
    MIN_RADIUS,
    POINT_KINDS,
    QUASI_UNIFORM,
)

__all__ = ["Limits", "Parameters", "allowed_values"]


class Limits(NamedTuple):
    """Ends that the present geometry allows, and why a parameter cannot act now.

    Attributes
    ----------
    separation_high, half_width_high : float
        Largest values at which the regions fit, in patch half-widths; a list has no common
        half-width, and 1 stands there.
    region_count_high : int
        Most regions that fit in a row at the present size and separation; those of a list.
    reasons : dict of str to str
        For each parameter that has no effect now, the reason.
    """

    separation_high: float
    half_width_high: float
    region_count_high: int
    reasons: dict[str, str]


class Parameters(param.Parameterized):
    """What a user may set, as reactive parameters that compile to a `Setup`.

    Every parameter carries its own documentation.  Bounds that depend on other parameters are
    checked by `setup`.
    """

    density = param.Number(
        default=1250.0,
        bounds=(1.0, MAX_ELEMENTS / PATCH_AREA),
        doc="""
        Elements per unit area; the patch has area 2.""",
    )
    elements = param.Number(
        default=2500.0,
        doc="""
        Twice the density, the expected elements of a flat patch: setting it sets the density.""",
    )
    seed = param.Integer(
        default=1,
        bounds=(0, MAX_SEED - 1),
        doc="""
        Seed of the sprinkling; with one seed a higher density only adds elements.""",
    )
    kind: Any = param.Selector(
        default="poisson",
        objects=[*POINT_KINDS],
        doc="""
        Poisson sprinkling, a fixed number, quasi-uniform points, or imported points.""",
    )
    oversampling = param.Integer(
        default=1,
        bounds=(1, MAX_OVERSAMPLING),
        doc="""
        How many times more quasi-uniform points are laid, cut at the same wavenumber.""",
    )
    curvature: Any = param.Selector(
        default="flat",
        objects=[*CURVATURES],
        doc="""
        Metric of the patch: flat, or of constant positive or negative curvature; massless only.""",
    )
    radius = param.Number(
        default=1.0,
        bounds=(MIN_RADIUS, MAX_RADIUS),
        doc="""
        Curvature radius in patch half-widths; the larger, the flatter.""",
    )
    mass = param.Number(
        default=0.0,
        bounds=(0.0, None),
        doc="""
        Mass of the field in inverse patch half-widths, at most 0.3 sqrt(density).""",
    )
    region_count = param.Integer(
        default=2,
        bounds=(1, MAX_REGIONS),
        doc="""
        Number of equal regions in the row.""",
    )
    half_width = param.Number(
        default=0.3,
        bounds=(0.0, 1.0),
        inclusive_bounds=(False, True),
        doc="""
        Half-width of each region of the row, in patch half-widths.""",
    )
    separation = param.Number(
        default=0.2,
        bounds=(0.0, 2.0),
        doc="""
        Gap between neighbouring corners, in patch half-widths; the mean gap of a list.""",
    )
    regions = param.Parameter(
        default=None,
        doc="""
        None for the equal row, or a sequence of Region: an explicit list.""",
    )
    truncation_mode: Any = param.Selector(
        default="two_stages",
        objects=[*MODES, "custom"],
        doc="""
        Which modes count, by name; custom uses patch_rule and region_rule.""",
    )
    alpha = param.Number(
        default=1.0,
        bounds=(0.05, 20.0),
        doc="""
        Multiple of the threshold sqrt(n)/(4 pi), for both stages.""",
    )
    number = param.Integer(
        default=20,
        bounds=(1, 100_000),
        doc="""
        Positive modes kept in each region by the mode fixed_number.""",
    )
    patch_rule = param.ClassSelector(
        class_=Rule,
        default=Rule(),
        doc="""
        Rule of the first stage, for the mode custom.""",
    )
    region_rule = param.ClassSelector(
        class_=Rule,
        default=Rule(),
        doc="""
        Rule of the second stage, for the mode custom.""",
    )
    order = param.Number(
        default=1.0,
        bounds=(0.5, 50.0),
        doc="""
        Renyi order q of the entropies; 1 is the von Neumann entropy.""",
    )
    sprinklings = param.Integer(
        default=8,
        bounds=(1, 10_000),
        doc="""
        Sprinklings to average over.""",
    )
    sweeps = param.ClassSelector(
        class_=SweepPlan,
        default=SweepPlan(),
        doc="""
        Ranges of the three sweeps.""",
    )

    _MIRRORED: ClassVar[tuple[str, ...]] = (
        "mass",
        "region_count",
        "half_width",
        "separation",
        "truncation_mode",
        "alpha",
        "number",
        "patch_rule",
        "region_rule",
        "order",
        "sweeps",
    )
    _file: PointFile | None = None

    def _values(self) -> dict[str, Any]:
        """All parameters but the name."""
        return {k: v for k, v in self.param.values().items() if k != "name"}

    def _idle(self) -> dict[str, str]:
        """Why a parameter has no effect now."""
        reasons = {}
        if self.regions is not None:
            for name in ("region_count", "half_width"):
                reasons[name] = "a list of regions is in use; clear it to use the equal row"
        if len(self.regions or range(self.region_count)) < 2:
            reasons["separation"] = "one region has no neighbour"
        if self.kind == "file":
            for name in ("density", "elements", "seed", "sprinklings", "curvature", "radius"):
                reasons[name] = "the points come from a file"
        elif self.curvature == "flat":
            reasons["radius"] = "the patch is flat"
        else:
            reasons["mass"] = "curved patches are massless only"
        if self.kind not in QUASI_UNIFORM:
            reasons["oversampling"] = "only quasi-uniform points are laid more densely"
        mode = self.truncation_mode
        if mode in ("none", "custom"):
            reasons["alpha"] = (
                "nothing is cut" if mode == "none" else "each stage has its own alpha"
            )
        if mode != "custom":
            for name in ("patch_rule", "region_rule"):
                reasons[name] = "only the mode custom uses it"
        if mode != "fixed_number":
            reasons["number"] = "only the mode fixed_number uses it"
        return reasons

    def setup(self) -> Setup:
        """The frozen setup of the present parameters.

        Returns
        -------
        Setup
            Checked.

        Raises
        ------
        InputError
            If the parameters do not fit together.
        """
        points = PointSource(
            kind=self.kind,
            density=self.density,
            seed=self.seed,
            file=self._file.name if self.kind == "file" and self._file else None,
            sha256=self._file.sha256 if self.kind == "file" and self._file else None,
            oversampling=self.oversampling if self.kind in QUASI_UNIFORM else 1,
            curvature="flat" if self.kind == "file" else self.curvature,
            radius=self.radius,
        )
        return Setup(
            points=points,
            region_list=None if self.regions is None else tuple(self.regions),
            averaging=Averaging(sprinklings=self.sprinklings),
            **{name: getattr(self, name) for name in self._MIRRORED},
        )

    def config(self) -> Config:
        """The configuration of the seed's own sprinkling.

        Returns
        -------
        Config
            Checked.

        Raises
        ------
        InputError
            If the parameters do not fit together.
        """
        return self.setup().config()

    def limits(self) -> Limits:
        """Ends of the controls at the present geometry.

        Returns
        -------
        Limits
            Largest values that fit, and why a control cannot act.

        Raises
        ------
        InputError
            If the parameters do not fit together.
        """
        if self.regions is None:
            count, half, gap = self.region_count, self.half_width, self.separation
            room = largest_separation(count, half)
            most = max(k for k in range(1, MAX_REGIONS + 1) if _fits(k, half, gap))
            return Limits(
                max(0.0, room) if count > 1 else 0.0,
                max(0.0, largest_half_width(count, gap if count > 1 else 0.0)),
                most,
                self._idle(),
            )
        return Limits(
            largest_mean_gap(self.setup().regions()), 1.0, len(self.regions), self._idle()
        )

    def __repr__(self) -> str:
        """The parameters that differ from their defaults."""
        changed = {
            k: v
            for k, v in self._values().items()
            if k != "elements" and v != self.param[k].default
        }
        return (
            f"{type(self).__name__}({', '.join(f'{k}={v!r}' for k, v in sorted(changed.items()))})"
        )

    __str__ = __repr__

    def _repr_html_(self) -> str:
        """A table of all parameters, those that cannot act now with the reason."""
        idle = self._idle()
        rows = "".join(
            f"<tr><td>{name}</td><td>{html.escape(repr(value))}</td>"
            f"<td>{html.escape(idle.get(name, ''))}</td></tr>"
            for name, value in self._values().items()
        )
        return (
            f"<table><tr><th>parameter</th><th>value</th><th>no effect now</th></tr>{rows}</table>"
        )


def allowed_values(owner: param.Parameterized, name: str) -> str:
    """What a parameter takes, in words, from its own declaration.

    Parameters
    ----------
    owner : param.Parameterized
        Who has the parameter.
    name : str
        Its name.

    Returns
    -------
    str
        The choices, the range or the kind of value.
    """
    declared = owner.param[name]
    if isinstance(declared, param.Selector):
        return ", ".join(map(str, declared.objects))
    if isinstance(declared, param.Number):
        kind = "a whole number" if isinstance(declared, param.Integer) else "a number"
        low, high = declared.bounds or (None, None)
        above = "" if low is None else f" from {low:g}"
        return kind + above + ("" if high is None else f" to {high:g}")
    kinds = getattr(declared, "class_", None)
    return f"a {kinds.__name__}" if isinstance(kinds, type) else "another value"


def _fits(count: int, half_width: float, separation: float) -> bool:
    """Whether a row fits in the patch."""
    return count * 2 * half_width + (count - 1) * separation <= 2.0 + 1e-12 or count == 1
