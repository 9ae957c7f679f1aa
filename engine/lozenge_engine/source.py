"""Where the elements come from: the kind of point set, its density, and the patch's metric."""

from __future__ import annotations

import math
from dataclasses import asdict, dataclass
from typing import Any, Literal, get_args

from lozenge_engine.checks import checked_number, checked_whole
from lozenge_engine.errors import refuse
from lozenge_engine.geometry import PATCH, PATCH_AREA, Curvature, Region, volume

__all__ = [
    "CURVATURES",
    "MAX_ELEMENTS",
    "MAX_OVERSAMPLING",
    "MAX_RADIUS",
    "MAX_SEED",
    "MIN_RADIUS",
    "POINT_KINDS",
    "QUASI_UNIFORM",
    "PointKind",
    "PointSource",
]

MAX_SEED = 2**53
MAX_ELEMENTS = 1_000_000
"""Most elements a density may ask for: a guard against typing errors, not a promise of speed."""
MAX_OVERSAMPLING = 64
MIN_RADIUS, MAX_RADIUS = 0.7, 1000.0
"""Curvature radii: Omega diverges in the patch's corners at 2/pi = 0.637; at 1000 it is flat."""

PointKind = Literal["poisson", "fixed", "lattice", "sobol", "file"]
POINT_KINDS: tuple[PointKind, ...] = get_args(PointKind)
QUASI_UNIFORM: tuple[PointKind, ...] = ("lattice", "sobol")
CURVATURES: tuple[Curvature, ...] = get_args(Curvature)
UNSET: dict[str, Any] = {"oversampling": 1, "curvature": "flat", "radius": 1.0}
"""What is left out of documents and hashes, so that those of older versions stay the same."""


@dataclass(frozen=True, slots=True, kw_only=True)
class PointSource:
    """Where the elements come from.

    Parameters
    ----------
    kind : {"poisson", "fixed", "lattice", "sobol", "file"}
        Poisson sprinkling, a fixed count round(density times the patch's volume), quasi-uniform
        points on a golden lattice or a scrambled Sobol set, or imported points.
    density : float
        Elements per unit volume, 1 to 500 000; the flat patch has 2.  For imported points N/2.  For
        quasi-uniform points the density of the geometry that they stand for.
    seed : int
        0 <= seed < 2**53; not used for imported points.
    file, sha256 : str or None
        For imported points only: name of the file and hash of the point set.
    oversampling : int
        For quasi-uniform points only: about how many times more of them are laid, 1 to 64.
    curvature : {"flat", "positive", "negative"}
        Metric Omega^2 (dt^2 - dx^2): Omega = 1, 1/cos(t/l) (de Sitter) or 1/cos(x/l) (anti-de
        Sitter); not for imported points.
    radius : float
        Curvature radius l in patch half-widths, 0.7 to 1000; 1 when flat.
    """

    kind: PointKind = "poisson"
    density: float = 1000.0
    seed: int = 1
    file: str | None = None
    sha256: str | None = None
    oversampling: int = 1
    curvature: Curvature = "flat"
    radius: float = 1.0

    def __post_init__(self) -> None:
        if self.kind not in POINT_KINDS:
            raise refuse(
                "kind", given=self.kind, allowed=", ".join(POINT_KINDS), do="choose one of them"
            )
        high = MAX_ELEMENTS / PATCH_AREA
        density = checked_number(
            "density",
            self.density,
            low=1.0,
            high=high,
            allowed=f"1 to {high:g} elements per unit area (the patch has area 2)",
        )
        object.__setattr__(self, "density", density)
        checked_whole("seed", self.seed, low=0, high=MAX_SEED - 1)
        if (self.kind == "file") != (self.sha256 is not None):
            raise refuse(
                "points",
                given=f"kind {self.kind} with sha256 {self.sha256}",
                allowed="a hash of the points for kind file, and for no other kind",
                do="load the points from their file",
            )
        self._check_metric()
        self._check_oversampling()

    def _check_metric(self) -> None:
        """Check curvature and radius; a flat patch has the default radius."""
        if self.curvature not in CURVATURES:
            raise refuse(
                "curvature",
                given=self.curvature,
                allowed=", ".join(CURVATURES),
                do="choose one of them",
            )
        radius = checked_number(
            "radius",
            self.radius,
            low=MIN_RADIUS,
            high=MAX_RADIUS,
            allowed=f"{MIN_RADIUS:g} to {MAX_RADIUS:g} patch half-widths (the conformal factor "
            "diverges in the patch at 2/pi)",
        )
        object.__setattr__(self, "radius", 1.0 if self.curvature == "flat" else radius)
        if self.kind == "file" and self.curvature != "flat":
            raise refuse(
                "curvature",
                given=f"{self.curvature} for imported points",
                allowed="flat: imported points are taken as they are, and counted one by one",
                do="set it to flat or choose another kind of points",
            )

    def _check_oversampling(self) -> None:
        """Check the oversampling, and that not too many points are asked for."""
        checked_whole("oversampling", self.oversampling, low=1, high=MAX_OVERSAMPLING)
        if self.oversampling > 1 and not self.quasi_uniform:
            raise refuse(
                "oversampling",
                given=f"{self.oversampling} for kind {self.kind}",
                allowed="1: only quasi-uniform points (lattice, sobol) are laid more densely",
                do="set it to 1 or choose lattice or sobol",
            )
        points = self.expected_points()
        if points > MAX_ELEMENTS and self.kind != "file":
            raise refuse(
                "density",
                given=f"{self.density:g}, which makes {points:.0f} points",
                allowed=f"at most {MAX_ELEMENTS} points",
                do="lower the density, the oversampling or the curvature",
            )

    @property
    def quasi_uniform(self) -> bool:
        """Whether the points are laid out evenly instead of sprinkled."""
        return self.kind in QUASI_UNIFORM

    @property
    def curved(self) -> bool:
        """Whether the metric is not the flat one."""
        return self.curvature != "flat"

    def elements(self, region: Region | None = None) -> float:
        """Expected elements, density times volume.

        Parameters
        ----------
        region : Region or None
            None for the whole patch.

        Returns
        -------
        float
            What the counts of the truncation rules stand for, whatever the kind of points.
        """
        if not self.curved:
            return self.density * (PATCH_AREA if region is None else region.area)
        extent = PATCH if region is None else region.extent
        return self.density * volume(extent, curvature=self.curvature, radius=self.radius)

    def expected_points(self, region: Region | None = None) -> float:
        """Expected points of the set that is computed on.

        Parameters
        ----------
        region : Region or None
            None for the whole patch.

        Returns
        -------
        float
            The elements, but for quasi-uniform points: these lie evenly in the coordinates, a
            Sobol set as the nearest power of two.
        """
        if not self.quasi_uniform:
            return self.elements(region)
        area = PATCH_AREA if region is None else region.area
        if self.kind == "sobol":
            return area / PATCH_AREA * 2.0**self.log2_points
        return area * self.density * self.oversampling

    @property
    def log2_points(self) -> int:
        """Base-2 logarithm of the nearest power of two to 2 density oversampling."""
        return round(math.log2(PATCH_AREA * self.density * self.oversampling))

    def remarks(self) -> tuple[str, ...]:
        """What is unusual about the points, in words.

        Returns
        -------
        tuple of str
            How densely quasi-uniform points are laid, and how the patch is curved.
        """
        found = []
        if self.quasi_uniform:
            found.append(f"laid at {self.oversampling} times the density")
        if self.curved:
            found.append(f"{self.curvature} curvature, radius {self.radius:g}")
        return tuple(found)

    def plain(self) -> dict[str, Any]:
        """Plain values by field, without what stands at the defaults of `UNSET`."""
        return {k: v for k, v in asdict(self).items() if k not in UNSET or v != UNSET[k]}
