"""The numbers of the bench and of a campaign as tables for a paper."""

from __future__ import annotations

import math

from lozenge_dashboard.campaigns import Watch
from lozenge_dashboard.publish.tables import Cell, Estimated, Head, Table
from lozenge_dashboard.readings import values
from lozenge_dashboard.records import RULE_NAMES, Scene
from lozenge_engine.estimates import CellEstimate
from lozenge_engine.geometry import region_letter
from lozenge_engine.kernels.scaling import Estimate
from lozenge_engine.sweeps import ScalingCurve, SeparationCurve

__all__ = ["bench_tables", "campaign_tables"]

NAN = math.nan
AXIS_HEADS = {
    "density": Head("density", "per unit area"),
    "half_width": Head("half-width", "patch half-widths"),
    "separation": Head("separation", "patch half-widths"),
    "mass": Head("mass", "inverse patch half-widths"),
    "region_count": Head("regions"),
    "truncation_mode": Head("truncation"),
    "alpha": Head("multiple of the threshold", digits=".4g"),
    "order": Head("Rényi order"),
}
LENGTH = Head("ln(l/a)", digits=".4f")
ELEMENTS = Head("expected elements per region", digits=".1f")


def _estimated(estimate: Estimate | None) -> Estimated:
    """Mean and error; no error is invented for one sprinkling."""
    return Estimated(NAN, NAN) if estimate is None else Estimated(estimate.mean, estimate.error)


# ------------------------------------------------------------------------ bench


def bench_tables(scene: Scene) -> list[Table]:
    """Tables of the bench: the values, and each sweep that was computed.

    Parameters
    ----------
    scene : Scene
        What was computed.

    Returns
    -------
    list of Table
        The values first.
    """
    found = [_values(scene)]
    if scene.density is not None:
        found.append(_scaling(scene.density, "density ladder at fixed geometry"))
    if scene.size is not None:
        found.append(_scaling(scene.size, "all sizes scaled together at fixed density"))
    fitted = [c for c in (scene.density, scene.size) if c is not None and c.fit is not None]
    if fitted:
        found.append(_fits(fitted))
    if scene.separation is not None and len(scene.result.regions) > 1:
        found.append(_separation(scene.separation))
    return found


def _values(scene: Scene) -> Table:
    shown = values(scene)
    count = max(value.count for value in shown)
    made = (
        f"mean of {count} sprinklings with its standard error in brackets"
        if count > 1
        else "one sprinkling, no error is known"
    )
    heads = (
        Head("quantity"),
        Head("union rule"),
        Head("value", "nats", estimated=True),
        Head("scatter of one sprinkling", "nats", digits=".2g"),
        Head("kept modes, this sprinkling"),
        Head("nominal modes", digits=".1f"),
        Head("mark"),
    )
    rows = tuple(
        (
            value.name,
            RULE_NAMES[value.rule] if value.rule else "–",
            Estimated(value.mean, value.error),
            float(value.scatter),
            "–" if value.kept is None else int(value.kept),
            float(value.nominal),
            value.note or "–",
        )
        for value in shown
    )
    caption = f"Entropies S and mutual information I; {made}."
    marks = scene.result.certificate
    if not marks.met:
        caption += " The certificate of the patch's modes is not met."
    return Table("values", caption, heads, rows)


def _scaling(curve: ScalingCurve, what: str) -> Table:
    """Rows of one sweep of scale."""
    first = AXIS_HEADS["density"] if curve.axis == "density" else Head("multiple of the half-width")
    heads = (
        first,
        LENGTH,
        ELEMENTS,
        Head("S of all regions by support", "nats", estimated=True),
        Head("sprinklings"),
        Head("in the fit"),
    )
    rows = tuple(
        (
            float(curve.values[k]),
            float(curve.x[k]),
            float(curve.elements_per_region[k]),
            _estimated(estimate),
            int(estimate.count),
            "yes" if curve.used[k] and curve.fit is not None else "no",
        )
        for k, estimate in enumerate(curve.entropy)
    )
    return Table(f"scaling-{curve.axis}", f"Entropy against scale: {what}.", heads, rows)


def _fits(curves: list[ScalingCurve]) -> Table:
    """Straight-line fits of the sweeps."""
    heads = (
        Head("sweep"),
        Head("slope b", "nats", estimated=True),
        Head("constant c", "nats", estimated=True),
        Head("χ²", digits=".2f"),
        Head("degrees of freedom"),
        Head("p", digits=".2g"),
        Head("points"),
        Head("smallest elements fitted", digits=".0f"),
        Head("reference slope", digits=".4f"),
    )
    rows: list[tuple[Cell, ...]] = []
    for curve in curves:
        fit, window = curve.fit, curve.window
        if fit is None or window is None:
            continue
        reference = NAN if curve.reference_slope is None else float(curve.reference_slope)
        rows.append(
            (
                curve.axis,
                Estimated(fit.slope, fit.slope_error),
                Estimated(fit.intercept, fit.intercept_error),
                float(fit.chi2),
                int(fit.dof),
                float(fit.p_value),
                int(fit.points),
                window[0],
                reference,
            )
        )
    caption = "Fits S = b ln(l/a) + c; density and size are different experiments."
    return Table("fits", caption, heads, tuple(rows))


def _separation(curve: SeparationCurve) -> Table:
    letters = ":".join(region_letter(k) for k in curve.pair)
    heads = [AXIS_HEADS["separation"]]
    for rule, words in RULE_NAMES.items():
        if rule in curve.union:
            heads += [
                Head(f"S of the union, {words}", "nats", estimated=True),
                Head(f"I({letters}), {words}", "nats", estimated=True),
            ]
    heads.append(Head("cross block", digits=".3f"))
    rows = []
    for k, gap in enumerate(curve.separation):
        row: list[Cell] = [float(gap)]
        for rule in RULE_NAMES:
            if rule in curve.union:
                row += [_estimated(curve.union[rule][k]),
                        _estimated(curve.mutual_information[rule][k])]  # fmt: skip
        rows.append((*row, float(curve.cross_block[k])))
    caption = "Against separation; rows share their sprinklings, so their errors are correlated."
    return Table("separation", caption, tuple(heads), tuple(rows))


# --------------------------------------------------------------------- campaign


def campaign_tables(watch: Watch) -> list[Table]:
    """Tables of a results file: points, fits, sprinklings.

    Parameters
    ----------
    watch : Watch
        The file.

    Returns
    -------
    list of Table
        Without fits where there is none.
    """
    found = [_points(watch)]
    if any(fit.report is not None for fit in watch.estimates.fits):
        found.append(_campaign_fits(watch))
    found.append(_sprinklings(watch))
    return found


def _points(watch: Watch) -> Table:
    """One row for each point in each placement class."""
    several = any(cell.mutual_information is not None for cell in watch.estimates.cells)
    axes = [AXIS_HEADS[axis.name] for axis in watch.plan.axes]
    heads = [*axes, Head("class"), LENGTH, ELEMENTS, Head("realisations")]
    heads.append(Head("S by support" if several else "S", "nats", estimated=True))
    if several:
        heads += [
            Head("S, direct sum", "nats", estimated=True),
            Head("I of the nearest pair, by support", "nats", estimated=True),
            Head("I, direct sum", "nats", estimated=True),
            Head("cross block", digits=".3f"),
        ]
    heads += [Head("kept/nominal", digits=".3f"), Head("untrusted"), Head("without a number")]
    rows = tuple(_point(watch, number, several=several) for number in watch.estimates.cells)
    caption = "Means over realisations with their standard errors; S of all regions together."
    return Table("points", caption, tuple(heads), rows)


def _point(watch: Watch, number: CellEstimate, *, several: bool) -> tuple[Cell, ...]:
    cell = watch.design.cells[number.cell]
    given = watch.design.points[cell.point].values
    row: list[Cell] = [
        value if isinstance(value := given[axis.name], str | int) else float(value)
        for axis in watch.plan.axes
    ]
    row += [cell.placement + 1, float(cell.x), float(cell.elements), int(number.entropy.count)]
    row.append(_estimated(number.entropy))
    if several:
        row += [_estimated(number.direct_sum), _estimated(number.mutual_information)]
        row += [_estimated(number.mutual_direct_sum), float(number.cross_block)]
    return (*row, float(number.kept_ratio), int(number.untrusted), int(number.missing))


def _campaign_fits(watch: Watch) -> Table:
    heads = (
        Head("fit over"),
        Head("other axis"),
        Head("slope b", "nats", estimated=True),
        Head("95 % from", "nats", digits=".4f"),
        Head("to", "nats", digits=".4f"),
        Head("χ²", digits=".2f"),
        Head("degrees of freedom"),
        Head("p", digits=".2g"),
        Head("cells"),
        Head("least realisations"),
        Head("reference slope", digits=".4f"),
        Head("settled"),
    )
    rows: list[tuple[Cell, ...]] = []
    for fit in watch.estimates.fits:
        if fit.report is None:
            continue
        best = fit.report.fit
        rows.append(
            (
                fit.axis.replace("_", " "),
                fit.label.replace("_", " ") or "–",
                Estimated(best.slope, best.slope_error),
                float(best.low),
                float(best.high),
                float(best.chi2),
                int(best.dof),
                float(best.p_value),
                int(best.cells),
                int(best.realisations),
                NAN if fit.reference is None else float(fit.reference),
                "yes" if fit.report.settled else f"no: {fit.report.why}",
            )
        )
    caption = "Fits S = b ln(l/a) + c, one constant for each placement class."
    return Table("campaign-fits", caption, heads, tuple(rows))


def _sprinklings(watch: Watch) -> Table:
    heads = (Head("kind"), AXIS_HEADS["density"], Head("realisations"), Head("failed"))
    rows = tuple(
        (own.kind, float(own.density), int(done), int(failed))
        for own, (done, failed) in zip(watch.design.sprinklings, watch.counts, strict=True)
    )
    return Table(
        "realisations", "Realisations of each sprinkling, failed ones included.", heads, rows
    )
