"""What the evidence page says in words: the line on top, the table, what the bench sent."""

from __future__ import annotations

import html
import math
from typing import TYPE_CHECKING

import numpy as np

from lozenge_dashboard.records import RULE_NAMES, EvidenceScene
from lozenge_dashboard.views.campaign import named
from lozenge_engine.config import Setup
from lozenge_engine.geometry import region_letter
from lozenge_engine.notation import thousands, with_error
from lozenge_engine.presets import Preset

if TYPE_CHECKING:
    from lozenge_engine.crossratio import MutualRecord
    from lozenge_engine.cutrecord import CutRecord
    from lozenge_engine.due import DueRecord
    from lozenge_engine.modeview import ModeRecord
    from lozenge_engine.statecheck import StateRecord
    from lozenge_engine.thresholds import ThresholdRecord
    from lozenge_engine.verdict import Slope

__all__ = ["COLUMNS", "asked_words", "line_html", "rows"]

COLUMNS = ("quantity", "value", "caution")
MODE_WORDS = {
    "two_stages": "cut in both stages",
    "patch_only": "cut in the patch only",
    "regions_only": "cut in the regions only",
    "none": "no cut",
    "union_count": "regions cut by the union's count",
    "equal_share": "regions cut by equal shares",
    "fixed_number": "a fixed number of modes",
    "custom": "custom cuts",
}


def asked_words(preset: Preset) -> str:
    """What the bench sent, in one sentence.

    Parameters
    ----------
    preset : Preset
        Its screen.

    Returns
    -------
    str
        Geometry, points and cut.
    """
    setup = preset.setup
    source = setup.points
    count = len(setup.regions())
    kind = {
        "poisson": "Poisson sprinkling",
        "fixed": "fixed count",
        "file": "imported points",
        "lattice": "lattice points",
        "sobol": "Sobol points",
    }.get(source.kind, source.kind)
    parts = [
        f"“{preset.title}”: {count} region{'' if count == 1 else 's'}",
        _extent(setup),
        f"{thousands(round(2 * source.density))} elements ({kind})",
        MODE_WORDS.get(setup.truncation_mode, setup.truncation_mode.replace("_", " ")),
    ]
    if setup.mass:
        parts.append(f"mass {setup.mass:g}")
    curvature = getattr(source, "curvature", "flat")
    if curvature != "flat":
        parts.append(f"{curvature} curvature, radius {source.radius:g}")
    return ", ".join(filter(None, parts)) + "."


def _extent(setup: Setup) -> str:
    """Sizes of the regions."""
    sizes = sorted({round(region.half_width, 6) for region in setup.regions()})
    words = f"h = {sizes[0]:g}" if len(sizes) == 1 else f"h = {sizes[0]:g} to {sizes[-1]:g}"
    gap = len(setup.regions()) > 1 and setup.region_list is None
    return f"{words}, gap {setup.separation:g}" if gap else words


# ---------------------------------------------------------------- readings and table


def _reading(name: str, value: str, small: str = "") -> str:
    tail = f"<dd class='small'>{html.escape(small)}</dd>" if small else ""
    return f"<div><dt>{html.escape(name)}</dt><dd>{html.escape(value)}</dd>{tail}</div>"


def line_html(scene: EvidenceScene, doing: str) -> str:
    """The line on top.

    Parameters
    ----------
    scene : EvidenceScene
        The records that are there.
    doing : str
        What is being computed; empty if nothing is.

    Returns
    -------
    str
        HTML.
    """
    found = [_reading(name, value, small) for name, value, small in _readings(scene)]
    status = f"<div class='status busy' role='status'>{html.escape(doing)}</div>" if doing else ""
    return f"<dl class='readings'>{''.join(found)}{status}</dl>"


def _readings(scene: EvidenceScene) -> list[tuple[str, str, str]]:
    """Name, value and small print of what is known."""
    found: list[tuple[str, str, str]] = []
    record = scene.due
    for row in [] if record is None else record.rows[:3]:
        name = f", {named(row.label)}" if row.label else ""
        if row.data_slope.known:
            small = f"twin {_number(row.twin_slope)}" if row.twin_slope.known else ""
            found.append((f"b from data{name}", _number(row.data_slope), small))
        elif row.twin_slope.known:
            found.append((f"b of the twin{name}", _number(row.twin_slope), "no data yet"))
    if scene.thresholds is not None:
        for each in scene.thresholds.operators[:1]:
            departure, own = each.departure, each.thresholds.get("root_count", math.nan)
            value = with_error(departure.threshold, departure.threshold_error)
            found.append(("threshold, derived", value, f"√n/4π = {own:.3g}"))
    mode = scene.mode
    if mode is not None and mode.splitting is not None:
        none = f"1 fully, 1/{len(mode.config.regions)} not"
        found.append(("modes split", f"{mode.splitting.mean_share:.3f}", none))
    state = scene.state
    if state is not None:
        law = with_error(state.slope, state.slope_error).replace("-", "−")
        found.append(("W against ln |τ|", law, "−1/2π = −0.159"))
    return found


def _number(slope: Slope) -> str:
    """A slope or a constant with its error."""
    return with_error(slope.value, slope.error).replace("-", "−")


def rows(scene: EvidenceScene) -> list[tuple[str, str, str]]:
    """Everything that is known, as lines of a table.

    Parameters
    ----------
    scene : EvidenceScene
        The records that are there.

    Returns
    -------
    list of (str, str, str)
        Under `COLUMNS`.
    """
    found: list[tuple[str, str, str]] = []
    if scene.due is not None:
        found += _due_rows(scene.due)
    if scene.thresholds is not None:
        found += _threshold_rows(scene.thresholds)
    if scene.cuts is not None:
        found += _cut_rows(scene.cuts)
    if scene.mutual is not None:
        found += _mutual_rows(scene.mutual)
    if scene.state is not None:
        found += _state_rows(scene.state)
    if scene.mode is not None:
        found += _mode_rows(scene.mode)
    return found


def _due_rows(record: DueRecord) -> list[tuple[str, str, str]]:
    """Slopes of each geometry, their fits, and combinations of constants."""
    found = []
    for row in record.rows:
        name = f", {named(row.label)}" if row.label else ""
        numbers = {
            "b from data": row.data_slope,
            "b of the twin": row.twin_slope,
            "b of the chain": row.chain_slope,
            "slope of data minus twin": row.minus_slope,
            "data minus twin as a constant": row.constant,
        }
        for title, slope in numbers.items():
            if slope.known or slope.note:
                found.append((f"{title}{name}", _number(slope), _fit(slope)))
        reference = row.no_reference if row.reference is None else "Calabrese-Cardy"
        value = "none" if row.reference is None else f"{row.reference:.4f}"
        found.append((f"reference slope{name}", value, reference))
        found.append((f"due to{name}", row.verdict, row.why))
    for each in record.combinations:
        for route in ("data", "twin", "chain"):
            slope = getattr(each, route)
            if slope.known:
                found.append((f"{each.label}, {route}", _number(slope), _fit(slope)))
    return found


def _fit(slope: Slope) -> str:
    """How a number was made."""
    chi2 = f"χ²/dof {slope.chi2:.3g}/{slope.dof}" if slope.dof and slope.chi2 >= 0 else ""
    return "; ".join(filter(None, (chi2, slope.note)))


def _threshold_rows(record: ThresholdRecord) -> list[tuple[str, str, str]]:
    """Derived thresholds beside what rules cut at."""
    found = []
    percent = f"δ = {100 * record.delta:g} %, {record.done} sprinklings, against {record.reference}"
    for each in record.operators:
        gone = each.departure
        value = with_error(gone.threshold, gone.threshold_error)
        at = with_error(gone.rank, gone.rank_error)
        found.append((f"derived threshold, {each.name}", value, f"rank {at}; {percent}"))
        for rule, threshold in each.thresholds.items():
            words = f"{rule.replace('_', ' ')}, {each.elements:.0f} elements"
            found.append((f"threshold of the rule, {each.name}", f"{threshold:.4g}", words))
    return found


def _cut_rows(record: CutRecord) -> list[tuple[str, str, str]]:
    """Plateaus of the cut study."""
    found = []
    for level in record.plateaus:
        stage, rule, uncut = level.key
        curve = f"{stage}, {rule.replace('_', ' ')}{', uncut space' if uncut else ''}"
        flat = level.plateau
        value = with_error(flat.value, flat.spread)
        low, high = math.exp(flat.low), math.exp(flat.high)
        words = f"{curve}; α from {low:.2g} to {high:.2g}"
        found.append((f"plateau of {level.quantity}", value, words))
    return found


def _mutual_rows(record: MutualRecord) -> list[tuple[str, str, str]]:
    """Mutual information at the cross ratio nearest to the bench's, by every route."""
    found = []
    for curve in record.curves:
        known = np.isfinite(curve.value)
        if known.any():
            distance = np.where(known, np.abs(curve.eta - record.present), np.inf)
            k = int(np.argmin(distance))
            rule = f", {RULE_NAMES[curve.rule]}" if curve.rule in RULE_NAMES else ""
            value = with_error(float(curve.value[k]), float(curve.error[k])).replace("-", "−")
            words = f"η = {curve.eta[k]:.4g}; algebra: {curve.algebra}"
            found.append((f"I, {curve.kind}{rule}", value, words))
    return found


def _state_rows(record: StateRecord) -> list[tuple[str, str, str]]:
    """Checks of the state."""
    slope = with_error(record.slope, record.slope_error).replace("-", "−")
    constant = with_error(record.law_constant, record.law_constant_error).replace("-", "−")
    pure, positive = record.purity, record.positivity
    found = [
        ("slope of Re W against ln |τ|", slope, f"−1/2π = −0.1592; {len(record.fits)} sprinklings"),
        ("constant of −(1/2π) ln |τ| + c", constant, "near the centre"),
        ("lost of ‖iΔ‖ by the cut", f"{100 * record.lost:.3g} %", "Frobenius norm, patch"),
        (
            "S of the whole patch",
            "not computed" if pure is None else f"{pure.entropy:.1e}",
            "too many modes" if pure is None else f"pure to {pure.tolerance:.0e}",
        ),
    ]
    if positive is not None:
        words = f"rounding reaches −{positive.tolerance:.0e}"
        found.append(("lowest eigenvalue of W", f"{positive.lowest:.1e}".replace("-", "−"), words))
    return found


def _mode_rows(record: ModeRecord) -> list[tuple[str, str, str]]:
    """The mode that is drawn."""
    where = record.operator if record.region < 0 else f"region {region_letter(record.region)}"
    name = f"mode {record.rank} of the {where}"
    kept = f"{'kept' if record.kept else 'dropped'}, cut {record.cut:.4g}"
    found = [(f"eigenvalue, {name}", f"{record.eigenvalue:.5g}", kept)]
    for k, share in enumerate(record.shares):
        found.append((f"share on {region_letter(k)}, {name}", f"{share:.3f}", ""))
    if record.continuum is not None:
        overlap = f"{record.continuum.overlap:.4f}"
        found.append((f"overlap with the continuum, {name}", overlap, ""))
    if record.splitting is not None:
        split = record.splitting
        words = f"{split.clear} of {split.modes} clear; cross block {record.cross_block:.3f}"
        found.append(("splitting by region", f"{split.mean_share:.3f}", words))
    return found
