"""What the continuum twin of a setup and of its sweeps takes: tasks for another process."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable
from dataclasses import asdict, dataclass, replace
from functools import cached_property, lru_cache
from typing import NamedTuple

from lozenge_engine.config import Config, Setup
from lozenge_engine.draws import density_draws, scaled, separation_draws, size_draws
from lozenge_engine.geometry import Region
from lozenge_engine.placement import with_separation
from lozenge_engine.stages import Stages
from lozenge_engine.twin import Level, Twin, twins

__all__ = ["TwinPlan", "TwinTask", "twin_plan"]

RECENT = 16
"""Plans kept."""


@dataclass(frozen=True, kw_only=True)
class TwinTask:
    """Twins of one density, for several layouts of regions.

    Parameters
    ----------
    config : Config
        Density, mass and rules.
    layouts : tuple of tuple of Region
        One or more.
    level : str
        A key of `lozenge_engine.twin.LEVELS`.
    """

    config: Config
    layouts: tuple[tuple[Region, ...], ...]
    level: Level

    @cached_property
    def key(self) -> str:
        """SHA-256, in hexadecimal, of everything that the twins depend on."""
        rest = json.dumps(
            [self.level, [[asdict(r) for r in layout] for layout in self.layouts]],
            sort_keys=True,
            separators=(",", ":"),
        )
        return hashlib.sha256((self.config.digest + rest).encode()).hexdigest()

    def take(self, *, stages: Stages, report: Callable[[str, float], None]) -> tuple[Twin, ...]:
        """Compute them.

        Parameters
        ----------
        stages : Stages
            Cache of the sets' modes, which tasks of one density share.
        report : callable
            As in `lozenge_engine.twin.twins`; may raise `Cancelled`.

        Returns
        -------
        tuple of Twin
            One for each layout.

        Raises
        ------
        InputError
            If the configuration has no twin.
        Cancelled
            If `report` raises it.

        Notes
        -----
        Cost: that of `lozenge_engine.twin.twins`.
        """
        return twins(
            self.config, self.layouts, level=self.level, points_cache=stages, report=report
        )


class TwinPlan(NamedTuple):
    """What a setup's twin needs at one level.

    Attributes
    ----------
    front : TwinTask
        The present geometry.
    density : tuple of TwinTask or None
        One for each rung of the ladder; None for one that the mass refuses.
    size, separation : TwinTask or None
        All layouts of the sweep; None where it has no points.
    """

    front: TwinTask
    density: tuple[TwinTask | None, ...]
    size: TwinTask | None
    separation: TwinTask | None

    def tasks(self, name: str) -> tuple[TwinTask, ...]:
        """The tasks of one sweep, or of the front.

        Parameters
        ----------
        name : {"front", "density", "size", "separation"}
            Which.

        Returns
        -------
        tuple of TwinTask
            Without what is refused.
        """
        found = getattr(self, name)
        several = found if name == "density" else (found,)
        return tuple(task for task in several if task is not None)


def _geometry(config: Config) -> Config:
    """What a twin depends on: seed, realisation and the kind of points do not matter."""
    source = replace(config.points, kind="poisson", seed=1, oversampling=1, file=None, sha256=None)
    return replace(config, points=source, realisation=0)


@lru_cache(maxsize=RECENT)
def twin_plan(setup: Setup, level: Level) -> TwinPlan:
    """Plan the twin of a setup and of its sweeps.

    Parameters
    ----------
    setup : Setup
        What is shown.
    level : str
        A key of `lozenge_engine.twin.LEVELS`.

    Returns
    -------
    TwinPlan
        Nothing is computed.
    """
    config, regions = _geometry(setup.config()), setup.regions()
    rungs = {float(draw.config.points.density): draw.config for draw in density_draws(setup).draws}
    sizes = tuple(scaled(regions, float(f)) for f in size_draws(setup).values)
    apart = tuple(with_separation(regions, float(d)) for d in separation_draws(setup).values)

    def rung(density: float) -> TwinTask | None:
        at = rungs.get(density)
        if at is None:
            return None
        return TwinTask(config=_geometry(at), layouts=(regions,), level=level)

    def of(layouts: tuple[tuple[Region, ...], ...]) -> TwinTask | None:
        return TwinTask(config=config, layouts=layouts, level=level) if layouts else None

    return TwinPlan(
        TwinTask(config=config, layouts=(regions,), level=level),
        tuple(rung(float(d)) for d in density_draws(setup).values),
        of(sizes),
        of(apart),
    )
