"""What the views are drawn from: finished records, put together once for all of them."""

from __future__ import annotations

from typing import TYPE_CHECKING, Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Setup
from lozenge_engine.result import Result

if TYPE_CHECKING:
    from collections.abc import Sequence

    from lozenge_engine.kernels.scaling import Estimate
    from lozenge_engine.sweeps import Average, ScalingCurve, SeparationCurve

__all__ = ["RULE_NAMES", "CampaignChoices", "Choices", "Scene", "Spread", "spread"]

UnionRule = Literal["support", "direct_sum"]

RULE_NAMES = {"support": "by support", "direct_sum": "direct sum"}
"""The two union rules in words."""


class Choices(NamedTuple):
    """What the views' own switches say."""

    union_rule: UnionRule = "support"
    entropies: Literal["values", "modes"] = "values"
    scaling: Literal["density", "size"] = "density"
    separation: Literal["mutual", "union"] = "mutual"


class CampaignChoices(NamedTuple):
    """What the switches of a campaign's views say."""

    quantity: Literal["entropy", "mutual"] = "entropy"


class Spread(NamedTuple):
    """Estimates as columns of shape (M,); NaN where not known."""

    mean: NDArray[np.float64]
    error: NDArray[np.float64]


def spread(estimates: Sequence[Estimate]) -> Spread:
    """Means and standard errors of a sequence of estimates, as columns."""
    return Spread(
        np.array([e.mean for e in estimates], dtype=float),
        np.array([e.error for e in estimates], dtype=float),
    )


class Scene(NamedTuple):
    """Everything that the page shows at one moment.

    Attributes
    ----------
    setup : Setup
        What the user set.
    result : Result
        The sprinkling in front.
    average : Average or None
        Over the sprinklings finished so far, the one in front among them.
    density, size : ScalingCurve or None
        The two sweeps of scale.
    separation : SeparationCurve or None
        The sweep of separation.
    continuum : ndarray, shape (count,), float64
        Exact eigenvalues of the patch in the continuum, massless.
    reference : Scene or None
        The scene kept for comparison.
    """

    setup: Setup
    result: Result
    average: Average | None = None
    density: ScalingCurve | None = None
    size: ScalingCurve | None = None
    separation: SeparationCurve | None = None
    continuum: NDArray[np.float64] = np.empty(0)
    reference: Scene | None = None
