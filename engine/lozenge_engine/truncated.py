"""One sprinkling at many truncations: what every cut of either stage makes of its regions.

The patch's modes are searched once, down to the lowest cut.  A cut of the first stage keeps the
first so many of them; everything after it depends on that number only.
"""

from __future__ import annotations

from functools import cached_property
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Rule
from lozenge_engine.ground import Ground
from lozenge_engine.kernels import cuts, gaussian
from lozenge_engine.kernels.modes import Modes
from lozenge_engine.kernels.subspaces import Gram, Spanned, gram, spanned
from lozenge_engine.readout import read

__all__ = ["Kept", "Regional", "Truncated"]

FloatArray = NDArray[np.float64]
Rows = NDArray[np.intp]


class Kept(NamedTuple):
    """What one kept space of a region or a union holds.

    Attributes
    ----------
    modes : int
        Positive modes kept.
    entropy : float
        In nats; NaN where it cannot be given.
    note : str
        Why not; empty otherwise.
    """

    modes: int
    entropy: float
    note: str


class Regional(NamedTuple):
    """The second stage's rule at one alpha: its cut, or its number, for each region.

    Attributes
    ----------
    rule : Rule
        Its kind decides whether `cuts` or `numbers` act.
    cuts : ndarray, shape (K,), float64
        Thresholds in the units of the points' operator; 0 for a fixed number.
    numbers : ndarray of int, shape (K,)
        Modes of each region under a fixed number.
    """

    rule: Rule
    cuts: FloatArray
    numbers: NDArray[np.int64]

    def of(self, region: int) -> Rule:
        """The rule as one region sees it.

        Parameters
        ----------
        region : int
            Its index.

        Returns
        -------
        Rule
            With the region's own number, if it is a fixed number.
        """
        if self.rule.kind != "fixed_number":
            return self.rule
        return Rule(kind="fixed_number", number=int(self.numbers[region]))

    def keep(self, region: int, values: FloatArray) -> NDArray[np.bool_]:
        """What it keeps of one region's eigenvalues.

        Parameters
        ----------
        region : int
            Its index.
        values : ndarray, shape (r,), float64
            Positive, descending.

        Returns
        -------
        ndarray, shape (r,), bool
            What is kept.
        """
        return cuts.keep(values, self.of(region), cut=float(self.cuts[region]))


class Truncated:
    """The regions of one sprinkling after a cut of the first stage.

    Parameters
    ----------
    ground : Ground
        The sprinkling and its modes.
    kept : int
        Modes of the patch that are kept.
    """

    def __init__(self, ground: Ground, kept: int) -> None:
        self.ground = ground
        self.kept = kept
        self._spectra: dict[tuple[int, ...], tuple[gaussian.Spectrum, FloatArray | None]] = {}
        self._grams: dict[tuple[int, ...], tuple[int, Gram]] = {}
        self._sums: dict[tuple[int, ...], tuple[tuple[int, ...], Gram]] = {}
        self._memo: dict[object, Kept] = {}
        self._space: dict[int, tuple[FloatArray, FloatArray]] = {}

    @cached_property
    def factors(self) -> list[FloatArray]:
        """Factor of the cut state on each region, all rows."""
        values = self.ground.modes.values[: self.kept]
        vectors = self.ground.modes.vectors
        return [gaussian.restricted(values, vectors, own) for own in self.ground.rows]

    @cached_property
    def compressed(self) -> list[FloatArray]:
        """The same in as few coordinates as there are."""
        return [gaussian.compressed(factor) for factor in self.factors]

    def spectrum(self, members: tuple[int, ...]) -> tuple[gaussian.Spectrum, FloatArray | None]:
        """Spectrum of the cut operator on a region or a union, worked out once.

        Parameters
        ----------
        members : tuple of int
            Indices of the regions.

        Returns
        -------
        Spectrum
            Of their operator.
        ndarray, shape (pairs, members), float64, or None
            Share of each mode on each member; None for one region.

        Notes
        -----
        Cost: 7 d**3 flops, d rows or columns of the stacked factors, whichever are fewer.
        """
        if members not in self._spectra:
            self._spectra[members] = self._diagonalised(members)
        return self._spectra[members]

    def _diagonalised(
        self, members: tuple[int, ...]
    ) -> tuple[gaussian.Spectrum, FloatArray | None]:
        parts = [self.compressed[k] for k in members]
        if len(parts) == 1:
            return gaussian.restricted_spectrum(parts[0]), None
        factor = np.vstack(parts)
        sizes = tuple(part.shape[0] for part in parts)
        if factor.shape[0] <= factor.shape[1]:
            spectrum = gaussian.restricted_spectrum(factor)
            return spectrum, gaussian.shares(spectrum, sizes)
        q, small = np.linalg.qr(factor)
        spectrum = gaussian.restricted_spectrum(small)
        lifted = spectrum.pairs._replace(a=q @ spectrum.pairs.a, b=q @ spectrum.pairs.b)
        return spectrum, gaussian.shares(spectrum._replace(pairs=lifted), sizes)

    def single(self, region: int, rule: Regional) -> Kept:
        """Entropy of one region.

        Parameters
        ----------
        region : int
            Its index.
        rule : Regional
            Of the second stage.

        Returns
        -------
        Kept
            Of that kept space.
        """
        spectrum, _ = self.spectrum((region,))
        kept = rule.keep(region, spectrum.pairs.values)
        return self._own((region,), kept, uncut=rule.rule.kind == "none")

    def by_support(self, members: tuple[int, ...], rule: Regional) -> Kept:
        """Entropy of a union whose own modes are cut with the count of the region they live on.

        Parameters
        ----------
        members : tuple of int
            Indices of the regions.
        rule : Regional
            Of the second stage.

        Returns
        -------
        Kept
            Of that kept space.
        """
        spectrum, held = self.spectrum(members)
        values = spectrum.pairs.values
        kept = np.zeros(values.size, dtype=bool)
        owner = held.argmax(axis=1) if held is not None else np.zeros(values.size, dtype=np.intp)
        kernel = cuts.KERNEL_TOLERANCE * float(values[0]) if values.size else 0.0
        for i, k in enumerate(members):
            own = np.nonzero(owner == i)[0]
            kept[own] = rule.keep(k, values[own]) & (values[own] > kernel)
        return self._own(members, kept, uncut=rule.rule.kind == "none")

    def direct_sum(self, members: tuple[int, ...], rule: Regional) -> Kept:
        """Entropy of the span of the regions' own kept modes.

        Parameters
        ----------
        members : tuple of int
            Indices of the regions.
        rule : Regional
            Of the second stage.

        Returns
        -------
        Kept
            Of that kept space.
        """
        kept = [rule.keep(k, self.spectrum((k,))[0].pairs.values) for k in members]
        key = ("sum", members, *(int(own.sum()) for own in kept))
        if key not in self._memo:
            if rule.rule.kind == "none":
                parts = zip(members, kept, strict=True)
                g = np.hstack([gaussian.projected(self.spectrum((k,))[0], m) for k, m in parts])
                self._memo[key] = self._read(members, kept[0], g, uncut=False)
            else:
                self._memo[key] = self._sum(members, tuple(int(own.sum()) for own in kept))
        return self._memo[key]

    def uncut_space(self, members: tuple[int, ...], rule: Regional, spaces: list[Modes]) -> Kept:
        """Entropy on the span of the uncut restricted operators' kept modes.

        The space only: commutator and W stay the cut ones.  Uncut modes lie on one region each,
        so that both rules for a union give the same space.

        Parameters
        ----------
        members : tuple of int
            Indices of the regions.
        rule : Regional
            Of the second stage.
        spaces : list of Modes
            Uncut modes of every region, from `lozenge_engine.ground.spaces`.

        Returns
        -------
        Kept
            Of that kept space.
        """
        for k in members:
            known, wanted = spaces[k].values.size, int(rule.numbers[k])
            short = known < min(wanted, self.ground.rows[k].size // 2)
            if rule.rule.kind == "fixed_number" and short:
                note = f"{wanted} modes asked for, {known} uncut ones found above the lowest cut"
                return Kept(known, np.nan, note)
        counts = tuple(int(rule.keep(k, spaces[k].values).sum()) for k in members)
        key = ("uncut", members, *counts)
        if key not in self._memo:
            blocks = [
                self._seen(k, spaces[k])[:, : 2 * c] for k, c in zip(members, counts, strict=True)
            ]
            block = gram(np.hstack(blocks))
            columns = np.arange(block.r.shape[0])
            self._memo[key] = self._entry(sum(counts), self._spanned(block, columns))
        return self._memo[key]

    def _seen(self, region: int, space: Modes) -> FloatArray:
        """G of the uncut modes of a region, columns a_0, b_0, a_1, ..."""
        if region not in self._space:
            g = np.asarray(self.factors[region].T @ space.vectors, dtype=np.float64)
            self._space[region] = (g, space.values)
        return self._space[region][0]

    def _own(self, members: tuple[int, ...], kept: NDArray[np.bool_], *, uncut: bool) -> Kept:
        """Entropy of some of an operator's own modes, computed once for each choice of them."""
        key = (members, uncut, kept.tobytes())
        if key not in self._memo:
            spectrum, _ = self.spectrum(members)
            if uncut:
                g = gaussian.projected(spectrum, kept)
                self._memo[key] = self._read(members, kept, g, uncut=True)
            else:
                block, columns = self._columns(members, kept)
                self._memo[key] = self._entry(int(kept.sum()), self._spanned(block, columns))
        return self._memo[key]

    def _columns(self, members: tuple[int, ...], kept: NDArray[np.bool_]) -> tuple[Gram, Rows]:
        """Gram matrices that hold the kept modes, and where these stand in them."""
        needed = int(np.nonzero(kept)[0].max(initial=-1)) + 1
        size, block = self._grams.get(members, (-1, None))
        if block is None or size < needed:
            size = min(kept.size, max(needed, 4))
            mask = np.arange(kept.size) < size
            block = gram(gaussian.projected(self.spectrum(members)[0], mask))
            self._grams[members] = (size, block)
        found = np.nonzero(kept)[0]
        return block, np.concatenate([found, size + found])

    def _sum(self, members: tuple[int, ...], counts: tuple[int, ...]) -> Kept:
        """Entropy of the first so many modes of each region together."""
        sizes, block = self._sums.get(members, ((0,) * len(members), None))
        if block is None or any(n > size for n, size in zip(counts, sizes, strict=True)):
            sizes = tuple(max(pair) for pair in zip(counts, sizes, strict=True))
            parts = []
            for k, size in zip(members, sizes, strict=True):
                spectrum, _ = self.spectrum((k,))
                wanted = np.arange(spectrum.pairs.values.size) < size
                parts.append(gaussian.projected(spectrum, wanted))
            block = gram(np.hstack(parts))
            self._sums[members] = (sizes, block)
        starts = np.cumsum((0, *(2 * size for size in sizes)))
        columns = [
            np.concatenate([start + np.arange(n), start + size + np.arange(n)])
            for start, size, n in zip(starts[:-1], sizes, counts, strict=True)
        ]
        return self._entry(sum(counts), self._spanned(block, np.concatenate(columns)))

    def _spanned(self, block: Gram, columns: Rows) -> Spanned:
        return spanned(block, columns, order=self.ground.config.order)

    @staticmethod
    def _entry(modes: int, found: Spanned) -> Kept:
        return Kept(modes, np.nan if found.trouble else found.entropy, found.trouble)

    def _read(
        self, members: tuple[int, ...], kept: NDArray[np.bool_], g: FloatArray, *, uncut: bool
    ) -> Kept:
        """As the pipeline reads it, for a second stage without a cut."""
        config = self.ground.config
        found = read(
            self.spectrum(members)[0] if uncut else self.spectrum(members[:1])[0],
            kept,
            g,
            order=config.order,
            uncut=True,
            elements=sum(self.ground.rows[k].size for k in members),
            rank=2 * self.kept,
        )
        value = found.entropy if found.status == "ok" else np.nan
        return Kept(g.shape[1] // 2, value, found.note if found.status != "ok" else "")
