"""The harmonic chain beside a setup's sweeps: its local slope, and S against size at fixed lattice.

The chain has another cutoff, so its constant is its own: a line is shifted to the data's mean and
only its slope is compared.
"""

from __future__ import annotations

import hashlib
import json
import math
from collections.abc import Callable
from dataclasses import asdict, dataclass
from functools import cached_property
from typing import Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Setup
from lozenge_engine.draws import scaled, size_draws
from lozenge_engine.geometry import Region
from lozenge_engine.routes import ChainRoute, chain_route
from lozenge_engine.saturation import ChainSizes, chain_sizes
from lozenge_engine.stages import Stages
from lozenge_engine.sweeps import ScalingCurve
from lozenge_engine.twinline import Outcomes

__all__ = ["ChainLine", "ChainTask", "chain_line", "chain_task"]

FloatArray = NDArray[np.float64]
Axis = Literal["density", "size"]


@dataclass(frozen=True, kw_only=True)
class ChainTask:
    """Entropies of blocks at the regions' fractions along x.

    Parameters
    ----------
    axis : {"density", "size"}
        One layout on refined lattices, or several layouts on one lattice.
    layouts : tuple of tuple of Region
        Of which only x0 and the half-width count.
    mass, order : float
        In inverse patch half-widths; Renyi order.
    """

    axis: Axis
    layouts: tuple[tuple[Region, ...], ...]
    mass: float
    order: float

    @cached_property
    def key(self) -> str:
        """SHA-256, in hexadecimal, of everything that the chain depends on."""
        return hashlib.sha256(
            json.dumps(["chain", asdict(self)], sort_keys=True, separators=(",", ":")).encode()
        ).hexdigest()

    def take(
        self, *, stages: Stages, report: Callable[[str, float], None]
    ) -> tuple[ChainRoute | ChainSizes, ...]:
        """Compute them.

        Parameters
        ----------
        stages : Stages
            Not used.
        report : callable
            As in `lozenge_engine.routes`; may raise `Cancelled`.

        Returns
        -------
        tuple of ChainRoute or ChainSizes
            One: refined lattices for ``density``, growing blocks for ``size``.

        Raises
        ------
        InputError
            If a region's fractions overlap or leave the chain.
        Cancelled
            If `report` raises it.

        Notes
        -----
        Cost: that of `lozenge_engine.routes.chain_route` or `chain_sizes`.
        """
        del stages
        if self.axis == "density":
            layout = self.layouts[0]
            return (chain_route(layout, mass=self.mass, order=self.order, report=report),)
        return (chain_sizes(self.layouts, mass=self.mass, order=self.order, report=report),)


class ChainLine(NamedTuple):
    """The chain over the points of a sweep of scale.

    Attributes
    ----------
    x, value : ndarray, shape (P,), float64
        ln(l/a) and S in nats, shifted to the mean of the data that the fit uses.
    slope, error : float
        On a density ladder the limit of the local slopes as the lattice is refined, with its
        error; in a size sweep the mean slope, with NaN.
    saturation : float
        ln(l/a) at which m l = 1, in a size sweep; infinite for a massless field.
    """

    x: FloatArray
    value: FloatArray
    slope: float
    error: float
    saturation: float


def chain_task(setup: Setup, axis: Axis) -> ChainTask | None:
    """Plan the chain beside one sweep of scale.

    Parameters
    ----------
    setup : Setup
        What is shown.
    axis : {"density", "size"}
        Which sweep.

    Returns
    -------
    ChainTask or None
        None where the sweep has no points.
    """
    regions = setup.regions()
    layouts = (
        (regions,)
        if axis == "density"
        else tuple(scaled(regions, float(f)) for f in size_draws(setup).values)
    )
    if not layouts:
        return None
    return ChainTask(axis=axis, layouts=layouts, mass=setup.mass, order=setup.order)


def chain_line(
    task: ChainTask | None, outcomes: Outcomes, curve: ScalingCurve, *, setup: Setup
) -> ChainLine | None:
    """The chain over the points of a sweep.

    Parameters
    ----------
    task : ChainTask or None
        Of the setup.
    outcomes : mapping of str to tuple
        What tasks gave.
    curve : ScalingCurve
        The data.
    setup : Setup
        Its mass and half-widths place m l = 1.

    Returns
    -------
    ChainLine or None
        None until the chain and at least one point of the data are known.
    """
    found = (task and outcomes.get(task.key)) or (None,)
    mean = np.array([e.mean for e in curve.entropy], dtype=float)
    known = np.isfinite(mean)
    anchor = known & curve.used if (known & curve.used).any() else known
    if not anchor.any():
        return None
    x, slope, error, saturation = curve.x, math.nan, math.nan, math.nan
    if isinstance(found[0], ChainRoute):
        slope, error = found[0].slope
        if not math.isfinite(slope):
            slope = float(found[0].slopes[-1])
        value = slope * x
    elif isinstance(found[0], ChainSizes) and found[0].change.size == x.size:
        value = found[0].change
        slope = float(np.polyfit(x, value, 1)[0]) if x.size > 1 else math.nan
        saturation = math.log(found[0].saturation * math.sqrt(setup.points.density))
    else:
        return None
    shift = float((mean - value)[anchor].mean())
    return ChainLine(x, value + shift, slope, error, saturation)
