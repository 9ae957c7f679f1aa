"""Sentences on certificates and on the evidence that was computed."""

from __future__ import annotations

from lozenge_dashboard.publish.facts import Facts
from lozenge_dashboard.publish.wording import listing, numbers, several
from lozenge_engine.notation import with_error

__all__ = ["sentences"]

ROUTES = {
    "data": "sprinklings",
    "twin": "the continuum twin",
    "chain": "a harmonic chain",
    "currents": "currents on a lattice",
    "far": "the law of small cross ratios for currents",
}


def sentences(facts: Facts) -> list[str]:
    """How far the numbers were checked, and what else was studied.

    Parameters
    ----------
    facts : Facts
        What was computed.

    Returns
    -------
    list of str
        Only of what was computed.
    """
    return [
        _certificate(facts),
        _certified_mean(facts),
        _cuts(facts),
        _thresholds(facts),
        _state(facts),
        _mutual(facts),
        *_due(facts),
    ]


def _certificate(facts: Facts) -> str:
    """Of the seed's own sprinkling."""
    if facts.scene is None:
        return ""
    result = facts.scene.result
    c = result.certificate
    if not c.met:
        return (
            "For the seed's own sprinkling the certificate of the patch's modes is not met "
            f"({'; '.join(c.reasons)}): its numbers are not to be trusted."
        )
    text = (
        f"For the seed's own sprinkling ({result.elements} elements) the modes above "
        f"{result.patch.floor:.3g} are certified: residuals up to {c.residual:.0e}, "
        f"orthogonality to {c.orthogonality:.0e}"
    )
    if c.fresh_vectors:
        text += (
            f", and a run of {c.fresh_vectors} fresh vectors saw nothing above "
            f"{c.fresh_largest:.3f} of that floor"
        )
    return f"{text}."


def _certified_mean(facts: Facts) -> str:
    average = facts.scene.average if facts.scene is not None else None
    if average is None or average.count < 2:
        return ""
    if average.trusted:
        return f"The same checks hold for all {average.count} sprinklings of the means."
    return "Some sprinklings of the means carry a mark."


def _cuts(facts: Facts) -> str:
    record = facts.evidence.cuts if facts.evidence is not None else None
    if record is None or not record.averages:
        return ""
    alphas = record.front.alphas
    rules = dict.fromkeys(curve.mean.rule for curve in record.averages)
    text = (
        f"The cuts were moved by {len(alphas)} factors from {alphas[0]:.2g} to {alphas[-1]:.2g} "
        f"under the rules {numbers(rules)}, on {several(record.done, 'sprinkling')}"
    )
    if record.slopes:
        text += f"; slopes are from {several(record.slopes_done, 'sprinkling')} of the ladder"
    if record.twin and record.twin_oversampling:
        text += f"; the twin has {record.twin_oversampling} times the density"
    return f"{text}."


def _thresholds(facts: Facts) -> str:
    record = facts.evidence.thresholds if facts.evidence is not None else None
    if record is None or not record.operators:
        return ""
    return (
        f"Thresholds were derived from the mean spectrum of {several(record.done, 'sprinkling')}, "
        f"where it stays away from the continuum's ({record.reference}) by more than "
        f"{100 * record.delta:g} %."
    )


def _state(facts: Facts) -> str:
    record = facts.evidence.state if facts.evidence is not None else None
    if record is None:
        return ""
    count = len(record.fits)
    spread = "" if count > 1 else "; the error leaves out what all pairs share"
    slope = with_error(record.slope, record.slope_error)
    return (
        f"Near the centre, for |τ| up to {record.longest:.2g}, Re W falls with ln|τ| at the slope "
        f"{slope} on {several(count, 'sprinkling')} (−1/(2π) = −0.1592 in the continuum){spread}."
    )


def _mutual(facts: Facts) -> str:
    if not facts.mutual_kinds:
        return ""
    routes = listing([words for kind, words in ROUTES.items() if kind in facts.mutual_kinds])
    return (
        f"Mutual information against the cross ratio is from {routes}; each belongs to an algebra "
        "of its own, and they need not agree."
    )


def _due(facts: Facts) -> list[str]:
    record = facts.evidence.due if facts.evidence is not None else None
    if record is None or not record.rows:
        return []
    return [
        f"Slopes were compared for data from {record.source} and the twin at level {record.level}.",
        *(f"{row.verdict.rstrip('.')}." for row in record.rows if row.verdict),
    ]
