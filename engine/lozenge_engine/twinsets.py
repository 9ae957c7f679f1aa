"""The quasi-uniform sets that a continuum twin is read on, and what one of them says."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import replace
from types import MappingProxyType
from typing import Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import MAX_ELEMENTS, Config, Rule
from lozenge_engine.errors import refuse
from lozenge_engine.kernels import laws
from lozenge_engine.pipeline import compute
from lozenge_engine.result import Result
from lozenge_engine.samples import reading_of
from lozenge_engine.source import PointSource
from lozenge_engine.stages import Stages

__all__ = ["LEVELS", "Level", "PointSet", "SetKind", "SetReading", "chosen_sets", "read_set"]

FloatArray = NDArray[np.float64]
Report = Callable[[str, float], None]
Level = Literal["preview", "refined", "long", "exact", "smooth"]
SetKind = Literal["lattice", "sobol"]

SCALED_RULES = ("root_count", "union_count", "equal_share")
"""Rules of the second stage with a threshold."""
LOWEST_ALPHA, HIGHEST_ALPHA = 0.05, 20.0
MEMORY_BYTES = 2_000_000_000
"""Sets whose search space would need more are left out of a level."""
BASIS_PER_MODE = 3.5
"""Krylov vectors for each positive mode (measured: 3.28 to 3.42, DEVELOPERS.md)."""
SEED = 1
"""Of the first offset and of the scrambles: a twin does not depend on the sprinkling's seed."""
UNSHARP = 0.06
"""Relative error of eigenvalues near the cut on a set of ratio 1, about; it falls like f**-1/2 or
faster (measured: up to 1.4 % on a lattice and 0.6 % on a Sobol set at 16 times the density)."""


class PointSet(NamedTuple):
    """One quasi-uniform set.

    Attributes
    ----------
    kind : {"lattice", "sobol"}
        Golden-rotated square lattice or scrambled Sobol set.
    oversampling : int
        Its density over the geometry's, 1 to 64.
    number : int
        Which offset or scramble.
    """

    kind: SetKind
    oversampling: int
    number: int


def _lattices(*oversamplings: int) -> tuple[PointSet, ...]:
    """A lattice of each size, each at another offset."""
    return tuple(PointSet("lattice", f, f) for f in oversamplings)


_PREVIEW = _lattices(4, 6, 9)
_REFINED = (
    *_PREVIEW,
    *_lattices(10, 12, 13, 14, 15, 16),
    PointSet("sobol", 16, 0),
    PointSet("sobol", 16, 1),
)
_LONG = (
    *_REFINED,
    *_lattices(23, 27, 32),
    PointSet("sobol", 32, 0),
    PointSet("sobol", 32, 1),
)
LEVELS: Mapping[Level, tuple[PointSet, ...]] = MappingProxyType(
    {"preview": _PREVIEW, "refined": _REFINED, "long": _LONG}
)
"""Sets of each level.  Sizes rather than offsets: lattices of one size err alike whatever their
offset (measured: at 4 to 16 times, the mean of two offsets is as far off as each of them), Sobol
sets below 16 times are too far off to help (0.1 to 0.2 in S at 4 times)."""


class SetReading(NamedTuple):
    """What one set says about K regions.

    Attributes
    ----------
    points : PointSet
        The set.
    ratio : float
        Density found over the geometry's.
    numbers : ndarray, shape (q,), float64
        Patch modes, region modes (K), entropies (K), union by support and by direct sum, pairs by
        support and by direct sum, in this order: means over thresholds of the second stage that
        differ by `UNSHARP` over the root of the oversampling.
    unsharp : ndarray, shape (q,), float64
        Their standard deviation: what a mode near its threshold adds to the error.
    patch : ndarray, float64
        Positive eigenvalues found, descending, in units of the geometry's density.
    regions : tuple of ndarray, float64
        The same for each region's restricted operator.
    """

    points: PointSet
    ratio: float
    numbers: FloatArray
    unsharp: FloatArray
    patch: FloatArray
    regions: tuple[FloatArray, ...]


def chosen_sets(config: Config, level: Level) -> list[PointSet]:
    """Sets of a level, without those that are too large.

    Parameters
    ----------
    config : Config
        The geometry, its density and its first stage.
    level : {"preview", "refined", "long"}
        A key of `LEVELS`; ``exact`` and ``smooth`` have no sets.

    Returns
    -------
    list of PointSet
        The smallest sets first.

    Raises
    ------
    InputError
        If nothing is cut in the first stage, or the smallest set is too large.
    """
    if level not in LEVELS:
        raise refuse("level", given=level, allowed=", ".join(LEVELS), do="choose one of them")
    if config.patch_rule.kind == "none":
        raise refuse(
            "continuum twin",
            given="no cut in the first stage",
            allowed="a patch rule that names a wavenumber: root_count or fixed_number",
            do="cut in the first stage; without a cut there is no wavenumber to share",
        )
    elements, modes = config.points.elements(), _patch_modes(config)

    def fits(size: int) -> bool:
        basis = 8.0 * BASIS_PER_MODE * modes * elements * size
        return 1.05 * elements * size <= MAX_ELEMENTS and basis <= MEMORY_BYTES

    chosen = [one for one in LEVELS[level] if fits(one.oversampling)]
    if len(chosen) < 2:
        raise refuse(
            "continuum twin",
            given=f"{elements:.0f} elements with about {modes:.0f} modes",
            allowed=f"at most {MAX_ELEMENTS} elements and {MEMORY_BYTES / 1e9:g} GB at "
            f"{LEVELS[level][1].oversampling} times the density",
            do="lower the density or raise alpha",
        )
    return chosen


def _patch_modes(config: Config) -> float:
    """Positive modes that the first stage keeps, about."""
    rule = config.patch_rule
    if rule.kind == "fixed_number":
        return float(rule.number)
    return laws.nominal_modes(config.points.elements()) / rule.alpha


def read_set(config: Config, points: PointSet, *, stages: Stages, report: Report) -> SetReading:
    """All numbers of a configuration on one set.

    Parameters
    ----------
    config : Config
        The geometry and the rules.
    points : PointSet
        The set that stands for the continuum.
    stages : Stages
        Cache of its modes.
    report : callable
        As for `lozenge_engine.pipeline.compute`.

    Returns
    -------
    SetReading
        Cut at the wavenumbers of the configuration.

    Raises
    ------
    InputError
        If the set cannot be computed.
    Cancelled
        If `report` raises it.

    Notes
    -----
    Cost: as `compute` on f N points with the modes of N: linear in the oversampling f.
    """
    given = config.points
    source = PointSource(
        kind=points.kind,
        density=given.density,
        seed=SEED,
        oversampling=points.oversampling,
        curvature=given.curvature,
        radius=given.radius,
    )
    dense = replace(config, points=source, realisation=points.number)
    result = compute(dense, stages=stages, report=report)
    ratio = result.oversampling
    near = [_numbers(result)]
    if config.region_rule.kind in SCALED_RULES:
        rule, step = config.region_rule, UNSHARP / math.sqrt(points.oversampling)
        for factor in (1.0 - step, 1.0 + step):
            other = replace(dense, region_rule=_at_least(rule, rule.alpha * factor))
            near.append(_numbers(compute(other, stages=stages, report=report)))
    return SetReading(
        points,
        ratio,
        np.mean(near, axis=0),
        np.std(near, axis=0, ddof=1) if len(near) > 1 else np.zeros_like(near[0]),
        result.patch.eigenvalues / ratio,
        tuple(r.eigenvalues / ratio for r in result.regions),
    )


def _at_least(rule: Rule, alpha: float) -> Rule:
    """The rule at another alpha, inside the range that a rule allows."""
    return replace(rule, alpha=min(max(alpha, LOWEST_ALPHA), HIGHEST_ALPHA))


def _numbers(result: Result) -> FloatArray:
    """Everything of a result that a twin has an error for, in the order of `SetReading`."""
    reading = reading_of(result)
    return np.concatenate(
        [
            [float(result.patch.kept_modes)],
            reading.kept.astype(np.float64),
            reading.entropy,
            [reading.union_support, reading.union_direct_sum],
            reading.pair_support,
            reading.pair_direct_sum,
        ]
    )
