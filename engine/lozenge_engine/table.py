"""Samples as bytes in a results file, and as arrays of a whole sprinkling."""

from __future__ import annotations

import math
import zlib
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.checks import checked_number, checked_whole
from lozenge_engine.design import Design, Sprinkling
from lozenge_engine.errors import refuse
from lozenge_engine.plan import MAX_REALISATIONS
from lozenge_engine.realisation import Record, Sample

__all__ = ["Row", "SampleRow", "Table", "arrays", "packed", "rows_of", "sprinkling_of"]

FloatArray = NDArray[np.float64]
Numbers = tuple[FloatArray, ...]
"""One array for each cell."""
Row = tuple[int, int, float | None, str, str]
"""Seed, elements, ordering fraction (None for NaN), status, reason."""
SampleRow = tuple[int, int, bytes]
"""Cell, trusted, numbers."""


class Table(NamedTuple):
    """All samples of one sprinkling: R realisations, done and not failed, ascending; C cells.

    Cells are in the order of `lozenge_engine.design.Sprinkling.cells`; cell c has K_c regions and
    P_c = K_c (K_c - 1)/2 pairs.

    Attributes
    ----------
    realisation : ndarray, shape (R,), int64
        Which ones.
    seconds, elements, ordering_fraction : ndarray, shape (R,), float64
        CPU time in seconds, elements of the patch, related pairs over all pairs (NaN for none).
    trusted : ndarray, shape (R, C), bool
        Whether a sample's certificate holds and no number carries a mark.
    region_elements, kept, entropy : tuple over C of ndarray, shape (R, K_c), float64
        Elements, kept positive modes and entropy in nats of each region.
    union_support, union_direct_sum : ndarray, shape (R, C), float64
        Entropy of all regions together, in nats.
    pair_support, pair_direct_sum, cross_block : tuple over C of ndarray, shape (R, P_c), float64
        Mutual information of each pair, in nats, and the norm of its cross block.
    """

    realisation: NDArray[np.int64]
    seconds: FloatArray
    elements: FloatArray
    ordering_fraction: FloatArray
    trusted: NDArray[np.bool_]
    region_elements: Numbers
    kept: Numbers
    entropy: Numbers
    union_support: FloatArray
    union_direct_sum: FloatArray
    pair_support: Numbers
    pair_direct_sum: Numbers
    cross_block: Numbers


def packed(sample: Sample, *, regions: int) -> bytes:
    """Write a sample's numbers as bytes.

    Parameters
    ----------
    sample : Sample
        What was computed for one cell.
    regions : int
        Regions K of that cell.

    Returns
    -------
    bytes
        3 K + 2 + 3 K (K - 1)/2 little-endian doubles in the order of the sample's fields.

    Raises
    ------
    InputError
        If the arrays are of other shapes.
    """
    pairs = regions * (regions - 1) // 2
    shapes = ((regions,),) * 3 + ((), ()) + ((pairs,),) * 3
    values = [np.asarray(x, dtype=np.float64) for x in sample[:-1]]
    if any(value.shape != shape for value, shape in zip(values, shapes, strict=True)):
        raise refuse(
            "sample",
            given=f"arrays of shapes {[value.shape for value in values]}",
            allowed=f"those of {regions} regions and {pairs} pairs",
            do="record what this campaign computed",
        )
    return np.concatenate([value.ravel() for value in values]).astype("<f8").tobytes()


def sprinkling_of(layout: Design, sprinkling: int) -> Sprinkling:
    """Find a sprinkling by its index.

    Parameters
    ----------
    layout : Design
        The campaign.
    sprinkling : int
        Index of `Design.sprinklings`, from 0.

    Returns
    -------
    Sprinkling
        That one.

    Raises
    ------
    InputError
        If there is none.
    """
    last = len(layout.sprinklings) - 1
    return layout.sprinklings[checked_whole("sprinkling", sprinkling, low=0, high=last)]


def rows_of(record: Record, layout: Design) -> tuple[tuple[int, int], Row, list[SampleRow]]:
    """Write a record as rows of a results file.

    Parameters
    ----------
    record : Record
        A finished realisation.
    layout : Design
        The campaign that it must belong to.

    Returns
    -------
    key : tuple of int
        Sprinkling and realisation.
    row : Row
        What is known of the realisation, but for times and versions.
    samples : list of SampleRow
        One for each cell, by its index of `Design.cells`, ascending.

    Raises
    ------
    InputError
        If its seed, or number or shapes of its samples, are not those of the campaign.
    """
    own = sprinkling_of(layout, record.sprinkling)
    checked_whole("realisation", record.realisation, low=0, high=MAX_REALISATIONS)
    checked_whole("elements", record.elements, low=0, high=2**53)
    checked_number("seconds", record.seconds, low=0.0, high=1e15, allowed="seconds from 0")
    seed = layout.seed(record.sprinkling, record.realisation)
    if record.seed != seed or len(record.samples) != (0 if record.reason else len(own.cells)):
        raise refuse(
            f"realisation {record.realisation} of sprinkling {record.sprinkling}",
            given=f"seed {record.seed} and {len(record.samples)} samples"
            + (f", failed: {record.reason}" if record.reason else ""),
            allowed=f"seed {seed} and {len(own.cells)} samples, or none and a reason",
            do="record what this campaign computed",
        )
    samples = []
    for i, sample in zip(own.cells, record.samples, strict=not record.reason):
        regions = len(layout.cells[i].config.regions)
        samples.append((i, int(sample.trusted), packed(sample, regions=regions)))
    fraction = float(record.ordering_fraction)
    row = (
        seed,
        record.elements,
        None if math.isnan(fraction) else fraction,
        "failed" if record.reason else "done",
        record.reason.encode("utf-8", "replace").decode("utf-8"),
    )
    return (record.sprinkling, record.realisation), row, sorted(samples)


def arrays(
    realisations: Sequence[tuple[int, float, int, float | None]],
    samples: Sequence[Sequence[tuple[int, int, bytes, int]]],
    *,
    regions: Sequence[int],
) -> Table:
    """Make the table of a sprinkling out of rows of a results file.

    Parameters
    ----------
    realisations : sequence of tuple, length R
        Realisation, seconds, elements, ordering fraction; ascending.
    samples : sequence of sequences of tuple, C of length R
        For each cell: realisation, trusted, numbers as `packed` wrote them, their CRC-32.
    regions : sequence of int, length C
        Regions of each cell.

    Returns
    -------
    Table
        Of float64 in the byte order of this machine.

    Raises
    ------
    ValueError
        If a sample is missing, of a wrong length or does not have its checksum.
    """
    rows = np.array(realisations, dtype=np.float64).reshape(len(realisations), 4)
    trusted = np.empty((len(rows), len(samples)), dtype=np.bool_)
    fields = []
    wanted = [row[0] for row in realisations]
    for c, (own, k) in enumerate(zip(samples, regions, strict=True)):
        if [row[0] for row in own] != wanted:
            raise ValueError("samples that do not belong to a finished realisation, or none")
        trusted[:, c] = [row[1] for row in own]
        fields.append(_unpacked([row[2] for row in own], [row[3] for row in own], regions=k))
    elements, kept, entropy, support, direct_sum, *pairs = zip(*fields, strict=True)
    pair_support, pair_direct_sum, cross_block = pairs
    unions = np.hstack(support), np.hstack(direct_sum)
    numbers = rows[:, 0].astype(np.int64)
    for array in (rows, trusted, numbers, *unions):
        array.flags.writeable = False
    return Table(
        numbers,
        rows[:, 1],
        rows[:, 2],
        rows[:, 3],
        trusted,
        elements,
        kept,
        entropy,
        *unions,
        pair_support,
        pair_direct_sum,
        cross_block,
    )


def _unpacked(blobs: Sequence[bytes], checksums: Sequence[int], *, regions: int) -> Numbers:
    """The eight fields of one cell's samples, each of shape (R, width)."""
    pairs = regions * (regions - 1) // 2
    widths = (regions,) * 3 + (1, 1) + (pairs,) * 3
    if set(map(len, blobs)) - {8 * sum(widths)}:
        raise ValueError("samples of a wrong length")
    if any(map(int.__ne__, map(zlib.crc32, blobs), checksums)):
        raise ValueError("samples whose bytes have changed")
    data = np.frombuffer(b"".join(blobs), dtype="<f8").astype(np.float64, copy=False)
    data = data.reshape(len(blobs), sum(widths))
    data.flags.writeable = False
    return tuple(np.split(data, np.cumsum(widths)[:-1], axis=1))
