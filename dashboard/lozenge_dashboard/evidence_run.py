"""`lozenge evidence`: slopes of data, twin and chain from one preset, and what they are due to."""

from __future__ import annotations

import contextlib
import json
import sys
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import NamedTuple, get_args

from lozenge_dashboard.campaign_run import run_campaign
from lozenge_dashboard.evidence_table import (
    due_document,
    due_text,
    thresholds_document,
    thresholds_text,
)
from lozenge_dashboard.run import STANDARD_OUTPUT, put
from lozenge_engine import store
from lozenge_engine.config import Setup
from lozenge_engine.design import design
from lozenge_engine.differences import campaign_in, check_same
from lozenge_engine.document import check_writable, write_bytes
from lozenge_engine.due import DueRecord, due_of_plan, due_of_results
from lozenge_engine.errors import refuse
from lozenge_engine.evidence import EvidencePlan
from lozenge_engine.presets import Preset
from lozenge_engine.stages import ONE_THREAD, Stages
from lozenge_engine.thresholds import ThresholdRecord, threshold_record
from lozenge_engine.twin import Level

__all__ = ["LEVELS", "Told", "run_evidence"]

Report = Callable[[str, float], None]
LEVELS: tuple[Level, ...] = get_args(Level)
"""Levels of the twin that the command takes."""
STAGE_WORDS = {
    "chain": "chain",
    "twin": "continuum twin",
    "modes": "modes",
    "sprinklings": "sprinklings",
}


class Told(NamedTuple):
    """How it ended.

    Attributes
    ----------
    paused : bool
        Whether Ctrl-C or SIGTERM paused the campaign, so that there is no table.
    trusted : bool
        Whether nothing of the campaign failed or carries a mark; True without one.
    """

    paused: bool
    trusted: bool


def run_evidence(
    preset: Preset,
    *,
    results: Path | None = None,
    json_file: Path | None = None,
    workers: int | None = None,
    level: str | None = None,
    as_is: bool = False,
    resume_line: str = "",
) -> Told:
    """Print the table of a preset's campaign: data, twin, chain, data minus twin.

    Parameters
    ----------
    preset : Preset
        With a campaign.  With a section evidence, thresholds are derived and printed too.
    results : Path or None
        The campaign's results file, made or gone on with first; None for twin and chain alone.
    json_file : Path or None
        A file to write the numbers to, whole or not at all; ``-`` for the standard output instead
        of the table.
    workers : int or None
        Processes of the campaign; None for as many as cores.
    level : str or None
        Level of the twin; None for that of the preset's section evidence, else ``smooth`` for a
        massless field in a flat patch and ``refined`` otherwise.
    as_is : bool
        Whether the results file is read as it is, also while another run writes it.
    resume_line : str
        The command that goes on, to be printed after a pause.

    Returns
    -------
    Told
        After the table is printed.

    Raises
    ------
    InputError
        If the preset has no campaign, or a file or the level cannot be taken.
    """
    layout = design(preset.setup, campaign_in(preset))
    chosen = _level(preset, level)
    _check_files(results, json_file)
    trusted = True
    if results is not None and not as_is:
        with contextlib.redirect_stdout(sys.stderr):  # the standard output holds the table alone
            ended = run_campaign(preset, path=results, resume_line=resume_line, workers=workers)
        if ended.paused:
            return Told(paused=True, trusted=True)
        trusted = ended.trusted
    stages = Stages(threads_from=ONE_THREAD)
    with _progress() as report:
        if results is None:
            record = due_of_plan(layout, level=chosen, stages=stages, report=report)
        else:
            with store.inspect(results) as opened:
                check_same(results, opened.preset, preset)
                record = due_of_results(opened, level=chosen, stages=stages, report=report)
        limits = _thresholds(preset, record, stages, report)
    _tell(preset, record, limits, json_file)
    return Told(paused=False, trusted=trusted)


def _level(preset: Preset, asked: str | None) -> Level:
    """The level of the twin, checked."""
    if asked is None:
        return _own_level(preset)
    for level in LEVELS:
        if level == asked:
            return level
    raise refuse("--level", given=asked, allowed=", ".join(LEVELS), do="choose one of them")


def _own_level(preset: Preset) -> Level:
    """What a preset asks for; else the closed form where there is one."""
    if preset.evidence is not None:
        return preset.evidence.level
    masses = [axis for axis in campaign_in(preset).axes if axis.name == "mass"]
    closed = preset.setup.points.curvature == "flat" and preset.setup.mass == 0 and not masses
    return "smooth" if closed else "refined"


def _check_files(results: Path | None, json_file: Path | None) -> None:
    """Refuse what cannot be written before anything is computed."""
    if json_file is None or json_file == STANDARD_OUTPUT:
        return
    check_writable(json_file)
    if results is not None and results.resolve() == json_file.resolve():
        raise refuse(
            str(json_file), given="one file twice", allowed="two files", do="change one name"
        )


def _thresholds(
    preset: Preset, record: DueRecord, stages: Stages, report: Report
) -> list[tuple[str, ThresholdRecord]]:
    """Thresholds of every geometry of the table, if the preset has a section evidence."""
    if preset.evidence is None:
        return []
    found = []
    for label, setup in _geometries(preset.setup, record):
        plan: EvidencePlan = preset.evidence
        found.append((label, threshold_record(setup, plan, cache=stages, report=report)))
    return found


def _geometries(setup: Setup, record: DueRecord) -> Iterator[tuple[str, Setup]]:
    """The setups of the rows at the preset's own density, each layout once."""
    seen = set()
    for row in record.rows:
        if row.regions not in seen:
            seen.add(row.regions)
            one = setup.with_(region_list=row.regions, mass=row.mass, order=row.order)
            yield row.label or "its regions", one


def _tell(
    preset: Preset,
    record: DueRecord,
    limits: list[tuple[str, ThresholdRecord]],
    json_file: Path | None,
) -> None:
    """Write the JSON and print the table, or the JSON in its place."""
    if json_file is not None:
        made = {
            "title": preset.title,
            "invented": preset.invented,
            **due_document(record),
            "thresholds": [thresholds_document(label, one) for label, one in limits],
        }
        to_output = json_file == STANDARD_OUTPUT  # which may know no more than ASCII
        text = json.dumps(made, indent=2, ensure_ascii=to_output, allow_nan=False) + "\n"
        if to_output:
            put(text)
            return
        write_bytes(json_file, text.encode())
    mark = " (invented scenario)" if preset.invented else ""
    parts = [f"{preset.title}{mark}\n", due_text(record)]
    parts += [f"{thresholds_text(label, one)}\n" for label, one in limits]
    put("\n".join(parts))


@contextlib.contextmanager
def _progress() -> Iterator[Report]:
    """A bar on a terminal; elsewhere nothing."""
    if not sys.stderr.isatty():
        yield lambda _stage, _fraction: None
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn

    columns = (BarColumn(bar_width=24), TextColumn("{task.description}"))
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task("starting", total=1.0)

        def show(stage: str, fraction: float) -> None:
            words = STAGE_WORDS.get(stage, stage)
            bar.update(task, completed=min(1.0, fraction), description=words)

        yield show
