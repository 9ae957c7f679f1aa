"""Campaigns on the terminal: what one will take, its running, pause and end, its numbers."""

from __future__ import annotations

import json
import math
import signal
import sys
import threading
import time
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Executor
from contextlib import contextmanager
from pathlib import Path
from types import FrameType
from typing import Any, NamedTuple

from lozenge_dashboard.campaign_checks import trusted
from lozenge_dashboard.campaign_files import results_document, samples_csv
from lozenge_dashboard.campaign_plan import plan_text, progress_text, target_text
from lozenge_dashboard.campaign_report import report_text
from lozenge_dashboard.run import STANDARD_OUTPUT, put
from lozenge_engine import campaign, store
from lozenge_engine.design import design
from lozenge_engine.differences import campaign_in
from lozenge_engine.document import check_writable, write_bytes
from lozenge_engine.errors import refuse
from lozenge_engine.estimates import estimates
from lozenge_engine.forecast import forecast
from lozenge_engine.notation import duration, thousands
from lozenge_engine.plan import CampaignPlan
from lozenge_engine.presets import Preset
from lozenge_engine.workers import MAX_WORKERS, Processes, cores

__all__ = ["Ended", "run_campaign", "show_plan", "show_results"]

EVERY = 30.0
"""Seconds between two lines where there is no terminal."""
CONNECT = 10.0
"""Seconds to wait for a Dask scheduler."""

Report = Callable[[campaign.Progress], None]
Trouble = Callable[[], str]


class Ended(NamedTuple):
    """How a run ended.

    Attributes
    ----------
    paused : bool
        Whether Ctrl-C or SIGTERM stopped it.
    trusted : bool
        Whether nothing failed and no sample carries a mark; True if paused.
    """

    paused: bool
    trusted: bool


def show_plan(preset: Preset, *, workers: int | None = None) -> None:
    """Print what a preset's campaign will take.

    Parameters
    ----------
    preset : Preset
        With a campaign.
    workers : int or None
        Realisations at a time; None for as many as cores.

    Raises
    ------
    InputError
        If it has no campaign or nothing of it can be computed.
    """
    layout = design(preset.setup, campaign_in(preset))
    put(plan_text(preset, layout, forecast(preset, workers=_count(workers))))


def show_results(
    path: Path, *, json_file: Path | None = None, csv_file: Path | None = None
) -> bool:
    """Print what a results file holds, also while a run is writing it.

    Parameters
    ----------
    path : Path
        The results file.
    json_file, csv_file : Path or None
        Files to write, whole or not at all; ``-`` writes to the standard output instead of the
        report.

    Returns
    -------
    bool
        Whether nothing failed and no sample carries a mark.

    Raises
    ------
    InputError
        If it is no results file or a path cannot be written.
    """
    _check_outputs(path, [file for file in (json_file, csv_file) if file is not None])
    with store.inspect(path) as results:
        found = estimates(results)
        printed = False
        if json_file is not None:
            made = results_document(results, found)
            ascii_only = json_file == STANDARD_OUTPUT  # which may know no more
            text = json.dumps(made, indent=2, ensure_ascii=ascii_only, allow_nan=False)
            printed |= _written(json_file, f"{text}\n")
        if csv_file is not None:
            printed |= _written(csv_file, "".join(samples_csv(results)))
        if not printed:
            put(report_text(results, found))
    return trusted(found)


def _check_outputs(source: Path, files: Sequence[Path]) -> None:
    """Refuse what cannot be written before anything is read."""
    for file in files:
        if file != STANDARD_OUTPUT:
            check_writable(file)
    places = [file.resolve() for file in (source, *files)]
    if len(set(places)) < len(places):
        twice = next(file for file in files if places.count(file.resolve()) > 1)
        raise refuse(
            str(twice), given="one file twice", allowed="different files", do="change one name"
        )


def _written(file: Path, text: str) -> bool:
    """Write a file; whether it was the standard output."""
    if file == STANDARD_OUTPUT:
        put(text)
        return True
    write_bytes(file, text.encode())
    return False


def _count(workers: int | None) -> int:
    """The workers asked for, checked; one for each core if none are."""
    if workers is None:
        return min(cores(), MAX_WORKERS)
    if not 1 <= workers <= MAX_WORKERS:
        raise refuse(
            "--workers",
            given=workers,
            allowed=f"a whole number from 1 to {MAX_WORKERS}",
            do=f"take one for each core, here {cores()}",
        )
    return workers


# ---------------------------------------------------------------------- running


def run_campaign(
    preset: Preset,
    *,
    path: Path,
    resume_line: str,
    workers: int | None = None,
    dask: str | None = None,
) -> Ended:
    """Run a preset's campaign, or go on with it, until it ends or Ctrl-C pauses it.

    Parameters
    ----------
    preset : Preset
        With a campaign.
    path : Path
        Its results file; made if it does not exist.
    resume_line : str
        The command that goes on, to be printed after a pause.
    workers : int or None
        Processes; None for as many as cores.
    dask : str or None
        Address of a Dask scheduler whose workers compute instead of processes here.

    Returns
    -------
    Ended
        After the report, or after the line that resumes, is printed.

    Raises
    ------
    InputError
        If the preset, the results file, the workers or the scheduler cannot be taken.
    """
    design(preset.setup, campaign_in(preset))  # refused before any worker starts
    stop = threading.Event()
    with (
        _pausing(stop),
        _executor(workers, dask) as (executor, capacity, trouble),
        _opened(path, preset, capacity) as results,
    ):
        _told(_opening(results, capacity))
        with _progress(results.design.plan) as report:
            ending = campaign.run(
                results,
                executor=executor,
                capacity=capacity,
                report=report,
                stop=stop,
                trouble=trouble,
            )
        if ending.reason == "paused":
            _told(f"{ending.text}; nothing is lost. To go on:\n{resume_line}")
            return Ended(paused=True, trusted=True)
        found = estimates(results)
        put(f"{ending.text}\n\n{report_text(results, found)}")
        if ending.reason == "budget":
            _told(f"To go on, with a larger campaign.budget in the preset:\n{resume_line}")
        return Ended(paused=False, trusted=trusted(found))


def _told(text: str) -> None:
    """Lines beside the report: the standard output holds the report alone."""
    sys.stderr.write(f"{text}\n")
    sys.stderr.flush()


def _opened(path: Path, preset: Preset, workers: int) -> store.Results:
    """The results file of this preset, made if it does not exist."""
    if path.exists():
        return store.resume(path, preset)
    check_writable(path)
    rows = forecast(preset, workers=workers).rows
    return store.create(path, preset, predicted=[(row.seconds, row.peak_bytes) for row in rows])


def _opening(results: store.Results, capacity: int) -> str:
    """What is about to run."""
    plan, layout = results.design.plan, results.design
    have = sum(done for done, _ in results.counts())
    count = len(layout.sprinklings)
    parts = [
        f"{len(layout.cells)} samples of {count} sprinkling{'s' if count > 1 else ''}",
        f"at most {thousands(plan.realisations, space=' ')} realisations each",
    ]
    parts += [target_text(plan.target)] if plan.target else []
    parts += [f"budget {duration(plan.budget)}"] if plan.budget else []
    parts.append(f"{capacity} at a time")
    parts += [f"{thousands(have, space=' ')} realisations are there already"] if have else []
    return "\n".join([", ".join(parts), *(f"left out: {text}" for text in layout.left_out)])


@contextmanager
def _pausing(stop: threading.Event) -> Iterator[None]:
    """Ctrl-C and SIGTERM ask for a pause instead of breaking off."""

    def pause(_number: int, _frame: FrameType | None) -> None:
        stop.set()

    numbers = (signal.SIGINT, signal.SIGTERM)
    before = [signal.signal(number, pause) for number in numbers]
    try:
        yield
    finally:
        for number, handler in zip(numbers, before, strict=True):
            signal.signal(number, handler)


@contextmanager
def _executor(workers: int | None, dask: str | None) -> Iterator[tuple[Executor, int, Trouble]]:
    """What computes, how many realisations at a time, and what is wrong with it."""
    if dask is not None:
        with _cluster(dask) as connected:
            yield connected
        return
    count = _count(workers)
    pool = Processes(count)
    try:
        yield pool, count, lambda: ""
    finally:
        pool.shutdown(wait=True, cancel_futures=True)


@contextmanager
def _cluster(address: str) -> Iterator[tuple[Executor, int, Trouble]]:
    """The workers of a Dask scheduler, as an executor."""
    try:
        from distributed import Client
    except ImportError as error:
        raise refuse(
            "--dask",
            given=f"{address} without the package distributed",
            allowed="an address where it is installed",
            do='pip install "lozenge[cluster]"',
        ) from error
    try:
        client = Client(address, timeout=CONNECT, set_as_default=False)
    except (OSError, ValueError, TypeError) as error:
        raise refuse(
            "--dask",
            given=f"{address}, where no scheduler answers ({str(error) or type(error).__name__})",
            allowed="the address of a running Dask scheduler, like tcp://127.0.0.1:8786",
            do="start one, or check the address",
        ) from error
    try:
        yield (
            client.get_executor(retries=0),
            _cluster_size(client, address),
            lambda: "" if client.status in ("running", "connecting") else "its scheduler is gone",
        )
    finally:
        client.close()


def _cluster_size(client: Any, address: str) -> int:
    """Workers of a cluster, which must be there, compute one thing at a time and have Lozenge."""
    threads: dict[str, int] = client.nthreads()
    if not threads or max(threads.values()) > 1:
        raise refuse(
            "--dask",
            given=f"{address} with {len(threads)} workers"
            + (f" of up to {max(threads.values())} threads" if threads else ""),
            allowed="one or more workers of one thread each",
            do=f"start them with: dask worker {address} --nworkers 2 --nthreads 1",
        )
    try:
        there = set(client.run(versions_here).values())
    except Exception as error:
        raise refuse(
            "--dask",
            given=f"workers that cannot load Lozenge ({type(error).__name__}: {error})",
            allowed="workers with the same Lozenge and NumPy as here",
            do="install them there",
        ) from error
    if there != {versions_here()}:
        raise refuse(
            "--dask",
            given=f"workers with {'; '.join(sorted(there))}",
            allowed=f"the same as here, {versions_here()}",
            do="install the same versions there",
        )
    return len(threads)


def versions_here() -> str:
    """Versions that numbers depend on, where this is called."""
    from lozenge_engine.pipeline import versions

    found = versions()
    return ", ".join(f"{name} {found[name]}" for name in ("lozenge", "numpy", "scipy"))


# --------------------------------------------------------------------- progress


@contextmanager
def _progress(plan: CampaignPlan) -> Iterator[Report]:
    """A bar on a terminal, elsewhere a line every half minute."""
    if not sys.stderr.isatty():
        last = -math.inf

        def line(now: campaign.Progress) -> None:
            nonlocal last
            if time.monotonic() - last >= EVERY:
                last = time.monotonic()
                _told(progress_text(now, plan.target))

        yield line
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn

    columns = (BarColumn(bar_width=24), TextColumn("{task.description}"))
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task("starting", total=None)

        def show(now: campaign.Progress) -> None:
            left = now.seconds_left
            known = math.isfinite(left) and now.elapsed + left > 0
            total, completed = (now.elapsed + left, now.elapsed) if known else (None, 0.0)
            text = progress_text(now, plan.target)
            bar.update(task, total=total, completed=completed, description=text)

        yield show
