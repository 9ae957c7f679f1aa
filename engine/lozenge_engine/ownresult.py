"""What is known of an own causal set, as values that say what they assume."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.geometry import region_letter
from lozenge_engine.kernels import modes
from lozenge_engine.kernels.bitorder import BitOrder
from lozenge_engine.result import Pair, PatchSpectrum, RegionResult, Triple, UnionResult

__all__ = ["ASSUMPTION", "Comparison", "OwnResult", "OwnSet", "count_of", "ordering_of"]

Index = NDArray[np.intp]

ASSUMPTION = "Assumes a 1+1 sprinkling"
ORDERING_ERRORS = 4.0
"""Standard deviations allowed to an ordering fraction: one false alarm in 16 000."""
COUNT_MODES, COUNT_SHARE = 4.0, 0.015
"""Modes, and share of the count, allowed between found and expected.  Sprinklings of 60 to 3 000
elements lie 0.2 to 3.5 modes below the count (measured)."""


class Comparison(NamedTuple):
    """A number beside what a 1+1 sprinkling would give.

    Attributes
    ----------
    found, expected : float
        The number, and the sprinkling's.
    tolerance : float
        Difference allowed.
    """

    found: float
    expected: float
    tolerance: float

    @property
    def matches(self) -> bool:
        """Whether the difference is within the tolerance."""
        return abs(self.found - self.expected) <= self.tolerance


class OwnSet(NamedTuple):
    """A causal set that was given, checked and closed.

    Attributes
    ----------
    name : str
        Name of its file.
    order : BitOrder
        Its order.
    sha256 : str
        Of the closed packed relation in the order of the elements' numbers.
    """

    name: str
    order: BitOrder
    sha256: str


@dataclass(frozen=True, slots=True, kw_only=True)
class OwnResult:
    """Everything computed on an own causal set.

    Parameters
    ----------
    own : OwnSet
        The set.
    alpha : float
        Multiple of the threshold in both stages.
    ordering : Comparison
        Related pairs over all pairs, and 1/2.
    count : Comparison
        Positive modes above sqrt(n)/(4 pi), or above the cut where that is higher, and
        n/(2 pi lambda).
    patch, certificate : PatchSpectrum, Certificate
        First stage.
    members : tuple of ndarray of intp
        Elements of each region.
    regions : tuple of RegionResult
        Second stage; the geometry in them stands for none.
    region_orderings : tuple of Comparison
        As `ordering`, for each region alone.
    between : tuple of int
        Elements that lie between those of a region without being in it; 0 for a diamond.
    related : mapping of (int, int) to int
        Relations between the elements of every two regions, either way; 0 for spacelike ones.
    unions, total_correlation, pairs, triples : as in `lozenge_engine.result.Result`
        The gaps of the pairs stand for none.
    seconds : mapping of str to float
        Wall time of each stage.
    versions : mapping of str to str
        Of Python, the libraries and this program.
    """

    own: OwnSet
    alpha: float
    ordering: Comparison
    count: Comparison
    patch: PatchSpectrum
    certificate: modes.Certificate
    members: tuple[Index, ...]
    regions: tuple[RegionResult, ...]
    region_orderings: tuple[Comparison, ...]
    between: tuple[int, ...]
    related: Mapping[tuple[int, int], int]
    unions: Mapping[str, UnionResult]
    total_correlation: Mapping[str, float]
    pairs: tuple[Pair, ...]
    triples: tuple[Triple, ...]
    seconds: Mapping[str, float]
    versions: Mapping[str, str]

    @property
    def elements(self) -> int:
        """Number of elements N."""
        return self.own.order.elements

    @property
    def trusted(self) -> bool:
        """Whether the certificate holds and no entropy carries a mark."""
        marks = [r.status for r in self.regions] + [u.status for u in self.unions.values()]
        return self.certificate.met and all(m == "ok" for m in (*marks, *self._pair_marks()))

    def _pair_marks(self) -> list[str]:
        return [p.status for p in self.pairs]

    def mismatches(self) -> list[str]:
        """Say where the set is not what is assumed of it.

        Returns
        -------
        list of str
            Sentences without a full stop; empty if everything matches.
        """
        notes = []
        if not self.ordering.matches:
            notes.append(
                f"the ordering fraction {_beside(self.ordering, '.4f')}: this is no sprinkled "
                "diamond of 1+1 dimensions, and thresholds and counts need not hold"
            )
        if not self.count.matches:
            notes.append(
                f"the number of modes {_beside(self.count, '.1f')}: the thresholds were not made "
                "for such a spectrum"
            )
        for k, one in enumerate(self.region_orderings):
            if not one.matches:
                notes.append(
                    f"the ordering fraction of region {region_letter(k)} {_beside(one, '.4f')}: "
                    "its elements are no sprinkled diamond"
                )
        for k, others in enumerate(self.between):
            if others:
                notes.append(
                    f"region {region_letter(k)} is not causally convex: {others} elements lie "
                    "between its own and are not in it; no diamond is like that"
                )
        for (a, b), pairs in self.related.items():
            if pairs:
                notes.append(
                    f"regions {region_letter(a)} and {region_letter(b)} are not spacelike: "
                    f"{pairs} relations between their elements; their mutual information is not "
                    "that of two independent parts"
                )
        return notes

    def numbers(self) -> dict[str, Any]:
        """The numbers as plain JSON values; what is not a number is null."""
        order = self.own.order
        return {
            "assumption": ASSUMPTION,
            "mismatches": self.mismatches(),
            "file": self.own.name,
            "relation_sha256": self.own.sha256,
            "elements": self.elements,
            "relations": order.relations,
            "links": order.links,
            "relations_added": order.added,
            "alpha": self.alpha,
            "ordering_fraction": _comparison(self.ordering),
            "modes_above_threshold": _comparison(self.count),
            "patch_modes": self.patch.kept_modes,
            "patch_cut": self.patch.cut,
            "regions": [
                {
                    "elements": r.elements,
                    "ordering_fraction": _comparison(one),
                    "elements_between": between,
                    "kept_modes": r.kept_modes,
                    "nominal_modes": r.nominal_modes,
                    "entropy": _plain(r.entropy),
                    "status": r.status,
                }
                for r, one, between in zip(
                    self.regions, self.region_orderings, self.between, strict=True
                )
            ],
            "union": {
                k: {"kept_modes": u.kept_modes, "entropy": _plain(u.entropy), "status": u.status}
                for k, u in self.unions.items()
            },
            "mutual_information": [
                {
                    "a": p.a,
                    "b": p.b,
                    "support": _plain(p.support),
                    "direct_sum": _plain(p.direct_sum),
                    "cross_block": _plain(p.cross_block),
                    "relations": self.related[p.a, p.b],
                    "status": p.status,
                }
                for p in self.pairs
            ],
            "total_correlation": {k: _plain(x) for k, x in self.total_correlation.items()},
            "tripartite_information": [
                {
                    "members": list(t.members),
                    "support": _plain(t.support),
                    "direct_sum": _plain(t.direct_sum),
                }
                for t in self.triples
            ],
            "reference_slope": None,
            "certificate": self.certificate.as_json(),
            "seconds": dict(self.seconds),
            "versions": dict(self.versions),
        }


def _beside(one: Comparison, form: str) -> str:
    return (
        f"is {one.found:{form}}, a sprinkling gives {one.expected:{form}} within "
        f"{one.tolerance:{form}}"
    )


def _comparison(one: Comparison) -> dict[str, Any]:
    return {**one._asdict(), "matches": one.matches}


def _plain(x: float) -> float | None:
    return float(x) if math.isfinite(x) else None


def ordering_of(relations: int, elements: int) -> Comparison:
    """Ordering fraction beside that of a sprinkled diamond.

    There the order is that of a uniform random permutation, so that 1/2 is the mean and the
    related pairs have the variance n (n - 1)(2 n + 5)/72 of its inversions (textbook).

    Parameters
    ----------
    relations : int
        Related pairs.
    elements : int
        n >= 2.

    Returns
    -------
    Comparison
        Within four standard deviations.
    """
    pairs = elements * (elements - 1) / 2
    error = math.sqrt(pairs * (2 * elements + 5) / 36) / pairs
    return Comparison(relations / pairs, 0.5, ORDERING_ERRORS * error)


def count_of(found: int, *, elements: int, threshold: float) -> Comparison:
    """Number of positive modes above a threshold beside n/(2 pi lambda).

    Parameters
    ----------
    found : int
        Modes.
    elements : int
        n.
    threshold : float
        lambda, at least sqrt(n)/(4 pi): below it discreteness takes modes away.

    Returns
    -------
    Comparison
        Within four modes and 1.5 %.
    """
    expected = elements / (2.0 * math.pi * threshold)
    return Comparison(float(found), expected, COUNT_MODES + COUNT_SHARE * expected)
