"""Finished realisations of a campaign, kept in a results file so that none is ever lost.

Each realisation is written in one transaction, is on the disk when `Results.add` returns, and is
never changed afterwards.  One run at a time writes a file; any number of readers look on.
"""

from __future__ import annotations

import json
from collections.abc import Sequence
from pathlib import Path

from lozenge_engine.checks import checked_number
from lozenge_engine.design import design, identity
from lozenge_engine.differences import campaign_in, check_same
from lozenge_engine.document import check_writable
from lozenge_engine.errors import refuse
from lozenge_engine.filelock import FileLock
from lozenge_engine.presets import Preset, dumps
from lozenge_engine.recorded import Results, versions_text
from lozenge_engine.resultsfile import lay_down, open_file
from lozenge_engine.table import Table

__all__ = ["Results", "Table", "create", "inspect", "resume"]


def create(path: Path, preset: Preset, *, predicted: Sequence[tuple[float, float]] = ()) -> Results:
    """Start a results file.

    Parameters
    ----------
    path : Path
        A file that does not exist, in a folder that does.
    preset : Preset
        With a campaign.
    predicted : sequence of (float, float)
        Seconds and bytes that one realisation of each sprinkling is expected to take, none or one
        for each sprinkling; kept to say how far off they were.

    Returns
    -------
    Results
        Writable, with no realisation yet.

    Raises
    ------
    InputError
        If the preset has no campaign or the file cannot be made; nothing is left behind then.
    """
    plan = campaign_in(preset)
    layout = design(preset.setup, plan)
    pairs = [
        [
            checked_number("predicted", x, low=0.0, high=1e300, allowed="seconds and bytes")
            for x in pair
        ]
        for pair in predicted
    ]
    if any(len(pair) != 2 for pair in pairs) or len(pairs) not in (0, len(layout.sprinklings)):
        raise refuse(
            "predicted",
            given=f"{len(pairs)} entries",
            allowed=f"none, or seconds and bytes for each of {len(layout.sprinklings)} sprinklings",
            do="predict them all",
        )
    target = _target(path)
    check_writable(target)
    lock = FileLock(target)
    try:
        lay_down(
            target,
            preset=dumps(preset),
            identity=identity(preset.setup, plan),
            versions=versions_text(),
            predicted=json.dumps(pairs),
        )
        return Results(path, open_file(target, writable=True), lock)
    except BaseException:
        lock.release()
        raise


def resume(path: Path, preset: Preset | None = None) -> Results:
    """Open a results file to go on with it.

    Parameters
    ----------
    path : Path
        The file.
    preset : Preset or None
        If given, of the same campaign; its realisations, target, budget and smallest region then
        take the place of those in the file.

    Returns
    -------
    Results
        Writable, with all realisations that were ever recorded.

    Raises
    ------
    InputError
        If it is no results file, newer, damaged, not writable, of another preset, or another run
        is writing it.
    """
    target = _target(path)
    open_file(target, writable=False).close()  # no lock beside what is no results file
    lock = FileLock(target)
    try:
        results = Results(path, open_file(target, writable=True), lock)
    except BaseException:
        lock.release()
        raise
    try:
        if preset is not None:
            check_same(path, results.preset, preset)
            results.replan(campaign_in(preset))
    except BaseException:
        results.close()
        raise
    return results


def inspect(path: Path) -> Results:
    """Open a results file to look at it, also while a run is writing it.

    Parameters
    ----------
    path : Path
        The file.

    Returns
    -------
    Results
        Read only; each call sees what has been recorded by then.

    Raises
    ------
    InputError
        If it is no results file, newer or damaged.
    """
    return Results(path, open_file(_target(path), writable=False), None)


def _target(path: Path) -> Path:
    """The file itself, so that all its names share one lock."""
    try:
        return path.resolve()
    except (OSError, RuntimeError, ValueError) as error:
        raise refuse(
            str(path), given=str(error), allowed="the path of a results file", do="check the path"
        ) from error
