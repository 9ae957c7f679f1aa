"""What the view of the cut study is drawn from: sprinklings, slopes and the twin against alpha."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import replace
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Config, Setup
from lozenge_engine.cutmeans import Level, MeanCurve, SlopeCurve, averaged, levels, slopes
from lozenge_engine.cutstudy import CutStudy, cut_study
from lozenge_engine.cuttwin import Study, cut_twin
from lozenge_engine.draws import density_draws, realisations
from lozenge_engine.errors import InputError
from lozenge_engine.evidence import EvidencePlan
from lozenge_engine.kernels.laws import calabrese_cardy_slope
from lozenge_engine.placement import abscissa
from lozenge_engine.pointfile import PointFile
from lozenge_engine.stages import Stages
from lozenge_engine.sweeps import ends_inside

__all__ = ["CutRecord", "cut_record", "ladder_studies"]

FloatArray = NDArray[np.float64]
Report = Callable[[str, float], None]


class CutRecord(NamedTuple):
    """A cut study as far as it is known.

    Attributes
    ----------
    front : CutStudy
        The sprinkling in front, with what each mode carries.
    averages : tuple of MeanCurve
        Over the sprinklings done, the one in front among them.
    done, planned : int
        Those sprinklings, and how many are asked for.
    slopes : tuple of SlopeCurve
        Along the density ladder; empty until three rungs are there.
    slopes_done, slopes_planned : int
        Sprinklings of the ladder; 0 planned if no slope is asked for.
    twin : tuple of MeanCurve
        The continuum twin's curves at `twin_alphas`; empty until it is there.
    twin_alphas : ndarray, shape (T,), float64
        The part of the alphas that the twin can show.
    twin_oversampling : int
        Density of its sets over the sprinkling's; 0 without sets, that is for the exact one.
    plateaus : tuple of Level
        Of averages and slopes.
    reference_slope : float or None
        Calabrese-Cardy slope; None where it does not hold (mass, curvature).
    notes : tuple of str
        What could not be done, and why.
    """

    front: CutStudy
    averages: tuple[MeanCurve, ...] = ()
    done: int = 1
    planned: int = 1
    slopes: tuple[SlopeCurve, ...] = ()
    slopes_done: int = 0
    slopes_planned: int = 0
    twin: tuple[MeanCurve, ...] = ()
    twin_alphas: FloatArray = np.empty(0)
    twin_oversampling: int = 0
    plateaus: tuple[Level, ...] = ()
    reference_slope: float | None = None
    notes: tuple[str, ...] = ()


def cut_record(
    setup: Setup,
    plan: EvidencePlan,
    *,
    points: PointFile | None = None,
    cache: Stages,
    report: Report | None = None,
    publish: Callable[[CutRecord], None] | None = None,
) -> CutRecord:
    """Study the cuts of a geometry: front, average, twin, and slopes if they are what is drawn.

    Parameters
    ----------
    setup : Setup
        The geometry; its density ladder is what slopes are taken from.
    plan : EvidencePlan
        Alphas, stage, rules, realisations, level of the twin; the ladder is drawn only if its
        `cut_quantity` is ``slope``.
    points : PointFile or None
        The imported points, when the setup asks for them.
    cache : Stages
        Cache of the sprinkling in front; the others go through caches of their own.
    report : callable or None
        Called as ``report(stage, fraction)``; may raise `Cancelled`.
    publish : callable or None
        Called with the record whenever something has been added to it.

    Returns
    -------
    CutRecord
        Complete.

    Raises
    ------
    InputError
        If the sprinkling in front cannot be studied; what fails later is in the notes.
    Cancelled
        If `report` raises it.

    Notes
    -----
    Cost: `cut_study` for every sprinkling.
    """
    say, show = report or (lambda _s, _f: None), publish or (lambda _r: None)

    def study(config: Config, stages: Stages, alphas: FloatArray, *, front: bool) -> CutStudy:
        return cut_study(
            config,
            alphas=tuple(float(a) for a in alphas),
            stages=(plan.stage,),
            rules=plan.rules,
            uncut_space=plan.uncut_space,
            per_mode=front,
            points=points,
            cache=stages,
            report=say,
        )

    alphas = np.array(plan.alpha_values())
    studies = [study(setup.config(), cache, alphas, front=True)]
    count = 1 if realisations(setup) == 1 and setup.points.kind == "file" else plan.realisations
    record = _with_means(
        CutRecord(studies[0], planned=count, reference_slope=_reference(setup)), studies
    )
    show(record)
    for r in range(1, count):
        say("sprinklings", r / count)
        studies.append(study(setup.config(r), Stages(), alphas, front=False))
        record = _with_means(record, studies)
        show(record)
    beside = cut_twin(setup, plan, study=study, report=say)
    record = record._replace(
        twin=beside.curves,
        twin_alphas=beside.alphas,
        twin_oversampling=beside.oversampling,
        notes=(*record.notes, *([beside.note] if beside.note else [])),
    )
    show(record)
    if plan.cut_quantity == "slope":
        for grown in _ladder(record, setup, plan, study, say):
            record = grown
            show(record)
    return record


def _reference(setup: Setup) -> float | None:
    """Slope of the Calabrese-Cardy law where it is known to hold."""
    if setup.mass > 0 or setup.points.curved:
        return None
    return calabrese_cardy_slope(ends_inside(setup.regions()), order=setup.order)


def _with_means(record: CutRecord, studies: list[CutStudy]) -> CutRecord:
    """The record with these sprinklings averaged and their plateaus marked."""
    means = averaged(studies)
    return record._replace(
        averages=means,
        done=len(studies),
        plateaus=levels(record.front.alphas, means, record.slopes),
    )


def ladder_studies(setup: Setup, *, sprinklings: int) -> list[tuple[int, Config]]:
    """Sprinklings of the density ladder: the first of every rung, then the second, ...

    Parameters
    ----------
    setup : Setup
        Its density ladder, as the page's scaling view draws it.
    sprinklings : int
        For each rung.

    Returns
    -------
    list of (int, Config)
        Rung and configuration; rungs have sprinklings of their own.
    """
    wanted = setup.with_(averaging=replace(setup.averaging, sprinklings=sprinklings))
    drawn = density_draws(wanted)
    return [(rung, draw.config) for draw, rung in zip(drawn.draws, drawn.point_of, strict=True)]


def _ladder(
    record: CutRecord,
    setup: Setup,
    plan: EvidencePlan,
    study: Study,
    say: Report,
) -> Iterator[CutRecord]:
    """Yield the record as the sprinklings of the ladder come in."""
    todo = ladder_studies(setup, sprinklings=plan.realisations)
    alphas = record.front.alphas
    values = density_draws(setup).values
    sources = [replace(setup.points, density=float(density)) for density in values]
    x = np.array([abscissa(setup.regions(), source)[0] for source in sources])
    rungs: list[list[CutStudy]] = [[] for _ in values]
    for i, (rung, config) in enumerate(todo):
        say("slopes", i / len(todo))
        try:
            rungs[rung].append(study(config, Stages(), alphas, front=False))
        except InputError as error:
            note = f"density {values[rung]:.4g}: {error}"
            record = record._replace(notes=(*record.notes, note))
        lines = slopes(x, rungs)
        record = record._replace(
            slopes=lines,
            slopes_done=i + 1,
            slopes_planned=len(todo),
            plateaus=levels(record.front.alphas, record.averages, lines),
        )
        yield record
