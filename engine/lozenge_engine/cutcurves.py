"""Curves of a cut study: the kept spaces of one sprinkling at every alpha."""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Rule
from lozenge_engine.evidence import CutRule, Stage
from lozenge_engine.ground import Ground, spaces
from lozenge_engine.kernels import cuts, gaussian
from lozenge_engine.kernels.laws import nominal_modes
from lozenge_engine.kernels.modes import Modes
from lozenge_engine.kernels.subspaces import gram, nested_entropies
from lozenge_engine.sweeps import nearest_pair
from lozenge_engine.truncated import Kept, Regional, Truncated

__all__ = ["Carried", "Curves", "CutCurve", "fixed_number"]

FloatArray = NDArray[np.float64]
Report = Callable[[str, float], None]

DEEPER = 0.75
"""Uncut spaces are searched below the lowest cut, since spectra fall short of a fixed number."""
LEAST_CARRIED, MOST_CARRIED = 40, 200
"""Modes of a region whose gain is worked out: four times those kept, within these bounds."""


class CutCurve(NamedTuple):
    """One rule at one stage, at M multiples of the threshold, for K regions.

    Attributes
    ----------
    stage, rule : str
        Which threshold moves, and by which rule.
    uncut_space : bool
        Whether the regions' kept space comes from the uncut restricted operator (the space only;
        commutator and W stay the cut ones).
    patch_kept, patch_ratio : ndarray, shape (M,), float64
        Positive modes that the first stage keeps, and their ratio to the nominal number
        2 sqrt(N)/alpha; NaN without a cut in that stage.
    kept, ratio : ndarray, shape (M, K), float64
        Positive modes that the second stage keeps, and their ratio to 2 sqrt(n)/alpha.
    entropy : ndarray, shape (M, K), float64
        Of each region, in nats; NaN where it cannot be given.
    union_support, union_direct_sum : ndarray, shape (M,), float64
        Entropy of all regions together under both union rules; the region's own for K = 1.
    mutual_support, mutual_direct_sum : ndarray, shape (M,), float64
        Mutual information of the nearest pair; NaN for K = 1.
    reasons : tuple of str
        Why a number is missing at each alpha; empty where none is.
    """

    stage: Stage
    rule: CutRule
    uncut_space: bool
    patch_kept: FloatArray
    patch_ratio: FloatArray
    kept: FloatArray
    ratio: FloatArray
    entropy: FloatArray
    union_support: FloatArray
    union_direct_sum: FloatArray
    mutual_support: FloatArray
    mutual_direct_sum: FloatArray
    reasons: tuple[str, ...]


class Carried(NamedTuple):
    """Which modes of one region carry its entropy, at the configuration's own first stage.

    Attributes
    ----------
    eigenvalues : ndarray, shape (r,), float64
        The largest of the cut operator restricted to the region, descending, in units of the
        geometry: four times as many as are kept, 40 to 200 of them.
    gain : ndarray, shape (r,), float64
        Entropy with the first k modes less that with the first k - 1, in nats: what mode k adds.
        NaN where the modes reach into the kernel.
    kept : ndarray, shape (r,), bool
        What the configuration's rule keeps; the rest is what the cut drops.
    """

    eigenvalues: FloatArray
    gain: FloatArray
    kept: NDArray[np.bool_]


class Curves:
    """All kept spaces of one sprinkling.

    Parameters
    ----------
    base : Ground
        The sprinkling and its modes down to the lowest cut.
    row : ndarray, shape (M,), float64
        The alphas, increasing.
    uncut_space : bool
        Whether the spaces of the uncut restricted operators are wanted too.
    """

    def __init__(self, base: Ground, row: FloatArray, *, uncut_space: bool) -> None:
        self.base = base
        self.row = row
        self.count = len(base.rows)
        self.pair = nearest_pair(base.config.regions)
        self.spaces: list[Modes] = spaces(base, alpha=DEEPER * float(row[0])) if uncut_space else []
        self._last: Truncated | None = None
        # The configuration's own cut of the patch, which the regions' curves come back to.
        self._own_kept = self._patch_kept(base.config.patch_rule)
        self._own: Truncated | None = None

    # ------------------------------------------------------------ first stage

    def _patch_rule(self, stage: str, rule: str, alpha: float) -> Rule:
        """Rule of the first stage."""
        if stage == "regions":
            return self.base.config.patch_rule
        if stage == "patch" and rule == "fixed_number":
            expected = self.base.config.points.elements()
            return Rule(kind="fixed_number", number=fixed_number(expected, alpha))
        return Rule(kind="root_count", alpha=alpha)

    def _patch_kept(self, rule: Rule) -> int | None:
        """Modes of the patch that a rule keeps; None if they are not all known."""
        base = self.base
        if rule.kind == "fixed_number":
            return rule.number if rule.number <= base.modes.values.size else None
        own, ratio = base.elements, base.counting.ratio
        cut = cuts.threshold(rule, own=own, union=own, regions=1, ratio=ratio)
        return int((base.modes.values > cut).sum())

    def _truncated(self, kept: int) -> Truncated:
        """The regions after this cut of the patch; the last and the own one are at hand."""
        if kept == self._own_kept:
            self._own = self._own or Truncated(self.base, kept)
            return self._own
        if self._last is None or self._last.kept != kept:
            self._last = Truncated(self.base, kept)
        return self._last

    # ----------------------------------------------------------- second stage

    def _regional(self, stage: str, rule: CutRule, alpha: float) -> Regional:
        """Rule of the second stage, with its cut or number for each region."""
        if stage == "patch":
            own = self.base.config.region_rule
            numbers = [own.number] * self.count
        else:
            number = [
                fixed_number(self.base.config.points.elements(region), alpha)
                for region in self.base.config.regions
            ]
            fixed = rule == "fixed_number"
            own = Rule(kind=rule) if fixed else Rule(kind=rule, alpha=alpha)
            numbers = number if fixed else [own.number] * self.count
        counts = self.base.counts
        thresholds = [
            cuts.threshold(
                own, own=n, union=sum(counts), regions=self.count, ratio=self.base.counting.ratio
            )
            for n in counts
        ]
        return Regional(own, np.array(thresholds), np.array(numbers))

    # ---------------------------------------------------------------- curves

    def columns(self, wanted: list[tuple[Stage, CutRule]], say: Report) -> list[CutCurve]:
        """One curve for each stage and rule, then those of the uncut space.

        Parameters
        ----------
        wanted : list of (str, str)
            Stages and rules.
        say : callable
            Progress, as ``say("cuts", fraction)``; may raise `Cancelled`.

        Returns
        -------
        list of CutCurve
            In that order.
        """
        spaces_of = (False, True) if self.spaces else (False,)
        places = [(s, r, uncut) for uncut in spaces_of for s, r in wanted]
        rows: dict[tuple[str, str, bool], list[_Row]] = {place: [] for place in places}
        for i, alpha in enumerate(self.row):
            say("cuts", i / self.row.size)
            # By kept modes of the patch, so that each of its cuts is worked out once.
            todo = [(self._patch_rule(s, r, float(alpha)), s, r, u) for s, r, u in places]
            # The last rule keeps most, and what is worked out for it serves the others.
            todo.reverse()
            todo.sort(key=lambda item: self._patch_kept(item[0]) or 0)
            for patch_rule, stage, rule, uncut in todo:
                row = self._row(patch_rule, stage, rule, float(alpha), uncut=uncut)
                rows[stage, rule, uncut].append(row)
        say("cuts", 1.0)
        return [self._curve(*place, rows[place]) for place in places]

    def _row(
        self, patch_rule: Rule, stage: Stage, rule: CutRule, alpha: float, *, uncut: bool
    ) -> _Row:
        """All numbers of one curve at one alpha."""
        if stage == "patch" and rule in ("union_count", "equal_share"):
            return _missing(self.count, "the patch is one region: its root count is all there is")
        kept = self._patch_kept(patch_rule)
        if kept is None:
            return _missing(
                self.count,
                f"{patch_rule.number} modes asked for, {self.base.modes.values.size} found above "
                "the lowest cut",
            )
        regional = self._regional(stage, rule, alpha)
        truncated = self._truncated(kept)
        everyone = tuple(range(self.count))
        if uncut:
            singles = [truncated.uncut_space((k,), regional, self.spaces) for k in everyone]
            whole = truncated.uncut_space(everyone, regional, self.spaces)
            two = (
                truncated.uncut_space(self.pair, regional, self.spaces) if self._several else whole
            )
            unions, pairs = (whole, whole), (two, two)
        else:
            singles = [truncated.single(k, regional) for k in everyone]
            unions, pairs = (singles[0], singles[0]), (singles[0], singles[0])
            if self._several:
                unions = self._both(truncated, everyone, regional)
                pairs = self._both(truncated, self.pair, regional)
        nominal = nominal_modes(self.base.elements) / self._nominal_alpha(patch_rule)
        shown = self._shown_alpha(stage, regional, alpha)
        return _Row(kept, kept / nominal, singles, unions, pairs, shown)

    @property
    def _several(self) -> bool:
        return self.count > 1

    def _both(
        self, truncated: Truncated, members: tuple[int, ...], rule: Regional
    ) -> tuple[Kept, Kept]:
        """A union under both rules."""
        return truncated.by_support(members, rule), truncated.direct_sum(members, rule)

    def _nominal_alpha(self, rule: Rule) -> float:
        """Multiple of the threshold that the nominal number of the first stage belongs to."""
        if rule.kind == "fixed_number":
            return nominal_modes(self.base.config.points.elements()) / rule.number
        return rule.alpha

    def _shown_alpha(self, stage: str, rule: Regional, alpha: float) -> float:
        """The same of the second stage; NaN without a cut there."""
        if stage != "patch":
            return alpha
        if rule.rule.kind == "none":
            return float("nan")
        if rule.rule.kind == "fixed_number":
            return nominal_modes(self.base.counts[0]) / rule.rule.number
        return rule.rule.alpha

    def _curve(self, stage: Stage, rule: CutRule, uncut: bool, rows: list[_Row]) -> CutCurve:
        """Rows as columns."""
        nominal = np.array([nominal_modes(n) for n in self.base.counts])
        kept = np.array([[k.modes for k in row.singles] for row in rows], dtype=float)
        alphas = np.array([row.alpha for row in rows])
        entropy = np.array([[k.entropy for k in row.singles] for row in rows])
        a, b = self.pair
        both = entropy[:, a] + entropy[:, b] if self._several else np.full(len(rows), np.nan)
        return CutCurve(
            stage=stage,
            rule=rule,
            uncut_space=uncut,
            patch_kept=np.array([row.patch_kept for row in rows], dtype=float),
            patch_ratio=np.array([row.patch_ratio for row in rows]),
            kept=kept,
            ratio=kept * alphas[:, None] / nominal,
            entropy=entropy,
            union_support=np.array([row.unions[0].entropy for row in rows]),
            union_direct_sum=np.array([row.unions[1].entropy for row in rows]),
            mutual_support=both - np.array([row.pairs[0].entropy for row in rows]),
            mutual_direct_sum=both - np.array([row.pairs[1].entropy for row in rows]),
            reasons=tuple(row.reason for row in rows),
        )

    # -------------------------------------------------------------- per mode

    def carried(self) -> tuple[Carried, ...]:
        """What each mode of each region adds to its entropy."""
        kept = self._patch_kept(self.base.config.patch_rule)
        if kept is None or self.base.config.patch_rule.kind == "none":
            return ()
        truncated = self._truncated(kept)
        order = self.base.config.order
        rule = self.base.config.region_rule
        found = []
        for k, n in enumerate(self.base.counts):
            spectrum, _ = truncated.spectrum((k,))
            values = spectrum.pairs.values
            held = cuts.keep(
                values,
                rule,
                cut=cuts.threshold(
                    rule,
                    own=n,
                    union=sum(self.base.counts),
                    regions=self.count,
                    ratio=self.base.counting.ratio,
                ),
            )
            shown = min(values.size, MOST_CARRIED, max(LEAST_CARRIED, 4 * int(held.sum())))
            block = gram(gaussian.projected(spectrum, np.arange(values.size) < shown))
            entropy = nested_entropies(block, order=order)
            gain = np.diff(entropy, prepend=0.0)
            found.append(Carried(values[:shown] / self.base.counting.ratio, gain, held[:shown]))
        return tuple(found)


class _Row(NamedTuple):
    """One curve at one alpha."""

    patch_kept: float
    patch_ratio: float
    singles: list[Kept]
    unions: tuple[Kept, Kept]
    pairs: tuple[Kept, Kept]
    alpha: float
    refused: str = ""

    @property
    def reason(self) -> str:
        """The first reason why a number is missing."""
        notes = (kept.note for kept in (*self.singles, *self.unions, *self.pairs))
        return self.refused or next((note for note in notes if note), "")


def _missing(count: int, reason: str) -> _Row:
    """A row without numbers."""
    nan = float("nan")
    none = Kept(0, nan, "")
    return _Row(nan, nan, [none] * count, (none, none), (none, none), nan, reason)


def fixed_number(elements: float, alpha: float) -> int:
    """Number of modes that a fixed number stands for at a multiple of the threshold.

    Parameters
    ----------
    elements : float
        Expected elements of the operator.
    alpha : float
        Multiple of the threshold.

    Returns
    -------
    int
        The nominal 2 sqrt(n)/alpha, rounded; at least 1.
    """
    return max(1, round(nominal_modes(elements) / alpha))
