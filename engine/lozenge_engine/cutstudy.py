"""What the cut does: every number of one sprinkling against the multiple alpha of the threshold.

A curve is one rule at one stage.  Where the first stage moves alone, the regions keep the rule of
the configuration; where the regions move alone, the patch does.
"""

from __future__ import annotations

import itertools
import time
from collections.abc import Callable, Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.checks import checked_number
from lozenge_engine.config import Config
from lozenge_engine.cutcurves import Carried, Curves, CutCurve
from lozenge_engine.errors import refuse
from lozenge_engine.evidence import RULES, STAGES, CutRule, Stage
from lozenge_engine.ground import ground
from lozenge_engine.pointfile import PointFile
from lozenge_engine.stages import Stages
from lozenge_engine.threads import blas_threads

__all__ = ["Carried", "CutCurve", "CutStudy", "alpha_row", "cut_study"]

FloatArray = NDArray[np.float64]
Report = Callable[[str, float], None]

LEAST_ALPHA, MOST_ALPHA = 0.05, 20.0
FLOOR_MARGIN = 0.97
"""The search goes a little below the lowest cut, as the pipeline's does."""
NUMBER_MARGIN = 0.85
"""And this far where a fixed number of modes is asked for: spectra fall short of the nominal."""


class CutStudy(NamedTuple):
    """A cut study of one sprinkling.

    Attributes
    ----------
    config : Config
        What was studied.
    alphas : ndarray, shape (M,), float64
        Multiples of the threshold, increasing.
    pair : tuple of int
        The nearest pair of regions; (0, 0) for one.
    elements : tuple of float
        Elements of the K regions at the density of the geometry.
    patch_elements : float
        Of the patch.
    curves : tuple of CutCurve
        Stage by stage, rule by rule, then those of the uncut space.
    carried : tuple of Carried
        For each region; empty if not asked for.
    floor_seconds, seconds : float
        Wall time to reach the lowest cut, and of everything else.
    trusted : bool
        Whether the certificate of the patch's modes holds.
    """

    config: Config
    alphas: FloatArray
    pair: tuple[int, int]
    elements: tuple[float, ...]
    patch_elements: float
    curves: tuple[CutCurve, ...]
    carried: tuple[Carried, ...]
    floor_seconds: float
    seconds: float
    trusted: bool


def alpha_row(alphas: Sequence[float]) -> FloatArray:
    """Check multiples of the threshold.

    Parameters
    ----------
    alphas : sequence of float
        Two or more, increasing, 0.05 to 20.

    Returns
    -------
    ndarray, shape (M,), float64
        The same.

    Raises
    ------
    InputError
        If they are fewer, do not increase or are out of range.
    """
    row = [
        checked_number("alpha", value, low=LEAST_ALPHA, high=MOST_ALPHA, allowed="0.05 to 20")
        for value in alphas
    ]
    if len(row) < 2 or any(b <= a for a, b in itertools.pairwise(row)):
        raise refuse(
            "alphas",
            given=f"{len(row)} values" + (" that do not increase" if len(row) > 1 else ""),
            allowed="two or more multiples of the threshold, increasing",
            do="sort them and drop doubles",
        )
    return np.array(row)


def cut_study(
    config: Config,
    *,
    alphas: Sequence[float],
    stages: Sequence[Stage] = STAGES,
    rules: Sequence[CutRule] = RULES,
    uncut_space: bool = False,
    per_mode: bool = False,
    points: PointFile | None = None,
    cache: Stages | None = None,
    report: Report | None = None,
) -> CutStudy:
    """Compute one sprinkling at every alpha, for every stage and rule.

    Parameters
    ----------
    config : Config
        The sprinkling, its regions, its rules where a stage stands still, its Renyi order.
    alphas : sequence of float
        Increasing multiples of the threshold, 0.05 to 20.
    stages, rules : sequence of str
        Which of `evidence.STAGES` and `evidence.RULES`.  Where the patch moves with the regions
        ("both") it is cut by its own root count, as in the named truncation modes.
    uncut_space : bool
        Whether every curve is repeated with the kept space of the uncut restricted operator.
    per_mode : bool
        Whether to find out which modes carry the entropy.
    points : PointFile or None
        The imported points, when the configuration asks for them.
    cache : Stages or None
        Cache of the patch's modes, which is extended to the lowest cut.
    report : callable or None
        Called as ``report(stage, fraction)``; may raise `Cancelled`.

    Returns
    -------
    CutStudy
        Numbers that cannot be given are NaN, with their reason.

    Raises
    ------
    InputError
        If the alphas or the configuration cannot be computed.
    Cancelled
        If `report` raises it.

    Notes
    -----
    A fixed number of modes at alpha is the nominal one, 2 sqrt(n)/alpha of the region's expected
    elements, rounded.  Cost: the patch's modes; for every alpha at which the first stage moves the
    eigenpairs of the regions and of their unions, 7 d**3 flops with d rows or columns of their
    factors, whichever are fewer; for every kept space of d vectors 5 d**3 flops, once each.
    """
    row = alpha_row(alphas)
    say = report or (lambda _stage, _fraction: None)
    start = time.perf_counter()
    base = ground(
        config,
        floor=_floor(config, row, stages, rules),
        points=points,
        stages=cache or Stages(),
        report=report,
    )
    middle = time.perf_counter()
    with blas_threads(1):
        study = Curves(base, row, uncut_space=uncut_space)
        wanted = [(stage, rule) for stage in stages for rule in rules]
        columns = study.columns(wanted, say)
        carried = study.carried() if per_mode else ()
    return CutStudy(
        config=config,
        alphas=row,
        pair=study.pair,
        elements=base.counts,
        patch_elements=base.elements,
        curves=tuple(columns),
        carried=carried,
        floor_seconds=middle - start,
        seconds=time.perf_counter() - middle,
        trusted=base.certificate.met,
    )


def _floor(config: Config, row: FloatArray, stages: Sequence[str], rules: Sequence[str]) -> float:
    """How far down the patch's modes are needed, in units of its threshold."""
    moving = any(stage != "regions" for stage in stages)
    low = float(row[0]) if moving else 1.0
    if "patch" in stages and "fixed_number" in rules:
        low *= NUMBER_MARGIN
    rule = config.patch_rule
    if rule.kind == "root_count":
        low = min(low, rule.alpha)
    elif rule.kind == "fixed_number":
        low = min(low, 2.0 * np.sqrt(config.points.elements()) / (rule.number + 2))
    elif rule.kind == "none" and any(stage == "regions" for stage in stages):
        raise refuse(
            "patch rule",
            given="none",
            allowed="a cut in the first stage, where the regions' threshold moves alone",
            do="cut in the first stage, or move both stages",
        )
    return low * FLOOR_MARGIN
