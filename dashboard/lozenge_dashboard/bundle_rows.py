"""The samples of a bundle as rows, checked against the campaign that they belong to."""

from __future__ import annotations

import csv
import io

from lozenge_dashboard.campaign_files import sample_columns
from lozenge_engine.bundle import Bundle
from lozenge_engine.design import Design, design
from lozenge_engine.errors import refuse
from lozenge_engine.presets import Preset

__all__ = ["Key", "count_rows", "layout_of", "rows_of"]

Key = tuple[int, int]
"""Sprinkling and realisation."""


def count_rows(bundle: Bundle) -> int:
    """How many samples a bundle holds, when their columns are those of its own campaign.

    Only the first line is read: a bundle may hold fifty megabytes of them.
    """
    if not bundle.samples:
        return 0
    head, _, body = bundle.samples.partition("\n")
    _check_columns(head.rstrip("\r").split(","), sample_columns(layout_of(bundle.preset)))
    return body.count("\n") + (body[-1:] not in ("", "\n"))


def layout_of(preset: Preset) -> Design:
    """The design of the campaign that a bundle's samples come from; refused without one."""
    if preset.campaign is None:
        raise refuse(
            "the bundle",
            given="samples beside a preset without a campaign",
            allowed="the preset that the samples were computed from",
            do="get the bundle again",
        )
    return design(preset.setup, preset.campaign)


def rows_of(text: str, layout: Design) -> dict[Key, list[list[str]]]:
    """The rows of each realisation, when they are those of this campaign."""
    try:
        head, *body = csv.reader(io.StringIO(text, newline=""), strict=True)
    except (csv.Error, ValueError) as error:
        raise _not_these("text that is no table") from error
    columns = sample_columns(layout)
    _check_columns(head, columns)
    place = {(own.kind, repr(own.density)): g for g, own in enumerate(layout.sprinklings)}
    found: dict[Key, list[list[str]]] = {}
    for number, row in enumerate(body, start=2):
        if len(row) != len(columns):
            raise _not_these(f"line {number} with {len(row)} fields")
        sprinkling = place.get((row[0], row[1]))
        if sprinkling is None or not (row[2].isascii() and row[2].isdigit() and len(row[2]) < 8):
            raise _not_these(f"line {number}: {','.join(row[:3])[:60]}")
        found.setdefault((sprinkling, int(row[2])), []).append(row)
    return found


def _check_columns(head: list[str], columns: list[str]) -> None:
    if head != columns:
        odd = next((a for a, b in zip(head, columns, strict=False) if a != b), "their number")
        raise _not_these(f"other columns, the first of them {odd[:40]}")


def _not_these(given: str) -> Exception:
    return refuse(
        "samples.csv",
        given=given,
        allowed="the samples of the bundle's own preset",
        do="get the bundle again",
    )
