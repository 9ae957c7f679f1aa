"""``lozenge order``: a causal set from a file, its modes and its regions' entropies."""

from __future__ import annotations

import json
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path

from lozenge_dashboard.curves import RULE_WORDS, aligned, wrapped
from lozenge_dashboard.run import STANDARD_OUTPUT, put
from lozenge_engine.config import Rule
from lozenge_engine.document import check_writable, write_bytes
from lozenge_engine.errors import refuse
from lozenge_engine.geometry import region_letter
from lozenge_engine.notation import NO_NUMBER, duration, thousands
from lozenge_engine.ownresult import ASSUMPTION, Comparison, OwnResult
from lozenge_engine.ownset import compute_own, own_set
from lozenge_engine.relationfile import read_members, read_relation
from lozenge_engine.result import RegionResult, UnionResult

__all__ = ["order_text", "run_order"]

SMALLEST = 80
"""Elements below which a region is not in the scaling regime."""
SHOW_PROGRESS_FROM = 4000
"""Elements from which progress is shown on a terminal."""


def run_order(
    path: Path,
    *,
    only_links: bool = False,
    close: bool = False,
    regions: Path | None = None,
    alpha: float = 1.0,
    json_file: Path | None = None,
) -> bool:
    """Compute an own causal set, write the file asked for and print the table.

    Parameters
    ----------
    path : Path
        Its relations or links; see `lozenge_engine.relationfile.read_relation`.
    only_links : bool
        They are links alone, to be closed.
    close : bool
        Add the relations that transitivity asks for.
    regions : Path or None
        A CSV file with columns region and element.
    alpha : float
        Multiple of the threshold in both stages.
    json_file : Path or None
        File to write; ``-`` writes the JSON to the standard output instead of the table.

    Returns
    -------
    bool
        Whether the certificate holds, no number carries a mark and the set is what is assumed.

    Raises
    ------
    InputError
        If a file, a path or alpha cannot be taken.
    """
    if json_file not in (None, STANDARD_OUTPUT):
        check_writable(json_file)
    if json_file is not None and json_file.resolve() in {
        given.resolve() for given in (path, regions) if given is not None
    }:
        raise refuse(
            "--json",
            given=str(json_file),
            allowed="another file than those that are read",
            do="change its name",
        )
    Rule(alpha=alpha)  # refused before anything is read
    own = own_set(read_relation(path), close=close, only_links=only_links)
    members = () if regions is None else read_members(regions, elements=own.order.elements)
    with _progress(own.order.elements) as report:
        result = compute_own(own, members=members, alpha=alpha, report=report)
    data = (json.dumps(result.numbers(), indent=2, allow_nan=False) + "\n").encode()
    if json_file == STANDARD_OUTPUT:
        put(data.decode())
    else:
        if json_file is not None:
            write_bytes(json_file, data)
        put(order_text(result))
    return result.trusted and not result.mismatches()


@contextmanager
def _progress(elements: int) -> Iterator[Callable[[float], None]]:
    """A bar, on a terminal and for large sets only."""
    if elements < SHOW_PROGRESS_FROM or not sys.stderr.isatty():
        yield lambda _fraction: None
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

    columns = (TextColumn("{task.description}"), BarColumn(), TimeElapsedColumn())
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task("modes", total=1.0)
        yield lambda fraction: bar.update(task, completed=fraction)


def order_text(result: OwnResult) -> str:
    """Write the numbers for a person to read.

    Parameters
    ----------
    result : OwnResult
        What was computed.

    Returns
    -------
    str
        Lines of about 100 characters at most, the last one with a newline.
    """
    blocks = [_heading(result), aligned(_checks(result)), aligned(_entropies(result))]
    if result.pairs:
        blocks.append(aligned(_informations(result)))
    return "\n\n".join([*blocks, "\n".join(map(wrapped, _remarks(result)))]) + "\n"


def _count(number: int) -> str:
    return thousands(number, space=" ")


def _heading(result: OwnResult) -> str:
    """What the set is, and what is assumed of it."""
    order = result.own.order
    facts = [
        f"{_count(result.elements)} elements",
        f"{_count(order.relations)} relations",
        f"{_count(order.links)} links",
    ]
    if order.added:
        facts.append(f"{_count(order.added)} relations added by closing")
    facts += ["massless", "truncation: two stages"]
    if result.alpha != 1:
        facts.append(f"alpha {result.alpha:g}")
    return f"Causal set {result.own.name}\n{ASSUMPTION}\n{wrapped(', '.join(facts))}"


def _checks(result: OwnResult) -> list[list[str]]:
    """What speaks for or against the assumption."""

    def row(name: str, one: Comparison, digits: int) -> list[str]:
        verdict = "matches" if one.matches else "does NOT match"
        cells = [f"{x:.{digits}f}" for x in one]
        return [name, cells[0], cells[1], cells[2], verdict]

    rows = [["", "found", "1+1 sprinkling", "allowed +-", ""]]
    rows.append(row("ordering fraction", result.ordering, 4))
    rows.append(row("modes above the threshold, n/(2 pi lambda)", result.count, 1))
    for k, one in enumerate(result.region_orderings):
        rows.append(row(f"ordering fraction of region {region_letter(k)}", one, 4))
    return rows


def _kept(kept: int, nominal: float) -> str:
    return f"{kept}/{nominal:.1f} = {kept / nominal:.2f}" if nominal else NO_NUMBER


def _entropies(result: OwnResult) -> list[list[str]]:
    """One row for the set, each region and the union under both rules."""

    def value(part: RegionResult | UnionResult) -> str:
        return f"{part.entropy:.4f}" + ("" if sound and part.status == "ok" else "*")

    sound = result.certificate.met
    rows = [["", "elements", "kept/nominal", "S (nats)"]]
    nominal = result.patch.nominal_modes / result.alpha
    kept = _kept(result.patch.kept_modes, nominal)
    rows.append(["whole set", _count(result.elements), kept, ""])
    for k, region in enumerate(result.regions):
        kept = _kept(region.kept_modes, region.nominal_modes / result.alpha)
        rows.append([f"region {region_letter(k)}", _count(region.elements), kept, value(region)])
    total = sum(region.elements for region in result.regions)
    nominal = sum(region.nominal_modes for region in result.regions) / result.alpha
    for rule, union in result.unions.items():
        kept = _kept(union.kept_modes, nominal)
        rows.append([f"union, {RULE_WORDS[rule]}", _count(total), kept, value(union)])
    return rows


def _informations(result: OwnResult) -> list[list[str]]:
    """Mutual information of every pair under both union rules, and what several regions share."""
    rows = [["", "I (nats)", "cross block", "relations between"]]
    mark = "" if result.trusted else "*"
    for pair in result.pairs:
        name = f"I({region_letter(pair.a)}:{region_letter(pair.b)})"
        between = _count(result.related[pair.a, pair.b])
        for rule, words in RULE_WORDS.items():
            value = f"{getattr(pair, rule):.4f}{mark}"
            rows.append([f"{name}, {words}", value, f"{pair.cross_block:.2f}", between])
    if len(result.regions) > 2:
        for rule, total in result.total_correlation.items():
            rows.append([f"total correlation, {RULE_WORDS[rule]}", f"{total:.4f}{mark}", "", ""])
    for triple in result.triples:
        letters = ":".join(region_letter(k) for k in triple.members)
        for rule, words in RULE_WORDS.items():
            value = f"{getattr(triple, rule):.4f}{mark}"
            rows.append([f"I({letters}), {words}", value, "", ""])
    return rows


def _remarks(result: OwnResult) -> list[str]:
    """What has to be said beside the numbers."""
    c = result.certificate
    lines = ["one causal set: no error is known"]
    if c.met:
        lines.append(
            f"certificate: met (residual {c.residual:.0e}, orthogonality {c.orthogonality:.0e})"
        )
    else:
        reasons = "; ".join(c.reasons)
        lines.append(f"certificate: NOT met, numbers with * are not to be trusted: {reasons}")
    lines += [f"mismatch: {text}" for text in result.mismatches()]
    lines += [
        f"caution: region {region_letter(k)}: {r.status.replace('_', ' ')}: {r.note}"
        for k, r in enumerate(result.regions)
        if r.status != "ok"
    ]
    lines += [
        f"caution: union, {RULE_WORDS[rule]}: {u.status.replace('_', ' ')}: {u.note}"
        for rule, u in result.unions.items()
        if u.status != "ok"
    ]
    small = [region_letter(k) for k, r in enumerate(result.regions) if r.elements < SMALLEST]
    if small:
        lines.append(
            f"caution: fewer than {SMALLEST} elements in {', '.join(small)}: not in the scaling "
            "regime"
        )
    lines.append("no reference slope: relations alone carry no coordinates and no lengths")
    lines.append(f"time: {duration(sum(result.seconds.values()))}")
    return lines
