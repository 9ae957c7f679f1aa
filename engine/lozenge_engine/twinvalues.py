"""The continuum twin of one geometry as a value: every number with its error."""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from typing import Literal, NamedTuple, get_args

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Config
from lozenge_engine.errors import refuse
from lozenge_engine.kernels.twin import combined
from lozenge_engine.twinsets import SetReading

__all__ = [
    "QUANTITIES",
    "Quantity",
    "Twin",
    "TwinValue",
    "assembled",
    "column_of",
    "quantity_of",
    "together",
]

FloatArray = NDArray[np.float64]
Quantity = Literal[
    "entropy", "union_support", "union_direct_sum", "pair_support", "pair_direct_sum"
]
QUANTITIES: tuple[Quantity, ...] = get_args(Quantity)


FLOOR = 0.12
"""Floor of `lozenge_engine.kernels.twin.combined` for the entropy of one region, in nats, times
the root of the regions for a union: with it the exact twin lies 0.6 to 1.0 errors away (root mean
square over geometries and densities)."""


class TwinValue(NamedTuple):
    """One number of a twin.

    Attributes
    ----------
    value : float
        NaN where the pipeline gives none.
    error : float
        Half-width like one standard error, from the spread of sets, offsets and sizes.
    """

    value: float
    error: float


class Twin(NamedTuple):
    """The continuum twin of one geometry with K regions.

    Attributes
    ----------
    config : Config
        Whose twin it is.
    oversampling : int
        The largest among its sets; 0 for the exact twin.
    sets : int
        Sets read.
    patch, patch_spread : ndarray, shape (r,), float64
        Positive eigenvalues by rank, descending, in units of the configuration's own density, and
        their errors.
    regions, regions_spread : tuple of ndarray, shape (k,), float64
        The same for each region's restricted operator.
    patch_kept, kept : TwinValue, tuple of TwinValue
        Positive modes kept in the patch and in each region.
    entropy : tuple of TwinValue
        Of each region, in nats.
    union_support, union_direct_sum : TwinValue
        Of all regions; of the region itself for K = 1.
    pair_support, pair_direct_sum : tuple of TwinValue
        Mutual information of all pairs a < b in lexicographic order.
    seconds : float
        Wall time, with that of all layouts computed together.
    readings : tuple of SetReading
        Each set by itself; none for the exact twin.
    """

    config: Config
    oversampling: int
    sets: int
    patch: FloatArray
    patch_spread: FloatArray
    regions: tuple[FloatArray, ...]
    regions_spread: tuple[FloatArray, ...]
    patch_kept: TwinValue
    kept: tuple[TwinValue, ...]
    entropy: tuple[TwinValue, ...]
    union_support: TwinValue
    union_direct_sum: TwinValue
    pair_support: tuple[TwinValue, ...]
    pair_direct_sum: tuple[TwinValue, ...]
    seconds: float
    readings: tuple[SetReading, ...]


def _spectrum(spectra: Sequence[FloatArray], ratios: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Eigenvalues by rank with their errors, as many as every set has."""
    count = min(values.size for values in spectra)
    return combined(np.stack([values[:count] for values in spectra]), ratios=ratios)


def together(config: Config, readings: tuple[SetReading, ...], *, seconds: float) -> Twin:
    """One value and error for every number.

    Parameters
    ----------
    config : Config
        Whose twin it is.
    readings : tuple of SetReading
        Of its sets, two or more.
    seconds : float
        Wall time that they took.

    Returns
    -------
    Twin
        By `lozenge_engine.kernels.twin.combined`.
    """
    ratios = np.array([r.ratio for r in readings])
    count = len(config.regions)
    pairs = count * (count - 1) // 2
    # Of how many regions each entropy is; kept modes are whole numbers and need no floor, and in
    # mutual informations most of the error cancels.
    members = np.repeat([0.0, 1.0, count, 0.1], [1 + count, count, 2, 2 * pairs])
    value, error = combined(
        np.stack([r.numbers for r in readings]),
        np.stack([r.unsharp for r in readings]),
        ratios=ratios,
        floor=FLOOR * np.sqrt(members),
    )
    return assembled(
        config,
        value,
        error,
        patch=_spectrum([r.patch for r in readings], ratios),
        regions=[_spectrum([r.regions[k] for r in readings], ratios) for k in range(count)],
        seconds=seconds,
        readings=readings,
    )


def assembled(
    config: Config,
    value: FloatArray,
    error: FloatArray,
    *,
    patch: tuple[FloatArray, FloatArray],
    regions: Sequence[tuple[FloatArray, FloatArray]],
    seconds: float,
    readings: tuple[SetReading, ...] = (),
) -> Twin:
    """A twin from its numbers.

    Parameters
    ----------
    config : Config
        Whose twin it is, K regions.
    value, error : ndarray, shape (q,), float64
        In the order of `SetReading`.
    patch : tuple of ndarray
        Eigenvalues of the patch and their errors.
    regions : sequence of tuple of ndarray
        The same for each region.
    seconds : float
        Wall time.
    readings : tuple of SetReading
        Each set by itself; none if there were no sets.

    Returns
    -------
    Twin
        The numbers by name.
    """
    numbers = [TwinValue(float(a), float(b)) for a, b in zip(value, error, strict=True)]
    count = len(config.regions)
    pairs = count * (count - 1) // 2
    ends = itertools.accumulate((0, 1, count, count, 1, 1, pairs, pairs))
    parts = [tuple(numbers[low:high]) for low, high in itertools.pairwise(ends)]
    return Twin(
        config=config,
        oversampling=max((r.points.oversampling for r in readings), default=0),
        sets=len(readings),
        patch=patch[0],
        patch_spread=patch[1],
        regions=tuple(values for values, _ in regions),
        regions_spread=tuple(spread for _, spread in regions),
        patch_kept=parts[0][0],
        kept=parts[1],
        entropy=parts[2],
        union_support=parts[3][0],
        union_direct_sum=parts[4][0],
        pair_support=parts[5],
        pair_direct_sum=parts[6],
        seconds=seconds,
        readings=readings,
    )


def quantity_of(twin: Twin, quantity: Quantity = "union_support", *, index: int = 0) -> TwinValue:
    """One number of a twin by name.

    Parameters
    ----------
    twin : Twin
        The twin.
    quantity : str
        One of `QUANTITIES`.
    index : int
        Which region, for ``entropy``, or which pair; otherwise unused.

    Returns
    -------
    TwinValue
        The number.

    Raises
    ------
    InputError
        If there is no such quantity, region or pair.
    """
    column = column_of(len(twin.config.regions), quantity, index=index)
    found = getattr(twin, quantity)
    one: TwinValue = found if column and isinstance(found, TwinValue) else found[index]
    return one


def column_of(count: int, quantity: Quantity, *, index: int = 0) -> int:
    """Where a quantity stands among the numbers of a `SetReading`.

    Parameters
    ----------
    count : int
        Regions, K.
    quantity : str
        One of `QUANTITIES`.
    index : int
        Which region or pair; 0 for a union.

    Returns
    -------
    int
        Its column.

    Raises
    ------
    InputError
        If there is no such quantity, region or pair.
    """
    if quantity not in QUANTITIES:
        raise refuse(
            "quantity", given=quantity, allowed=", ".join(QUANTITIES), do="choose one of them"
        )
    pairs = count * (count - 1) // 2
    first, entries = {
        "entropy": (1 + count, count),
        "union_support": (1 + 2 * count, 1),
        "union_direct_sum": (2 + 2 * count, 1),
        "pair_support": (3 + 2 * count, pairs),
        "pair_direct_sum": (3 + 2 * count + pairs, pairs),
    }[quantity]
    if not 0 <= index < entries:
        raise refuse(
            f"index of {quantity}",
            given=index,
            allowed=f"0 to {entries - 1} for {count} regions" if entries else "two regions or more",
            do="choose another region or pair",
        )
    return first + index
