"""Cut studies of several sprinklings: means, slopes and plateaus against alpha."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.cutstudy import CutCurve, CutStudy
from lozenge_engine.errors import refuse
from lozenge_engine.evidence import CutRule, Stage
from lozenge_engine.kernels.plateaus import Plateau, plateau
from lozenge_engine.kernels.scaling import estimate, fit_independent

__all__ = ["TOLERANCES", "Level", "MeanCurve", "SlopeCurve", "averaged", "levels", "slopes"]

FloatArray = NDArray[np.float64]
Quantity = Literal["entropy", "mutual", "slope"]

TOLERANCES: dict[Quantity, float] = {"entropy": 0.05, "mutual": 0.02, "slope": 0.02}
"""Band of a plateau where errors are smaller or unknown: nats, nats, and nats per ln(l/a)."""
COLUMNS = (
    "patch_kept",
    "patch_ratio",
    "kept",
    "ratio",
    "entropy",
    "union_support",
    "union_direct_sum",
    "mutual_support",
    "mutual_direct_sum",
)


class MeanCurve(NamedTuple):
    """One rule at one stage over several sprinklings.

    Attributes
    ----------
    mean, error : CutCurve
        Means and their standard errors, of the shapes of one sprinkling's; errors are NaN with
        fewer than two sprinklings.
    count : int
        Sprinklings read.
    """

    mean: CutCurve
    error: CutCurve
    count: int  # type: ignore[assignment]  # hides tuple.count, which nobody needs here

    @property
    def key(self) -> tuple[str, str, bool]:
        """Stage, rule and space."""
        return self.mean.stage, self.mean.rule, self.mean.uncut_space


class SlopeCurve(NamedTuple):
    """Slope of S, all regions together by support, against ln(l/a) at every alpha.

    Attributes
    ----------
    stage, rule, uncut_space : str, str, bool
        As in `CutCurve`.
    slope, error : ndarray, shape (M,), float64
        b and its standard error in nats; NaN where there is no fit.
    chi2_per_dof : ndarray, shape (M,), float64
        Lack of fit; NaN where not known.
    rungs : int
        Densities read.
    """

    stage: Stage
    rule: CutRule
    uncut_space: bool
    slope: FloatArray
    error: FloatArray
    chi2_per_dof: FloatArray
    rungs: int

    @property
    def key(self) -> tuple[str, str, bool]:
        """Stage, rule and space."""
        return self.stage, self.rule, self.uncut_space


class Level(NamedTuple):
    """A level stretch of one curve.

    Attributes
    ----------
    quantity : str
        Entropy of the union by support, mutual information by support, or slope.
    key : tuple
        Stage, rule and space of the curve.
    plateau : Plateau
        In ln(alpha).
    """

    quantity: Quantity
    key: tuple[str, str, bool]
    plateau: Plateau


def averaged(studies: Sequence[CutStudy]) -> tuple[MeanCurve, ...]:
    """Mean and standard error of every number over sprinklings.

    Parameters
    ----------
    studies : sequence of CutStudy
        One or more, with the same alphas, stages and rules.

    Returns
    -------
    tuple of MeanCurve
        In the order of their curves.  A number that some sprinkling refuses is averaged over the
        others only if at least half of them give it: the rest would be a selection.

    Raises
    ------
    InputError
        If the studies do not match.
    """
    if not studies:
        return ()
    first = studies[0]
    for study in studies[1:]:
        same = np.array_equal(study.alphas, first.alphas)
        if not same or [c[:3] for c in study.curves] != [c[:3] for c in first.curves]:
            raise refuse(
                "studies",
                given="different alphas, stages or rules",
                allowed="the same for all sprinklings of a mean",
                do="study every sprinkling alike",
            )
    return tuple(_mean([study.curves[i] for study in studies]) for i in range(len(first.curves)))


def _mean(curves: list[CutCurve]) -> MeanCurve:
    """Mean of one curve over sprinklings."""
    means: dict[str, Any] = {}
    errors: dict[str, Any] = {}
    for name in COLUMNS:
        samples = np.stack([getattr(curve, name) for curve in curves])
        means[name], errors[name] = _mean_and_error(samples)
    reasons = tuple(
        next((reason for reason in each if reason), "")
        for each in zip(*(curve.reasons for curve in curves), strict=True)
    )
    first = curves[0]._replace(reasons=reasons)
    return MeanCurve(first._replace(**means), first._replace(**errors), len(curves))


def _mean_and_error(samples: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Over the first axis, NaN samples left out, NaN where more than half are missing."""
    valid = np.isfinite(samples)
    count = valid.sum(axis=0)
    enough = count * 2 >= max(samples.shape[0], 1)
    total = np.where(valid, samples, 0.0).sum(axis=0)
    mean = np.where(enough & (count > 0), total / np.maximum(count, 1), np.nan)
    away = np.where(valid, samples - mean, 0.0)
    spare = np.maximum(count - 1, 1)
    error = np.sqrt((away**2).sum(axis=0) / spare / np.maximum(count, 1))
    return mean, np.where(enough & (count > 1), error, np.nan)


def slopes(x: FloatArray, rungs: Sequence[Sequence[CutStudy]]) -> tuple[SlopeCurve, ...]:
    """Slope of the entropy against ln(l/a) at every alpha, for every stage and rule.

    Parameters
    ----------
    x : ndarray, shape (J,), float64
        ln(l/a) of the rungs of a density ladder at fixed geometry.
    rungs : sequence of sequence of CutStudy
        Studies of each rung, of independent sprinklings.

    Returns
    -------
    tuple of SlopeCurve
        Empty with fewer than three rungs that have a study.

    Notes
    -----
    At each alpha a fit of its own, `kernels.scaling.fit_independent`; slopes at neighbouring
    alphas share their sprinklings and move together.
    """
    there = [(float(at), list(own)) for at, own in zip(x, rungs, strict=True) if own]
    if len(there) < 3:
        return ()
    template = there[0][1][0]
    found = []
    for i, curve in enumerate(template.curves):
        rows = [
            (at, np.stack([study.curves[i].union_support for study in own])) for at, own in there
        ]
        fits = [_fit(rows, m) for m in range(template.alphas.size)]
        slope, error, quality = (np.array(column) for column in zip(*fits, strict=True))
        found.append(
            SlopeCurve(
                curve.stage, curve.rule, curve.uncut_space, slope, error, quality, len(there)
            )
        )
    return tuple(found)


def _fit(rows: list[tuple[float, FloatArray]], m: int) -> tuple[float, float, float]:
    """Slope, its error and chi2/dof at one alpha."""
    kept = [(at, own[np.isfinite(own[:, m]), m]) for at, own in rows]
    kept = [(at, own) for at, own in kept if own.size]
    if len(kept) < 3:
        return np.nan, np.nan, np.nan
    x = np.array([at for at, _ in kept])
    fit = fit_independent(x, [own for _, own in kept])
    if fit is None:
        means = [estimate(own).mean for _, own in kept]
        return float(np.polyfit(x, means, 1)[0]), np.nan, np.nan
    return fit.slope, fit.slope_error, fit.chi2 / fit.dof


def levels(
    alphas: FloatArray, curves: Sequence[MeanCurve], slope: Sequence[SlopeCurve]
) -> tuple[Level, ...]:
    """Plateaus of entropies, mutual informations and slopes against ln(alpha).

    Parameters
    ----------
    alphas : ndarray, shape (M,), float64
        Multiples of the threshold, increasing.
    curves : sequence of MeanCurve
        Of entropies.
    slope : sequence of SlopeCurve
        Of slopes; may be empty.

    Returns
    -------
    tuple of Level
        One at most for each curve and quantity; a curve without a plateau is not in it.
    """
    x = np.log(alphas)
    found: list[Level] = []

    def look(quantity: Quantity, key: tuple[str, str, bool], y: FloatArray, e: FloatArray) -> None:
        level = plateau(x, y, e, tolerance=TOLERANCES[quantity])
        if level is not None:
            found.append(Level(quantity, key, level))

    for each in curves:
        look("entropy", each.key, each.mean.union_support, each.error.union_support)
        look("mutual", each.key, each.mean.mutual_support, each.error.mutual_support)
    for line in slope:
        look("slope", line.key, line.slope, line.error)
    return tuple(found)
