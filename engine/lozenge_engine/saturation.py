"""The chain as its blocks grow at a fixed mass: where growth ends."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.geometry import Region, check_regions
from lozenge_engine.kernels.chain import chain_entropies, refined_limit
from lozenge_engine.routes import PATCH_LENGTH, fractions, on_sites, unseen

__all__ = ["ChainSizes", "chain_sizes"]

FloatArray = NDArray[np.float64]
Report = Callable[[str, float], None]


class ChainSizes(NamedTuple):
    """Entropy of the chain's blocks as they grow at a fixed lattice and mass.

    Attributes
    ----------
    lengths : ndarray, shape (M,), float64
        Mean length l of the blocks as taken, in patch half-widths.
    x : ndarray, shape (M,), float64
        Mean over the blocks of ln(sites in the block).
    entropy : ndarray, shape (M,), float64
        Of all blocks together, in nats, on `sites`.
    change : ndarray, shape (M,), float64
        Entropy minus that of the first layout, in the limit of a fine lattice: free of the
        cutoff while all layouts have as many ends inside.
    change_error : ndarray, shape (M,), float64
        How far that may be off.
    mass, order : float, float
        In inverse patch half-widths; Renyi order.
    sites : int
        Of the finest chain.
    notes : tuple of str
        What of the geometry the chain does not see.
    """

    lengths: FloatArray
    x: FloatArray
    entropy: FloatArray
    change: FloatArray
    change_error: FloatArray
    mass: float
    order: float
    sites: int
    notes: tuple[str, ...]

    @property
    def saturation(self) -> float:
        """Length 1/m beyond which growth ends, in patch half-widths; infinite without a mass."""
        return 1.0 / self.mass if self.mass > 0 else math.inf


def chain_sizes(
    layouts: Sequence[tuple[Region, ...]],
    *,
    mass: float,
    order: float = 1.0,
    sites: int = 200,
    report: Report | None = None,
) -> ChainSizes:
    """Entropy of the chain's blocks for layouts of growing size, mass and lattice fixed.

    Parameters
    ----------
    layouts : sequence of tuple of Region
        The same regions at several sizes, as a size sweep has them.
    mass : float
        In inverse patch half-widths, >= 0.
    order : float
        Renyi order.
    sites : int
        Of the coarsest of four chains, each twice as long as the one before; ends of blocks are
        rounded to its sites, so `lengths` are those taken.
    report : callable or None
        As for `chain_route`, before each layout.

    Returns
    -------
    ChainSizes
        In the order of the layouts.

    Raises
    ------
    InputError
        As for `chain_route`.
    Cancelled
        If `report` raises it.

    Notes
    -----
    Growth with l ends once m l > 1 (arXiv:0905.4013, common knowledge).  Cost: as for
    `chain_route` for each layout.
    """
    counts = [sites * 2**j for j in range(4)]
    found, lengths, x = [], [], []
    for k, layout in enumerate(layouts):
        if report is not None:
            report("chain", k / len(layouts))
        check_regions(tuple(layout))
        _, taken = on_sites(fractions(layout), sites)
        everything = (tuple(range(len(taken))),)
        found.append(
            [
                chain_entropies(
                    taken,
                    everything,
                    sites=n,
                    mass_over_sites=PATCH_LENGTH * mass / (n + 1),
                    order=order,
                )[0]
                for n in counts
            ]
        )
        widths = np.array([b - a for a, b in taken])
        lengths.append(PATCH_LENGTH * widths.mean())
        x.append(np.log(counts[-1] * widths).mean())
    values = np.array(found)
    limits = [refined_limit(row, order=order) for row in values - values[0]]
    return ChainSizes(
        np.array(lengths),
        np.array(x),
        values[:, -1],
        np.array([limit.value for limit in limits]),
        np.array([limit.error for limit in limits]),
        mass,
        order,
        counts[-1],
        unseen([region for layout in layouts for region in layout]),
    )
