"""The reactive model: parameters that a user may set, and the result that follows."""

from __future__ import annotations

import html
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any, ClassVar, NamedTuple

import numpy as np
import param
from numpy.typing import NDArray

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
from lozenge_engine.errors import InputError, refuse
from lozenge_engine.geometry import (
    MAX_REGIONS,
    PATCH_AREA,
    Region,
    gaps,
    largest_half_width,
    largest_mean_gap,
    largest_separation,
)
from lozenge_engine.kernels.laws import diamond_eigenvalues
from lozenge_engine.pipeline import compute
from lozenge_engine.pointfile import PointFile
from lozenge_engine.result import Result
from lozenge_engine.stages import Stages

__all__ = ["Bench", "Limits", "continuum_eigenvalues"]

FloatArray = NDArray[np.float64]


class Limits(NamedTuple):
    """Ends that the present geometry allows, and why a parameter cannot act now.

    Attributes
    ----------
    separation_high, half_width_high : float
        Largest values at which the regions fit.
    region_count_high : int
        Most regions that fit in a row at the present size and separation.
    reasons : dict of str to str
        For each parameter that has no effect now, the reason.
    """

    separation_high: float
    half_width_high: float
    region_count_high: int
    reasons: dict[str, str]


class Bench(param.Parameterized):
    """Parameters of a computation, checked together; `result` computes and caches by stage.

    Every change is checked against all other parameters before it is taken: a refused value
    raises `InputError` and leaves the bench as it was.

    Examples
    --------
    >>> Bench(density=1000, region_count=2, half_width=0.3).result()  # doctest: +SKIP
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
        Expected elements of the patch, 2 density: setting it sets the density.""",
    )
    seed = param.Integer(
        default=1,
        bounds=(0, MAX_SEED - 1),
        doc="""
        Seed of the sprinkling; with one seed a higher density only adds elements.""",
    )
    kind: Any = param.Selector(
        default="poisson",
        objects=["poisson", "fixed", "file"],
        doc="""
        Poisson sprinkling, a fixed number of elements, or imported points.""",
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

    def __init__(self, *, points: PointFile | None = None, **values: Any) -> None:
        self._file = points
        self._stages = Stages()
        self._settled: dict[str, Any] = {}
        self._quiet = True
        both = "elements" in values and "density" in values
        if both and values["elements"] != PATCH_AREA * values["density"]:
            raise _disagree(values["elements"], values["density"])
        if "elements" in values and "density" not in values:
            values["density"] = values["elements"] / PATCH_AREA
        values["elements"] = values.get("density", type(self).density) * PATCH_AREA
        regions = values.pop("regions", None)
        super().__init__(**values)  # type: ignore[no-untyped-call]
        if points is not None:
            self._use_file(points)
        if regions is not None:
            self._use_list(regions, separation=values.get("separation"))
        self._settled = self._values()
        self._quiet = False
        self.setup()

    def __setattr__(self, name: str, value: Any) -> None:
        """Set a parameter; when its own bounds refuse it, undo a half-done update as well."""
        try:
            super().__setattr__(name, value)
        except ValueError:
            if not getattr(self, "_quiet", True):
                with self._silent(), param.parameterized.discard_events(self):
                    self.param.update(**self._settled)
            raise

    def _values(self) -> dict[str, Any]:
        """All parameters but the name."""
        return {k: v for k, v in self.param.values().items() if k != "name"}

    def _use_file(self, points: PointFile) -> None:
        """Take imported points, whose density is N/2."""
        self._file = points
        self.kind = "file"
        self.density = points.points.u.size / PATCH_AREA
        self.elements = float(points.points.u.size)

    def _use_list(self, regions: Any, *, separation: float | None) -> None:
        """Take a list of regions; without a separation theirs is the mean gap."""
        if not isinstance(regions, list | tuple) or not all(
            isinstance(region, Region) for region in regions
        ):
            raise refuse(
                "regions", given=regions, allowed="None or a list of Region", do="give such a list"
            )
        self.regions = tuple(regions)
        if separation is None and len(regions) > 1:
            old = gaps(self.regions)
            self.separation = max(0.0, sum(old) / len(old))

    @contextmanager
    def _silent(self) -> Iterator[None]:
        """Change parameters without checking each by itself."""
        quiet, self._quiet = self._quiet, True
        try:
            yield
        finally:
            self._quiet = quiet

    @param.depends(
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
        "density",
        "elements",
        "seed",
        "kind",
        "regions",
        "sprinklings",
        watch=True,
    )
    def _checked(self) -> None:
        """Keep what is linked in step and refuse what does not fit together, whole."""
        if self._quiet:
            return
        before = self._settled
        # Watchers run when the batch ends, after the check: they never see what is refused.
        with param.parameterized.batch_call_watchers(self), self._silent():
            try:
                if self.kind == "file" and before["kind"] != "file" and self._file is not None:
                    self._use_file(self._file)
                elif self.elements != before["elements"] and self.density == before["density"]:
                    self.density = self.elements / PATCH_AREA
                elif self.elements != self.density * PATCH_AREA:
                    if self.elements != before["elements"]:
                        raise _disagree(self.elements, self.density)
                    self.elements = self.density * PATCH_AREA
                if self.regions is not before["regions"] and self.regions is not None:
                    given = self.separation != before["separation"]
                    self._use_list(self.regions, separation=self.separation if given else None)
                self._refuse_idle(before)
                self.setup()
            except ValueError:
                self.param.update(**before)
                raise
            self._settled = self._values()

    def _refuse_idle(self, before: dict[str, Any]) -> None:
        """Refuse a change of a parameter that would be silently without effect."""
        coming_back = self.kind == "file" and before["kind"] != "file"
        for name, reason in self._idle().items():
            if coming_back and name in ("density", "elements"):
                continue
            if name in before and getattr(self, name) != before[name]:
                raise refuse(
                    name,
                    given=getattr(self, name),
                    allowed=f"no change now: {reason}",
                    do="change that first",
                )

    def _idle(self) -> dict[str, str]:
        """Why a parameter has no effect now."""
        reasons = {}
        if self.regions is not None:
            for name in ("region_count", "half_width"):
                reasons[name] = "a list of regions is in use; clear it to use the equal row"
        if len(self.regions or range(self.region_count)) < 2:
            reasons["separation"] = "one region has no neighbour"
        if self.kind == "file":
            for name in ("density", "elements", "seed", "sprinklings"):
                reasons[name] = "the points come from a file"
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
        )
        return Setup(
            points=points,
            region_list=None if self.regions is None else tuple(self.regions),
            averaging=Averaging(sprinklings=self.sprinklings),
            **{name: getattr(self, name) for name in self._MIRRORED},
        )

    def load(self, setup: Setup, *, points: PointFile | None = None) -> None:
        """Take all values of a setup at once; watchers run once.

        Parameters
        ----------
        setup : Setup
            The values.
        points : PointFile or None
            The imported points that the setup asks for.

        Raises
        ------
        InputError
            If the setup asks for imported points that were not given; nothing changes then.
        """
        file = points or self._file
        source = setup.points
        if source.kind == "file" and (file is None or file.sha256 != source.sha256):
            raise refuse(
                "points",
                given=f"a setup for the points of {source.file}",
                allowed="that file, with the same points",
                do=f"load {source.file} first",
            )
        before, file_before = self._settled, self._file
        self._file = file if source.kind == "file" else self._file
        try:
            with self._silent():
                self.param.update(
                    density=source.density,
                    elements=source.density * PATCH_AREA,
                    seed=source.seed,
                    kind=source.kind,
                    regions=setup.region_list,
                    sprinklings=setup.averaging.sprinklings,
                    **{name: getattr(setup, name) for name in self._MIRRORED},
                )
        except ValueError:
            self._file = file_before
            with self._silent():
                self.param.update(**before)
            raise
        self._settled = self._values()

    @property
    def file(self) -> PointFile | None:
        """The imported points, if any were given."""
        return self._file

    def import_points(self, points: PointFile) -> None:
        """Use imported points instead of a sprinkling.

        Parameters
        ----------
        points : PointFile
            From `lozenge_engine.pointfile`.
        """
        setup = self.setup()
        self.load(
            setup.with_(
                points=PointSource(
                    kind="file",
                    density=points.points.u.size / PATCH_AREA,
                    seed=setup.points.seed,
                    file=points.name,
                    sha256=points.sha256,
                )
            ),
            points=points,
        )

    def config(self) -> Config:
        """The configuration of the seed's own sprinkling.

        Returns
        -------
        Config
            Checked.
        """
        return self.setup().config()

    def result(self, report: Callable[[str, float], None] | None = None) -> Result:
        """Compute the present configuration; only stages that a change touches run again.

        Parameters
        ----------
        report : callable or None
            As for `lozenge_engine.pipeline.compute`.

        Returns
        -------
        Result
            Of the seed's own sprinkling.
        """
        return compute(self.config(), points=self._file, stages=self._stages, report=report)

    def limits(self) -> Limits:
        """Ends of the controls at the present geometry.

        Returns
        -------
        Limits
            Largest values that fit, and why a control cannot act.
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
        return f"Bench({', '.join(f'{k}={v!r}' for k, v in sorted(changed.items()))})"

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


def _disagree(elements: float, density: float) -> InputError:
    """Elements and density were both given and do not fit together."""
    return refuse(
        "elements",
        given=f"{elements:g} with density {density:g}",
        allowed="elements = 2 density",
        do="give one of the two",
    )


def _fits(count: int, half_width: float, separation: float) -> bool:
    """Whether a row fits in the patch."""
    return count * 2 * half_width + (count - 1) * separation <= 2.0 + 1e-12 or count == 1


def continuum_eigenvalues(config: Config, count: int) -> FloatArray:
    """Exact continuum eigenvalues of the patch's massless operator at the nominal density.

    Parameters
    ----------
    config : Config
        Its density is used; its mass is not.
    count : int
        How many.

    Returns
    -------
    ndarray, shape (count,), float64
        Descending.
    """
    return diamond_eigenvalues(count, elements=PATCH_AREA * config.points.density)
