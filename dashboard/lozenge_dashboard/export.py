"""`lozenge export`: figures, tables, methods and sources of a preset or of results, in a folder."""

from __future__ import annotations

import secrets
import shutil
import sys
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import Any

from lozenge_dashboard.campaign_checks import trusted
from lozenge_dashboard.campaign_files import samples_csv
from lozenge_dashboard.campaigns import Campaigns, Watch
from lozenge_dashboard.evidence_work import TASKS, Ask
from lozenge_dashboard.publish import findings, methods, numbers, shots, sources
from lozenge_dashboard.publish.facts import Facts
from lozenge_dashboard.publish.figures import DOUBLE, SINGLE, printed
from lozenge_dashboard.publish.latex import escaped
from lozenge_dashboard.publish.shots import BENCH, CAMPAIGN, EVIDENCE, Shot
from lozenge_dashboard.publish.tables import Table, csv_text, latex_text
from lozenge_dashboard.records import EvidenceScene, Scene
from lozenge_dashboard.report import Outcome, cautions
from lozenge_dashboard.run import computed, own_points, put, with_points
from lozenge_dashboard.views.evidence import RECORDS, TITLES
from lozenge_engine import store
from lozenge_engine.bench import continuum_eigenvalues
from lozenge_engine.document import check_writable, write_bytes
from lozenge_engine.errors import InputError, refuse
from lozenge_engine.evidence import EvidencePlan
from lozenge_engine.pointfile import PointFile
from lozenge_engine.presets import Preset, dumps
from lozenge_engine.stages import Stages

__all__ = ["export_preset", "export_results"]

SWEPT = ("scaling", "separation")
"""Views of the bench that need its sweeps."""
CONTINUUM_MODES = 400
Files = dict[str, bytes]


def export_preset(
    preset: Preset,
    *,
    to: Path,
    folder: Path | None = None,
    views: Sequence[str] | None = None,
    double: bool = False,
) -> bool:
    """Compute a preset and write what a paper takes from it.

    Parameters
    ----------
    preset : Preset
        What to compute.
    to : Path
        Folder to write: a new one whole or not at all; in one that exists, files of the same
        name are replaced one by one.
    folder : Path or None
        Where the preset's file lies; own points that it names are looked for there.
    views : sequence of str or None
        Names of views; None for the bench's six, and the evidence page's if the preset has a
        section ``evidence``.
    double : bool
        Whether figures are also drawn two columns wide.

    Returns
    -------
    bool
        Whether the certificate holds and no number carries a mark.

    Raises
    ------
    InputError
        If a view is unknown, or the points, the preset or the folder cannot be taken: the views
        and the folder before anything is computed.
    """
    usual = BENCH + (EVIDENCE if preset.evidence is not None else ())
    chosen = _chosen(views, allowed=BENCH + EVIDENCE, usual=usual)
    _check_folder(to)
    own = own_points(preset, folder, None)
    preset = with_points(preset, own)
    outcome = computed(preset, own, with_sweeps=bool(set(SWEPT) & set(chosen)))
    scene = _scene(outcome)
    evidence, notes = _evidence(preset, own, chosen=chosen, results=None)
    facts = Facts(
        preset,
        (_versions(outcome.result.versions),),
        scene=scene,
        evidence=evidence,
        failures=outcome.failures,
    )
    pictures = shots.bench_shots(scene, preset.view, chosen=chosen)
    tables = numbers.bench_tables(scene)
    if evidence is not None:
        pictures += shots.evidence_shots(evidence, preset.view, chosen=chosen)
        tables += findings.evidence_tables(evidence)
    notes += [*cautions(preset.setup, outcome.result), *outcome.failures]
    _write(to, _files(facts, pictures, tables, notes=notes, double=double), pictures)
    return outcome.trusted


def export_results(
    path: Path, *, to: Path, views: Sequence[str] | None = None, double: bool = False
) -> bool:
    """Write what a paper takes from a results file.

    Parameters
    ----------
    path : Path
        The results file of a campaign, finished or not.
    to : Path
        As in `export_preset`.
    views : sequence of str or None
        Names of views; None for the campaign's four, and the evidence page's if its preset has
        a section ``evidence``.
    double : bool
        Whether figures are also drawn two columns wide.

    Returns
    -------
    bool
        Whether no realisation failed and no number carries a mark.

    Raises
    ------
    InputError
        If it is no results file, a view is unknown or the folder cannot be written.
    """
    with store.inspect(path) as results:
        preset, made = results.preset, results.computed_with()
        samples = "".join(samples_csv(results)).encode()
    usual = CAMPAIGN + (EVIDENCE if preset.evidence is not None else ())
    chosen = _chosen(views, allowed=CAMPAIGN + EVIDENCE, usual=usual)
    _check_folder(to)
    watch: Watch = Campaigns(path.parent).watch(path.name)
    evidence, notes = _evidence(preset, None, chosen=chosen, results=path)
    versions = tuple(_versions(found) for found, _ in made)
    facts = Facts(preset, versions, watch=watch, evidence=evidence)
    pictures = shots.campaign_shots(watch, chosen=chosen)
    tables = numbers.campaign_tables(watch)
    if evidence is not None:
        pictures += shots.evidence_shots(evidence, preset.view, chosen=chosen)
        tables += findings.evidence_tables(evidence)
    notes += list(watch.design.left_out)
    files = _files(facts, pictures, tables, notes=notes, double=double)
    _write(to, files | {"samples.csv": samples}, pictures)
    return trusted(watch.estimates)


# -------------------------------------------------------------------- computing


def _chosen(
    views: Sequence[str] | None, *, allowed: Sequence[str], usual: Sequence[str]
) -> tuple[str, ...]:
    """The views asked for, each once."""
    if views is None:
        return tuple(usual)
    odd = next((name for name in views if name not in allowed), None)
    if odd is not None or not views:
        raise refuse(
            "--views",
            given=odd if odd is not None else "none",
            allowed=", ".join(allowed),
            do="name views of what is exported, separated by commas",
        )
    return tuple(dict.fromkeys(views))


def _scene(outcome: Outcome) -> Scene:
    """What the bench's views are drawn from."""
    setup, result, curves = outcome.preset.setup, outcome.result, outcome.curves
    shown = min(CONTINUUM_MODES, 2 * result.patch.kept_modes + 20)
    return Scene(
        setup=setup,
        result=result,
        average=outcome.average,
        density=curves.density if curves is not None else None,
        size=curves.size if curves is not None else None,
        separation=curves.separation if curves is not None else None,
        continuum=continuum_eigenvalues(setup.config(), shown),
        beside=outcome.beside,
    )


def _evidence(
    preset: Preset, own: PointFile | None, *, chosen: Sequence[str], results: Path | None
) -> tuple[EvidenceScene | None, list[str]]:
    """The evidence page's records that the chosen views need, and what could not be computed."""
    wanted = [view for view in TASKS if view in chosen]
    if not wanted:
        return None, []
    plan = preset.evidence or EvidencePlan()
    ask = Ask(preset.setup, plan, points=own, results=results)
    stages, notes = Stages(), []
    records: dict[str, Any] = {}
    for view in wanted:
        say = _progress(TITLES[view])
        try:
            record = TASKS[view](ask, stages=stages, report=say, publish=lambda _part: None)
            records[RECORDS[view]] = record
        except InputError as error:
            notes.append(f"{TITLES[view]}: {error}")
        finally:
            say("", 1.0)
    return EvidenceScene(preset.setup, plan, **records), notes


def _progress(title: str) -> Callable[[str, float], None]:
    """One line on a terminal that says what is being computed."""

    def report(stage: str, fraction: float) -> None:
        if sys.stderr.isatty():
            line = f"\r{title}: {stage} {100 * fraction:.0f} %\x1b[K" if stage else "\r\x1b[K"
            sys.stderr.write(line)
            sys.stderr.flush()

    return report


def _versions(found: Mapping[str, str]) -> str:
    return ", ".join(f"{name} {version}" for name, version in found.items())


# ---------------------------------------------------------------------- writing


def _files(
    facts: Facts,
    pictures: Sequence[Shot],
    tables: Sequence[Table],
    *,
    notes: Sequence[str],
    double: bool,
) -> Files:
    """Everything that is written, by the names of the files."""
    files: Files = {}
    captions = []
    for shot in pictures:
        if shot.empty:
            continue
        title = f"{facts.preset.title}: {shot.question}"
        for column in (SINGLE, DOUBLE) if double else (SINGLE,):
            stem = f"{shot.name}-{column.name}" if column.name else shot.name
            made = printed(shot.figure, shot.data, column=column, title=title, letters=shot.letters)
            for kind, data in made:
                files[f"{stem}.{kind}"] = data
        # Only a letter of a word: the sign of a quantity stays as it is.
        first = shot.caution[:1].upper() if shot.caution[:1].isascii() else shot.caution[:1]
        captions.append(f"{shot.name}\n    {shot.question} {first}{shot.caution[1:]}\n")
    for table in tables:
        files[f"table-{table.name}.csv"] = csv_text(table).encode()
        files[f"table-{table.name}.tex"] = latex_text(table).encode()
    rested = sources.rested_on(facts)
    text = methods.paragraph(facts)
    invented = "The scenario is invented. " if facts.preset.invented else ""
    heading = f"{facts.preset.title}\n{invented}{facts.preset.sentence}\n\n"
    marked = "".join(f"caution: {note}\n" for note in notes)
    files["captions.txt"] = (heading + "\n".join(captions)).encode()
    files["methods.txt"] = f"{heading}{text}\n{marked and chr(10) + marked}".encode()
    files["methods.tex"] = f"{escaped(text)}\n".encode()
    files["sources.txt"] = sources.list_text(rested).encode()
    files["sources.tex"] = sources.bibliography(rested).encode()
    files["preset.json"] = dumps(facts.preset).encode()
    return files


def _check_folder(to: Path) -> None:
    """Refuse a folder that cannot be written, before anything is computed."""
    if to.is_dir():
        check_writable(to / "methods.txt")
    elif to.exists():
        raise refuse(str(to), given="a file", allowed="a folder", do="give another name")
    else:
        check_writable(to)


def _write(to: Path, files: Files, pictures: Sequence[Shot]) -> None:
    """Write the files and say so: a new folder whole or not at all."""
    there = to.is_dir()
    replaced = sum((to / name).exists() for name in files) if there else 0
    if there:
        for name in files:
            check_writable(to / name)
        for name, data in files.items():
            write_bytes(to / name, data)
    else:
        _write_new(to, files)
    drawn = sum(not shot.empty for shot in pictures)
    count = sum(name.startswith("table-") and name.endswith(".csv") for name in files)
    text = f"{to}: {drawn} figures, {count} tables, methods and sources, {len(files)} files"
    if there:
        text += f"; the folder was there: {replaced} files replaced one by one, no other touched"
    empty = [shot.name for shot in pictures if shot.empty]
    if empty:
        text += f"; nothing to show in {', '.join(empty)}"
    put(f"{text}.\n")


def _write_new(to: Path, files: Files) -> None:
    """A folder beside it takes its name once everything is in it."""
    trial = to.parent / f".lozenge-{secrets.token_hex(8)}.part"
    try:
        trial.mkdir()
        for name, data in files.items():
            write_bytes(trial / name, data)
        trial.rename(to)
    except OSError as error:
        reason = error.strerror or str(error)
        raise refuse(
            str(to),
            given=f"a folder that cannot be written ({reason})",
            allowed="a new name in a folder that takes files",
            do="choose another path",
        ) from error
    finally:
        shutil.rmtree(trial, ignore_errors=True)
