"""The cut state of a patch with everything that its checks and its modes are read from."""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple, cast

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Config
from lozenge_engine.geometry import PATCH_EXTENT
from lozenge_engine.kernels.curved import Counting, counting
from lozenge_engine.kernels.gaussian import restricted
from lozenge_engine.kernels.modes import Modes
from lozenge_engine.kernels.order import Commutator
from lozenge_engine.pipeline import compute, prepare
from lozenge_engine.pointfile import PointFile
from lozenge_engine.result import Result
from lozenge_engine.stages import Stages

__all__ = ["PatchState", "patch_state", "positions"]

FloatArray = NDArray[np.float64]
Report = Callable[[str, float], None]


class PatchState(NamedTuple):
    """The numbers of a configuration, its modes and its operator.

    Attributes
    ----------
    result : Result
        All numbers.
    modes : Modes
        The patch's modes, of which the first `result.patch.kept_modes` are kept.
    operator : Commutator
        The uncut commutator.
    counting : Counting
        How the points count.
    """

    result: Result
    modes: Modes
    operator: Commutator
    counting: Counting

    @property
    def kept(self) -> FloatArray:
        """Kept positive eigenvalues, descending."""
        return self.modes.values[: self.result.patch.kept_modes]

    @property
    def density(self) -> float:
        """Points per unit area in the middle of the patch."""
        return self.result.config.points.density * self.counting.ratio

    def factor(self, rows: NDArray[np.intp]) -> FloatArray:
        """Factor of the cut state on some rows.

        Parameters
        ----------
        rows : ndarray of int, shape (n,)
            Elements.

        Returns
        -------
        ndarray, shape (n, 2 r), float64
            As `lozenge_engine.kernels.gaussian.restricted`.
        """
        return restricted(self.kept, self.modes.vectors, rows)

    def weight_roots(self, rows: NDArray[np.intp]) -> FloatArray:
        """Factor between a vector of the operator and the function that it stands for.

        Parameters
        ----------
        rows : ndarray of int, shape (n,)
            Elements.

        Returns
        -------
        ndarray, shape (n,), float64
            Square roots of the points' weights; 1 except for evenly laid points in a curved patch.
        """
        weights = self.counting.weights
        return np.ones(rows.size) if weights is None else np.sqrt(weights[rows])


def patch_state(
    config: Config,
    *,
    stages: Stages,
    points: PointFile | None = None,
    report: Report | None = None,
) -> PatchState:
    """Compute a configuration and take its modes and its operator out of the cache.

    Parameters
    ----------
    config : Config
        What to compute.
    stages : Stages
        Cache to use and fill.
    points : PointFile or None
        The imported points, when the configuration asks for them.
    report : callable or None
        As for `lozenge_engine.pipeline.compute`.

    Returns
    -------
    PatchState
        Of one sprinkling.

    Raises
    ------
    InputError
        If the configuration cannot be computed.
    Cancelled
        If `report` raises it.

    Notes
    -----
    Cost: `lozenge_engine.pipeline.compute`; milliseconds where the cache holds the modes.
    """
    result = compute(config, points=points, stages=stages, report=report)
    key, found = prepare(config, points=points, stages=stages)
    of_operator = ("order", *cast(tuple[object, ...], key)[1:])
    operator = stages.peek(of_operator)
    if operator is None:  # another thread has filled the cache in between
        own = Stages(compiled=stages.compiled)
        own.put(key, found)
        prepare(config, points=points, stages=own)
        operator = own.peek(of_operator)
    return PatchState(
        result,
        cast(tuple[Modes, object], found)[0],
        cast(Commutator, operator),
        counting(result.u, result.v, source=config.points),
    )


def positions(u: FloatArray, v: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Time and position of points.

    Parameters
    ----------
    u, v : ndarray, shape (n,), float64
        Light-cone coordinates, in patch half-widths.

    Returns
    -------
    t, x : ndarray, shape (n,), float64
        In patch half-widths.
    """
    return (u + v) * PATCH_EXTENT, (u - v) * PATCH_EXTENT
