"""What the command line says of the references beside a preset's data: the twin and the chain."""

from __future__ import annotations

import math
from typing import Any

from lozenge_dashboard.curves import Curves, aligned, wrapped
from lozenge_engine import references
from lozenge_engine.averages import Readings
from lozenge_engine.chainline import ChainLine
from lozenge_engine.config import Setup
from lozenge_engine.geometry import region_letter
from lozenge_engine.kernels.scaling import Fit
from lozenge_engine.notation import with_error
from lozenge_engine.presets import ViewState
from lozenge_engine.references import Beside, Company
from lozenge_engine.stages import Stages
from lozenge_engine.twin import Twin, TwinValue
from lozenge_engine.twinline import TwinLine

__all__ = ["company_document", "company_of", "company_text"]

RULES = ("support", "direct_sum")
RULE_WORDS = {"support": "by support", "direct_sum": "direct sum"}
SWEEPS = ("density", "size", "separation")


def company_of(
    setup: Setup, view: ViewState, readings: Readings, curves: Curves | None
) -> Company | None:
    """Compute the references that a preset's screen shows.

    Parameters
    ----------
    setup : Setup
        What was computed.
    view : ViewState
        Whether the twin and the chain are wanted.
    readings : mapping of str to tuple of Reading
        What the sweeps were read from.
    curves : Curves or None
        The sweeps; without them only the twin of the present geometry is computed.

    Returns
    -------
    Company or None
        The twin at its last level; None if nothing is wanted.

    Raises
    ------
    InputError
        If the twin or the chain refuses the geometry.
    """
    if not (view.twin or view.chain):
        return None
    planned = references.plan(setup, twin=view.twin, chain=view.chain)
    tasks = planned.front(len(planned.twin) - 1) if planned.twin else {}
    if curves is not None:
        last = max(len(planned.along) - 1, 0)
        for name in SWEEPS:
            tasks |= planned.sweep(name, last)
            if name in planned.chain:
                tasks[planned.chain[name].key] = planned.chain[name]
    stages = Stages()
    found = {k: t.take(stages=stages, report=lambda _stage, _part: None) for k, t in tasks.items()}
    if curves is None:
        return references.front_only(planned, found)
    return references.read(
        setup, planned, found, readings, density=curves.density, size=curves.size
    )


def company_text(company: Company, setup: Setup, curves: Curves | None) -> str:
    """Write the references for a person to read.

    Parameters
    ----------
    company : Company
        From `company_of`.
    setup : Setup
        What was computed.
    curves : Curves or None
        The sweeps that they stand beside.

    Returns
    -------
    str
        Paragraphs.
    """
    blocks = []
    if reason := references.no_twin(setup):
        blocks.append(wrapped(f"continuum twin: none; {reason}"))
    if company.front is not None:
        blocks.append(_front_text(company.front))
    if curves is not None:
        for name, beside in (("density", company.density), ("size", company.size)):
            blocks += _sweep_text(name, beside)
    return "\n\n".join(blocks)


def _number(value: float, error: float) -> str:
    """A number with its error; one in closed form has none."""
    if error > 0.0:
        return with_error(value, error)
    return f"{value:.0f}" if value == round(value, 0) else f"{value:.4f}"


def _front_text(twin: Twin) -> str:
    """The twin's numbers at the present geometry."""
    how = (
        f"{twin.sets} quasi-uniform sets, up to {twin.oversampling} times the density"
        if twin.sets
        else "modes in closed form"
    )
    rows = [["", "kept", "S (nats)"], ["patch", _number(*twin.patch_kept), ""]]
    rows += [
        [region_letter(k), _number(*kept), _number(*twin.entropy[k])]
        for k, kept in enumerate(twin.kept)
    ]
    if len(twin.entropy) > 1:
        rows += [
            [f"union, {RULE_WORDS[rule]}", "", _number(*getattr(twin, f"union_{rule}"))]
            for rule in RULES
        ]
        rows += [
            [f"I{_pair_name(twin, k)}, {RULE_WORDS[rule]}", "", _number(*value)]
            for rule in RULES
            for k, value in enumerate(getattr(twin, f"pair_{rule}"))
        ]
    return f"continuum twin: {how}\n{aligned(rows)}"


def _pairs(twin: Twin) -> list[tuple[int, int]]:
    count = len(twin.entropy)
    return [(a, b) for a in range(count) for b in range(a + 1, count)]


def _pair_name(twin: Twin, index: int) -> str:
    a, b = _pairs(twin)[index]
    return f"({region_letter(a)}:{region_letter(b)})"


def _sweep_text(name: str, beside: Beside) -> list[str]:
    """The twin and the chain beside one sweep of scale."""
    lines = []
    if beside.twin is not None:
        line = beside.twin
        values = " ".join(
            _number(v, e) for v, e in zip(line.value, line.error, strict=True) if math.isfinite(v)
        )
        lines.append(f"twin beside the {name} sweep: S = {values}")
        if math.isfinite(line.slope):
            lines.append(f"twin's slope: {_number(line.slope, line.slope_error)}")
        fit = line.minus.fit
        lines.append(_minus_text(fit) if fit else "data minus twin: no slope is known")
    if beside.chain is not None:
        chain = beside.chain
        lines.append(
            f"harmonic chain at the same fractions along x: slope "
            f"{_number(chain.slope, chain.error)}; its constant is its own"
        )
        if math.isfinite(chain.saturation):
            lines.append(f"m l = 1 at ln(l/a) = {chain.saturation:.2f}")
    return ["\n".join(map(wrapped, lines))] if lines else []


def _minus_text(fit: Fit) -> str:
    """What the line through data minus twin says."""
    known = math.isfinite(fit.chi2)
    quality = f"chi2/dof {fit.chi2:.2g}/{fit.dof}" if known else "fit quality unknown"
    return (
        f"data minus twin: slope {with_error(fit.slope, fit.slope_error)}, "
        f"{abs(fit.slope) / fit.slope_error:.1f} errors from a constant, {quality}"
    )


# ---------------------------------------------------------------------------- JSON


def company_document(company: Company) -> dict[str, Any]:
    """The references as plain JSON values; null where nothing is known.

    Parameters
    ----------
    company : Company
        From `company_of`.

    Returns
    -------
    dict
        Keys ``twin``, ``density``, ``size`` and ``separation``, those that are known.
    """
    found: dict[str, Any] = {}
    if company.front is not None:
        found["twin"] = _twin_document(company.front)
    for name, beside in (("density", company.density), ("size", company.size)):
        part: dict[str, Any] = {}
        if beside.twin is not None:
            part["twin"] = _line_document(beside.twin)
        if beside.chain is not None:
            part["chain"] = _chain_document(beside.chain)
        if part:
            found[name] = part
    if company.separation is not None:
        lines = company.separation
        found["separation"] = {
            key: {
                rule: [_value(float(v), float(e)) for v, e in zip(*columns, strict=True)]
                for rule, columns in getattr(lines, key).items()
            }
            for key in ("union", "mutual_information")
        }
    return found


def _plain(x: float) -> float | None:
    return float(x) if math.isfinite(x) else None


def _value(value: float, error: float) -> dict[str, float | None]:
    return {"value": _plain(value), "error": _plain(error)}


def _twin_document(twin: Twin) -> dict[str, Any]:
    def several(values: tuple[TwinValue, ...]) -> list[dict[str, float | None]]:
        return [_value(*value) for value in values]

    return {
        "sets": twin.sets,
        "oversampling": twin.oversampling,
        "patch_kept": _value(*twin.patch_kept),
        "kept": several(twin.kept),
        "entropy": several(twin.entropy),
        "union": {rule: _value(*getattr(twin, f"union_{rule}")) for rule in RULES},
        "mutual_information": [
            {
                "a": a,
                "b": b,
                **{rule: _value(*getattr(twin, f"pair_{rule}")[k]) for rule in RULES},
            }
            for k, (a, b) in enumerate(_pairs(twin))
        ],
    }


def _line_document(line: TwinLine) -> dict[str, Any]:
    fit = line.minus.fit
    return {
        "entropy": [
            _value(float(v), float(e)) for v, e in zip(line.value, line.error, strict=True)
        ],
        "slope": _value(line.slope, line.slope_error),
        "data_minus_twin": None
        if fit is None
        else {k: _plain(v) if isinstance(v, float) else v for k, v in fit._asdict().items()},
    }


def _chain_document(chain: ChainLine) -> dict[str, Any]:
    return {
        "slope": _value(chain.slope, chain.error),
        "entropy_shifted_to_data": [_plain(v) for v in chain.value],
        "log_length_at_one_over_mass": _plain(chain.saturation),
    }
