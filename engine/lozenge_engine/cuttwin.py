"""The continuum twin of a cut study: exact where its modes are known, otherwise from dense sets."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Config, Rule, Setup
from lozenge_engine.cutcurves import CutCurve, fixed_number
from lozenge_engine.cutmeans import MeanCurve, averaged
from lozenge_engine.cutstudy import CutStudy
from lozenge_engine.errors import InputError
from lozenge_engine.evidence import CutRule, EvidencePlan, Stage
from lozenge_engine.kernels.laws import nominal_modes
from lozenge_engine.stages import Stages
from lozenge_engine.sweeps import nearest_pair
from lozenge_engine.twin import twin

__all__ = ["OFFSETS", "OVERSAMPLING", "CutTwin", "Study", "cut_twin", "rules_at"]

FloatArray = NDArray[np.float64]
Report = Callable[[str, float], None]
Study = Callable[..., CutStudy]

OVERSAMPLING = {"preview": 4, "refined": 8, "long": 16, "exact": 4, "smooth": 4}
"""How densely sets are laid at each level; those of the last two where there is no closed form."""
OFFSETS = 3
"""Sets of the twin, each with its own shift."""
SAFE = 1.5
"""A set's curve ends at this over sqrt(oversampling): below, the cut comes to the lattice's own
spacing, whose order would be read as physics."""
EXACT = ("exact", "smooth")


class CutTwin(NamedTuple):
    """The twin's curves of a cut study.

    Attributes
    ----------
    curves : tuple of MeanCurve
        One for each rule, or for the geometry's own rule alone when exact.  Errors are the scatter
        of one set, and 0 when exact; exact curves are staircases in alpha, whose steps are single
        modes (0.01 to 0.02 nats), as a sprinkling's are not on the mean.
    alphas : ndarray, shape (T,), float64
        Where they are known.
    oversampling : int
        Density of the sets over the sprinkling's; 0 without sets.
    note : str
        Why there is no twin; otherwise empty.
    """

    curves: tuple[MeanCurve, ...]
    alphas: FloatArray
    oversampling: int
    note: str = ""


def cut_twin(
    setup: Setup, plan: EvidencePlan, *, study: Study, report: Report | None = None
) -> CutTwin:
    """Compute the twin of a cut study.

    Parameters
    ----------
    setup : Setup
        The geometry.
    plan : EvidencePlan
        Alphas, stage, rules and level.
    study : callable
        (config, cache, alphas, front=) -> CutStudy, for sets.
    report : callable or None
        Called as ``report("twin", fraction)``; may raise `Cancelled`.

    Returns
    -------
    CutTwin
        Without curves where there is none, with the reason.

    Raises
    ------
    Cancelled
        If `report` raises it.

    Notes
    -----
    Cost: `lozenge_engine.twin.twin` once for each alpha when exact, otherwise `cut_study` for each
    of three sets.
    """
    alphas = np.array(plan.alpha_values())
    if setup.points.quasi_uniform or setup.points.kind == "file":
        return CutTwin((), alphas[:0], 0, "no twin: these points are no sprinkling")
    try:
        if plan.level in EXACT and setup.mass == 0 and not setup.points.curved:
            return _exact(setup.config(), plan, alphas, report or (lambda _s, _f: None))
        return _laid(setup, OVERSAMPLING[plan.level], alphas, study)
    except InputError as error:
        return CutTwin((), alphas[:0], 0, f"no twin: {error}")


def _laid(setup: Setup, oversampling: int, alphas: FloatArray, study: Study) -> CutTwin:
    """Curves of dense lattices, where their own spacing does not show."""
    shown = alphas[alphas >= SAFE / np.sqrt(oversampling)]
    if shown.size < 2:
        low = SAFE / np.sqrt(oversampling)
        return CutTwin((), shown, 0, f"no twin: it needs alphas above {low:.2g}")
    source = replace(
        setup.points, kind="lattice", oversampling=oversampling, file=None, sha256=None
    )
    laid = setup.with_(points=source)
    studies = [study(laid.config(k), Stages(), shown, front=False) for k in range(OFFSETS)]
    return CutTwin(_scattered(studies), shown, oversampling)


def _scattered(studies: list[CutStudy]) -> tuple[MeanCurve, ...]:
    """Means over the twin's sets; their error is the scatter of one set, not that of the mean.

    Sets differ by their shift only and share what a lattice gets wrong.
    """
    found = []
    for each in averaged(studies):
        factor = np.sqrt(each.count)
        columns = {
            name: getattr(each.error, name) * factor
            for name in each.error._fields
            if isinstance(getattr(each.error, name), np.ndarray)
        }
        found.append(each._replace(error=each.error._replace(**columns)))
    return tuple(found)


def rules_at(config: Config, *, stage: Stage, rule: CutRule, alpha: float) -> Config:
    """The configuration whose numbers a curve has at one alpha.

    Parameters
    ----------
    config : Config
        The geometry; equal regions if the rule is a fixed number.
    stage, rule : str
        Of the curve.
    alpha : float
        Multiple of the threshold.

    Returns
    -------
    Config
        With the rules of both stages at that alpha.
    """
    source = config.points
    fixed = rule == "fixed_number"
    root = Rule(kind="root_count", alpha=alpha)
    if stage == "patch":
        number = fixed_number(source.elements(), alpha)
        return replace(
            config, patch_rule=Rule(kind="fixed_number", number=number) if fixed else root
        )
    number = fixed_number(source.elements(config.regions[0]), alpha)
    regional = Rule(kind=rule, number=number) if fixed else Rule(kind=rule, alpha=alpha)
    if stage == "regions":
        return replace(config, region_rule=regional)
    return replace(config, patch_rule=root, region_rule=regional)


def _exact(config: Config, plan: EvidencePlan, alphas: FloatArray, say: Report) -> CutTwin:
    """The closed form at every alpha, under the geometry's own rule or the first one asked for."""
    own = config.region_rule.kind
    rule = next((each for each in plan.rules if each == own), plan.rules[0])
    sizes = {round(config.points.elements(region), 9) for region in config.regions}
    if rule == "fixed_number" and len(sizes) > 1:
        return CutTwin((), alphas[:0], 0, "no twin of a fixed number in unequal regions")
    rows: list[dict[str, object]] = []
    reasons = []
    for i, alpha in enumerate(alphas):
        say("twin", i / alphas.size)
        moved = rules_at(config, stage=plan.stage, rule=rule, alpha=float(alpha))
        try:
            rows.append(_numbers(moved, float(alpha), moves_regions=plan.stage != "patch"))
            reasons.append("")
        except InputError as error:
            rows.append({})
            reasons.append(str(error))
    if not any(rows):
        return CutTwin((), alphas[:0], 0, f"no twin: {reasons[0]}")
    filled = next(row for row in rows if row)
    columns: dict[str, Any] = {
        name: np.array([row.get(name, np.full_like(value, np.nan)) for row in rows])
        for name, value in filled.items()
    }
    mean = CutCurve(
        stage=plan.stage, rule=rule, uncut_space=False, reasons=tuple(reasons), **columns
    )
    none: dict[str, Any] = {name: np.zeros_like(value) for name, value in columns.items()}
    zero = mean._replace(**none)
    return CutTwin((MeanCurve(mean, zero, 1),), alphas, 0)


def _numbers(config: Config, alpha: float, *, moves_regions: bool) -> dict[str, object]:
    """The columns of a curve at one alpha, from the closed form."""
    found = twin(config, level="exact")
    count = len(config.regions)
    entropy = np.array([value.value for value in found.entropy])
    kept = np.array([value.value for value in found.kept])
    own = np.array([nominal_modes(config.points.elements(region)) for region in config.regions])
    support = direct = np.nan
    if count > 1:
        pairs = [(a, b) for a in range(count) for b in range(a + 1, count)]
        at = pairs.index(nearest_pair(config.regions))
        support, direct = found.pair_support[at].value, found.pair_direct_sum[at].value
    patch = nominal_modes(config.points.elements()) / config.patch_rule.alpha
    if config.patch_rule.kind == "fixed_number":
        patch = float(config.patch_rule.number)
    return {
        "patch_kept": np.float64(found.patch_kept.value),
        "patch_ratio": np.float64(found.patch_kept.value / patch),
        "kept": kept,
        "ratio": kept * (alpha if moves_regions else config.region_rule.alpha) / own,
        "entropy": entropy,
        "union_support": np.float64(found.union_support.value),
        "union_direct_sum": np.float64(found.union_direct_sum.value),
        "mutual_support": np.float64(support),
        "mutual_direct_sum": np.float64(direct),
    }
