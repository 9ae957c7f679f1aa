"""What the views are drawn from: finished records, put together once for all of them."""

from __future__ import annotations

from typing import TYPE_CHECKING, Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Setup
from lozenge_engine.result import Result

if TYPE_CHECKING:
    from collections.abc import Sequence

    from lozenge_engine.crossratio import MutualRecord
    from lozenge_engine.cutrecord import CutRecord
    from lozenge_engine.due import DueRecord
    from lozenge_engine.evidence import EvidencePlan
    from lozenge_engine.kernels.scaling import Estimate
    from lozenge_engine.modeview import ModeRecord
    from lozenge_engine.references import Company
    from lozenge_engine.statecheck import StateRecord
    from lozenge_engine.sweeps import Average, ScalingCurve, SeparationCurve
    from lozenge_engine.thresholds import ThresholdRecord

__all__ = [
    "RULE_NAMES",
    "CampaignChoices",
    "Choices",
    "EvidenceChoices",
    "EvidenceScene",
    "Scene",
    "Spread",
    "spread",
]

UnionRule = Literal["support", "direct_sum"]

RULE_NAMES = {"support": "by support", "direct_sum": "direct sum"}
"""The two union rules in words."""


class Choices(NamedTuple):
    """What the views' own switches say."""

    union_rule: UnionRule = "support"
    entropies: Literal["values", "modes"] = "values"
    scaling: Literal["density", "size"] = "density"
    separation: Literal["mutual", "union"] = "mutual"
    twin: bool = False
    chain: bool = False
    difference: bool = False


class CampaignChoices(NamedTuple):
    """What the switches of a campaign's views say."""

    quantity: Literal["entropy", "mutual"] = "entropy"


class EvidenceChoices(NamedTuple):
    """What the switches of the evidence page's views say."""

    cutstudy: Literal["entropy", "mutual", "slope", "kept", "modes"] = "entropy"
    thresholds: Literal["patch", "regions", "union"] = "patch"
    modeshape: Literal["real", "imaginary", "modulus"] = "real"
    statecheck: Literal["fit", "deviation", "loss"] = "fit"
    mutual: Literal["linear", "log"] = "linear"
    due: Literal["slopes", "minus"] = "slopes"
    union_rule: UnionRule = "support"


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
    beside : Company or None
        The continuum twin and the harmonic chain, as far as they are wanted and known.
    """

    setup: Setup
    result: Result
    average: Average | None = None
    density: ScalingCurve | None = None
    size: ScalingCurve | None = None
    separation: SeparationCurve | None = None
    continuum: NDArray[np.float64] = np.empty(0)
    reference: Scene | None = None
    beside: Company | None = None


class EvidenceScene(NamedTuple):
    """What the evidence page shows at one moment; None where nothing is computed yet.

    Attributes
    ----------
    setup : Setup
        The geometry that the bench sent.
    plan : EvidencePlan
        What is asked about it.
    cuts, thresholds, mode, state, mutual, due : record or None
        What the six views are drawn from.
    """

    setup: Setup
    plan: EvidencePlan
    cuts: CutRecord | None = None
    thresholds: ThresholdRecord | None = None
    mode: ModeRecord | None = None
    state: StateRecord | None = None
    mutual: MutualRecord | None = None
    due: DueRecord | None = None
