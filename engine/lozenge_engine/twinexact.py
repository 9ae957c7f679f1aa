"""The continuum itself, where its modes are known: massless, flat, cut at a wavenumber."""

from __future__ import annotations

import itertools
import time
from collections.abc import Callable
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Config
from lozenge_engine.entropies import Block, Entropies
from lozenge_engine.errors import refuse
from lozenge_engine.kernels import cuts, gaussian
from lozenge_engine.kernels.continuum import DiamondModes, diamond_modes, region_factor
from lozenge_engine.kernels.twin import normal_points
from lozenge_engine.threads import blas_threads
from lozenge_engine.twinvalues import Twin, assembled

__all__ = ["SAMPLES", "exact_twin"]

FloatArray = NDArray[np.float64]

BEYOND = 0.5
"""Eigenvalues of the patch are listed down to this multiple of the cut."""
ENDLESS = 2**62
"""Points of a region when there is one at every place."""
SAMPLES = 24
"""Sets of counts that the smooth twin averages over."""
SEED = 1
"""Of the combinations of counts: one twin for one configuration."""
FEWEST = 0.2
"""A drawn count is at least this multiple of its mean."""


class _Read(NamedTuple):
    """Numbers in the order of `lozenge_engine.twinsets.SetReading`, and regions' spectra."""

    numbers: FloatArray
    spectra: tuple[FloatArray, ...]


def exact_twin(
    config: Config,
    *,
    smooth: bool = False,
    report: Callable[[str, float], None] | None = None,
) -> Twin:
    """The twin that sets of growing density approach, without any set.

    Parameters
    ----------
    config : Config
        Massless and flat, with a cut in the first stage.
    smooth : bool
        Average over counts that fluctuate as a sprinkling's do, instead of taking the mean count.
    report : callable or None
        Called as ``report("twin", fraction)``; may raise `Cancelled`.

    Returns
    -------
    Twin
        With errors 0, since what is left is rounding (1e-12); when smooth, with the standard error
        of `SAMPLES` draws.  `oversampling` and `sets` are 0.

    Raises
    ------
    InputError
        If the configuration has no closed form, or nothing is cut in the first stage.
    Cancelled
        If `report` raises it.

    Notes
    -----
    The mean over sprinklings of a number that jumps whenever a mode enters is no staircase: a
    region of n elements keeps 2 sqrt(n) modes, and n +- sqrt(n) is one mode more or less.  With n
    elements where nbar were expected, eigenvalues are n/nbar times as large and the threshold
    sqrt(n/nbar) times, so lambda is compared with alpha nbar/(4 pi sqrt(n)).  That is all of a
    sprinkling's noise that the smooth twin knows.  Cost: of the order of 100 r**3 flops for each
    region, pair and union, r the kept modes of the patch, and `SAMPLES` times that when smooth.
    """
    start = time.perf_counter()
    _check(config)
    tell = report or (lambda _stage, _fraction: None)
    whole = config.points.elements()
    own = np.array([config.points.elements(region) for region in config.regions])
    floor = cuts.needed_floor(config.patch_rule, elements=whole)
    found = diamond_modes(density=config.points.density, floor=BEYOND * floor)
    draws = _draws(own.size) if smooth else np.zeros((1, 1))
    reads = []
    with blas_threads(1):
        for j, draw in enumerate(draws):
            tell("twin", j / len(draws))
            counts = _drawn(own, draw[1:]) if smooth else own
            rest = float(_drawn(np.array([whole - own.sum()]), draw[:1])[0]) if smooth else 0.0
            total = rest + float(counts.sum()) if smooth else whole
            reads.append(_read(config, found, whole**2 / total, own, counts))
    tell("twin", 1.0)
    numbers = np.stack([read.numbers for read in reads])
    error = numbers.std(axis=0, ddof=1) / len(reads) ** 0.5 if smooth else 0.0 * numbers[0]
    middle = _read(config, found, whole, own, own) if smooth else reads[0]
    return assembled(
        config,
        numbers.mean(axis=0),
        error,
        patch=(found.values, np.zeros_like(found.values)),
        regions=[(values, np.zeros_like(values)) for values in middle.spectra],
        seconds=time.perf_counter() - start,
    )


def _draws(regions: int) -> FloatArray:
    """Standard normal numbers for the rest of the patch and for each region."""
    generator = np.random.Generator(np.random.PCG64(SEED))
    return normal_points(SAMPLES, dimensions=regions + 1, generator=generator)


def _drawn(means: FloatArray, normal: FloatArray) -> FloatArray:
    """Counts with the variance of Poisson's, from standard normal numbers."""
    counts = means + np.sqrt(np.maximum(means, 0.0)) * normal
    return np.asarray(np.maximum(counts, FEWEST * means), dtype=np.float64)


def _check(config: Config) -> None:
    """Refuse what has no closed form."""
    curved = config.points.curved
    if config.mass > 0 or curved:
        given = f"{config.points.curvature} curvature" if curved else f"mass {config.mass:g}"
        raise refuse(
            "exact twin",
            given=given,
            allowed="the massless field on the flat patch, whose modes are known",
            do="take one of the other levels, which lay quasi-uniform points",
        )
    if config.patch_rule.kind == "none":
        raise refuse(
            "continuum twin",
            given="no cut in the first stage",
            allowed="a patch rule that names a wavenumber: root_count or fixed_number",
            do="cut in the first stage; without a cut there is no wavenumber to share",
        )


def _read(
    config: Config, found: DiamondModes, whole: float, own: FloatArray, counts: FloatArray
) -> _Read:
    """Everything at given counts; `whole` and own**2/counts are what thresholds are made of."""
    rule = config.patch_rule
    cut = cuts.threshold(rule, own=whole, union=whole, regions=1)
    kept = cuts.keep(found.values, rule, cut=cut)
    modes = DiamondModes(found.values[kept], found.wavenumbers[kept], found.odd[kept])
    union = float(own.sum()) ** 2 / float(counts.sum())
    blocks = [_block(config, modes, k, float(n), union) for k, n in enumerate(own**2 / counts)]
    count = len(blocks)
    numbers = Entropies(config, 2 * modes.values.size, blocks, [ENDLESS] * count, list(own))
    entropy = [r.entropy for r in numbers.regions()]
    both = [entropy[0], entropy[0]]
    if count > 1:
        both = [u.entropy for u in numbers.union(tuple(range(count))).values()]
    pairs = [
        [entropy[a] + entropy[b] - u.entropy for u in numbers.union((a, b)).values()]
        for a, b in itertools.combinations(range(count), 2)
    ]
    return _Read(
        np.concatenate(
            [
                [modes.values.size],
                [int(block.kept.sum()) for block in blocks],
                entropy,
                both,
                [support for support, _ in pairs],
                [direct_sum for _, direct_sum in pairs],
            ]
        ),
        tuple(block.spectrum.pairs.values for block in blocks),
    )


def _block(config: Config, modes: DiamondModes, index: int, own: float, union: float) -> Block:
    """What the second stage keeps of one region."""
    factor = gaussian.compressed(region_factor(modes, config.regions[index].extent))
    spectrum = gaussian.restricted_spectrum(factor)
    rule = config.region_rule
    cut = cuts.threshold(rule, own=own, union=union, regions=len(config.regions))
    kept = cuts.keep(spectrum.pairs.values, rule, cut=cut)
    return Block(spectrum, cut, kept, gaussian.projected(spectrum, kept))
