"""What is written of a results file for other programs: a JSON document, a CSV of samples."""

from __future__ import annotations

import itertools
import json
import math
from collections.abc import Iterator
from typing import Any

from lozenge_dashboard.campaign_checks import controls, prediction, trusted
from lozenge_engine.agreement import plain
from lozenge_engine.design import Design
from lozenge_engine.estimates import CellEstimate, Estimates
from lozenge_engine.geometry import region_letter
from lozenge_engine.presets import dumps
from lozenge_engine.store import Results, Table

__all__ = ["results_document", "sample_columns", "sample_rows", "samples_csv"]


# ------------------------------------------------------------------------- JSON


def results_document(results: Results, found: Estimates) -> dict[str, Any]:
    """The numbers of a results file as plain JSON values; null where nothing is known.

    Parameters
    ----------
    results : Results
        Open.
    found : Estimates
        What its samples say.

    Returns
    -------
    dict
        Keys ``points``, ``fits``, ``sprinklings``, ``left_out``, ``failures``, ``error`` of the
        target, ``history`` (CPU seconds, that error), ``prediction``, ``trusted``, ``versions`` and
        ``preset``.
    """
    predicted, measured = prediction(results)
    tried = controls(results)
    return {
        "points": [
            _point(results, cell) | {"control_variates": _plain(tried[cell.cell])}
            for cell in found.cells
        ],
        "fits": [_plain(fit) for fit in found.fits],
        "sprinklings": [
            {"kind": own.kind, "density": own.density, "done": done, "failed": failed}
            for own, (done, failed) in zip(
                results.design.sprinklings, results.counts(), strict=True
            )
        ],
        "left_out": list(results.design.left_out),
        "failures": [{"reason": reason, "count": count} for reason, count in found.failures],
        "error": _plain(found.error),
        "history": _plain(found.history),
        "cpu_seconds": found.cpu_seconds,
        "elapsed": results.elapsed,
        "prediction": {"predicted": predicted, "measured": measured} if predicted else None,
        "trusted": trusted(found),
        "versions": [{"realisations": count, **made} for made, count in results.computed_with()],
        "preset": json.loads(dumps(results.preset)),
    }


def _point(results: Results, number: CellEstimate) -> dict[str, Any]:
    """One point in one placement class: its values, then its numbers."""
    cell = results.design.cells[number.cell]
    head = {
        "values": dict(results.design.points[cell.point].values),
        "placement": list(results.design.plan.placements[cell.placement]),
        "log_length": cell.x,
        "elements_per_region": cell.elements,
    }
    return head | _plain(number)


def _plain(value: Any) -> Any:
    """Named tuples as objects, NumPy's numbers as Python's, what is not finite as null."""
    if hasattr(value, "_asdict"):
        return {key: _plain(part) for key, part in value._asdict().items()}
    if isinstance(value, tuple | list):
        return [_plain(part) for part in value]
    return plain(value.item() if hasattr(value, "item") else value)


# -------------------------------------------------------------------------- CSV


def samples_csv(results: Results) -> Iterator[str]:
    """Write all samples, one row for each cell of each finished realisation.

    Parameters
    ----------
    results : Results
        Open.

    Yields
    ------
    str
        Lines with their newline, the first with the columns' names.  Numbers are in the shortest
        form that reads back as the same double; fields that a row does not have are empty.
    """
    layout = results.design
    yield ",".join(sample_columns(layout)) + "\n"
    for g in range(len(layout.sprinklings)):
        for row in sample_rows(layout, g, results.table(g)):
            yield ",".join(row) + "\n"


def sample_columns(layout: Design) -> list[str]:
    """Names of the columns of a campaign's samples.

    Parameters
    ----------
    layout : Design
        The campaign.

    Returns
    -------
    list of str
        As many as the cell with the most regions needs.
    """
    most = _most(layout)
    letters = [region_letter(k) for k in range(most)]
    pairs = list(itertools.combinations(range(most), 2))
    head = ["kind", "patch_density", "realisation", "child_seed", "seconds", "patch_elements"]
    head += ["ordering_fraction", *(axis.name for axis in layout.plan.axes)]
    head += ["placement_t", "placement_x", "trusted"]
    head += [f"{a}_{what}" for a in letters for what in ("elements", "kept", "entropy")]
    head += ["union_support", "union_direct_sum"]
    head += [
        f"{letters[a]}{letters[b]}_{what}"
        for a, b in pairs
        for what in ("information_support", "information_direct_sum", "cross_block")
    ]
    return head


def sample_rows(layout: Design, sprinkling: int, table: Table) -> Iterator[list[str]]:
    """Write samples of one sprinkling: realisations in order, its cells in order within them.

    Parameters
    ----------
    layout : Design
        The campaign.
    sprinkling : int
        Index of `Design.sprinklings`.
    table : Table
        Samples of it.

    Yields
    ------
    list of str
        One field for each of `sample_columns`.
    """
    own = layout.sprinklings[sprinkling]
    shared = zip(
        table.realisation.tolist(),
        table.seconds.tolist(),
        table.elements.tolist(),
        table.ordering_fraction.tolist(),
        strict=True,
    )
    columns = [_columns(table, c, most=_most(layout)) for c in range(len(own.cells))]
    heads = [_cell_head(layout, i) for i in own.cells]
    for row, (realisation, seconds, elements, fraction) in enumerate(shared):
        child = layout.seed(sprinkling, realisation)
        front = [own.kind, own.density, realisation, child, seconds, int(elements), fraction]
        for head, column in zip(heads, columns, strict=True):
            yield list(map(_field, [*front, *head, *column[row]]))


def _most(layout: Design) -> int:
    """Regions of the cell with the most."""
    return max(len(cell.config.regions) for cell in layout.cells)


def _cell_head(layout: Design, cell: int) -> list[object]:
    """Values of the axes and the placement."""
    own = layout.cells[cell]
    values = layout.points[own.point].values
    return [*values.values(), *layout.plan.placements[own.placement]]


def _columns(table: Table, column: int, *, most: int) -> list[list[object]]:
    """For each realisation the numbers of one cell, as many as the widest cell has."""
    triples = [table.region_elements[column], table.kept[column], table.entropy[column]]
    pairs = [
        table.pair_support[column],
        table.pair_direct_sum[column],
        table.cross_block[column],
    ]
    count = int(triples[0].shape[1])
    place = {pair: k for k, pair in enumerate(itertools.combinations(range(count), 2))}
    order = [place.get(pair) for pair in itertools.combinations(range(most), 2)]
    parts = [part.tolist() for part in (*triples, *pairs)]
    rows: list[list[object]] = []
    for row in range(table.realisation.size):
        made: list[object] = [bool(table.trusted[row, column])]
        for k in range(most):
            made += [part[row][k] if k < count else None for part in parts[:3]]
        made += [
            float(table.union_support[row, column]),
            float(table.union_direct_sum[row, column]),
        ]
        for at in order:
            made += [None if at is None else part[row][at] for part in parts[3:]]
        rows.append(made)
    return rows


def _field(value: object) -> str:
    if value is None or (isinstance(value, float) and not math.isfinite(value)):
        return ""
    if isinstance(value, bool):
        return "1" if value else "0"
    return repr(value) if isinstance(value, float) else str(value)
