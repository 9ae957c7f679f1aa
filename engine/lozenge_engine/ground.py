"""The first stage of a study: one point set with the patch's modes down to a floor."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Config, Rule
from lozenge_engine.kernels import cuts
from lozenge_engine.kernels.curved import Counting, counting
from lozenge_engine.kernels.modes import Certificate, Modes, certified_modes
from lozenge_engine.kernels.order import Commutator
from lozenge_engine.kernels.points import Coordinates, membership
from lozenge_engine.kernels.weighted import WeightedCommutator
from lozenge_engine.pipeline import prepare
from lozenge_engine.pointfile import PointFile
from lozenge_engine.stages import Stages
from lozenge_engine.threads import blas_threads
from lozenge_engine.uncut import commutator, region_modes

__all__ = ["Ground", "ground", "spaces"]

Rows = NDArray[np.intp]
Report = Callable[[str, float], None]

SHALLOW = Rule(kind="root_count", alpha=4.0)
"""What is searched before the search that reports its progress."""


class Ground(NamedTuple):
    """The first stage down to the lowest cut of a study.

    Attributes
    ----------
    config : Config
        The configuration that is studied.
    points : Coordinates
        All N points.
    rows : tuple of ndarray of int
        Points of each of the K regions.
    counting : Counting
        How points count: points per element, weights.
    operator : Commutator
        On all points.
    modes : Modes
        Of the patch, down to the lowest cut.
    certificate : Certificate
        Of these modes.
    """

    config: Config
    points: Coordinates
    rows: tuple[Rows, ...]
    counting: Counting
    operator: Commutator
    modes: Modes
    certificate: Certificate

    @property
    def elements(self) -> float:
        """Elements of the patch at the density of the geometry."""
        return self.counting.total(self.points.u.size)

    @property
    def counts(self) -> tuple[float, ...]:
        """Elements of each region, likewise."""
        return tuple(self.counting.elements(own) for own in self.rows)

    def restricted_commutator(self, region: int) -> Commutator:
        """The uncut operator restricted to one region.

        Parameters
        ----------
        region : int
            Its index.

        Returns
        -------
        Commutator
            On the region's points; weighted where the points are.
        """
        own = self.rows[region]
        density = self.counting.ratio * self.config.points.density
        plain = commutator(self.points, own, mass=self.config.mass, density=density)
        weights = self.counting.weights
        return plain if weights is None else WeightedCommutator(plain, weights[own])


def ground(
    config: Config,
    *,
    floor: float,
    points: PointFile | None = None,
    stages: Stages,
    report: Report | None = None,
) -> Ground:
    """Search the patch's modes down to a floor, in the cache that the pipeline uses.

    Parameters
    ----------
    config : Config
        One sprinkling.
    floor : float
        How far down, as a multiple of the patch's threshold at alpha = 1; > 0.
    points : PointFile or None
        The imported points, when the configuration asks for them.
    stages : Stages
        Cache that the modes are taken from and put into.
    report : callable or None
        As for `lozenge_engine.pipeline.compute`.

    Returns
    -------
    Ground
        With modes that may reach further down.

    Raises
    ------
    InputError
        If the configuration cannot be computed on these points.
    Cancelled
        If `report` raises it.

    Notes
    -----
    Cost: `kernels.modes.certified_modes`, from what the cache holds downwards.
    """
    key, pair = prepare(replace(config, patch_rule=SHALLOW), points=points, stages=stages)
    parts = key if isinstance(key, tuple) else ()
    held = stages.peek(("points", *parts[1:-1]))
    operator = stages.peek(("order", *parts[1:]))
    if held is None or operator is None or not isinstance(pair, tuple):
        message = "the cache is too small for one sprinkling"
        raise MemoryError(message)
    known, certificate = pair
    own = counting(held[0].u, held[0].v, source=config.points)
    total = own.total(held[0].u.size)
    wanted = cuts.needed_floor(Rule(), elements=total, ratio=own.ratio) * floor
    if known.floor > wanted:
        with blas_threads(1):
            known, certificate = certified_modes(
                operator,
                floor=wanted,
                known=known,
                report=lambda f: report("modes", f) if report else None,
            )
        stages.put(key, (known, certificate))
    region_of = membership(held[0], config.regions)
    rows = tuple(np.nonzero(region_of == k)[0] for k in range(len(config.regions)))
    return Ground(config, held[0], rows, own, operator, known, certificate)


def spaces(ground: Ground, *, alpha: float) -> list[Modes]:
    """Modes of the uncut restricted operators down to the smallest cut of a study.

    Parameters
    ----------
    ground : Ground
        The sprinkling.
    alpha : float
        The smallest multiple of the threshold.

    Returns
    -------
    list of Modes
        One for each region.

    Notes
    -----
    Cost: `lozenge_engine.uncut.region_modes` for each region.
    """
    ratio = ground.counting.ratio
    return [
        region_modes(
            ground.restricted_commutator(k),
            floor=cuts.threshold(
                Rule(alpha=max(alpha, 0.05)), own=n, union=n, regions=1, ratio=ratio
            ),
        )
        for k, n in enumerate(ground.counts)
    ]
