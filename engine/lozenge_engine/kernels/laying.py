"""The points that a source stands for: sprinkled, or laid out evenly."""

from __future__ import annotations

import numpy as np

from lozenge_engine.errors import refuse
from lozenge_engine.geometry import PATCH_AREA
from lozenge_engine.kernels.points import (
    UNIT,
    Coordinates,
    golden_lattice,
    scrambled_sobol,
    sprinkle,
)
from lozenge_engine.source import PointSource

__all__ = ["laid"]

OFFSET_TAG, SCRAMBLE_TAG = 0x4C5B, 0x4C5C  # separate these streams from the sprinkling's
PLASTIC = (0.7548776662466927, 0.5698402909980532)
"""1/p and 1/p^2 with p^3 = p + 1: steps of a low-discrepancy sequence in the unit square."""


def laid(source: PointSource, *, realisation: int = 0) -> Coordinates:
    """The points of a source.

    A lattice is shifted by a low-discrepancy sequence in `realisation` that starts at a place
    given by the seed; the scrambling of a Sobol set is drawn from both.

    Parameters
    ----------
    source : PointSource
        Of any kind but imported points.
    realisation : int
        Number of the sprinkling, the shift or the scrambling, >= 0.

    Returns
    -------
    Coordinates
        Ascending u.  Quasi-uniform points lie evenly in the coordinates, in curved patches too;
        `lozenge_engine.kernels.curved.counting` says how they count.

    Raises
    ------
    InputError
        For imported points; if two points share u or v (improbable).
    """
    words = [source.seed & 0xFFFFFFFF, source.seed >> 32]
    if source.kind == "lattice":
        start = np.random.PCG64(np.random.SeedSequence([*words, OFFSET_TAG])).random_raw(2)
        u0, v0 = (int(word >> np.uint64(11)) * UNIT for word in start)
        count = round(PATCH_AREA * source.density * source.oversampling)
        shift = (u0 + realisation * PLASTIC[0]) % 1.0, (v0 + realisation * PLASTIC[1]) % 1.0
        return golden_lattice(count, offset=shift)
    if source.kind == "sobol":
        key = np.random.SeedSequence([*words, realisation, SCRAMBLE_TAG])
        return scrambled_sobol(source.log2_points, seed=int(key.generate_state(1, np.uint64)[0]))
    if source.kind == "file":
        raise refuse(
            "points",
            given="imported points",
            allowed="points that are drawn or laid",
            do="read them from their file",
        )
    return sprinkle(
        density=source.density,
        seed=source.seed,
        realisation=realisation,
        fixed=source.kind == "fixed",
        curvature=source.curvature,
        radius=source.radius,
    )
