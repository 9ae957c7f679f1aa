"""Finished numbers of one sprinkling, as values that explain themselves."""

from __future__ import annotations

import html
import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import RULE_KINDS, Config, Rule
from lozenge_engine.geometry import Region, region_letter
from lozenge_engine.kernels import cuts
from lozenge_engine.kernels.modes import Certificate

__all__ = ["Pair", "PatchSpectrum", "RegionResult", "Result", "Status", "Triple", "UnionResult"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

Status = Literal["ok", "refused", "undetermined", "out_of_range"]
"""``refused``: rank makes S = 0 and no number is given; ``undetermined``: S depends on the
kernel tolerance (NaN where R is singular); ``out_of_range``: a symplectic value lies below 1/2 by
more than rounding."""


@dataclass(frozen=True, slots=True, kw_only=True)
class PatchSpectrum:
    """Positive eigenvalues of i Delta on the whole patch that were found.

    Parameters
    ----------
    eigenvalues : ndarray, shape (found,), float64
        Descending, each counted once (the spectrum is symmetric).
    kept : ndarray, shape (found,), bool
        Which of them the first stage keeps.
    cut : float
        Threshold of the first stage; 0 for ``none``, the smallest kept eigenvalue for
        ``fixed_number``.
    nominal_modes : float
        2 sqrt(n), the continuum count above the default threshold; n the elements that the points
        stand for.
    floor : float
        Every eigenvalue above it was found, as far as the certificate says.
    krylov_dimension : int
        Dimension of the spaces searched, in all; N on the dense route.
    """

    eigenvalues: FloatArray
    kept: BoolArray
    cut: float
    nominal_modes: float
    floor: float
    krylov_dimension: int

    @property
    def kept_modes(self) -> int:
        """Number of positive eigenvalues kept."""
        return int(self.kept.sum())


@dataclass(frozen=True, slots=True, kw_only=True)
class RegionResult:
    """One region after both stages.

    Parameters
    ----------
    region : Region
        Its geometry.
    elements : int
        Points inside.
    eigenvalues : ndarray, shape (pairs,), float64
        Positive eigenvalues of the restricted operator, descending; pairs = min(n, 2 r) // 2 with
        r kept modes of the patch.
    kept : ndarray, shape (pairs,), bool
        Which of them the second stage keeps.
    cut : float
        Threshold of the second stage; 0 for ``none`` and ``fixed_number``.
    nominal_modes : float
        2 sqrt(n).
    counted : float
        Elements n that the points stand for in the rules: their number, divided by the
        oversampling of quasi-uniform points, weighted by Omega^2 where these lie in a curved patch.
    symplectic : ndarray, shape (k,), float64
        Symplectic values s >= 1/2 up to rounding, descending, one for each kept mode; empty
        without an entropy.
    contributions : ndarray, shape (k,), float64
        What each of them adds to the entropy, in nats.
    entropy : float
        Of the order asked for, in nats; NaN when refused, or undetermined without a value.
    status : str
        See `Status`.
    note : str
        The reason, when the status is not ``ok``; otherwise empty.
    """

    region: Region
    elements: int
    eigenvalues: FloatArray
    kept: BoolArray
    cut: float
    nominal_modes: float
    counted: float
    symplectic: FloatArray
    contributions: FloatArray
    entropy: float
    status: Status = "ok"
    note: str = ""

    @property
    def kept_modes(self) -> int:
        """Number of positive eigenvalues kept."""
        return int(self.kept.sum())


@dataclass(frozen=True, slots=True, kw_only=True)
class UnionResult:
    """A union of regions under one of the two union rules.

    Parameters
    ----------
    rule : {"support", "direct_sum"}
        The rule.
    members : tuple of int
        Indices of the regions.
    eigenvalues : ndarray, shape (pairs,), float64
        Positive eigenvalues of the union's operator, descending; under ``direct_sum`` those that
        the regions keep.
    kept : ndarray, shape (pairs,), bool
        Which of them count; under ``direct_sum`` all.
    symplectic, contributions : ndarray, shape (k,), float64
        As in `RegionResult`.
    entropy : float
        In nats; NaN as in `RegionResult`.
    status, note : str
        As in `RegionResult`.
    """

    rule: Literal["support", "direct_sum"]
    members: tuple[int, ...]
    eigenvalues: FloatArray
    kept: BoolArray
    symplectic: FloatArray
    contributions: FloatArray
    entropy: float
    status: Status = "ok"
    note: str = ""

    @property
    def kept_modes(self) -> int:
        """Number of positive eigenvalues kept."""
        return int(self.kept.sum())


@dataclass(frozen=True, slots=True, kw_only=True)
class Pair:
    """Mutual information of two regions, S_A + S_B - S_AB, in nats, under both union rules.

    Parameters
    ----------
    a, b : int
        Indices of the regions, a < b.
    gap : float
        Distance in x between the neighbouring corners, in patch half-widths.
    support, direct_sum : float
        Per union rule, in nats; no theorem makes them positive here.
    cross_block : float
        Spectral norm of the commutator's block between the two kept spaces, scaled by both
        diagonal blocks (0 would mean that the regions' kept modes commute).
    status : str
        The first mark on one of the entropies, or ``ok``; see `Status`.
    """

    a: int
    b: int
    gap: float
    support: float
    direct_sum: float
    cross_block: float
    status: Status = "ok"


@dataclass(frozen=True, slots=True, kw_only=True)
class Triple:
    """Tripartite information S_A + S_B + S_C - S_AB - S_BC - S_CA + S_ABC, in nats.

    Parameters
    ----------
    members : tuple of int
        Indices of the three regions.
    support, direct_sum : float
        Per union rule.
    """

    members: tuple[int, int, int]
    support: float
    direct_sum: float


@dataclass(frozen=True, slots=True, kw_only=True, repr=False)
class Result:
    """Everything computed on one sprinkling.

    Parameters
    ----------
    config : Config
        What was asked.
    u, v : ndarray, shape (N,), float64
        Light-cone coordinates of the elements, u ascending.
    region_of : ndarray, shape (N,), int8
        Index of the region that holds an element, -1 for none.
    points_sha256 : str
        `lozenge_engine.kernels.points.points_hash` of them.
    patch : PatchSpectrum
        First stage.
    certificate : Certificate
        How far the patch modes can be trusted; every number rests on it.
    regions : tuple of RegionResult
        Second stage, in the order of the letters.
    unions : mapping of str to UnionResult
        Keys ``support`` and ``direct_sum``; empty for one region.
    pairs, triples : tuple of Pair, tuple of Triple
        All pairs; all triples of consecutive letters.
    total_correlation : mapping of str to float
        Sum of S minus S of the union, in nats, per union rule; empty for one region.
    seconds : mapping of str to float
        Wall time of each stage, next to 0 where the cache served it.
    versions : mapping of str to str
        Of Python, the libraries and this program.
    oversampling : float
        Points laid over those of the geometry at its density, f; not 1 for quasi-uniform sets
        alone.  All eigenvalues and cuts are f times those of the geometry.
    """

    config: Config
    u: FloatArray
    v: FloatArray
    region_of: NDArray[np.int8]
    points_sha256: str
    patch: PatchSpectrum
    certificate: Certificate
    regions: tuple[RegionResult, ...]
    unions: Mapping[str, UnionResult]
    pairs: tuple[Pair, ...]
    triples: tuple[Triple, ...]
    total_correlation: Mapping[str, float]
    seconds: Mapping[str, float]
    versions: Mapping[str, str]
    oversampling: float = 1.0

    @property
    def elements(self) -> int:
        """Number of elements in the patch, N."""
        return self.u.size

    @property
    def trusted(self) -> bool:
        """Whether the certificate holds and no entropy carries a mark."""
        marks = [r.status for r in self.regions] + [u.status for u in self.unions.values()]
        marks += [p.status for p in self.pairs]
        return self.certificate.met and all(mark == "ok" for mark in marks)

    def kept_by_rule(self) -> dict[str, tuple[int, ...]]:
        """Positive modes that other rules of the second stage would keep in each region.

        Returns
        -------
        dict of str to tuple of int
            For the kinds of rule with this configuration's alpha and number, the first stage left
            as it is; one count for each region.
        """
        rule = self.config.region_rule
        union = sum(r.counted for r in self.regions)
        found: dict[str, tuple[int, ...]] = {}
        for kind in RULE_KINDS:
            other = Rule(kind=kind, alpha=rule.alpha, number=rule.number)
            found[kind] = tuple(
                int(
                    cuts.keep(
                        r.eigenvalues,
                        other,
                        cut=cuts.threshold(
                            other,
                            own=r.counted,
                            union=union,
                            regions=len(self.regions),
                            ratio=self.oversampling,
                        ),
                    ).sum()
                )
                for r in self.regions
            )
        return found

    @property
    def _held(self) -> str:
        """What the points are called: those of a quasi-uniform set are no elements."""
        return "points" if self.config.points.quasi_uniform else "elements"

    def _rows(self) -> list[tuple[str, str, str]]:
        """Name, value and kept over nominal modes of what a reader asks for first."""
        rows = [
            (
                f"S({region_letter(k)})",
                f"{r.entropy:.4f}" if r.status == "ok" else f"{r.entropy:.4f} ({r.status})",
                f"{r.kept_modes} of {r.nominal_modes:.1f} modes, {r.elements} {self._held}",
            )
            for k, r in enumerate(self.regions)
        ]
        for rule, union in self.unions.items():
            rows.append((f"S(union, {rule})", f"{union.entropy:.4f}", f"{union.kept_modes} modes"))
        for p in self.pairs:
            name = f"I({region_letter(p.a)}:{region_letter(p.b)})"
            rows.append((name, f"{p.support:.4f}", f"by support; {p.direct_sum:.4f} direct sum"))
        return rows

    def __repr__(self) -> str:
        """One sprinkling's entropies in nats; their scatter between sprinklings is not in it."""
        one = "one set" if self.config.points.quasi_uniform else "one sprinkling"
        head = f"Result of {self.elements} {self._held}, {one}, entropies in nats"
        mark = "" if self.certificate.met else " (certificate not met)"
        body = "".join(f"\n  {name:<20}{value:>10}   {more}" for name, value, more in self._rows())
        return head + mark + body

    def _repr_html_(self) -> str:
        """The same as a table."""
        rows = "".join(
            "<tr>" + "".join(f"<td>{html.escape(cell)}</td>" for cell in row) + "</tr>"
            for row in self._rows()
        )
        caption = html.escape(repr(self).split("\n", 1)[0])
        return f"<table><caption>{caption}</caption>{rows}</table>"

    def numbers(self) -> dict[str, Any]:
        """The numbers as plain JSON values; what is not a number is null."""
        return {
            "elements": self.elements,
            "points_sha256": self.points_sha256,
            "patch_modes": self.patch.kept_modes,
            "patch_nominal_modes": self.patch.nominal_modes,
            "regions": [_region_numbers(r) for r in self.regions],
            "union": {k: _union_numbers(u) for k, u in self.unions.items()} or None,
            "mutual_information": [
                {
                    "a": p.a,
                    "b": p.b,
                    "gap": p.gap,
                    "support": _plain(p.support),
                    "direct_sum": _plain(p.direct_sum),
                    "cross_block": _plain(p.cross_block),
                    "status": p.status,
                }
                for p in self.pairs
            ],
            "total_correlation": {k: _plain(x) for k, x in self.total_correlation.items()} or None,
            "tripartite_information": [
                {
                    "members": list(t.members),
                    "support": _plain(t.support),
                    "direct_sum": _plain(t.direct_sum),
                }
                for t in self.triples
            ],
            "certificate": self.certificate.as_json(),
        }


def _plain(x: float) -> float | None:
    return float(x) if math.isfinite(x) else None


def _region_numbers(r: RegionResult) -> dict[str, Any]:
    return {
        "t0": r.region.t0,
        "x0": r.region.x0,
        "half_width": r.region.half_width,
        "boost": r.region.boost,
        "elements": r.elements,
        "kept_modes": r.kept_modes,
        "nominal_modes": r.nominal_modes,
        "entropy": _plain(r.entropy),
        "status": r.status,
    }


def _union_numbers(u: UnionResult) -> dict[str, Any]:
    return {"kept_modes": u.kept_modes, "entropy": _plain(u.entropy), "status": u.status}
