"""Entropies of regions, pairs, triples and unions from what the second stage keeps."""

from __future__ import annotations

import itertools
from typing import Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Config
from lozenge_engine.kernels import cuts, gaussian, laws
from lozenge_engine.placement import gaps
from lozenge_engine.readout import Measured, read
from lozenge_engine.result import Pair, RegionResult, Status, Triple, UnionResult

__all__ = ["UNION_RULES", "Block", "Entropies", "UnionRule"]

FloatArray = NDArray[np.float64]
UnionRule = Literal["support", "direct_sum"]
UNION_RULES: tuple[UnionRule, UnionRule] = ("support", "direct_sum")


class Block(NamedTuple):
    """Second stage of one region.

    Attributes
    ----------
    spectrum : Spectrum
        The cut operator restricted to the region.
    cut : float
        Threshold of the regions' rule; 0 for a rule without one.
    kept : ndarray, shape (pairs,), bool
        What the rule keeps, k pairs.
    g : ndarray, shape (2 r, 2 k), float64
        `gaussian.projected` of what is kept.
    """

    spectrum: gaussian.Spectrum
    cut: float
    kept: NDArray[np.bool_]
    g: FloatArray


class Entropies:
    """Everything that the regions' blocks say.

    Parameters
    ----------
    config : Config
        The rules and the Renyi order.
    patch_rank : int
        Real vectors that the first stage keeps, 2 r; unused when it cuts nothing.
    blocks : list of Block
        One for each region.
    elements : list of int
        Points of each region.
    counted : list of float
        Elements that they stand for, `lozenge_engine.kernels.curved.Counting.elements`.
    """

    def __init__(
        self,
        config: Config,
        patch_rank: int,
        blocks: list[Block],
        elements: list[int],
        counted: list[float],
    ) -> None:
        self.config = config
        self.blocks = blocks
        self.elements = elements
        self.counted = counted
        self.rank = patch_rank if config.patch_rule.kind != "none" else None
        self._singles: dict[int, Measured] = {}
        self._unions: dict[tuple[int, ...], dict[str, UnionResult]] = {}

    def _read(
        self, spectrum: gaussian.Spectrum, kept: NDArray[np.bool_], g: FloatArray, elements: int
    ) -> Measured:
        """Entropy of a kept space, with what has to be said about it."""
        return read(
            spectrum,
            kept,
            g,
            order=self.config.order,
            uncut=self.config.region_rule.kind == "none",
            elements=elements,
            rank=self.rank,
        )

    def regions(self) -> tuple[RegionResult, ...]:
        """Entropy of every region, in the order of the letters; each is computed once."""
        return tuple(
            RegionResult(
                region=region,
                elements=n,
                eigenvalues=block.spectrum.pairs.values,
                kept=block.kept,
                cut=block.cut,
                nominal_modes=laws.nominal_modes(counted),
                counted=counted,
                **self._single(k)._asdict(),
            )
            for k, (region, n, counted, block) in enumerate(
                zip(self.config.regions, self.elements, self.counted, self.blocks, strict=True)
            )
        )

    def union(self, members: tuple[int, ...]) -> dict[str, UnionResult]:
        """Entropy of a union of regions under both rules; each union is computed once.

        Parameters
        ----------
        members : tuple of int
            Indices of two or more regions.

        Returns
        -------
        dict of str to UnionResult
            Keys ``support``: the union's own modes, each cut with the threshold of the region
            that holds most of it (arXiv:2110.07627); ``direct_sum``: the span of the regions'
            own kept modes.

        Notes
        -----
        Cost by support, for d rows in the members' factors (at most 2 r each): 8 d r**2 flops
        and the eigenpairs of a matrix of size min(d, 2 r), `gaussian.restricted_spectrum`.
        """
        if members not in self._unions:
            self._unions[members] = {
                "support": self._by_support(members),
                "direct_sum": self._direct_sum(members),
            }
        return self._unions[members]

    def _by_support(self, members: tuple[int, ...]) -> UnionResult:
        """The union's own modes, each cut with the count of the region that holds most of it."""
        parts = [self.blocks[k] for k in members]
        factor = np.vstack([part.spectrum.factor for part in parts])
        sizes = tuple(part.spectrum.factor.shape[0] for part in parts)
        if factor.shape[0] > factor.shape[1]:
            q, small = np.linalg.qr(factor)
            spectrum = gaussian.restricted_spectrum(small)
            lifted = spectrum.pairs._replace(a=q @ spectrum.pairs.a, b=q @ spectrum.pairs.b)
            held = gaussian.shares(spectrum._replace(pairs=lifted), sizes)
        else:
            spectrum = gaussian.restricted_spectrum(factor)
            held = gaussian.shares(spectrum, sizes)
        values = spectrum.pairs.values
        kept = cuts.keep_by_support(
            values, held, self.config.region_rule, cuts=np.array([part.cut for part in parts])
        )
        g = gaussian.projected(spectrum, kept)
        reading = self._read(spectrum, kept, g, sum(self.elements[k] for k in members))
        return UnionResult(
            rule="support", members=members, eigenvalues=values, kept=kept, **reading._asdict()
        )

    def _direct_sum(self, members: tuple[int, ...]) -> UnionResult:
        """The span of the regions' own kept modes, with its cross blocks."""
        parts = [self.blocks[k] for k in members]
        g = np.hstack([part.g for part in parts])
        values = np.sort(np.concatenate([p.spectrum.pairs.values[p.kept] for p in parts]))[::-1]
        kept = np.ones(values.size, dtype=bool)
        spectrum = self.blocks[members[0]].spectrum
        reading = self._read(spectrum, kept, g, sum(self.elements[k] for k in members))
        if reading.status == "ok" and self.config.region_rule.kind == "none":
            # The spaces are those of the regions, and so is their dependence on the tolerance.
            for k in members:
                own = self._single(k)
                if own.status == "undetermined":
                    reading = reading._replace(status=own.status, note=own.note)
        return UnionResult(
            rule="direct_sum", members=members, eigenvalues=values, kept=kept, **reading._asdict()
        )

    def _single(self, k: int) -> Measured:
        """Entropy of one region, read once."""
        if k not in self._singles:
            block = self.blocks[k]
            self._singles[k] = self._read(block.spectrum, block.kept, block.g, self.elements[k])
        return self._singles[k]

    def _mark(self, a: int, b: int) -> Status:
        """The first mark on anything that a pair's mutual information is made of."""
        singles = [self._single(k).status for k in (a, b)]
        marks = [*singles, *(union.status for union in self.union((a, b)).values())]
        return next((mark for mark in marks if mark != "ok"), "ok")

    def _entropy(self, members: tuple[int, ...], rule: UnionRule) -> float:
        """Entropy of one or several regions."""
        if len(members) == 1:
            return self._single(members[0]).entropy
        return self.union(members)[rule].entropy

    def pairs(self) -> tuple[Pair, ...]:
        """Mutual information of every pair a < b, with the norm of its cross block."""
        single = [self._entropy((k,), "support") for k in range(len(self.blocks))]
        return tuple(
            Pair(
                a=a,
                b=b,
                gap=gaps((self.config.regions[a], self.config.regions[b]))[0],
                support=single[a] + single[b] - self._entropy((a, b), "support"),
                direct_sum=single[a] + single[b] - self._entropy((a, b), "direct_sum"),
                cross_block=gaussian.cross_block(self.blocks[a].g, self.blocks[b].g),
                status=self._mark(a, b),
            )
            for a, b in itertools.combinations(range(len(self.blocks)), 2)
        )

    def triples(self) -> tuple[Triple, ...]:
        """Tripartite information of every three regions that are neighbours in x."""
        row = sorted(range(len(self.blocks)), key=lambda k: self.config.regions[k].x0)
        found = []
        for near in zip(row, row[1:], row[2:], strict=False):
            a, b, c = sorted(near)
            members = (a, b, c)
            values = {}
            for rule in UNION_RULES:
                values[rule] = sum(
                    (-1) ** (size + 1)
                    * sum(self._entropy(s, rule) for s in itertools.combinations(members, size))
                    for size in (1, 2, 3)
                )
            found.append(Triple(members=members, **values))
        return tuple(found)
