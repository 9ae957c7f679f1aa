"""Thresholds read off the spectra: where the mean of sprinklings leaves the continuum.

On the patch, on every region's restricted uncut operator and on that of their union.  Measured
(diamonds of 60 to 960 elements, delta 3, 5 and 10 %): the departure stands at a fixed share of the
elements, rank 0.10, 0.126 and 0.18 n, that is at an eigenvalue (1.6, 1.26, 0.90) that does not
grow with n.  It meets sqrt(n)/(4 pi) at one n for each delta (about 410, 250 and 130).
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Sequence
from dataclasses import replace
from typing import Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Config, Setup
from lozenge_engine.errors import InputError
from lozenge_engine.evidence import EvidencePlan
from lozenge_engine.geometry import PATCH_AREA, region_letter
from lozenge_engine.ground import Ground, ground
from lozenge_engine.kernels.laws import diamond_eigenvalues, root_count_cut
from lozenge_engine.kernels.thresholds import Departure, Ratio, departure, merged, ratio
from lozenge_engine.pointfile import PointFile
from lozenge_engine.source import MAX_OVERSAMPLING
from lozenge_engine.stages import Stages
from lozenge_engine.twin import Twin
from lozenge_engine.uncut import region_values

__all__ = ["OperatorRecord", "ThresholdRecord", "sprinkled_spectra", "threshold_record"]

FloatArray = NDArray[np.float64]
Report = Callable[[str, float], None]
Kind = Literal["patch", "region", "union"]

LAID = 16_384
"""Points of a reference set where no closed form is known (mass, curvature), about, at least."""
SETS = 3
"""Scrambled Sobol sets that the reference is the mean of.  Near the cut of 200 elements their
eigenvalues are off by 3 % with 3 200 points and by 0.2 % with 12 800; a lattice's by 4 and 1.3 %
(measured on the exact spectrum)."""


class OperatorRecord(NamedTuple):
    """One operator: its mean spectrum beside the continuum's, and the thresholds.

    Attributes
    ----------
    kind, name : str
        ``patch``, ``region`` or ``union``; its name on the page.
    region : int
        Index of the region; -1 for patch and union.
    elements : float
        Expected elements of the operator.
    ratio : Ratio
        Mean sprinkled eigenvalue over the continuum's, by rank.
    reference : ndarray, shape (r,), float64
        The continuum's eigenvalues.
    departure : Departure
        The derived threshold, with its rank.
    thresholds : dict of str to float
        What rules would cut at (alpha = 1): ``root_count`` of its own elements; for a union
        ``union_count`` and ``equal_share`` instead.
    count_at : float
        The count n/(2 pi lambda) at the derived threshold lambda.
    meets : float
        Elements at which sqrt(n)/(4 pi) is the derived threshold, (4 pi lambda)**2.
    """

    kind: Kind
    name: str
    region: int
    elements: float
    ratio: Ratio
    reference: FloatArray
    departure: Departure
    thresholds: dict[str, float]
    count_at: float
    meets: float

    def rank_of(self, threshold: float) -> float:
        """Rank at which the continuum's spectrum crosses a threshold.

        Parameters
        ----------
        threshold : float
            > 0, in causal-set units.

        Returns
        -------
        float
            The count n/(2 pi threshold).
        """
        return self.elements / (2.0 * math.pi * threshold)


class ThresholdRecord(NamedTuple):
    """Derived thresholds of a geometry.

    Attributes
    ----------
    operators : tuple of OperatorRecord
        The patch, the regions in the order of their letters and, for several, their union.
    delta : float
        Relative departure that is asked for.
    lowest : float
        How far down spectra were searched, in units of each operator's own threshold.
    done, planned : int
        Sprinklings.
    reference : str
        What the continuum's spectrum is taken from, in words.
    twin : Ratio or None
        The continuum twin's patch spectrum over the reference, with its error, if it was given.
    seconds : float
        Wall time.
    notes : tuple of str
        What is missing, and why.
    """

    operators: tuple[OperatorRecord, ...]
    delta: float
    lowest: float
    done: int
    planned: int
    reference: str
    twin: Ratio | None
    seconds: float
    notes: tuple[str, ...] = ()


def sprinkled_spectra(
    config: Config,
    *,
    lowest: float,
    points: PointFile | None = None,
    stages: Stages | None = None,
    report: Report | None = None,
) -> tuple[FloatArray, ...]:
    """Uncut spectra of one point set: of the patch, of each region, of the union.

    Parameters
    ----------
    config : Config
        The point set and the regions; the rules do not matter.
    lowest : float
        How far down, in units of each operator's own threshold at alpha = 1, 0.05 to 4.
    points : PointFile or None
        The imported points, when the configuration asks for them.
    stages : Stages or None
        Cache of the patch's modes.
    report : callable or None
        As for `lozenge_engine.pipeline.compute`.

    Returns
    -------
    tuple of ndarray, float64
        Positive eigenvalues, descending, as they would be with the expected number of elements:
        times the expected over the counted number of each operator; the union is left out for one
        region.

    Notes
    -----
    Eigenvalues are proportional to the density.  The count's own scatter, 6 % for 250 elements,
    would hide a departure of 5 %; it says nothing of the spectrum's shape.  The union's operator
    is the regions' side by side, since they are spacelike to each other.  Cost: `ground`, and
    `lozenge_engine.uncut.region_values` for each region.
    """
    base = ground(config, floor=lowest, points=points, stages=stages or Stages(), report=report)
    expected = [config.points.elements(region) for region in config.regions]
    factors = [_to_expected(base, n, k) for n, k in zip(base.counts, expected, strict=True)]
    regions = [
        factor
        * region_values(
            base.restricted_commutator(k), floor=base.counting.ratio * root_count_cut(n, lowest)
        )
        for k, (n, factor) in enumerate(zip(base.counts, factors, strict=True))
    ]
    patch = base.modes.values * _to_expected(base, base.elements, config.points.elements())
    spectra = [patch, *regions]
    if len(regions) > 1:
        # Every region's spectrum is known above the largest of the floors.
        floors = [
            root_count_cut(n, lowest) * base.counting.ratio * factor
            for n, factor in zip(base.counts, factors, strict=True)
        ]
        spectra.append(merged(tuple(regions), above=max(floors)))
    return tuple(spectra)


def _to_expected(base: Ground, counted: float, expected: float) -> float:
    """What turns eigenvalues of a point set into those of the expected number of elements."""
    return expected / counted / base.counting.ratio


def threshold_record(
    setup: Setup,
    plan: EvidencePlan,
    *,
    points: PointFile | None = None,
    cache: Stages,
    twin: Twin | None = None,
    report: Report | None = None,
    publish: Callable[[ThresholdRecord], None] | None = None,
) -> ThresholdRecord:
    """Derive the thresholds of a geometry from sprinklings.

    Parameters
    ----------
    setup : Setup
        The geometry.
    plan : EvidencePlan
        Departure, sprinklings, and in `alpha_low` how far down to search.
    points : PointFile or None
        The imported points, when the setup asks for them.
    cache : Stages
        Cache of the sprinkling in front.
    twin : Twin or None
        Shown beside the patch's spectrum if it is there.
    report : callable or None
        Called as ``report(stage, fraction)``; may raise `Cancelled`.
    publish : callable or None
        Called with the record after every sprinkling from the second on.

    Returns
    -------
    ThresholdRecord
        Departures that do not occur in what was searched are NaN.

    Raises
    ------
    InputError
        If the first sprinkling cannot be computed.
    Cancelled
        If `report` raises it.

    Notes
    -----
    Cost: the patch's modes down to `alpha_low` of its threshold for every sprinkling,
    N/(2 pi floor) of them.
    """
    say, show = report or (lambda _s, _f: None), publish or (lambda _r: None)
    start = time.perf_counter()
    lowest = plan.alpha_low
    count = 1 if setup.points.kind == "file" or setup.points.quasi_uniform else plan.realisations
    reference, source = _reference(setup, lowest, report)
    rows: list[tuple[FloatArray, ...]] = []
    record = ThresholdRecord((), plan.delta, lowest, 0, count, source, None, 0.0)
    for r in range(count):
        say("sprinklings", r / count)
        try:
            rows.append(
                sprinkled_spectra(
                    setup.config(r),
                    lowest=lowest,
                    points=points,
                    stages=cache if r == 0 else Stages(),
                    report=report,
                )
            )
        except InputError as error:
            if not r:
                raise
            record = record._replace(notes=(*record.notes, f"sprinkling {r}: {error}"))
            continue
        record = record._replace(
            operators=_operators(setup, rows, reference, plan.delta),
            done=len(rows),
            twin=_beside(twin, reference[0]),
            seconds=time.perf_counter() - start,
        )
        if r:
            show(record)
    return record


def _beside(twin: Twin | None, reference: FloatArray) -> Ratio | None:
    """The twin's patch spectrum over the reference."""
    if twin is None:
        return None
    known = min(twin.patch.size, reference.size)
    base = reference[:known]
    return Ratio(twin.patch[:known] / base, twin.patch_spread[:known] / base)


def _reference(
    setup: Setup, lowest: float, report: Report | None
) -> tuple[tuple[FloatArray, ...], str]:
    """The continuum's spectra of patch, regions and union, deep enough, and where they are from."""
    source, regions = setup.points, setup.regions()
    if setup.mass == 0 and not source.curved:
        sizes = [source.elements(), *(source.elements(region) for region in regions)]
        # Half as many again as the nominal count, which no sprinkled spectrum reaches.
        exact = [
            diamond_eigenvalues(math.ceil(3.0 * math.sqrt(n) / lowest) + 8, elements=n)
            for n in sizes
        ]
        known = max(float(values[-1]) for values in exact[1:])
        union = (merged(tuple(exact[1:]), above=known),) if len(regions) > 1 else ()
        return (*exact, *union), "exact spectrum of a causal diamond"
    times = min(MAX_OVERSAMPLING, max(16, math.ceil(LAID / (PATCH_AREA * source.density))))
    points = replace(source, kind="sobol", oversampling=times, file=None, sha256=None)
    laid = setup.with_(points=points)
    sets = [
        sprinkled_spectra(laid.config(k), lowest=0.9 * lowest, report=report) for k in range(SETS)
    ]
    means = tuple(_mean_by_rank(own) for own in zip(*sets, strict=True))
    return means, f"{SETS} scrambled Sobol sets of about {times} times the density"


def _mean_by_rank(spectra: Sequence[FloatArray]) -> FloatArray:
    """Mean over sets at the ranks that all of them have."""
    known = min(values.size for values in spectra)
    return np.asarray(np.mean([values[:known] for values in spectra], axis=0), dtype=np.float64)


def _operators(
    setup: Setup,
    rows: list[tuple[FloatArray, ...]],
    reference: tuple[FloatArray, ...],
    delta: float,
) -> tuple[OperatorRecord, ...]:
    """What the spectra of all sprinklings so far say of each operator."""
    regions = setup.regions()
    sizes = [setup.points.elements(region) for region in regions]
    names: list[tuple[Kind, str, int, float]] = [
        ("patch", "patch", -1, setup.points.elements()),
        *(("region", region_letter(k), k, n) for k, n in enumerate(sizes)),
    ]
    if len(regions) > 1:
        names.append(("union", "union", -1, sum(sizes)))
    found = []
    for i, (kind, name, region, elements) in enumerate(names):
        known = min(reference[i].size, *(row[i].size for row in rows))
        samples = np.stack([row[i][:known] for row in rows])
        own = reference[i][:known]
        parting = departure(samples, own, delta=delta)
        found.append(
            OperatorRecord(
                kind=kind,
                name=name,
                region=region,
                elements=elements,
                ratio=ratio(samples, own),
                reference=own,
                departure=parting,
                thresholds=_thresholds(kind, elements, len(regions)),
                count_at=elements / (2.0 * math.pi * parting.threshold),
                meets=(4.0 * math.pi * parting.threshold) ** 2,
            )
        )
    return tuple(found)


def _thresholds(kind: Kind, elements: float, regions: int) -> dict[str, float]:
    """What the rules cut at."""
    if kind != "union":
        return {"root_count": root_count_cut(elements)}
    return {
        "union_count": root_count_cut(elements),
        "equal_share": root_count_cut(elements / regions),
    }
