"""A methods paragraph from what was computed: no sentence without its number.

Every sentence is a function of the facts that gives an empty text unless what it says was done.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from types import MappingProxyType

from lozenge_dashboard.publish import campaigning, checking, sweeping
from lozenge_dashboard.publish.facts import Facts
from lozenge_dashboard.publish.wording import listing, numbers, several, typeset
from lozenge_engine.config import Rule, Setup
from lozenge_engine.draws import placements
from lozenge_engine.geometry import Region, region_letter
from lozenge_engine.notation import thousands
from lozenge_engine.plan import AxisName

__all__ = ["paragraph", "sentences"]

PLACES = {
    "poisson": "by a Poisson process",
    "fixed": "as a fixed number of independent uniform points",
    "lattice": "on a golden-rotated lattice, shifted anew for each realisation",
    "sobol": "as a Sobol set, scrambled anew for each realisation",
}
NAMED: Mapping[AxisName, str] = MappingProxyType(
    {
        "half_width": "half-width (of the smallest, gaps scaled alike)",
        "separation": "separation",
        "region_count": "K, their number,",
    }
)
METRICS = {"positive": "1/cos(t/l)", "negative": "1/cos(x/l)"}


def paragraph(facts: Facts) -> str:
    """Write the methods paragraph.

    Parameters
    ----------
    facts : Facts
        What was computed.

    Returns
    -------
    str
        One paragraph.
    """
    return typeset(" ".join(sentences(facts)))


def sentences(facts: Facts) -> list[str]:
    """The sentences of the methods paragraph.

    Parameters
    ----------
    facts : Facts
        What was computed.

    Returns
    -------
    list of str
        Those whose condition holds, in the order of the computation.
    """
    parts: tuple[Callable[[Facts], Sequence[str]], ...] = (
        _geometry,
        _field,
        _cuts,
        _entropies,
        sweeping.sentences,
        campaigning.sentences,
        checking.sentences,
        _closing,
    )
    return [text for part in parts for text in part(facts) if text]


def _varied(facts: Facts, name: AxisName) -> tuple[object, ...]:
    """Values of a campaign's axis; empty where it is not varied."""
    if facts.watch is None:
        return ()
    return next((axis.values for axis in facts.watch.plan.axes if axis.name == name), ())


def _setup(facts: Facts) -> Setup:
    return facts.preset.setup


# --------------------------------------------------------------------- geometry


def _geometry(facts: Facts) -> list[str]:
    """Points, metric, regions."""
    return [_points(facts), _metric(facts), _regions(facts)]


def _points(facts: Facts) -> str:
    source = _setup(facts).points
    diamond = "the causal diamond |t| + |x| ≤ 1 (unit of length: its half-width)"
    if source.kind == "file":
        count = thousands(round(2 * source.density))
        return (
            f"The {count} points in {diamond} were imported from {source.file} "
            f"(SHA-256 {str(source.sha256)[:12]})."
        )
    densities = _varied(facts, "density")
    unit = "volume" if source.curved else "area"
    many = f"densities {numbers(densities)}" if densities else f"density {source.density:g}"
    text = f"Points were laid {PLACES[source.kind]} in {diamond} at {many} per unit {unit}"
    if not densities:
        text += f" ({thousands(round(source.elements()))} elements expected)"
    if source.quasi_uniform and source.oversampling > 1:
        text += (
            f", {source.oversampling} times as many points as elements and cut at the same "
            "wavenumber"
        )
    return f"{text}; seed {source.seed}."


def _metric(facts: Facts) -> str:
    source = _setup(facts).points
    if not source.curved:
        return ""
    return (
        f"The metric is Ω² (dt² − dx²) with Ω = {METRICS[source.curvature]}, l = "
        f"{source.radius:g}; regions are diamonds in these coordinates, and elements follow the "
        "volume."
    )


def _regions(facts: Facts) -> str:
    setup = _setup(facts)
    names: tuple[AxisName, ...] = ("half_width", "separation", "region_count")
    varied = [name for name in names if _varied(facts, name)]
    if facts.watch is not None and varied:
        said = listing([f"{NAMED[name]} {numbers(_varied(facts, name))}" for name in varied])
        row = "in a row" if setup.region_list is None else "of a list"
        return f"The regions are causal diamonds {row} with {said}."
    found = [f"{region_letter(i)} {_place(r)}" for i, r in enumerate(setup.regions())]
    one = len(found) == 1
    many = "region is the causal diamond" if one else "regions are the causal diamonds"
    return f"The {many} {listing(found)}."


def _place(region: Region) -> str:
    place = f"({region.t0:.4g}, {region.x0:.4g})"
    text = f"of half-width {region.half_width:.4g} at (t, x) = {place}"
    return f"{text} with rapidity {region.boost:g}" if region.boost else text


# ------------------------------------------------------------------ field, cuts


def _field(facts: Facts) -> list[str]:
    masses = _varied(facts, "mass") or (_setup(facts).mass,)
    massive = [m for m in masses if isinstance(m, int | float) and m > 0]
    massless = "its retarded function is C/2 with the causal matrix C"
    general = (
        "its retarded function is (C/2)(1 + (m²/2ρ) C)⁻¹ with the causal matrix C and the "
        f"density ρ, m = {numbers(masses)} inverse half-widths"
    )
    kind = f"with a mass; {general}" if massive else f"without mass; {massless}"
    return [
        f"The free scalar field is {kind}.",
        "Its Sorkin-Johnston state W is the positive part of the Pauli-Jordan operator iΔ.",
    ]


def _cuts(facts: Facts) -> list[str]:
    """Which modes count, in every combination that was used."""
    pairs = facts.rules
    if not pairs:
        return []
    own = "each region" if facts.several else "the region"
    if len(pairs) == 1:
        patch, region = pairs[0]
        return [f"On the patch {_rule(patch, 'the patch')}; on {own} {_rule(region, own)}."]
    said = [f"{_rule(p, 'the patch')} and then {_rule(r, own)}" for p, r in pairs]
    return [f"Modes were cut in {len(pairs)} ways, on the patch and then on the regions: "
            f"{'; '.join(said)}."]  # fmt: skip


def _rule(rule: Rule, what: str) -> str:
    """One stage in words."""
    if rule.kind == "none":
        return "no mode was cut"
    if rule.kind == "fixed_number":
        return f"the {rule.number} largest positive modes were kept"
    factor = "" if rule.alpha == 1 else f"{rule.alpha:g} "
    count = {
        "root_count": f"n the elements of {what}",
        "union_count": "n the elements of the union",
        "equal_share": "n the elements of the union over the number of regions",
    }[rule.kind]
    return f"the modes with |λ| > {factor}√n/(4π) were kept, {count}"


# -------------------------------------------------------------------- entropies


def _entropies(facts: Facts) -> list[str]:
    if not facts.entropies:
        return []
    orders = _varied(facts, "order") or (_setup(facts).order,)
    renyi = [q for q in orders if q != 1]
    name = f"Rényi entropies of order {numbers(orders)}" if renyi else "Entropies"
    found = [
        f"{name} in nats follow from the symplectic values of the cut W on a region, with the "
        "same cut operator as commutator."
    ]
    if facts.several:
        found.append(
            "The union of the regions is cut by support (an eigenvector with the count of the "
            "region that holds most of it) or as the direct sum of the regions' kept modes; a "
            "mutual information S(A) + S(B) − S(AB) carries the name of its rule."
        )
        if renyi:
            found.append("For these orders it is a difference of Rényi entropies only.")
    return [*found, _average(facts)]


def _average(facts: Facts) -> str:
    if facts.scene is None:
        return ""
    average = facts.scene.average
    if average is None or average.count < 2:
        return "The numbers are of one sprinkling; no error is known."
    setup = _setup(facts)
    images = len(placements(setup, setup.regions()))
    each = f", each the mean over {images} mirror images of the regions" if images > 1 else ""
    text = (
        f"Values are means over {average.count} sprinklings{each}, with the standard error of the "
        "mean in brackets."
    )
    if facts.failures:
        left = len(facts.failures)
        text += f" {several(left, 'sprinkling')} left out: this is a selected sample."
    return text


def _closing(facts: Facts) -> list[str]:
    return [f"Computed with {listing(list(facts.versions))}."] if facts.versions else []
