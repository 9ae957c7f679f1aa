"""What belongs beside a campaign's numbers: trust, control variates, predicted time."""

from __future__ import annotations

import numpy as np

from lozenge_engine.estimates import Estimates
from lozenge_engine.kernels.curved import ordering_fraction
from lozenge_engine.kernels.gls import Reduction, reduction
from lozenge_engine.store import Results

__all__ = ["controls", "prediction", "times", "trusted"]


def trusted(found: Estimates) -> bool:
    """Whether nothing failed and no sample carries a mark.

    Parameters
    ----------
    found : Estimates
        What the samples say.

    Returns
    -------
    bool
        False calls for status 3.
    """
    return found.failed == 0 and not any(cell.untrusted or cell.missing for cell in found.cells)


def controls(results: Results) -> tuple[Reduction | None, ...]:
    """Try control variates on the entropy of every cell.

    The controls are the elements of the patch and of each region and the ordering fraction, whose
    means are known: density times volume, and one half in a flat patch.

    Parameters
    ----------
    results : Results
        Open.

    Returns
    -------
    tuple of Reduction or None
        In the order of `Design.cells`; None with too few realisations.
    """
    layout = results.design
    metric = layout.setup.points
    related = ordering_fraction(curvature=metric.curvature, radius=metric.radius)
    found: dict[int, Reduction | None] = {}
    for g, own in enumerate(layout.sprinklings):
        table = results.table(g)
        patch = np.column_stack([table.elements.astype(float), table.ordering_fraction])
        for column, i in enumerate(own.cells):
            config = layout.cells[i].config
            source = config.points
            if source.quasi_uniform:
                found[i] = None  # nothing is drawn whose scatter could be taken out
                continue
            within = [source.elements(region) for region in config.regions]
            known = [source.elements(), related, *within]
            inside = table.region_elements[column]
            tried = reduction(
                table.union_support[:, column], np.hstack([patch, inside]), np.array(known)
            )
            found[i] = tried if isinstance(tried, Reduction) else None
    return tuple(found[i] for i in range(len(layout.cells)))


def prediction(results: Results) -> tuple[float, float]:
    """Predicted and measured CPU time of the realisations that did not fail.

    Parameters
    ----------
    results : Results
        Open.

    Returns
    -------
    tuple of float
        Seconds; 0 and 0 without a prediction.
    """
    pairs = times(results)
    return sum(p for _, p, _ in pairs), sum(m for _, _, m in pairs)


def times(results: Results) -> list[tuple[float, float, float]]:
    """Density, predicted and measured seconds of each sprinkling that has any.

    Parameters
    ----------
    results : Results
        Open.

    Returns
    -------
    list of tuple of float
        In the order of the sprinklings.
    """
    found = []
    for g, (own, (each, _)) in enumerate(
        zip(results.design.sprinklings, results.predicted, strict=False)
    ):
        seconds = results.table(g).seconds
        if seconds.size and each > 0:
            found.append((own.density, each * seconds.size, float(seconds.sum())))
    return found
