"""What a computation will take: seconds and bytes, from the kernels' own cost formulas.

The formulas count flops and applications of the operator; how fast this machine computes is
measured once, at first use, in about 0.2 s, and corrected by what `CostModel.learn` is told.
"""

from __future__ import annotations

import functools
import itertools
import math
import time
from typing import NamedTuple

import numpy as np

from lozenge_engine.config import Config
from lozenge_engine.geometry import PATCH_AREA
from lozenge_engine.kernels import cuts, modes
from lozenge_engine.kernels.order import MasslessCommutator
from lozenge_engine.kernels.points import sprinkle

__all__ = ["CostModel", "Prediction", "nominal", "predict", "shared_model"]

CACHED_BYTES = 32e6
"""Bases up to this size stay in the processor's cache."""
BASE_BYTES = 250e6
"""The interpreter with the engine loaded."""
SECOND_STAGE_CALLS = 2e-3
"""Seconds of a second stage besides its flops (measured)."""
NOMINAL_RATES = (1.0e10, 1.0e10)
"""Flops per second with the basis in cache, and out of it, for ratios of costs."""


class Prediction(NamedTuple):
    """Expected wall time and peak memory, at the nominal density.

    Attributes
    ----------
    seconds : float
        For the seed's own sprinkling, nothing cached.
    peak_bytes : float
        Including the interpreter.
    second_stage : float
        The part of the seconds that another layout of regions takes on the same patch modes.
    """

    seconds: float
    peak_bytes: float
    second_stage: float


class _Work(NamedTuple):
    """Counted work of one computation."""

    elements: float
    dimension: float
    flops: float
    applications: float
    basis_bytes: float
    peak_bytes: float
    second_flops: float


def _counted(config: Config) -> _Work:
    """Leading costs of `find_modes`, `certify` and the second stage."""
    n, counted = config.points.expected_points(), config.points.elements()
    ratio = n / (PATCH_AREA * config.points.density) if config.points.quasi_uniform else 1.0
    floor = cuts.needed_floor(config.patch_rule, elements=round(counted), ratio=ratio)
    if floor == 0.0:
        second = _second_stage(config, n / 2)
        return _Work(n, n, 9.0 * n**3, n, 16.0 * n**2, 48.0 * n**2 + BASE_BYTES, second)
    r = min(n / 2, ratio * counted / (2 * math.pi * floor))
    m = min(n, modes.RATIO * r + 24)
    search = 2 * n * m**2 + 2 * n * m * r + 256 * n * m
    check = 2 * n * (m / 4) * (2 * r) + n * m**2 / 8 + 4 * n * r**2
    second = _second_stage(config, r)
    basis = 8 * n * m
    return _Work(
        n,
        m,
        search + check + second,
        1.25 * m + 2 * r,
        basis,
        1.1 * basis + 16 * n * r + BASE_BYTES,
        second,
    )


def _second_stage(config: Config, r: float) -> float:
    """Flops of restriction, cut and entropies with r kept positive modes of the patch.

    A region of n elements is a problem of min(2 r, n) dimensions, made by products of n x 2 r
    numbers; so are pairs, triples and the union, whose modes are attributed by support.  The
    coefficients are measured (DEVELOPERS.md).
    """
    elements = [config.points.expected_points(region) for region in config.regions]
    sizes = {k: itertools.combinations(elements, k) for k in {2, 3, len(elements)} - {1}}
    together = [sum(own) for k, blocks in sizes.items() if k <= len(elements) for own in blocks]
    flops = 0.0
    for n in elements:
        size = min(2 * r, n)
        flops += 8 * size**3 + 7 * n * r * size
    return flops + 20 * sum(min(2 * r, n) ** 3 for n in together)


class CostModel:
    """Speed of this machine, measured once and corrected by what computations took."""

    def __init__(self) -> None:
        self._rates: tuple[float, float] | None = None
        self._correction: dict[tuple[int, bool, str], float] = {}

    def _calibrated(self) -> tuple[float, float]:
        """Flops per second with the basis in cache, and out of it."""
        if self._rates is None:
            self._rates = (_rate_in_cache(), _rate_in_memory())
        return self._rates

    @property
    def calibrated(self) -> bool:
        """Whether this machine was measured; until then nothing can be learnt."""
        return self._rates is not None

    def predict(self, config: Config) -> Prediction:
        """Predict a computation.

        Parameters
        ----------
        config : Config
            What would be computed.

        Returns
        -------
        Prediction
            Meant to be good to about 30 % once `learn` has seen computations of similar size.
        """
        correction = self._correction.get(_kind_of_work(config), 1.0)
        whole, second = _seconds(config, *self._calibrated())
        return Prediction(whole * correction, _counted(config).peak_bytes, second * correction)

    def learn(self, config: Config, seconds: float) -> float:
        """Take into account what a computation took.

        Parameters
        ----------
        config : Config
            What was computed, with nothing cached.
        seconds : float
            Its wall time, > 0.

        Returns
        -------
        float
            Actual over predicted time; the correction moves by its square root.
        """
        ratio = seconds / self.predict(config).seconds
        kind = _kind_of_work(config)
        self._correction[kind] = self._correction.get(kind, 1.0) * math.sqrt(ratio)
        return ratio


def _seconds(config: Config, cached: float, memory: float) -> tuple[float, float]:
    """Seconds at two flop rates: of everything, and of the second stage in it."""
    work = _counted(config)
    rate = cached if work.basis_bytes < CACHED_BYTES else min(cached, memory)
    per_element = 2.0e-8 if config.mass == 0 else 1.5e-8 * math.log2(work.elements)
    calls = 4e-5 * work.applications
    first = per_element * work.elements * work.applications + calls
    return work.flops / rate + first, work.second_flops / rate + SECOND_STAGE_CALLS


def nominal(config: Config) -> Prediction:
    """Predict for a processor of fixed speed, so that the answer is the same on every machine.

    Parameters
    ----------
    config : Config
        What would be computed.

    Returns
    -------
    Prediction
        Good for ratios of costs.
    """
    whole, second = _seconds(config, *NOMINAL_RATES)
    return Prediction(whole, _counted(config).peak_bytes, second)


def _kind_of_work(config: Config) -> tuple[int, bool, str]:
    """Computations that share a correction: sizes within a factor of two, mass, first stage."""
    elements = config.points.expected_points()
    return round(math.log2(elements)), config.mass > 0, config.patch_rule.kind


def _rate_in_cache() -> float:
    """Effective flop rate of the whole search on a small set."""
    points = sprinkle(density=600, seed=0, fixed=True)
    operator = MasslessCommutator(points.u, points.v)
    floor = math.sqrt(operator.size) / (4 * math.pi)
    best = math.inf
    for _ in range(2):
        start = time.perf_counter()
        found = modes.find_modes(operator, floor=floor)
        best = min(best, time.perf_counter() - start)
    n, m, r = operator.size, found.dimension, found.values.size
    best -= 1.25e-4 * m  # calls, counted apart
    return max(1e8, (2 * n * m**2 + 2 * n * m * r + 256 * n * m) / max(best, 1e-3))


def _rate_in_memory() -> float:
    """Flop rate of a panel of 9 against a basis that does not fit in cache."""
    basis = np.ones((100_000, 64), order="F")
    panel = np.ones((100_000, 9), order="F")
    best = math.inf
    for _ in range(3):
        start = time.perf_counter()
        panel - basis @ (basis.T @ panel)
        best = min(best, time.perf_counter() - start)
    return 4.0 * basis.size * panel.shape[1] / best


@functools.cache
def shared_model() -> CostModel:
    """The cost model of this process."""
    return CostModel()


def predict(config: Config) -> Prediction:
    """Predict a computation with the model of this process; see `CostModel.predict`.

    Parameters
    ----------
    config : Config
        What would be computed.

    Returns
    -------
    Prediction
        Seconds and bytes.
    """
    return shared_model().predict(config)
