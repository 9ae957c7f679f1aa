"""Bundles on the terminal: making one, and computing again what one holds."""

from __future__ import annotations

import math
import sys
from dataclasses import replace
from pathlib import Path

from lozenge_dashboard.campaign_files import samples_csv
from lozenge_dashboard.run import put
from lozenge_dashboard.verify import Checked, Verification, verify
from lozenge_engine import bundle, store
from lozenge_engine.agreement import TOLERANCE, Sender
from lozenge_engine.bundle import Bundle
from lozenge_engine.document import check_writable
from lozenge_engine.errors import refuse
from lozenge_engine.notation import thousands
from lozenge_engine.pipeline import compute, versions
from lozenge_engine.presets import Preset
from lozenge_engine.stages import Stages

__all__ = ["USUAL", "bundle_of_preset", "bundle_of_results", "save_bundle", "verify_bundle"]

USUAL = 6
"""Realisations that are computed again unless more or all are asked for."""
SHOWN = 40
"""Rows printed one by one when they are identical; others are always printed."""


def bundle_of_preset(preset: Preset) -> Bundle:
    """Make a bundle of a preset and the numbers of its own sprinkling.

    Parameters
    ----------
    preset : Preset
        Not of imported points: those lie in a file of their own.

    Returns
    -------
    Bundle
        Without samples.

    Raises
    ------
    InputError
        If it cannot be computed.
    """
    if preset.setup.points.kind == "file":
        raise refuse(
            "points",
            given="imported points",
            allowed="points that a seed gives",
            do="send the preset and the points' file themselves",
        )
    result = compute(preset.setup.config(), stages=Stages())
    return Bundle(replace(preset, sender=Sender.of(result)), "", versions(), {})


def bundle_of_results(path: Path) -> Bundle:
    """Make a bundle of a results file: its preset and all its samples.

    Parameters
    ----------
    path : Path
        Finished or not.

    Returns
    -------
    Bundle
        With the versions that computed it, joined where there were several.

    Raises
    ------
    InputError
        If it is no results file.
    """
    with store.inspect(path) as results:
        made = results.computed_with()
        names = sorted({name for found, _ in made for name in found})
        joined = {
            name: " and ".join(dict.fromkeys(found.get(name, "none") for found, _ in made))
            for name in names
        }
        text = "".join(samples_csv(results))
        return Bundle(results.preset, text, joined or versions(), {})


def save_bundle(made: Bundle, path: Path) -> None:
    """Write a bundle and say what it holds.

    Parameters
    ----------
    made : Bundle
        What goes into it.
    path : Path
        The zip file.

    Raises
    ------
    InputError
        If it cannot be written, or is too large.
    """
    check_writable(path)
    bundle.write(path, made)
    rows = max(0, made.samples.count("\n") - 1)
    parts = [f"{thousands(rows, space=' ')} samples"] if rows else []
    parts += ["the numbers of the preset's own sprinkling"] if made.preset.sender else []
    parts += [f"{len(made.figures)} figures and tables"] if made.figures else []
    put(
        f"{path}: the preset “{made.preset.title}” with {', '.join(parts) or 'no numbers'}, "
        f"{path.stat().st_size / 1000:.0f} kB. Check it anywhere with: lozenge verify {path.name}\n"
    )


def verify_bundle(path: Path, *, realisations: int | None) -> bool:
    """Compute again what a bundle holds and print the verdict on every row.

    Parameters
    ----------
    path : Path
        The zip file.
    realisations : int or None
        How many; None for all.

    Returns
    -------
    bool
        Whether nothing is different.

    Raises
    ------
    InputError
        If it is no bundle.
    """
    if realisations is not None and realisations < 1:
        raise refuse(
            "--realisations",
            given=realisations,
            allowed="a whole number from 1, or --all",
            do="leave it out for the usual few",
        )
    found = bundle.read(path)
    done = verify(found, here=versions(), realisations=realisations, report=_progress)
    put(verification_text(found, done))
    return done.agrees


def _progress(done: int, whole: int) -> None:
    """One line on a terminal that counts."""
    if sys.stderr.isatty():
        sys.stderr.write(f"\r{done} of {whole} realisations computed again" if done < whole else
                         "\r\x1b[K")  # fmt: skip
        sys.stderr.flush()


def verification_text(made: Bundle, found: Verification) -> str:
    """The verdicts as text.

    Parameters
    ----------
    made : Bundle
        What was checked.
    found : Verification
        From `lozenge_dashboard.verify.verify`.

    Returns
    -------
    str
        Lines with their newlines.
    """
    lines = [f"{made.preset.title}\n"]
    if found.versions:
        lines.append(f"{found.versions}\n")
    if found.text:
        lines.append(f"Its single numbers: {found.text}.\n")
    for k, row in enumerate(found.rows):
        if row.verdict != "identical" or row.may_flip or k < SHOWN:
            lines.append(f"  {_row(row)}\n")
    if len(found.rows) > SHOWN:
        lines.append(f"  rows from the {SHOWN + 1}st on are shown only if not identical\n")
    if found.held:
        counts = {
            name: sum(row.verdict == name for row in found.rows)
            for name in ("identical", "equal", "different")
        }
        lines.append(
            f"{len(found.rows)} of {found.held} rows computed again: {counts['identical']} "
            f"identical in every bit, {counts['equal']} equal within {TOLERANCE:g}, "
            f"{counts['different']} different.\n"
        )
        if len(found.rows) < found.held:
            lines.append("The others were not checked: --all computes them too.\n")
    if not (found.held or found.text):
        lines.append("It holds no numbers: there is nothing to compare.\n")
    return "".join(lines)


def _row(row: Checked) -> str:
    """One verdict."""
    text = {"identical": "identical bits", "equal": "equal", "different": "DIFFERENT"}[row.verdict]
    if row.what:
        by = f" by {row.difference:.1e}" if math.isfinite(row.difference) else ""
        text += f", {row.what}{by}"
    if row.may_flip:
        text += (
            f"; a mode lies within {row.near:.0e} of a cut and may fall on either side on "
            "another machine"
        )
    return f"{row.name}: {text}"
