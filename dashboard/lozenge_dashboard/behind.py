"""What is drawn behind the picture: plans of the average and the sweeps, and their curves."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any, NamedTuple

from lozenge_dashboard.column import Behind, TwinNote
from lozenge_dashboard.controls import LIVE_HIGH
from lozenge_dashboard.jobs import Flight, Workshop
from lozenge_dashboard.records import Choices
from lozenge_dashboard.worker import Task
from lozenge_engine import references
from lozenge_engine.config import Setup
from lozenge_engine.notation import with_error
from lozenge_engine.pointfile import PointFile
from lozenge_engine.references import Company, ReferencePlan
from lozenge_engine.samples import Draw
from lozenge_engine.sweeps import (
    Average,
    Plan,
    ScalingCurve,
    SeparationCurve,
    average,
    average_draws,
    density_curve,
    density_draws,
    separation_curve,
    separation_draws,
    size_curve,
    size_draws,
)

__all__ = ["Backdrop", "Curves", "Plans", "Wanted", "curves", "drawn", "plans"]

STEP = 0.3
"""Least time (s) between two pictures of what comes from behind."""
QUICK_HIGH = 50_000
"""Elements up to which a twin in closed form takes no more than some seconds."""
SWEEPS = ("density", "size", "separation")


class Wanted(NamedTuple):
    """A setup, and which references stand beside its data."""

    setup: Setup
    twin: bool = False
    chain: bool = False


class Plans(NamedTuple):
    """Draws of the average and the sweeps with their keys, and references, for one setup."""

    setup: Setup
    average: dict[str, Draw]
    density: dict[str, Draw]
    size: dict[str, Draw]
    separation: dict[str, Draw]
    references: ReferencePlan
    twin: bool
    chain: bool

    def queue(self, *, first: str) -> tuple[Draw | Task, ...]:
        """All work in the order wanted.

        The twin in front (in closed form or its preview) and the numbers in front, then the sweep
        looked at, each sweep with its references; last the refined twins, or sets that check one
        in closed form.
        """
        beside = self.references
        found: dict[str, Draw | Task] = (beside.quick() or beside.front(0)) | self.average
        sweeps = tuple(dict.fromkeys(("separation", first, "density", "size")))
        for name in sweeps:
            found |= beside.around(name, getattr(self, name))
        found |= beside.front(0) | beside.front(1)
        for name in sweeps:
            found |= beside.sweep(name, 1)
        return tuple(found.values())

    def light(self) -> tuple[Task, ...]:
        """What is done without being asked for however many the elements."""
        few = 2 * self.setup.points.density <= QUICK_HIGH
        return tuple(self.references.quick().values()) if few else ()

    def keys(self) -> tuple[str, ...]:
        """All keys, each once."""
        return tuple(self.average | self.density | self.size | self.separation)


class Curves(NamedTuple):
    """What the readings say so far; `done` of `planned` draws are finished."""

    plans: Plans
    average: Average
    density: ScalingCurve
    size: ScalingCurve
    separation: SeparationCurve
    done: int
    planned: int
    failures: tuple[str, ...]
    beside: Company
    twin_note: TwinNote

    def left(self) -> str:
        """What is still to come, in words; empty once everything is there."""
        if self.done < self.planned:
            return f"{self.done} of {self.planned} sprinklings behind"
        beside = self.beside
        if beside.done < beside.planned:
            return f"{beside.done} of {beside.planned} parts of twin and chain behind"
        return ""

    @property
    def wanted(self) -> Wanted:
        """What these curves were asked for with."""
        planned = self.plans
        return Wanted(planned.setup, planned.twin, planned.chain)


def _keyed(plan: Plan) -> dict[str, Draw]:
    return {draw.key: draw for draw in plan.draws}


def plans(setup: Setup, *, twin: bool = False, chain: bool = False) -> Plans:
    """Plan everything behind the picture of a setup."""
    return Plans(
        setup,
        _keyed(average_draws(setup)),
        _keyed(density_draws(setup)),
        _keyed(size_draws(setup)),
        _keyed(separation_draws(setup)),
        references.plan(setup, twin=twin, chain=chain),
        twin,
        chain,
    )


def curves(planned: Plans, workshop: Workshop) -> Curves:
    """Read what is known of the plans."""
    keys = planned.keys()
    readings = workshop.readings(keys)
    setup = planned.setup
    density, size = density_curve(setup, readings), size_curve(setup, readings)
    tasks = planned.references.keys()
    chains = [task.key for task in planned.references.chain.values()]
    outcomes = workshop.outcomes(tasks)
    beside = references.read(
        setup, planned.references, outcomes, readings, density=density, size=size
    )
    return Curves(
        planned,
        average(setup, readings),
        density,
        size,
        separation_curve(setup, readings),
        done=len(readings),
        planned=len(keys),
        failures=tuple(workshop.failures((*keys, *chains))),
        beside=beside,
        twin_note=_twin_note(
            planned, beside, workshop.failures(key for key in tasks if key not in chains)
        ),
    )


def _twin_note(planned: Plans, beside: Company, failures: list[str]) -> TwinNote:
    """What the column says at the twin's switch."""
    if not planned.references.twin:
        return TwinNote()
    if failures:
        return TwinNote(failures[0], failed=True)
    if not drawn(planned.setup):
        known = "modes in closed form; " if beside.front is not None else ""
        return TwinNote(
            f"{known}over {LIVE_HIGH} elements: run twins of sets as a campaign of kind lattice",
            failed=not known,
        )
    if beside.front is None:
        return TwinNote("computing a preview …")
    sets, times = beside.front.sets, beside.front.oversampling
    text = f"{sets} sets, up to {times} times the density" if sets else "modes in closed form"
    if beside.check is not None:
        check = with_error(*beside.check.union_support)
        text += f": S {beside.front.union_support.value:.3f}; {beside.check.sets} sets give {check}"
    left = beside.planned - beside.done
    return TwinNote(f"{text}; {left} of {beside.planned} parts to come" if left else text)


def drawn(setup: Setup) -> bool:
    """Whether further sprinklings of a setup are taken without being asked for."""
    return 2 * setup.points.density <= LIVE_HIGH


class Backdrop:
    """The sprinklings behind one page's picture, and what they say so far.

    Parameters
    ----------
    workshop : Workshop
        Where the draws are taken.
    later : callable
        Makes of a function one that may be called from any thread and runs in the page's turn.
    show : callable
        Called when there is something new, in the page's turn.
    """

    def __init__(
        self,
        workshop: Workshop,
        *,
        later: Callable[[Callable[[Any], None]], Callable[[Any], None]],
        show: Callable[[], None],
    ) -> None:
        self.progress = Behind()
        self._workshop = workshop
        self._show = show
        self._flight = Flight(later(self._gathered), lambda _progress: None)
        self._halted = False
        self._asked: Wanted | None = None
        self._pending: Callable[[], Curves] | None = None
        self._plans: Plans | None = None
        self._average: tuple[Setup, Average] | None = None
        self._sweeps: dict[str, tuple[Any, tuple[str, ...]]] = {}
        self._beside: tuple[Wanted, Company, TwinNote] | None = None

    def settle(self, wanted: Wanted, points: PointFile | None, *, first: str) -> None:
        """Queue what stands behind a setup, once its controls rest."""
        if self._halted or wanted == self._asked:
            return
        self._asked = wanted
        setup, workshop, notify = wanted.setup, self._workshop, self._gather

        def plan() -> Curves:
            self._plans = planned = plans(setup, twin=wanted.twin, chain=wanted.chain)
            queue = planned.queue(first=first) if drawn(setup) else planned.light()
            workshop.replace(self, queue, points=points, notify=notify)
            return curves(planned, workshop)

        self._pending = plan
        self._flight.request(self._work)

    def hold(self) -> None:
        """Stop a reference in the middle of its work: what is in front comes first."""
        self._workshop.hold(self)

    def halt(self) -> None:
        """Stop, until `resume`."""
        self._halted, self._asked, self._pending = True, None, None
        self._workshop.remove(self)
        self.progress = Behind(self.progress.text, "resume")

    def resume(self) -> None:
        """Go on with the next `settle`."""
        self._halted = False

    def close(self) -> None:
        """Forget the page."""
        self._flight.close()
        self._workshop.remove(self)

    def parts(self, setup: Setup) -> dict[str, Any]:
        """The fields of a scene of this setup that come from behind."""
        average = self._average
        return {
            "average": average[1] if average is not None and average[0] == setup else None,
            **{name: curve for name, (curve, _) in self._sweeps.items()},
            "beside": self._company(setup),
        }

    def _company(self, setup: Setup) -> Company | None:
        """What stands beside the data: the front's only at its own geometry."""
        if self._beside is None:
            return None
        wanted, company, _ = self._beside
        return company if wanted.setup == setup else company._replace(front=None)

    def twin_note(self, setup: Setup, *, twin: bool) -> TwinNote:
        """What is said at the twin's switch."""
        if reason := references.no_twin(setup):
            return TwinNote(reason, refused=True)
        if not twin:
            return TwinNote()
        if self._halted:
            return TwinNote("stopped with the sprinklings: Resume goes on")
        known = self._beside is not None and self._beside[0] == Wanted(setup, twin, self._chain)
        return self._beside[2] if known and self._beside else TwinNote("waiting …")

    @property
    def _chain(self) -> bool:
        return self._asked is not None and self._asked.chain

    def stale(self, setup: Setup, choices: Choices) -> dict[str, str]:
        """The views whose sweep belongs to another setup than this, with the reason."""
        shown = {"scaling": choices.scaling, "separation": "separation"}
        return {
            view: "earlier"
            for view, name in shown.items()
            if name in self._sweeps and not self._current(name, setup)
        }

    def _current(self, name: str, setup: Setup) -> bool:
        """Whether the sweep that is shown is this setup's."""
        planned = self._plans
        if planned is not None and planned.setup == setup:
            return self._sweeps[name][1] == tuple(getattr(planned, name))
        # Not planned yet: the separation sweep of a row does not depend on the separation.
        return (
            name == "separation"
            and planned is not None
            and setup.region_list is None
            and planned.setup == setup.with_(separation=planned.setup.separation)
        )

    def _gather(self) -> None:
        """Read again what is known; called by the workshop in its own thread."""
        self._flight.request(self._work)

    def _work(self, report: Callable[[str, float], None]) -> Curves | None:
        """Plan what was asked for last, or else read what is known.

        Every request of the flight runs this, so that the newest request never loses a plan.
        """
        end = time.monotonic() + STEP
        # When a slider moves, its views come first.
        while self._pending is None and (time.monotonic() < end or self._workshop.quiet):
            time.sleep(STEP / 10)
            report("curves", 0.0)
        plan, self._pending = self._pending, None
        if plan is not None:
            return plan()
        return None if self._plans is None else curves(self._plans, self._workshop)

    def _gathered(self, outcome: Curves | Exception | None) -> None:
        """Take what the readings say so far, if they are still wanted."""
        if isinstance(outcome, Exception):
            self.progress = Behind(f"{type(outcome).__name__}: {outcome}", "")
        elif outcome is not None and outcome.wanted == self._asked:
            self._take(outcome)
        self._show()

    def _take(self, outcome: Curves) -> None:
        text = outcome.left() if drawn(outcome.plans.setup) else ""
        shown = "; ".join(filter(None, (text, *outcome.failures[:1])))
        self.progress = Behind(shown, "halt" if text else "")
        self._average = outcome.plans.setup, outcome.average
        self._beside = outcome.wanted, outcome.beside, outcome.twin_note
        for name in SWEEPS:
            curve, keys = getattr(outcome, name), tuple(getattr(outcome.plans, name))
            # An earlier sweep stays until the new one shows anything.
            if curve.done or not curve.planned or not self._sweeps.get(name, (curve, ()))[0].done:
                self._sweeps[name] = curve, keys
