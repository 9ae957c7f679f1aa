"""Mutual information of two regions against their cross ratio, by several routes.

Each curve belongs to an algebra of its own: the field on the elements of the causal set, cut; the
same in the continuum; positions and momenta of a chain; currents.  None of them has to coincide
with another unless the algebras do, so that none is drawn as the other's reference.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Setup
from lozenge_engine.draws import placements
from lozenge_engine.entropies import UNION_RULES
from lozenge_engine.errors import InputError, refuse
from lozenge_engine.evidence import EvidencePlan
from lozenge_engine.geometry import Region, check_regions
from lozenge_engine.kernels.currents import CURRENT_GAPS, cross_ratio, current_curve, small_eta
from lozenge_engine.kernels.scaling import Estimate, estimate
from lozenge_engine.mutualcurves import (
    ALGEBRAS,
    CurveKind,
    MutualCurve,
    MutualRecord,
    chain_mutual,
    cross_ratios,
)
from lozenge_engine.placement import largest_mean_gap, with_separation
from lozenge_engine.pointfile import PointFile
from lozenge_engine.samples import Draw, Reading, take
from lozenge_engine.stages import Stages
from lozenge_engine.sweeps import nearest_pair
from lozenge_engine.twin import Twin, twins

__all__ = ["MutualCurve", "MutualRecord", "mutual_record"]

FloatArray = NDArray[np.float64]
Report = Callable[[str, float], None]
Publish = Callable[[MutualRecord], None]

SEPARATIONS = 10
"""Gaps at which regions are read, the touching one among them."""
CLOSED = ("exact", "smooth")
"""Levels of the twin that take less time than the data; the others come after them."""
FAR = 0.3
"""Cross ratio up to which the law of small ones is drawn."""


def mutual_record(
    setup: Setup,
    plan: EvidencePlan,
    *,
    points: PointFile | None = None,
    stages: Stages | None = None,
    report: Report | None = None,
    publish: Publish | None = None,
) -> MutualRecord:
    """Mutual information of the nearest pair against the cross ratio at fixed size.

    Parameters
    ----------
    setup : Setup
        Two or more regions; their sizes, the density, mass, rules and order are kept.
    plan : EvidencePlan
        Sprinklings to read, and the level of the twin.
    points : PointFile or None
        The imported points, when the setup asks for them.
    stages : Stages or None
        Cache of the modes.
    report : callable or None
        Called with a stage and a fraction; may raise `Cancelled`.
    publish : callable or None
        Called with the record as far as it is, after every sprinkling and every route.

    Returns
    -------
    MutualRecord
        With the curves of both union rules, the twin's, the chain's and, for a massless field and
        q = 1, the currents'.

    Raises
    ------
    InputError
        For one region, which has no partner.
    Cancelled
        If `report` raises it.

    Notes
    -----
    Cost: the patch's modes of every sprinkling and ten second stages each; as much for each set
    of the twin; ten chains.
    """
    work = _Work(setup, plan, report or (lambda _stage, _fraction: None), publish)
    work.lattices()
    if plan.level in CLOSED:
        work.twin(stages)
    work.data(points, stages)
    if plan.level not in CLOSED:
        work.twin(stages)
    return work.record()


class _Work:
    """A record in the making."""

    def __init__(
        self, setup: Setup, plan: EvidencePlan, report: Report, publish: Publish | None
    ) -> None:
        regions = setup.regions()
        if len(regions) < 2:
            raise refuse(
                "mutual information",
                given="one region",
                allowed="two or more regions",
                do="add a region on the bench",
            )
        self.begun = time.perf_counter()
        self.setup, self.plan = setup, plan
        self.report, self.publish = report, publish
        self.pair = nearest_pair(regions)
        self.layouts = _layouts(setup)
        self.ratios = [cross_ratios(*self._of(layout)) for layout in self.layouts]
        self.eta = np.array([math.sqrt(u * v) for u, v in self.ratios])
        self.curves: dict[tuple[CurveKind, str], MutualCurve] = {}
        self.cross = np.full(len(self.layouts), math.nan)
        self.done = 0
        once = setup.points.kind == "file"
        self.planned = 1 if once else plan.realisations
        self.notes = self._first_notes()

    def _of(self, layout: tuple[Region, ...]) -> tuple[Region, Region]:
        return layout[self.pair[0]], layout[self.pair[1]]

    def _index(self) -> int:
        count = len(self.layouts[0])
        pairs = [(a, b) for a in range(count) for b in range(a + 1, count)]
        return pairs.index(self.pair)

    def _first_notes(self) -> list[str]:
        notes = []
        if any(abs(u - v) > 1e-9 for u, v in self.ratios):
            notes.append("cross ratios in u and v differ: drawn at their geometric mean")
        if len(self.layouts[0]) > 2:
            notes.append("the nearest pair of more regions; the pair moves as all gaps scale")
        if self.setup.order != 1.0:
            notes.append("Renyi entropies: their difference is no mutual information")
        return notes

    def add(
        self, kind: CurveKind, rule: str, eta: FloatArray, value: FloatArray, error: FloatArray
    ) -> None:
        """Put a curve in place of an older one."""
        order = np.argsort(eta, kind="stable")
        made = MutualCurve(kind, rule, ALGEBRAS[kind], eta[order], value[order], error[order])
        self.curves[kind, rule] = made

    def told(self) -> None:
        """Let whoever waits see what there is."""
        if self.publish is not None:
            self.publish(self.record())

    def record(self) -> MutualRecord:
        """What is known so far."""
        own = self._of(self.setup.regions())
        first, second = (2 * region.half_width for region in self._of(self.layouts[0]))
        gaps = [_gap(*self._of(layout)) for layout in self.layouts]
        return MutualRecord(
            (first, second),
            np.array(gaps),
            self.eta,
            math.sqrt(math.prod(cross_ratios(*own))),
            self.setup.points.density,
            tuple(self.curves.values()),
            self.done,
            self.planned,
            self.cross,
            self.plan.level,
            tuple(self.notes),
            time.perf_counter() - self.begun,
        )

    def lattices(self) -> None:
        """The chain and the currents, which need no causal set."""
        rows = []
        for k, layout in enumerate(self.layouts):
            self.report("chain", k / len(self.layouts))
            rows.append(
                chain_mutual(*self._of(layout), mass=self.setup.mass, order=self.setup.order)
            )
        eta, value, error = np.array(rows).T
        # Gaps that round to the same sites are one point.
        some = np.isfinite(eta) & (np.arange(eta.size) == np.searchsorted(eta, eta))
        self.add("chain", "", eta[some], value[some], error[some])
        if self.setup.mass == 0.0 and self.setup.order == 1.0:
            gaps = []
            for k, gap in enumerate(CURRENT_GAPS):
                self.report("currents", k / len(CURRENT_GAPS))
                current_curve((gap,))
                gaps.append(gap)
            found = current_curve(tuple(gaps))
            self.add("currents", "", found.eta, 2 * found.mutual, 2 * found.error)
            far = np.geomspace(min(0.01, self.eta[0]), FAR, 12)
            self.add("far", "", far, 2 * small_eta(far), np.zeros_like(far))
        self.told()

    def data(self, points: PointFile | None, stages: Stages | None) -> None:
        """Readings of every sprinkling at every gap, both union rules."""
        setup = self.setup
        images = [placements(setup, layout) for layout in self.layouts]
        every = tuple(image for own in images for image in own)
        ends = np.cumsum([0, *(len(own) for own in images)])
        rows: list[tuple[Reading, ...]] = []
        for r in range(self.planned):

            def tell(_stage: str, fraction: float, before: int = r) -> None:
                self.report("sprinklings", (before + fraction) / self.planned)

            draw = Draw(config=setup.config(r), layouts=every)
            try:
                rows.append(take(draw, points=points, stages=stages, report=tell))
            except InputError as error:
                self.notes.append(f"sprinkling {r + 1}: {error}")
            self.done = r + 1
            self._read(rows, ends)
            self.told()

    def _read(self, rows: list[tuple[Reading, ...]], ends: NDArray[np.intp]) -> None:
        if not rows:
            return
        index = self._index()

        def means(field: str) -> list[Estimate]:
            table = np.array([[getattr(one, field)[index] for one in row] for row in rows])
            halves = np.add.reduceat(table, ends[:-1], axis=1) / np.diff(ends)
            return [estimate(column) for column in halves.T]

        for rule in UNION_RULES:
            found = means(f"pair_{rule}")
            self.add(
                "data",
                rule,
                self.eta,
                np.array([e.mean for e in found]),
                np.array([e.error for e in found]),
            )
        self.cross = np.array([e.mean for e in means("cross_block")])

    def twin(self, stages: Stages | None) -> None:
        """The twin at every gap."""
        try:
            found: tuple[Twin, ...] = twins(
                self.setup.config(),
                self.layouts,
                level=self.plan.level,
                points_cache=stages,
                report=self.report,
            )
        except InputError as error:
            self.notes.append(f"no twin: {error}")
            return
        index = self._index()
        for rule in UNION_RULES:
            values = [getattr(one, f"pair_{rule}")[index] for one in found]
            self.add(
                "twin",
                rule,
                self.eta,
                np.array([v.value for v in values]),
                np.array([v.error for v in values]),
            )
        self.told()


def _gap(a: Region, b: Region) -> float:
    left, right = sorted((a, b), key=lambda r: r.x0)
    return max(0.0, (right.x0 - right.reach) - (left.x0 + left.reach))


def _layouts(setup: Setup) -> list[tuple[Region, ...]]:
    """The regions at gaps from the widest that fits to none, equally spaced in the cross ratio."""
    regions = setup.regions()
    widest = largest_mean_gap(regions)
    mean = sum(2 * r.half_width for r in regions) / len(regions)
    lowest = cross_ratio(mean, mean, widest)
    found = []
    for eta in np.linspace(lowest, 1.0, SEPARATIONS):
        gap = min(mean * (eta**-0.5 - 1.0), widest * (1 - 1e-12))
        try:
            layout = with_separation(regions, max(0.0, float(gap)))
            check_regions(layout)
        except InputError:
            continue  # of unequal gaps the widest may not fit where the mean would
        found.append(tuple(replace(region) for region in layout))
    return found
