"""One realisation of a sprinkling: the unit of a campaign's work and of its results file."""

from __future__ import annotations

import time
from dataclasses import replace
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.design import Design
from lozenge_engine.errors import InputError
from lozenge_engine.kernels.laying import laid
from lozenge_engine.kernels.ranks import count_relations
from lozenge_engine.samples import Draw, Reading, take
from lozenge_engine.stages import ONE_THREAD, Stages

__all__ = ["Record", "Sample", "realise"]

FloatArray = NDArray[np.float64]


class Sample(NamedTuple):
    """The numbers of one cell on one realisation: means over its mirror images.

    Attributes
    ----------
    elements, kept : ndarray, shape (K,), float64
        Elements and kept positive modes of each region.
    entropy : ndarray, shape (K,), float64
        Of each region, in nats.
    union_support, union_direct_sum : float
        Entropy of all regions together, in nats; of the region itself for K = 1.
    pair_support, pair_direct_sum, cross_block : ndarray, shape (K (K - 1)/2,), float64
        Mutual information of each pair a < b in lexicographic order, in nats, and the norm of its
        cross block.
    trusted : bool
        Whether the certificate holds and no number carries a mark, in all images.
    """

    elements: FloatArray
    kept: FloatArray
    entropy: FloatArray
    union_support: float
    union_direct_sum: float
    pair_support: FloatArray
    pair_direct_sum: FloatArray
    cross_block: FloatArray
    trusted: bool


class Record(NamedTuple):
    """A finished realisation; never changed afterwards.

    Attributes
    ----------
    sprinkling, realisation : int
        Index of `Design.sprinklings`, and which of its realisations.
    seed : int
        The realisation's child seed.
    seconds : float
        CPU time of its computation, in seconds.
    elements : int
        Elements of the patch.
    ordering_fraction : float
        Related pairs over all pairs; NaN with fewer than two elements.
    samples : tuple of Sample
        One for each cell of the sprinkling, in its order; empty if it failed.
    reason : str
        Why it failed; otherwise empty.
    """

    sprinkling: int
    realisation: int
    seed: int
    seconds: float
    elements: int
    ordering_fraction: float
    samples: tuple[Sample, ...]
    reason: str = ""


def _mean(readings: tuple[Reading, ...]) -> Sample:
    """Mean over mirror images."""

    def mean(field: str) -> FloatArray:
        return np.asarray(np.mean([getattr(reading, field) for reading in readings], axis=0))

    return Sample(
        mean("elements"),
        mean("kept"),
        mean("entropy"),
        float(mean("union_support")),
        float(mean("union_direct_sum")),
        mean("pair_support"),
        mean("pair_direct_sum"),
        mean("cross_block"),
        all(reading.trusted for reading in readings),
    )


def _without_numbers(regions: int) -> Sample:
    """What stands for a cell that cannot be computed on a realisation."""
    one, pairs = np.full(regions, np.nan), np.full(regions * (regions - 1) // 2, np.nan)
    return Sample(one, one, one, np.nan, np.nan, pairs, pairs, pairs, trusted=False)


def realise(layout: Design, sprinkling: int, realisation: int) -> Record:
    """Draw one realisation and compute all cells that share it.

    Parameters
    ----------
    layout : Design
        The campaign.
    sprinkling, realisation : int
        Which one.

    Returns
    -------
    Record
        A cell that cannot be computed, such as one with a region of fewer than two elements, has
        NaN for numbers.  With the reason instead of samples if no cell can be computed or an array
        does not fit in memory; the same to the bit wherever and whenever it is computed with one
        thread of linear algebra and the same libraries.

    Notes
    -----
    Cost: the patch's modes once for each mass, the second stage of
    `lozenge_engine.pipeline.compute` for each placement.
    """
    own = layout.sprinklings[sprinkling]
    source = layout.source(sprinkling, realisation)
    start = time.process_time()
    points = laid(source)
    n = points.u.size
    fraction = count_relations(points.u, points.v) / (n * (n - 1) / 2) if n > 1 else float("nan")
    samples: list[Sample] = []
    reasons: list[str] = []
    stages = Stages(threads_from=ONE_THREAD, compiled=True)
    try:
        for i in own.cells:
            cell = layout.cells[i]
            draw = Draw(config=replace(cell.config, points=source), layouts=cell.layouts)
            try:
                samples.append(_mean(take(draw, stages=stages)))
            except InputError as error:
                # Of this cell alone: without the others it would select their sprinklings.
                reasons.append(str(error))
                samples.append(_without_numbers(len(cell.config.regions)))
    except MemoryError:
        samples, reasons = [], ["not enough memory"]
    if len(reasons) >= len(samples):
        samples = []
    return Record(
        sprinkling,
        realisation,
        source.seed,
        time.process_time() - start,
        n,
        fraction,
        tuple(samples),
        "" if samples else reasons[0],
    )
