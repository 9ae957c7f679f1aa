"""Compute a preset for the command line: own points, progress, output files."""

from __future__ import annotations

import io
import json
import os
import sys
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path

import numpy as np

from lozenge_dashboard.company import company_of
from lozenge_dashboard.curves import Curves
from lozenge_dashboard.report import Outcome, arrays, document, table
from lozenge_engine import samples, sweeps
from lozenge_engine.averages import Readings
from lozenge_engine.config import Averaging, Config, PointSource, Setup
from lozenge_engine.cost import predict
from lozenge_engine.document import check_writable, write_bytes
from lozenge_engine.errors import InputError, refuse
from lozenge_engine.geometry import PATCH_AREA
from lozenge_engine.notation import duration
from lozenge_engine.pipeline import compute
from lozenge_engine.pointfile import PointFile, read_points
from lozenge_engine.presets import Preset, compare
from lozenge_engine.result import Result
from lozenge_engine.stages import Stages

__all__ = ["computed", "own_points", "put", "run", "with_points"]

STANDARD_OUTPUT = Path("-")
COMPILED_FROM = 20_000
"""Elements above which compiled loops (same bits) earn the seconds that loading them takes."""
SHOW_PROGRESS_FROM = 2.0
"""Predicted seconds above which progress is shown on a terminal."""

Report = Callable[[str, float], None]
ReportOf = Callable[[int], Report | None]


def run(
    preset: Preset,
    *,
    folder: Path | None = None,
    points: Path | None = None,
    one: bool = False,
    with_sweeps: bool = False,
    json_file: Path | None = None,
    arrays_file: Path | None = None,
) -> bool:
    """Compute a preset, write the files asked for and print the table.

    Parameters
    ----------
    preset : Preset
        What to compute.
    folder : Path or None
        Where the preset's file lies; own points that it names are looked for there.
    points : Path or None
        A CSV file of own points that takes the place of the sprinkling.
    one : bool
        Only the sprinkling of the seed.
    with_sweeps : bool
        Also the sweeps of density, size and separation.
    json_file, arrays_file : Path or None
        Files to write, whole or not at all; ``-`` writes the JSON to the standard output
        instead of the table.

    Returns
    -------
    bool
        Whether the certificate holds and no number carries a mark.

    Raises
    ------
    InputError
        If the points, the preset or a path cannot be taken: the paths before anything is
        computed.
    """
    outputs = [path for path in (json_file, arrays_file) if path not in (None, STANDARD_OUTPUT)]
    for path in outputs:
        check_writable(path)
    if len({path.resolve() for path in outputs}) < len(outputs):
        raise refuse(
            str(json_file), given="one file twice", allowed="two files", do="change one name"
        )
    own = own_points(preset, folder, points)
    effective = with_points(preset, own)
    if one:
        effective = _with_sprinklings(effective, 1)
    outcome = computed(effective, own, with_sweeps=with_sweeps)
    if preset.sender is not None:
        outcome = replace(outcome, agreement=compare(preset, outcome.result))
    _write(outcome, json_file, arrays_file)
    return outcome.trusted


def _write(outcome: Outcome, json_file: Path | None, arrays_file: Path | None) -> None:
    """Write the files, then print; a disk that filled up meanwhile does not cost the table."""
    to_output = json_file == STANDARD_OUTPUT  # which may know no more than ASCII
    numbers = json.dumps(document(outcome), indent=2, ensure_ascii=to_output, allow_nan=False)
    try:
        if json_file is not None and not to_output:
            write_bytes(json_file, f"{numbers}\n".encode())
        if arrays_file is not None:
            write_bytes(arrays_file, _packed(outcome.result))
    finally:
        put(f"{numbers}\n" if to_output else table(outcome))


def put(text: str) -> None:
    """Write to the standard output; a reader that has gone is no error.

    Parameters
    ----------
    text : str
        What to write.
    """
    try:
        sys.stdout.write(text)
        sys.stdout.flush()
    except BrokenPipeError:
        # Python flushes once more at exit: let that go nowhere.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def own_points(preset: Preset, folder: Path | None, points: Path | None) -> PointFile | None:
    """The imported points: those given, or those that the preset names, beside its file."""
    source = preset.setup.points
    if points is not None:
        return read_points(points)
    if source.kind != "file":
        return None
    beside = (folder or Path()) / str(source.file)
    wanted = f"the points with hash {str(source.sha256)[:12]}"
    if not beside.is_file():
        raise refuse(
            "points.file",
            given=f"{source.file}, which is not beside the preset",
            allowed=wanted,
            do="put the file there or name it with --points",
        )
    own = read_points(beside)
    if own.sha256 != source.sha256:
        raise refuse(
            "points.file",
            given=f"{source.file} beside the preset, with hash {own.sha256[:12]}",
            allowed=wanted,
            do="get that file, or name this one with --points to compute it all the same",
        )
    return own


def with_points(preset: Preset, own: PointFile | None) -> Preset:
    """The preset on imported points, of which there is one set."""
    if own is None:
        return preset
    source = PointSource(
        kind="file",
        density=own.points.u.size / PATCH_AREA,
        seed=preset.setup.points.seed,
        file=own.name,
        sha256=own.sha256,
    )
    if source.sha256 == preset.setup.points.sha256:
        source = preset.setup.points
    return _with_sprinklings(replace(preset, setup=preset.setup.with_(points=source)), 1)


def _with_sprinklings(preset: Preset, count: int) -> Preset:
    averaging = Averaging(sprinklings=count)
    return replace(preset, setup=preset.setup.with_(averaging=averaging))


def computed(preset: Preset, own: PointFile | None, *, with_sweeps: bool) -> Outcome:
    """The seed's own sprinkling, the mean over all of them, and the sweeps if wanted."""
    setup = preset.setup
    several = setup.averaging.sprinklings > 1
    planned = list(sweeps.average_draws(setup).draws) if several else []
    if with_sweeps:
        for plan in (sweeps.size_draws, sweeps.separation_draws, sweeps.density_draws):
            planned += plan(setup).draws
    # Draws of one sprinkling follow each other: they share its modes, which are then dropped.
    planned.sort(key=lambda draw: (draw.config.points.density, draw.config.realisation))
    with _progress(planned or [_own_draw(setup)]) as report:
        work = _Work(own, report)
        stages = work.stages_for(setup.config())
        result = compute(setup.config(), points=own, stages=stages, report=report(0))
        for number, draw in enumerate(planned):
            work.take(number, draw)
    readings = work.readings
    curves = _curves(setup, readings) if with_sweeps else None
    return Outcome(
        preset=preset,
        result=result,
        average=sweeps.average(setup, readings) if several else None,
        failures=tuple(work.failures),
        curves=curves,
        beside=company_of(setup, preset.view, readings, curves),
    )


def _curves(setup: Setup, readings: Readings) -> Curves:
    """The three sweeps."""
    return Curves(
        density=sweeps.density_curve(setup, readings),
        size=sweeps.size_curve(setup, readings),
        separation=sweeps.separation_curve(setup, readings),
    )


def _own_draw(setup: Setup) -> samples.Draw:
    return samples.Draw(config=setup.config(), layouts=(setup.regions(),))


class _Work:
    """Draws that are taken one after the other, and what could not be taken."""

    def __init__(self, own: PointFile | None, report: ReportOf) -> None:
        self.own = own
        self.report = report
        self.readings: dict[str, tuple[samples.Reading, ...]] = {}
        self.failures: list[str] = []
        self._stages = Stages()
        self._sprinkling: tuple[PointSource, int] | None = None

    def stages_for(self, config: Config) -> Stages:
        """The cache of the present sprinkling; another sprinkling starts an empty one."""
        sprinkling = (config.points, config.realisation)
        if sprinkling != self._sprinkling:
            self._sprinkling = sprinkling
            compiled = config.points.expected_points() >= COMPILED_FROM
            self._stages = Stages(compiled=compiled)
        return self._stages

    def take(self, number: int, draw: samples.Draw) -> None:
        """Take a draw; one that the engine refuses is left out with its reason."""
        stages = self.stages_for(draw.config)
        report = self.report(number)
        try:
            taken = samples.take(draw, points=self.own, stages=stages, report=report)
        except InputError as error:  # of this sprinkling, such as an almost empty region
            self.failures.append(f"sprinkling {draw.config.realisation} is left out: {error}")
            taken = ()
        self.readings[draw.key] = taken


@contextmanager
def _progress(planned: Sequence[samples.Draw]) -> Iterator[ReportOf]:
    """A bar over all sprinklings, on a terminal and for long work only."""
    total = len(planned)
    seconds = _seconds(planned) if sys.stderr.isatty() else 0.0
    if seconds < SHOW_PROGRESS_FROM:
        yield lambda _number: None
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

    prediction = TextColumn(f"of about {duration(seconds)}")
    columns = (TextColumn("{task.description}"), BarColumn(), TimeElapsedColumn(), prediction)
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task("points", total=total)

        def report_of(number: int) -> Report:
            def report(stage: str, fraction: float) -> None:
                part = {"points": 0.0, "order": 0.0, "modes": fraction}.get(stage, 1.0)
                done = number + 0.95 * part
                name = f"sprinkling {number + 1} of {total}: {stage}" if total > 1 else stage
                bar.update(task, description=name, completed=done)

            return report

        yield report_of


def _seconds(planned: Sequence[samples.Draw]) -> float:
    """Predicted time of all draws; equal densities take equally long."""
    known: dict[float, float] = {}
    for draw in planned:
        density = draw.config.points.density
        if density not in known:
            known[density] = predict(draw.config).seconds
    return sum(known[draw.config.points.density] for draw in planned)


def _packed(result: Result) -> bytes:
    """The arrays as the bytes of an ``.npz`` file."""
    buffer = io.BytesIO()
    np.savez_compressed(buffer, allow_pickle=False, **arrays(result))
    return buffer.getvalue()
