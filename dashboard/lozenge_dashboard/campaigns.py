"""The campaigns of this server: they run here, whatever pages are open, and pages look at them.

A campaign is known by the name of its results file in the folder where the server was started.
Its thread alone writes the file; pages read it through a connection of their own.
"""

from __future__ import annotations

import contextlib
import re
import threading
import time
from collections import defaultdict
from collections.abc import Callable
from concurrent.futures import Future
from dataclasses import replace
from pathlib import Path
from typing import NamedTuple

from lozenge_engine import campaign, store
from lozenge_engine.design import Design
from lozenge_engine.errors import InputError, refuse
from lozenge_engine.estimates import Estimates, estimates
from lozenge_engine.forecast import forecast
from lozenge_engine.plan import CampaignPlan
from lozenge_engine.presets import Preset
from lozenge_engine.workers import Processes

__all__ = [
    "LONGEST_NAME",
    "SUFFIX",
    "Campaigns",
    "Status",
    "Watch",
    "checked_name",
    "results_names",
]

SUFFIX = ".sqlite"
LONGEST_NAME = 100
END_PATIENCE = 3.0
"""Seconds that a campaign is given to end by itself when the server ends."""


def checked_name(text: object) -> str:
    """A bare file name with the suffix of results files.

    Parameters
    ----------
    text : object
        What was typed.

    Returns
    -------
    str
        The name.

    Raises
    ------
    InputError
        If it is no bare name: results files lie in the folder where the server was started.
    """
    name = text.strip() if isinstance(text, str) else ""
    if not name:
        raise refuse("results file", given="nothing", allowed="a file name", do="type one")
    if len(name) > LONGEST_NAME:
        raise refuse(
            "results file",
            given=f"a name of {len(name)} characters",
            allowed=f"up to {LONGEST_NAME}",
            do="shorten it",
        )
    if name.startswith(".") or re.search(r"[/\\:\x00-\x1f]", name):
        raise refuse(
            "results file",
            given=name,
            allowed="a name without a folder, in the folder where the server was started",
            do="leave out slashes, colons and a dot at the start",
        )
    return name if name.endswith(SUFFIX) else name + SUFFIX


def results_names(folder: Path) -> list[str]:
    """Results files of a folder, the latest first."""
    with contextlib.suppress(OSError):
        paths = [path for path in folder.glob(f"*{SUFFIX}") if path.is_file()]
        return [name for _, name in sorted((-path.stat().st_mtime, path.name) for path in paths)]
    return []


class Status(NamedTuple):
    """How a campaign stands with this server.

    Attributes
    ----------
    running, stopping : bool
        Whether it runs here, and whether it was asked to pause.
    progress : Progress or None
        Of the run, once it has reported.
    text : str
        How the last run here ended, or why it failed.
    failed : bool
        Whether `text` says a failure.
    """

    running: bool = False
    stopping: bool = False
    progress: campaign.Progress | None = None
    text: str = ""
    failed: bool = False


class Watch(NamedTuple):
    """A results file at one moment.

    Attributes
    ----------
    name : str
        The file.
    preset, design : Preset, Design
        What it holds samples of.
    estimates : Estimates
        What they say.
    counts : tuple of (int, int)
        Done, failed ones included, and failed, of each sprinkling.
    elapsed : float
        Running time so far, all runs together, in seconds.
    predicted : tuple of (float, float)
        Seconds and bytes of a realisation of each sprinkling as predicted at the start.
    seconds : float
        What reading took.
    """

    name: str
    preset: Preset
    design: Design
    estimates: Estimates
    counts: tuple[tuple[int, int], ...]
    elapsed: float
    predicted: tuple[tuple[float, float], ...]
    seconds: float

    @property
    def plan(self) -> CampaignPlan:
        """The plan that it follows."""
        return self.design.plan


class _Run:
    """One campaign that runs, in a thread of its own with worker processes.

    Parameters
    ----------
    opened : callable
        Gives the results, open for writing; called in the thread.
    workers : int
        Processes.
    """

    def __init__(self, opened: Callable[[], store.Results], *, workers: int) -> None:
        self.status = Status(running=True)
        self._opened = opened
        self.workers = workers
        self._ready: Future[None] = Future()
        self._stop = threading.Event()
        self._plan: CampaignPlan | None = None
        self._lock = threading.Lock()
        self._thread = threading.Thread(target=self._run, name="campaign", daemon=True)
        self._thread.start()

    def wait_open(self) -> None:
        """Wait until the file is open; raises what refused it."""
        self._ready.result()

    def pause(self) -> None:
        """End it, giving up what is in the middle."""
        with self._lock:
            self._plan = None
            self._stop.set()
            self.status = self.status._replace(stopping=self.status.running)

    def follow(self, plan: CampaignPlan) -> bool:
        """Go on with another plan of the same samples; False if it ended meanwhile."""
        with self._lock:
            if not self.status.running or self.status.stopping:
                return False
            self._plan = plan
            self._stop.set()
            return True

    def close(self) -> None:
        """End it and wait for that."""
        self.pause()
        self._thread.join(END_PATIENCE)

    def _run(self) -> None:
        try:
            results = self._opened()
        except Exception as error:  # noqa: BLE001 (raised where the page asked)
            self.status = Status()
            self._ready.set_exception(error)
            return
        try:
            with results:
                self._ready.set_result(None)
                text, failed = self._go(results), False
        except Exception as error:  # noqa: BLE001 (shown in the page: nobody else would hear it)
            known = isinstance(error, InputError)
            text, failed = str(error) if known else f"{type(error).__name__}: {error}", True
        # The file is closed by now: whoever sees this may resume it at once.
        with self._lock:
            self.status = Status(progress=self.status.progress, text=text, failed=failed)

    def _go(self, results: store.Results) -> str:
        """Run until there is no further plan to follow; says how it ended."""
        executor = Processes(self.workers)
        try:
            while True:
                ending = campaign.run(
                    results,
                    executor=executor,
                    capacity=self.workers,
                    report=self._report,
                    stop=self._stop,
                )
                with self._lock:
                    plan, self._plan = self._plan, None
                    if plan is None:
                        # From here on `follow` is answered with False.
                        self.status = self.status._replace(stopping=True)
                        return ending.text
                    self._stop.clear()
                results.replan(plan)
        finally:
            executor.shutdown(cancel_futures=True)

    def _report(self, progress: campaign.Progress) -> None:
        with self._lock:
            self.status = self.status._replace(progress=progress)


class Campaigns:
    """The campaigns of one folder.  All methods may be called from any thread.

    Parameters
    ----------
    folder : Path
        Where the results files lie.
    """

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self._runs: dict[str, _Run] = {}
        self._lock = threading.Lock()
        self._reading: defaultdict[str, threading.Lock] = defaultdict(threading.Lock)
        self._read: dict[str, tuple[object, Watch]] = {}

    # ------------------------------------------------------------ what there is

    def names(self) -> list[str]:
        """Results files of the folder, the latest first."""
        return results_names(self.folder)

    def running(self) -> list[str]:
        """Those that run here, the latest first."""
        with self._lock:
            return [name for name, run in reversed(self._runs.items()) if run.status.running]

    def busy(self) -> int:
        """Workers of all that run here."""
        with self._lock:
            return sum(run.workers for run in self._runs.values() if run.status.running)

    def check_new(self, name: str) -> None:
        """Refuse the name of a file that exists."""
        if (self.folder / name).exists():
            raise refuse(
                "results file",
                given=f"{name}, which exists",
                allowed="a new name",
                do="type another name, or open that file at the top",
            )

    def status(self, name: str) -> Status:
        """How one stands with this server."""
        with self._lock:
            run = self._runs.get(name)
        return run.status if run else Status()

    def version(self, name: str) -> tuple[int, ...]:
        """Another value whenever the file may hold something new."""
        parts: list[int] = []
        for path in (self.folder / name, self.folder / f"{name}-wal"):
            with contextlib.suppress(OSError):
                known = path.stat()
                # An empty log beside the file comes and goes with readers.
                if path.suffix == SUFFIX or known.st_size:
                    parts += [known.st_mtime_ns, known.st_size]
        return tuple(parts)

    def watch(self, name: str) -> Watch:
        """Read a results file, or give what was read already.

        Raises
        ------
        InputError
            If it is no results file that can be read.
        """
        with self._reading[name]:
            version = self.version(name)
            held = self._read.get(name)
            if held is not None and held[0] == version:
                return held[1]
            start = time.monotonic()
            with store.inspect(self.folder / name) as results:
                found = Watch(
                    name,
                    results.preset,
                    results.design,
                    estimates(results),
                    results.counts(),
                    results.elapsed,
                    results.predicted,
                    time.monotonic() - start,
                )
            self._read[name] = version, found
            return found

    # ------------------------------------------------------------ what is done with them

    def start(self, name: str, preset: Preset, *, workers: int) -> None:
        """Make a results file and run its campaign.

        Raises
        ------
        InputError
            If the file cannot be made, exists already or runs.
        """
        path = self.folder / name
        self.check_new(name)

        def opened() -> store.Results:
            rows = forecast(preset, workers=workers).rows
            predicted = [(row.seconds, row.peak_bytes) for row in rows]
            return store.create(path, preset, predicted=predicted)

        self._begin(name, opened, workers=workers)

    def resume(self, name: str, *, workers: int, plan: CampaignPlan | None = None) -> None:
        """Go on with a results file, with another plan of the same samples if one is given.

        Raises
        ------
        InputError
            If it cannot be written, or runs in another process.
        """
        path = self.folder / name
        with self._lock:
            run = self._runs.get(name)
        if run is not None and run.status.running:
            if plan is not None and run.follow(plan):
                return
            if not run.status.stopping:
                return
            raise refuse(
                "campaign",
                given="resume while it pauses",
                allowed="to resume once it has paused",
                do="try again in a moment",
            )

        def opened() -> store.Results:
            if plan is None:
                return store.resume(path)
            return store.resume(path, replace(self.watch(name).preset, campaign=plan))

        self._begin(name, opened, workers=workers)

    def pause(self, name: str) -> None:
        """Let one end; what is in the middle is computed again when it goes on."""
        with self._lock:
            run = self._runs.get(name)
        if run is not None:
            run.pause()

    def close(self) -> None:
        """End all."""
        with self._lock:
            runs = list(self._runs.values())
        for run in runs:
            run.pause()
        for run in runs:
            run.close()

    def _begin(self, name: str, opened: Callable[[], store.Results], *, workers: int) -> None:
        run = _Run(opened, workers=workers)
        run.wait_open()
        with self._lock:
            self._runs.pop(name, None)
            self._runs[name] = run
