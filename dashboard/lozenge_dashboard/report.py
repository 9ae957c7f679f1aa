"""What the command line says of a finished computation: a table, a JSON document, arrays."""

from __future__ import annotations

import itertools
import json
import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from lozenge_dashboard.company import company_document, company_text
from lozenge_dashboard.curves import (
    RULE_WORDS,
    RULES,
    Curves,
    aligned,
    curves_document,
    curves_text,
    estimate_document,
    wrapped,
)
from lozenge_engine.agreement import Agreement, plain
from lozenge_engine.config import Setup
from lozenge_engine.draws import placements
from lozenge_engine.geometry import region_letter
from lozenge_engine.kernels.scaling import Estimate
from lozenge_engine.notation import (
    NO_NUMBER,
    duration,
    thousands,
    two_digits,
    with_error,
    with_scatter,
)
from lozenge_engine.presets import Preset, dumps
from lozenge_engine.references import Company
from lozenge_engine.result import PatchSpectrum, RegionResult, Result, UnionResult
from lozenge_engine.sweeps import Average

__all__ = ["Outcome", "arrays", "cautions", "document", "table"]

NO_ESTIMATE = Estimate(math.nan, math.nan, math.nan, 0)

Row = list[str]


@dataclass(frozen=True, slots=True, kw_only=True)
class Outcome:
    """All that was computed of a preset.

    Parameters
    ----------
    preset : Preset
        What was computed, with imported points where they took the sprinkling's place.
    result : Result
        The sprinkling of the seed itself, or the imported points.
    average : Average or None
        Over several sprinklings.
    failures : tuple of str
        Why sprinklings are missing in the average.
    agreement : Agreement or None
        With the numbers that came with the preset.
    curves : Curves or None
        The three sweeps.
    beside : Company or None
        The twin and the chain, where the preset's screen shows them.
    """

    preset: Preset
    result: Result
    average: Average | None = None
    failures: tuple[str, ...] = ()
    agreement: Agreement | None = None
    curves: Curves | None = None
    beside: Company | None = None

    @property
    def trusted(self) -> bool:
        """Whether the certificates hold and no number carries a mark."""
        return self.result.trusted and (self.average is None or self.average.trusted)


# ----------------------------------------------------------------------- the table


def table(outcome: Outcome) -> str:
    """Write the numbers for a person to read.

    Parameters
    ----------
    outcome : Outcome
        What was computed.

    Returns
    -------
    str
        Lines of about 100 characters at most, the last one with a newline.
    """
    preset, result, average = outcome.preset, outcome.result, outcome.average
    blocks = [
        _heading(preset, result),
        aligned(_entropy_rows(preset.setup, result, average)),
    ]
    if result.pairs:
        blocks.append(aligned(_information_rows(result, average)))
    if outcome.curves is not None:
        blocks.append(curves_text(outcome.curves))
    if outcome.beside is not None:
        blocks.append(company_text(outcome.beside, preset.setup, outcome.curves))
    lines = [_errors_line(preset.setup, average), _certificate_line(result)]
    lines += [f"caution: {text}" for text in (*cautions(preset.setup, result), *outcome.failures)]
    if outcome.agreement is not None:
        lines.append(f"sender's numbers: {outcome.agreement.text}")
    lines.append(_seconds_line(result))
    return "\n\n".join([*blocks, "\n".join(map(wrapped, lines))]) + "\n"


def _heading(preset: Preset, result: Result) -> str:
    """Title, sentence and what was computed."""
    setup, source = preset.setup, preset.setup.points
    origin = f"points of {source.file}" if source.kind == "file" else f"seed {source.seed}"
    held = f"{source.kind} points" if source.quasi_uniform else "elements"
    mass = f"mass {setup.mass:g}" if setup.mass else "massless"
    facts = [
        f"{_count(result.elements)} {held}, {origin}",
        *source.remarks(),
        f"density {setup.points.density:g}",
        mass,
        f"truncation: {setup.truncation_mode.replace('_', ' ')}",
    ]
    if setup.truncation_mode not in ("none", "custom") and setup.alpha != 1:
        facts.append(f"alpha {setup.alpha:g}")
    if setup.order != 1:
        facts.append(f"Renyi order {setup.order:g}")
    mark = " (invented scenario)" if preset.invented else ""
    return f"{preset.title}{mark}\n{preset.sentence}\n{', '.join(facts)}"


def _entropy_rows(setup: Setup, result: Result, average: Average | None) -> list[Row]:
    """One row per region and two for the union: elements, kept modes beside nominal, S."""
    name = "S (nats)" if setup.order == 1 else f"S_{setup.order:g} (nats)"
    held = "points" if setup.points.quasi_uniform else "elements"
    head = ["", held, "kept/nominal", *_value_heads(name, average)]
    rows = [head, _patch_row(result.patch, result.elements, len(head))]
    for k, region in enumerate(result.regions):
        estimate = average.regions[k] if average else NO_ESTIMATE
        kept = _kept(region.kept_modes, region.nominal_modes)
        value = _values(region.entropy, estimate, average, mark=_mark(result, region))
        rows.append([f"region {region_letter(k)}", _count(region.elements), kept, *value])
    elements = sum(region.elements for region in result.regions)
    nominal = sum(region.nominal_modes for region in result.regions)
    for rule, union in result.unions.items():
        estimate = average.unions[rule] if average else NO_ESTIMATE
        kept = _kept(union.kept_modes, nominal)
        value = _values(union.entropy, estimate, average, mark=_mark(result, union))
        rows.append([f"union, {RULE_WORDS[rule]}", _count(elements), kept, *value])
    return rows


def _patch_row(patch: PatchSpectrum, elements: int, width: int) -> Row:
    row = ["patch", _count(elements), _kept(patch.kept_modes, patch.nominal_modes)]
    return row + [""] * (width - len(row))


def _value_heads(name: str, average: Average | None) -> Row:
    if average is None:
        return [name]
    return [f"{name}, seed's own", f"mean of {average.count}", "scatter"]


def _values(value: float, estimate: Estimate, average: Average | None, *, mark: str) -> Row:
    """One sprinkling's number and, if there are several, their mean and scatter."""
    single = with_scatter(value, estimate.scatter) + mark
    if average is None:
        return [single]
    mean = with_error(estimate.mean, estimate.error) + mark
    return [single, mean, two_digits(estimate.scatter)]


def _mark(result: Result, part: RegionResult | UnionResult) -> str:
    """An asterisk for every number that is not to be trusted."""
    return "" if result.certificate.met and part.status == "ok" else "*"


def _information_rows(result: Result, average: Average | None) -> list[Row]:
    """Mutual information of every pair under both union rules, with the cross block."""
    rows = [["", *_value_heads("I (nats)", average), "cross block"]]
    for k, pair in enumerate(result.pairs):
        name = f"I({region_letter(pair.a)}:{region_letter(pair.b)})"
        mark = "" if result.trusted else "*"
        for rule in RULES:
            estimate = getattr(average.pairs[k], rule) if average else NO_ESTIMATE
            value = _values(getattr(pair, rule), estimate, average, mark=mark)
            rows.append([f"{name}, {RULE_WORDS[rule]}", *value, f"{pair.cross_block:.2f}"])
    blank = [""] * (len(rows[0]) - 2)
    if len(result.regions) > 2:
        rows += [
            [f"total correlation, {RULE_WORDS[rule]}", f"{value:.2f}", *blank]
            for rule, value in result.total_correlation.items()
        ]
    for triple, rule in itertools.product(result.triples, RULES):
        letters = ":".join(region_letter(k) for k in triple.members)
        single = f"{getattr(triple, rule):.2f}"
        rows.append([f"I({letters}), {RULE_WORDS[rule]}", single, *blank])
    return rows


def _kept(kept: int, nominal: float) -> str:
    ratio = f"{kept / nominal:.2f}" if nominal else NO_NUMBER
    return f"{kept}/{nominal:.1f} = {ratio}"


def _count(number: int) -> str:
    return thousands(number, space=" ")


def _errors_line(setup: Setup, average: Average | None) -> str:
    """What the columns of the average mean, or that no error is known."""
    if average is None or average.count < 2:
        return "one sprinkling: no error is known"
    images = len(placements(setup, setup.regions()))
    each = f" (each over {images} mirror images of the regions)" if images > 1 else ""
    one = {"lattice": "shift", "sobol": "scrambling"}.get(setup.points.kind, "sprinkling")
    return (
        f"mean of {average.count} {one}s{each} with its standard error in brackets; scatter "
        f"is the standard deviation of one {one}"
    )


def _certificate_line(result: Result) -> str:
    """Whether the patch's modes are all there, and how far that was checked."""
    c = result.certificate
    if not c.met:
        return f"certificate: NOT met, numbers with * are not to be trusted: {'; '.join(c.reasons)}"
    checks = f"residual {c.residual:.0e}, orthogonality {c.orthogonality:.0e}"
    if c.fresh_vectors:
        checks += (
            f", largest value that a fresh run of {c.fresh_vectors} vectors saw "
            f"{c.fresh_largest:.3f} of the floor"
        )
    return f"certificate: met ({checks})"


def cautions(setup: Setup, result: Result) -> list[str]:
    """Say where a reader of these numbers could be misled.

    Parameters
    ----------
    setup : Setup
        What was asked.
    result : Result
        What came out.

    Returns
    -------
    list of str
        Sentences without a full stop; empty if there is nothing to say.
    """
    notes = [
        f"{name}: {part.status.replace('_', ' ')}: {part.note}"
        for name, part in _named_parts(result)
        if part.status != "ok"
    ]
    least = setup.sweeps.smallest_region
    small = [k for k, r in enumerate(result.regions) if r.counted < least]
    if small:
        held = ", ".join(f"{region_letter(k)} {result.regions[k].counted:.0f}" for k in small)
        notes.append(f"fewer than {least} elements ({held}): not in the scaling regime")
    if setup.points.quasi_uniform:
        notes.append(
            "quasi-uniform points have no sprinkling noise: the error is the scatter of shifts or "
            "scramblings, and what more points change is not in it"
        )
    if setup.points.curved:
        notes.append(
            "curved patch: massless only; regions are diamonds in the coordinates, elements follow "
            "the volume; a reference slope is set at short distance and stays"
        )
    patch_rule, region_rule = setup.rules()
    if region_rule.kind == "none":
        notes.append("the regions' modes are not cut: S grows with the region's volume")
    if region_rule.kind == "union_count" and len(result.regions) > 1:
        notes.append("the union's count is known to be wrong for several regions")
    if patch_rule.kind != "none" and any(r.region.boost for r in result.regions):
        notes.append(
            "the first stage is not invariant under boosts: S of a boosted region is larger"
        )
    return notes


def _named_parts(result: Result) -> list[tuple[str, RegionResult | UnionResult]]:
    parts: list[tuple[str, RegionResult | UnionResult]] = [
        (f"region {region_letter(k)}", region) for k, region in enumerate(result.regions)
    ]
    parts += [(f"union, {RULE_WORDS[rule]}", union) for rule, union in result.unions.items()]
    return parts


def _seconds_line(result: Result) -> str:
    stages = ", ".join(f"{name} {duration(s)}" for name, s in result.seconds.items() if s >= 0.005)
    return f"time: {duration(sum(result.seconds.values()))}{f' ({stages})' if stages else ''}"


# --------------------------------------------------------------- JSON and arrays


def document(outcome: Outcome) -> dict[str, Any]:
    """The numbers as plain JSON values.

    Parameters
    ----------
    outcome : Outcome
        What was computed.

    Returns
    -------
    dict
        `Result.numbers()` without what does not exist; ``average``, ``agreement`` and ``sweeps``
        where they were computed; ``seconds``, ``versions`` and ``preset`` (without the numbers
        of its sender).
    """
    result = outcome.result
    made = {key: value for key, value in plain(result.numbers()).items() if value is not None}
    if outcome.average is not None:
        made["average"] = _average_document(outcome.average)
    if outcome.agreement is not None:
        made["agreement"] = outcome.agreement._asdict()
    if outcome.curves is not None:
        made["sweeps"] = curves_document(outcome.curves)
    if outcome.beside is not None:
        made["references"] = company_document(outcome.beside)
    return {
        **made,
        "seconds": dict(result.seconds),
        "versions": dict(result.versions),
        "preset": json.loads(dumps(replace(outcome.preset, sender=None))),
    }


def _average_document(average: Average) -> dict[str, Any]:
    made: dict[str, Any] = {
        "sprinklings": average.count,
        "regions": [estimate_document(e) for e in average.regions],
    }
    if len(average.regions) > 1:
        made["union"] = {rule: estimate_document(e) for rule, e in average.unions.items()}
    made["mutual_information"] = [
        {"a": p.a, "b": p.b, **{rule: estimate_document(getattr(p, rule)) for rule in RULES}}
        for p in average.pairs
    ]
    return made


def arrays(result: Result) -> Mapping[str, NDArray[Any]]:
    """The arrays behind the numbers, by the names they have in an ``.npz`` file.

    Parameters
    ----------
    result : Result
        A finished computation.

    Returns
    -------
    mapping of str to ndarray
        ``u``, ``v`` (N,) light-cone coordinates; ``region_of`` (N,) index of the region that
        holds an element, -1 for none; ``patch_eigenvalues``, ``patch_kept``; for each region
        ``region_A_eigenvalues``, ``region_A_kept``, ``region_A_symplectic`` and
        ``region_A_contributions``; the same for ``union_support`` and ``union_direct_sum``.
    """
    made: dict[str, NDArray[Any]] = {
        "u": result.u,
        "v": result.v,
        "region_of": result.region_of,
        "patch_eigenvalues": result.patch.eigenvalues,
        "patch_kept": result.patch.kept,
    }
    parts: dict[str, RegionResult | UnionResult] = {
        f"region_{region_letter(k)}": region for k, region in enumerate(result.regions)
    }
    parts |= {f"union_{rule}": union for rule, union in result.unions.items()}
    for name, part in parts.items():
        made[f"{name}_eigenvalues"] = part.eigenvalues
        made[f"{name}_kept"] = part.kept
        made[f"{name}_symplectic"] = part.symplectic
        made[f"{name}_contributions"] = part.contributions
    return {name: np.asarray(array) for name, array in made.items()}
