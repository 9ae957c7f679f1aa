"""The running of a campaign: propose, compute, record, over any executor."""

from __future__ import annotations

import math
import threading
import time
from collections import deque
from collections.abc import Callable, Sequence
from concurrent.futures import (
    FIRST_COMPLETED,
    BrokenExecutor,
    CancelledError,
    Executor,
    Future,
    wait,
)
from typing import Literal, NamedTuple

from lozenge_engine.design import Design
from lozenge_engine.errors import InputError, refuse
from lozenge_engine.notation import duration
from lozenge_engine.realisation import Record, realise
from lozenge_engine.schedule import Round, advance, first_round, nominal_seconds
from lozenge_engine.series import check_target
from lozenge_engine.store import Results

__all__ = ["Ending", "Progress", "attempt", "run"]

INNOCENT = 2
"""Deaths of workers during a realisation before it is computed alone, to see whose fault it is."""
ATTEMPTS = 6
"""A realisation on which this many workers died while it was alone is recorded as failed."""
TICK = 0.25
"""Seconds between two looks at the clock and at the wish to pause."""
AHEAD = 2
"""Realisations handed to an executor for each worker, so that none waits."""


class Progress(NamedTuple):
    """How far a campaign is.

    Attributes
    ----------
    done, failed, planned : int
        Realisations finished, those of them that failed, and those that this round ends with.
    running : int
        Realisations handed to workers.
    elapsed, seconds_left : float
        Running time so far, resumed runs together, and an estimate of what is left of the round
        or, with a target in sight, of the campaign; NaN while unknown.
    error, wanted : float
        Error of the target after the last round, and the target; infinite while unknown, NaN
        without one.
    """

    done: int
    failed: int
    planned: int
    running: int
    elapsed: float
    seconds_left: float
    error: float
    wanted: float


class Ending(NamedTuple):
    """Why a campaign stopped.

    Attributes
    ----------
    reason : {"target", "finished", "budget", "paused"}
        What it met.
    text : str
        In words.
    """

    reason: Literal["target", "finished", "budget", "paused"]
    text: str


def attempt(layout: Design, sprinkling: int, realisation: int) -> Record:
    """Compute a realisation; whatever goes wrong is a record of its own.

    Parameters
    ----------
    layout : Design
        The campaign.
    sprinkling, realisation : int
        Which one.

    Returns
    -------
    Record
        Failed, with its reason, if the computation raised anything.
    """
    try:
        return realise(layout, sprinkling, realisation)
    except Exception as error:  # noqa: BLE001 (recorded and shown: it must not stop the others)
        return _failed(layout, sprinkling, realisation, f"{type(error).__name__}: {error}")


def _failed(layout: Design, sprinkling: int, realisation: int, reason: str) -> Record:
    seed = layout.seed(sprinkling, realisation)
    return Record(sprinkling, realisation, seed, 0.0, 0, math.nan, (), reason)


def run(
    results: Results,
    *,
    executor: Executor,
    capacity: int,
    report: Callable[[Progress], None] | None = None,
    stop: threading.Event | None = None,
    trouble: Callable[[], str] | None = None,
) -> Ending:
    """Run a campaign until its target, its budget or its last realisation, or until told to stop.

    Parameters
    ----------
    results : Results
        Open for writing; every finished realisation goes in at once.
    executor : Executor
        Any that takes functions and arguments of this package, here or on other machines.
    capacity : int
        Realisations that it computes at a time.
    report : callable or None
        Called with a `Progress` after every realisation and about four times a second.
    stop : Event or None
        Set to pause: what is in the middle is given up, and computed again when resumed.
    trouble : callable or None
        Asked about four times a second; text ends the run, as a cluster that is gone does.

    Returns
    -------
    Ending
        What stopped it.  The rows do not depend on the executor, on its capacity, on the order
        in which they came or on interruptions, except that a budget ends at some row.

    Raises
    ------
    InputError
        If the results file cannot be written, nothing of the target can ever be known, or the
        executor does not compute; what was recorded stays.
    """
    check_target(results.design)
    stop = stop or threading.Event()
    own = _Run(results, executor, capacity, report=report, stop=stop, trouble=trouble)
    return own.loop()


def _is_death(error: BaseException) -> bool:
    """Whether an exception of Dask says that workers died; its class is not imported for that."""
    return type(error).__name__ == "KilledWorker"


def _no_computing(text: str) -> InputError:
    """What an executor that raises says: a realisation never does, see `attempt`."""
    return refuse(
        "workers",
        given=f"an executor that does not compute ({text})",
        allowed="workers that can load this program",
        do="see to them and resume: nothing is lost",
    )


class _Run:
    """State of a running campaign."""

    def __init__(
        self,
        results: Results,
        executor: Executor,
        capacity: int,
        *,
        report: Callable[[Progress], None] | None,
        stop: threading.Event,
        trouble: Callable[[], str] | None,
    ) -> None:
        self.results = results
        self.layout = results.design
        self.executor = executor
        self.capacity = capacity
        self.report = report
        self.stop = stop
        self.trouble = trouble or (lambda: "")
        self.begun = time.monotonic()
        self.before = results.elapsed
        self.done = results.done()
        self.round = first_round(self.layout)
        self.waiting: deque[tuple[int, int]] = deque()
        self.running: dict[Future[Record], tuple[int, int]] = {}
        self.deaths: dict[tuple[int, int], int] = {}
        self.suspects: deque[tuple[int, int]] = deque()
        self.costs = [nominal_seconds(self.layout, g) for g in range(len(self.round.goals))]

    @property
    def elapsed(self) -> float:
        return self.before + time.monotonic() - self.begun

    def loop(self) -> Ending:
        self._plan()
        while not self.stop.is_set():
            if trouble := self.trouble():
                raise _no_computing(trouble)
            if self.round.ended:
                return self._ended()
            if self._overdue() and not self.running:
                text = f"the budget of {duration(self.layout.plan.budget or 0.0)} is spent"
                return Ending("budget", text)
            self._hand_out()
            self._collect()
            if not self.running and not self.waiting and not self.suspects:
                self._next_round()
            self._tell()
        for future in self.running:
            future.cancel()
        return Ending("paused", f"paused after {len(self.done)} realisations")

    def _overdue(self) -> bool:
        budget = self.layout.plan.budget
        return budget is not None and self.elapsed >= budget

    def _plan(self) -> None:
        """List what the round lacks; rounds that are complete already are passed over."""
        while True:
            missing = [
                (g, r)
                for g, goal in enumerate(self.round.goals)
                for r in range(goal)
                if (g, r) not in self.done
            ]
            # All sprinklings fill in together, the longest first.
            missing.sort(key=lambda task: (task[1], -self.costs[task[0]]))
            self.waiting = deque(missing)
            if missing or self.round.ended:
                return
            self.round = self._following()

    def _following(self) -> Round:
        tables = [self.results.table(g) for g in range(len(self.round.goals))]
        return advance(self.layout, self.round.goals, tables)

    def _next_round(self) -> None:
        if all((g, r) in self.done for g, n in enumerate(self.round.goals) for r in range(n)):
            self._plan()

    def _hand_out(self) -> None:
        """Keep the executor supplied; what workers die on waits until it can be alone."""
        while self.waiting and len(self.running) < AHEAD * self.capacity and not self._overdue():
            self._submit(self.waiting.popleft())
        if not self.running and not self.waiting and self.suspects and not self._overdue():
            self._submit(self.suspects.popleft())

    def _submit(self, task: tuple[int, int]) -> None:
        self.running[self.executor.submit(attempt, self.layout, *task)] = task

    def _collect(self) -> None:
        """Record what has finished; what a killed worker took with it is handed out again."""
        if not self.running:
            return
        finished, _ = wait(self.running, timeout=TICK, return_when=FIRST_COMPLETED)
        for future in finished:
            task = self.running.pop(future)
            error = CancelledError() if future.cancelled() else future.exception()
            if error is None:
                self._record(future.result())
            elif self.stop.is_set():
                continue
            elif isinstance(error, BrokenExecutor | CancelledError) or _is_death(error):
                self._again(task)
            else:
                raise _no_computing(f"{type(error).__name__}: {error}")

    def _again(self, task: tuple[int, int]) -> None:
        """Hand a realisation out again whose worker is gone, unless that is its own fault."""
        self.deaths[task] = self.deaths.get(task, 0) + 1
        if self.deaths[task] < INNOCENT:
            self.waiting.appendleft(task)
        elif self.deaths[task] < INNOCENT + ATTEMPTS:
            self.suspects.append(task)
        else:
            reason = f"{ATTEMPTS} workers ended while they computed it, perhaps for want of memory"
            self._record(_failed(self.layout, *task, reason))

    def _record(self, record: Record) -> None:
        self.results.add(record, elapsed=self.elapsed)
        self.done.add((record.sprinkling, record.realisation))

    def _ended(self) -> Ending:
        target = self.layout.plan.target
        if self.round.ended == "target":
            return Ending("target", f"the target is reached: {self._error()}")
        text = f"all {sum(self.round.goals)} realisations of the plan are there"
        return Ending("finished", text if target is None else f"{text}; {self._error()}")

    def _error(self) -> str:
        target = self.layout.plan.target
        if target is None:
            return ""
        if not math.isfinite(self.round.error):
            return "its error is not known"
        if target.relative:
            reached, wanted = 100 * self.round.error, 100 * target.error
            return f"error {reached:.3g} % of the value, wanted {wanted:g} %"
        return f"error {self.round.error:.3g} nats, wanted {target.error:g} nats"

    def _tell(self) -> None:
        if self.report is None:
            return
        target = self.layout.plan.target
        counts = self.results.counts()
        self.report(
            Progress(
                done=len(self.done),
                failed=sum(failed for _, failed in counts),
                planned=sum(self.round.goals),
                running=len(self.running),
                elapsed=self.elapsed,
                seconds_left=self._left(counts),
                error=self.round.error,
                wanted=math.nan if target is None else target.error,
            )
        )

    def _left(self, counts: Sequence[tuple[int, int]]) -> float:
        """Time for what is missing, at the pace of what is done and the counted costs."""
        spent = sum(c * n for c, (n, _) in zip(self.costs, counts, strict=True))
        whole = sum(c * n for c, n in zip(self.costs, self.round.goals, strict=True))
        target = self.layout.plan.target
        if target is not None and math.isfinite(self.round.error):
            most = sum(self.costs) * self.layout.plan.realisations
            whole = min(most, max(whole, spent * (self.round.error / target.error) ** 2))
        pace = self.elapsed / spent if spent else math.nan
        left = max(0.0, whole - spent) * pace
        budget = self.layout.plan.budget
        return left if budget is None else min(left, max(0.0, budget - self.elapsed))
