"""What the command line says of a campaign before and while it runs: plan, target, progress."""

from __future__ import annotations

import math
from collections.abc import Collection

from lozenge_dashboard.curves import aligned, wrapped
from lozenge_engine.campaign import Progress
from lozenge_engine.config import Setup
from lozenge_engine.design import Design
from lozenge_engine.forecast import Forecast
from lozenge_engine.notation import duration, thousands, two_digits
from lozenge_engine.plan import CampaignPlan, Target
from lozenge_engine.presets import Preset

__all__ = [
    "fits_it",
    "plan_text",
    "progress_text",
    "setting_text",
    "share",
    "target_text",
    "value_text",
]

QUANTITY_WORDS = {
    "slope": "b",
    "entropy": "S at every point",
    "mutual_information": "I of the nearest pair at every point",
}


def target_text(target: Target) -> str:
    """Say what is wanted.

    Parameters
    ----------
    target : Target
        The plan's.

    Returns
    -------
    str
        Like ``b to 2 %`` or ``S at every point to 0.01``.
    """
    return f"{QUANTITY_WORDS[target.quantity]} to {_wanted_error(target)}"


def _wanted_error(target: Target) -> str:
    return f"{100 * target.error:g} %" if target.relative else f"{target.error:g}"


def share(error: float, target: Target) -> str:
    """Write an error in the terms of the target.

    Parameters
    ----------
    error : float
        In nats or as a fraction; what is not finite is not known.
    target : Target
        The plan's.

    Returns
    -------
    str
        Like ``3.1 %`` or ``0.014``.
    """
    if not math.isfinite(error):
        return "not known yet"
    return f"{two_digits(100 * error)} %" if target.relative else two_digits(error)


def value_text(value: object) -> str:
    """Write a value of an axis.

    Parameters
    ----------
    value : float, int or str
        Of any axis.

    Returns
    -------
    str
        At most six digits; words for a truncation mode.
    """
    return f"{value:.6g}" if isinstance(value, float) else str(value).replace("_", " ")


def fits_it(elements: float, plan: CampaignPlan) -> bool:
    """Whether a fit uses a point, up to rounding.

    Parameters
    ----------
    elements : float
        Expected in its smallest region.
    plan : CampaignPlan
        With the limit.

    Returns
    -------
    bool
        False if it holds too few.
    """
    return elements >= plan.smallest_region * (1 - 1e-9)


def plan_text(preset: Preset, layout: Design, foreseen: Forecast) -> str:
    """Write what a campaign will take for a person to read.

    Parameters
    ----------
    preset : Preset
        Whose campaign it is.
    layout : Design
        That campaign.
    foreseen : Forecast
        What it will take.

    Returns
    -------
    str
        Paragraphs; the last line ends with a newline.
    """
    plan = layout.plan
    mark = " (invented scenario)" if preset.invented else ""
    names = {axis.name for axis in plan.axes}
    blocks = [
        f"{preset.title}{mark}\n{wrapped(setting_text(layout.setup, names))}\n{_wanted(plan)}",
        aligned(_point_rows(layout)),
        aligned(_sprinkling_rows(foreseen)),
        "\n".join(map(wrapped, _totals(foreseen, plan))),
    ]
    return "\n\n".join(blocks) + "\n"


def _wanted(plan: CampaignPlan) -> str:
    """Target, most realisations and budget in one line."""
    parts = [f"wanted: {target_text(plan.target)}" if plan.target else "wanted: all realisations"]
    parts.append(f"at most {thousands(plan.realisations, space=' ')} of each sprinkling")
    parts.append(f"budget {duration(plan.budget)}" if plan.budget else "no budget of time")
    return ", ".join(parts)


def _point_rows(layout: Design) -> list[list[str]]:
    """One row for each point that is computed: its values, its size, its placement classes."""
    names = [axis.name for axis in layout.plan.axes]
    head = [*(name.replace("_", " ") for name in names), "elements", "ln(l/a)", "classes", ""]
    rows = [head]
    for k, point in enumerate(layout.points):
        own = [cell for cell in layout.cells if cell.point == k]
        if not own:
            continue
        elements = min(cell.elements for cell in own)
        mark = "" if fits_it(elements, layout.plan) else "too small for a fit"
        values = [value_text(point.values[name]) for name in names]
        rows.append([*values, f"{elements:.0f}", f"{own[0].x:.3f}", str(len(own)), mark])
    return rows


def _sprinkling_rows(foreseen: Forecast) -> list[list[str]]:
    """One row for each sprinkling: what a realisation takes, and all of them."""
    rows = [["density of sprinkling", "samples each", "realisations", "time each", "memory", "all"]]
    for row in foreseen.rows:
        whole = row.seconds * row.realisations
        rows.append(
            [
                f"{row.density:.6g}",
                str(row.cells),
                thousands(row.realisations, space=" "),
                _short(row.seconds),
                _memory(row.peak_bytes),
                duration(whole),
            ]
        )
    return rows


def _short(seconds: float) -> str:
    """A time with two digits, also below a tenth of a second."""
    return f"{two_digits(1000 * seconds)} ms" if seconds < 0.0995 else duration(seconds)


def _memory(size: float) -> str:
    return f"{size / 1e9:.1f} GB" if size >= 1e9 else f"{size / 1e6:.0f} MB"


def _totals(foreseen: Forecast, plan: CampaignPlan) -> list[str]:
    """Sums, what is left out and why, and whether the plan's own limits allow it."""
    workers = f"{foreseen.workers} worker{'s' if foreseen.workers > 1 else ''}"
    lines = [
        f"predicted: {duration(foreseen.seconds)} with {workers} of one thread each, "
        f"{_memory(foreseen.peak_bytes)} of memory at most"
    ]
    if plan.target is not None:
        lines.append(
            "realisations are foreseen from the usual scatter of a sprinkling; the campaign itself "
            "goes by the scatter it finds"
        )
    lines.append("elements: expected in the smallest region; realisation: one draw of a sprinkling")
    lines += [f"left out: {text}" for text in foreseen.left_out]
    return lines + ([f"caution: {foreseen.note}"] if foreseen.note else [])


def progress_text(now: Progress, target: Target | None) -> str:
    """How far a campaign is, in one line.

    Parameters
    ----------
    now : Progress
        Where it is.
    target : Target or None
        What is wanted.

    Returns
    -------
    str
        Done, failed, error reached, time.
    """
    parts = [f"{thousands(now.done, space=' ')} of {thousands(now.planned, space=' ')} done"]
    parts += [f"{now.failed} failed"] if now.failed else []
    if target is not None:
        parts.append(f"error {share(now.error, target)}, wanted {_wanted_error(target)}")
    parts.append(duration(now.elapsed))
    if math.isfinite(now.seconds_left):
        parts.append(f"about {duration(now.seconds_left)} left")
    return ", ".join(parts)


def setting_text(setup: Setup, varied: Collection[str]) -> str:
    """Say what all points of a campaign have in common.

    Parameters
    ----------
    setup : Setup
        What the axes vary.
    varied : collection of str
        Names of the axes.

    Returns
    -------
    str
        Points, regions, rules, mass and order; what is varied is left out.
    """
    parts = [f"{setup.points.kind} points, seed {setup.points.seed}", *setup.points.remarks()]
    if "density" not in varied:
        parts.append(f"density {setup.points.density:g}")
    if setup.region_list is not None:
        parts.append(f"a list of {len(setup.region_list)} regions")
    else:
        row = {
            "region_count": f"{setup.region_count} in a row",
            "half_width": f"half-width {setup.half_width:g}",
            "separation": f"separation {setup.separation:g}",
        }
        single = setup.region_count < 2 and "region_count" not in varied
        parts += [
            text
            for name, text in row.items()
            if name not in varied and not (single and name == "separation")
        ]
    parts.append(f"mass {setup.mass:g}" if "mass" not in varied else "")
    parts.append(_rules_text(setup, varied))
    if "order" not in varied:
        parts.append("von Neumann entropy" if setup.order == 1 else f"Renyi, q = {setup.order:g}")
    return ", ".join(filter(None, parts))


def _rules_text(setup: Setup, varied: Collection[str]) -> str:
    """The rules of both stages."""
    if "truncation_mode" in varied:
        return "" if "alpha" in varied else f"alpha {setup.alpha:g}"
    mode = setup.truncation_mode.replace("_", " ")
    if setup.truncation_mode == "custom":
        mode = " then ".join(rule.kind.replace("_", " ") for rule in setup.rules())
    return f"rules {mode}" + ("" if "alpha" in varied else f" (alpha {setup.alpha:g})")
