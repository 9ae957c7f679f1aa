"""The reactive model: parameters that a user may set, and the result that follows."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any

import numpy as np
import param
from numpy.typing import NDArray

from lozenge_engine.config import Config, PointSource, Setup
from lozenge_engine.errors import InputError, refuse
from lozenge_engine.geometry import PATCH_AREA, Region
from lozenge_engine.kernels.laws import diamond_eigenvalues
from lozenge_engine.parameters import Limits, Parameters, allowed_values
from lozenge_engine.pipeline import compute
from lozenge_engine.placement import gaps
from lozenge_engine.pointfile import PointFile
from lozenge_engine.result import Result
from lozenge_engine.stages import Stages

__all__ = ["Bench", "Limits", "continuum_eigenvalues"]

FloatArray = NDArray[np.float64]


class Bench(Parameters):
    """Parameters of a computation, checked together; `result` computes and caches by stage.

    Every change is checked against all other parameters before it is taken: a refused one raises
    and leaves the bench as it was.  One of `density` and `elements` sets the other.

    Parameters
    ----------
    points : PointFile or None
        Imported points to use, which set the kind and the density.
    **values : Any
        Parameters of `Parameters` by name, instead of their defaults.  `regions` may be a list;
        without a `separation` beside it the list keeps its gaps.

    Raises
    ------
    InputError
        If the values do not fit together.
    ValueError
        If a value is outside its parameter's own bounds (`InputError` is one, too).
    TypeError
        If a name is no parameter.

    Examples
    --------
    >>> Bench(density=1000, region_count=2, half_width=0.3).result()  # doctest: +SKIP
    """

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
        except ValueError as error:
            if not getattr(self, "_quiet", True):
                with self._silent(), param.parameterized.discard_events(self):
                    self.param.update(**self._settled)
            if isinstance(error, InputError):
                raise
            raise refuse(
                name, given=value, allowed=allowed_values(self, name), do=f"change {name}"
            ) from error

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
        *Parameters._MIRRORED,
        "density",
        "elements",
        "seed",
        "kind",
        "oversampling",
        "curvature",
        "radius",
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

    def load(self, setup: Setup, *, points: PointFile | None = None) -> None:
        """Take all values of a setup at once; watchers run once.

        Parameters
        ----------
        setup : Setup
            The values.
        points : PointFile or None
            The imported points that the setup asks for; None for those that the bench holds.

        Raises
        ------
        InputError
            If the setup asks for imported points that are not there; nothing changes then.
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
                    oversampling=source.oversampling,
                    curvature=source.curvature,
                    radius=source.radius,
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
        """Use imported points instead of a sprinkling; the density becomes N/2.

        Parameters
        ----------
        points : PointFile
            From `lozenge_engine.pointfile`.

        Raises
        ------
        InputError
            If the other parameters do not fit the new density; nothing changes then.
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

    def result(self, report: Callable[[str, float], None] | None = None) -> Result:
        """Compute the present configuration; only stages that a change touches run again.

        Parameters
        ----------
        report : callable or None
            As for `lozenge_engine.pipeline.compute`.

        Returns
        -------
        Result
            Of the seed's own sprinkling, or of the imported points.

        Raises
        ------
        InputError
            If the configuration cannot be computed on these points.
        Cancelled
            If `report` raises it.

        Notes
        -----
        Cost: that of `lozenge_engine.pipeline.compute`; the cache keeps up to 1.5 GB.
        """
        return compute(self.config(), points=self._file, stages=self._stages, report=report)


def _disagree(elements: float, density: float) -> InputError:
    """Elements and density were both given and do not fit together."""
    return refuse(
        "elements",
        given=f"{elements:g} with density {density:g}",
        allowed="elements = 2 density",
        do="give one of the two",
    )


def continuum_eigenvalues(config: Config, count: int, *, ratio: float = 1.0) -> FloatArray:
    """Exact continuum eigenvalues of the flat patch's massless operator at the nominal density.

    Parameters
    ----------
    config : Config
        Its density is used; its mass is not.
    count : int
        How many, >= 1.
    ratio : float
        Points laid per element, `Result.oversampling`: eigenvalues are as many times larger.

    Returns
    -------
    ndarray, shape (count,), float64
        Descending; see `lozenge_engine.kernels.laws.diamond_eigenvalues`.  Empty for a curved
        patch, whose eigenvalues are not known in closed form.
    """
    if config.points.curved:
        return np.empty(0)
    return diamond_eigenvalues(count, elements=ratio * PATCH_AREA * config.points.density)
