"""Whether a bundle's numbers come out again on this machine."""

from __future__ import annotations

import math
import zlib
from collections.abc import Callable, Sequence
from dataclasses import replace
from typing import Literal, NamedTuple

import numpy as np

from lozenge_dashboard.bundle_rows import Key, layout_of, rows_of
from lozenge_dashboard.campaign_files import sample_columns, sample_rows
from lozenge_engine.agreement import TOLERANCE
from lozenge_engine.bundle import Bundle
from lozenge_engine.design import Design
from lozenge_engine.errors import InputError
from lozenge_engine.pipeline import compute
from lozenge_engine.presets import Preset, compare
from lozenge_engine.realisation import Record, realise
from lozenge_engine.result import Result
from lozenge_engine.stages import ONE_THREAD, Stages
from lozenge_engine.table import Table, arrays, packed

__all__ = ["NEAR", "Checked", "Verdict", "Verification", "nearest_to_a_cut", "verify"]

Verdict = Literal["identical", "equal", "different"]
NEAR = 1e-9
"""A mode nearer to a cut than this fraction of it may fall on the other side on another machine:
ten times what the residuals of the search leave open (`lozenge_engine.kernels.modes`)."""
NUMBERS_OF_RUN = ("seconds",)
"""Columns that no second run repeats."""


class Checked(NamedTuple):
    """One row of the samples, computed again.

    Attributes
    ----------
    name : str
        Which one, in words.
    verdict : str
        ``identical``: every bit; ``equal``: within `lozenge_engine.agreement.TOLERANCE`, which is
        what rounding may do on another processor or linear algebra; ``different``.
    difference : float
        Largest difference of two numbers; infinite where one of them is missing.
    what : str
        The column with that difference; empty if there is none.
    near : float
        Distance of the mode nearest to a cut, as a fraction of the cut.
    """

    name: str
    verdict: Verdict
    difference: float
    what: str
    near: float

    @property
    def may_flip(self) -> bool:
        """Whether a mode is so near a cut that another machine may decide otherwise."""
        return self.near < NEAR


class Verification(NamedTuple):
    """Outcome of a check.

    Attributes
    ----------
    rows : tuple of Checked
        What was computed again.
    held : int
        Rows that the bundle holds.
    text : str
        The sender's single numbers beside those found here; empty without any.
    agrees : bool
        Whether nothing is different.
    versions : str
        Which versions differ, as a sentence; empty if none does.
    """

    rows: tuple[Checked, ...]
    held: int
    text: str
    agrees: bool
    versions: str


def verify(
    bundle: Bundle,
    *,
    here: dict[str, str],
    realisations: int | None,
    report: Callable[[int, int], None] | None = None,
) -> Verification:
    """Compute again what a bundle holds, or a part of it.

    Parameters
    ----------
    bundle : Bundle
        From `lozenge_engine.bundle.read`.
    here : dict of str to str
        The versions that run now.
    realisations : int or None
        How many realisations to compute again, spread evenly over those it holds; None for all.
    report : callable or None
        Called with realisations done and to do; may raise to stop.

    Returns
    -------
    Verification
        Row by row.

    Raises
    ------
    InputError
        If the samples are not those of the bundle's preset.

    Notes
    -----
    Cost: that of the realisations, and once more of their patch modes.
    """
    say = report or (lambda _done, _all: None)
    text, agrees = _sender(bundle.preset)
    rows: list[Checked] = []
    held = 0
    if bundle.samples:
        layout = layout_of(bundle.preset)
        samples = rows_of(bundle.samples, layout)
        held = sum(map(len, samples.values()))
        chosen = _spread(sorted(samples), realisations)
        for done, key in enumerate(chosen):
            say(done, len(chosen))
            rows += _checked(layout, key, samples[key])
        say(len(chosen), len(chosen))
    agrees = agrees and all(row.verdict != "different" for row in rows)
    return Verification(tuple(rows), held, text, agrees, _versions(bundle, here))


def _versions(bundle: Bundle, here: dict[str, str]) -> str:
    names = sorted({*bundle.versions, *here})
    notes = [
        f"{name} {bundle.versions.get(name, 'none')} there, {here.get(name, 'none')} here"
        for name in names
        if bundle.versions.get(name) != here.get(name)
    ]
    return f"Versions differ: {', '.join(notes)}." if notes else ""


def _sender(preset: Preset) -> tuple[str, bool]:
    """Compare the single numbers that a preset carries."""
    if preset.sender is None:
        return "", True
    found = compare(preset, compute(preset.setup.config(), stages=Stages()))
    return found.text, found.agrees


# ---------------------------------------------------------------- the samples


def _spread(keys: Sequence[Key], count: int | None) -> list[Key]:
    """So many of them, evenly spread."""
    if count is None or count >= len(keys):
        return list(keys)
    places = np.linspace(0, len(keys) - 1, count).round().astype(int)
    return [keys[k] for k in dict.fromkeys(places.tolist())]


def _checked(layout: Design, key: Key, rows: list[list[str]]) -> list[Checked]:
    """Compute one realisation again and compare all its rows."""
    sprinkling, realisation = key
    record = realise(layout, sprinkling, realisation)
    again = list(sample_rows(layout, sprinkling, _table(layout, record))) if record.samples else []
    near = _nearest(layout, key)
    own = layout.sprinklings[sprinkling]
    columns = sample_columns(layout)
    found = []
    for k, row in enumerate(rows):
        name = f"density {own.density:g}, realisation {realisation}, row {k + 1}"
        if len(again) != len(rows):
            why = record.reason or f"{len(again)} rows here, {len(rows)} there"
            found.append(Checked(name, "different", math.inf, why, math.nan))
            continue
        verdict, difference, what = _compared(columns, row, again[k])
        found.append(Checked(name, verdict, difference, what, near[k]))
    return found


def _table(layout: Design, record: Record) -> Table:
    """A record as the table of its sprinkling with one realisation."""
    own = layout.sprinklings[record.sprinkling]
    sizes = [len(layout.cells[i].config.regions) for i in own.cells]
    samples = []
    for sample, regions in zip(record.samples, sizes, strict=True):
        data = packed(sample, regions=regions)
        samples.append([(record.realisation, int(sample.trusted), data, zlib.crc32(data))])
    fraction = None if math.isnan(record.ordering_fraction) else record.ordering_fraction
    front = [(record.realisation, record.seconds, record.elements, fraction)]
    return arrays(front, samples, regions=sizes)


def _compared(
    columns: Sequence[str], there: Sequence[str], here: Sequence[str]
) -> tuple[Verdict, float, str]:
    """Compare two rows field by field."""
    worst, what = 0.0, ""
    for name, a, b in zip(columns, there, here, strict=True):
        if a == b or name in NUMBERS_OF_RUN:
            continue
        gap = _gap(a, b)
        # Whole numbers and names are equal or not; only real numbers may be rounded.
        if not ("." in a + b or "e" in a + b):
            gap = math.inf
        if not gap <= worst:
            worst, what = gap, name
    if not what:
        return "identical", 0.0, ""
    return ("equal" if worst <= TOLERANCE else "different"), worst, what


def _gap(a: str, b: str) -> float:
    try:
        gap = abs(float(a) - float(b))
    except ValueError:
        return math.inf
    return gap if math.isfinite(gap) else math.inf


# ---------------------------------------------------------------- modes near a cut


def nearest_to_a_cut(result: Result) -> float:
    """Distance of the mode nearest to a cut, as a fraction of that cut.

    Parameters
    ----------
    result : Result
        Of one sprinkling.

    Returns
    -------
    float
        Over the patch and all regions; infinite where nothing is cut at a threshold.
    """
    spectra = [(result.patch.eigenvalues, result.patch.cut)]
    spectra += [(region.eigenvalues, region.cut) for region in result.regions]
    gaps = [
        float(np.abs(values / cut - 1.0).min()) for values, cut in spectra if cut and values.size
    ]
    return min(gaps, default=math.inf)


def _nearest(layout: Design, key: Key) -> list[float]:
    """For each cell of a realisation how near a mode is to a cut, in all mirror images."""
    sprinkling, realisation = key
    own = layout.sprinklings[sprinkling]
    source = layout.source(sprinkling, realisation)
    stages = Stages(threads_from=ONE_THREAD, compiled=True)
    found = []
    for i in own.cells:
        cell = layout.cells[i]
        configs = [replace(cell.config, points=source, regions=one) for one in cell.layouts]
        try:
            found.append(min(nearest_to_a_cut(compute(c, stages=stages)) for c in configs))
        except InputError:  # a sample without numbers, as on the sender's side
            found.append(math.inf)
    return found
