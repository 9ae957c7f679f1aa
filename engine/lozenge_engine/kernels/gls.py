"""What a slope is worth: the fit, its rivals, its stability when small sizes go, in words."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from types import MappingProxyType
from typing import NamedTuple

import numpy as np

from lozenge_engine.kernels.cells import MODELS, Group, Model, Refused
from lozenge_engine.kernels.controls import Reduction, reduction
from lozenge_engine.kernels.resampling import Bootstrap, bootstrap
from lozenge_engine.kernels.trend import LineFit, fit, slope_weights
from lozenge_engine.notation import decimals_for, with_error

__all__ = [
    "LAWS",
    "MODELS",
    "Bootstrap",
    "Group",
    "LineFit",
    "Model",
    "Reduction",
    "Refused",
    "SlopeReport",
    "bootstrap",
    "fit",
    "reduction",
    "report",
    "slope_weights",
]

LEAST_P = 0.05
"""A fit with a smaller p-value is not settled."""
LEAST_SIZES = 3
"""Sizes that are left when the smallest are dropped one by one."""
LAWS: Mapping[Model, str] = MappingProxyType(
    {
        "log": "S = b x + c",
        "log_root": "S = b x + d/sqrt(n) + c",
        "volume": "S = v n + c",
    }
)
"""The laws as they are written in words; x = ln(l/a), n = elements of the smallest region."""


class SlopeReport(NamedTuple):
    """A slope with its diagnostics.

    Attributes
    ----------
    fit : LineFit
        The logarithmic law through all cells.
    models : tuple of LineFit
        All laws that could be fitted, by ascending `aicc`.
    by_smallest : tuple of (float, LineFit)
        Elements of the smallest size kept, and the fit without the smaller ones; the first is
        the full fit.
    bootstrap_error : float
        The slope's error from drawing realisations again; NaN without draws.
    settled : bool
        Whether p > 0.05 and dropping the smallest size moves the slope by less than its error.
    why : str
        Why it is settled or not.
    """

    fit: LineFit
    models: tuple[LineFit, ...]
    by_smallest: tuple[tuple[float, LineFit], ...]
    bootstrap_error: float
    settled: bool
    why: str

    def explain(self) -> str:
        """Everything that belongs beside the slope, in words.

        Returns
        -------
        str
            One sentence a line.
        """
        best = self.fit
        known = math.isfinite(best.slope_error) and best.slope_error > 0.0
        digits = min(12, max(0, decimals_for(best.slope_error))) if known else 4
        lines = [
            f"b = {with_error(best.slope, best.slope_error)}, "
            f"95 % interval {best.low:.{digits}f} to {best.high:.{digits}f}.",
            f"{best.cells} cells (points in placement classes), at least {best.realisations} "
            f"realisations each; {best.method}.",
        ]
        if math.isfinite(best.p_value):
            lines.append(f"chi2/dof = {best.chi2:.1f}/{best.dof}, p = {best.p_value:.2g}.")
        else:
            lines.append("Whether the line fits is not known: too few realisations.")
        if best.left_out:
            one = best.left_out == 1
            counted = "1 realisation" if one else f"{best.left_out} realisations"
            lines.append(f"{counted} without a number {'is' if one else 'are'} left out.")
        if math.isfinite(self.bootstrap_error):
            lines.append(f"Drawing realisations again gives the error {self.bootstrap_error:.2g}.")
        lines.append(("Settled: " if self.settled else "Not settled: ") + self.why + ".")
        ranked = [other for other in self.models if math.isfinite(other.aicc)]
        if len(ranked) > 1:
            least = ranked[0].aicc
            lines.append(
                "Laws by AICc (0 is best): "
                + "; ".join(f"{LAWS[m.model]}: {m.aicc - least:.1f}" for m in ranked)
                + ". Here x = ln(l/a), and n = elements of the smallest region."
            )
            if ranked[0].model != "log" and math.isfinite(best.aicc):
                lines.append(
                    f"The logarithmic law is not the best one, by {best.aicc - least:.1f}."
                )
        return "\n".join(lines)


def report(
    groups: Sequence[Group], *, seed: int | np.random.Generator = 0, resamples: int = 400
) -> SlopeReport | Refused:
    """Fit the logarithmic law and say what the slope is worth.

    Parameters
    ----------
    groups : sequence of Group
        Independent of each other.
    seed : int or numpy.random.Generator
        Of the bootstrap.
    resamples : int
        Fits to drawn realisations; 0 for none.

    Returns
    -------
    SlopeReport or Refused
        Refused where the fit of the logarithmic law is.
    """
    full = fit(groups)
    if isinstance(full, Refused):
        return full
    others = [fit(groups, model=model) for model in MODELS if model != "log"]
    fitted = [full, *(other for other in others if isinstance(other, LineFit))]
    models = sorted(fitted, key=lambda m: m.aicc if math.isfinite(m.aicc) else math.inf)
    by_smallest = _by_smallest(groups, full)
    drawn = bootstrap(groups, seed=seed, resamples=resamples) if resamples > 1 else None
    settled, why = _judged(full, by_smallest)
    return SlopeReport(
        full,
        tuple(models),
        by_smallest,
        drawn.error if isinstance(drawn, Bootstrap) else math.nan,
        settled,
        why,
    )


def _by_smallest(groups: Sequence[Group], full: LineFit) -> tuple[tuple[float, LineFit], ...]:
    """Fits without the smallest sizes, until three are left."""
    sizes = np.unique(np.concatenate([group.elements for group in groups]))
    found = [(float(sizes[0]), full)]
    for smallest in sizes[1 : max(1, sizes.size - LEAST_SIZES + 1)]:
        kept = [_without(group, float(smallest)) for group in groups]
        trial = fit([group for group in kept if group.x.size])
        if isinstance(trial, Refused):
            break
        found.append((float(smallest), trial))
    return tuple(found)


def _without(group: Group, smallest: float) -> Group:
    keep = group.elements >= smallest
    return Group(group.samples[:, keep], group.x[keep], group.placement[keep], group.elements[keep])


def _judged(full: LineFit, by_smallest: tuple[tuple[float, LineFit], ...]) -> tuple[bool, str]:
    """Whether the slope is settled, and why or why not."""
    if not math.isfinite(full.p_value):
        return False, "too few realisations to tell whether the line fits"
    if full.left_out:
        return (
            False,
            f"{full.left_out} realisations without a number are left out: what is left "
            "is a selected sample",
        )
    if full.p_value <= LEAST_P:
        return False, f"the line does not fit, p = {full.p_value:.2g}"
    if len(by_smallest) < 2:
        return False, "too few sizes to drop the smallest and fit again"
    moved = abs(by_smallest[1][1].slope - full.slope) / full.slope_error
    text = f"dropping the smallest size moves the slope by {moved:.2g} of its error"
    if moved >= 1.0:
        return False, text
    return True, f"p = {full.p_value:.2g}, and {text}"
