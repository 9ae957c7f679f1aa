"""What is drawn behind the picture: plans of the average and the sweeps, and their curves."""

from __future__ import annotations

import time
from collections.abc import Callable
from typing import Any, NamedTuple

from lozenge_dashboard.column import Behind
from lozenge_dashboard.controls import LIVE_HIGH
from lozenge_dashboard.jobs import Flight, Workshop
from lozenge_dashboard.records import Choices
from lozenge_engine.config import Setup
from lozenge_engine.pointfile import PointFile
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

__all__ = ["Backdrop", "Curves", "Plans", "curves", "drawn", "plans"]

STEP = 0.3
"""Least time (s) between two pictures of what comes from behind."""
SWEEPS = ("density", "size", "separation")


class Plans(NamedTuple):
    """Draws of the average and of the three sweeps, with their keys, for one setup."""

    setup: Setup
    average: dict[str, Draw]
    density: dict[str, Draw]
    size: dict[str, Draw]
    separation: dict[str, Draw]

    def queue(self, *, first: str) -> tuple[Draw, ...]:
        """All draws in the order wanted: the numbers in front, then the sweep looked at."""
        order = ["average", "separation", first, "density", "size"]
        found: dict[str, Draw] = {}
        for name in dict.fromkeys(order):
            found |= {k: d for k, d in getattr(self, name).items() if k not in found}
        return tuple(found.values())

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


def _keyed(plan: Plan) -> dict[str, Draw]:
    return {draw.key: draw for draw in plan.draws}


def plans(setup: Setup) -> Plans:
    """Plan everything behind the picture of a setup."""
    return Plans(
        setup,
        _keyed(average_draws(setup)),
        _keyed(density_draws(setup)),
        _keyed(size_draws(setup)),
        _keyed(separation_draws(setup)),
    )


def curves(planned: Plans, workshop: Workshop) -> Curves:
    """Read what is known of the plans."""
    keys = planned.keys()
    readings = workshop.readings(keys)
    setup = planned.setup
    return Curves(
        planned,
        average(setup, readings),
        density_curve(setup, readings),
        size_curve(setup, readings),
        separation_curve(setup, readings),
        done=len(readings),
        planned=len(keys),
        failures=tuple(workshop.failures(keys)),
    )


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
        self._asked: Setup | None = None
        self._plans: Plans | None = None
        self._average: tuple[Setup, Average] | None = None
        self._sweeps: dict[str, tuple[Any, tuple[str, ...]]] = {}

    def settle(self, setup: Setup, points: PointFile | None, *, first: str) -> None:
        """Queue what stands behind a setup, once its controls rest."""
        if self._halted or setup == self._asked:
            return
        self._asked = setup
        workshop, notify = self._workshop, self._gather

        def work(_report: object) -> Curves:
            self._plans = planned = plans(setup)
            queue = planned.queue(first=first) if drawn(setup) else ()
            workshop.replace(self, queue, points=points, notify=notify)
            return curves(planned, workshop)

        self._flight.request(work)

    def halt(self) -> None:
        """Stop, until `resume`."""
        self._halted, self._asked = True, None
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
        }

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
        workshop = self._workshop

        def work(report: Callable[[str, float], None]) -> Curves | None:
            time.sleep(STEP)
            report("curves", 0.0)
            while workshop.quiet:  # a slider moves: its views come first
                time.sleep(STEP / 10)
                report("curves", 0.0)
            return None if self._plans is None else curves(self._plans, workshop)

        self._flight.request(work)

    def _gathered(self, outcome: Curves | Exception | None) -> None:
        """Take what the readings say so far, if they are still wanted."""
        if isinstance(outcome, Exception):
            self.progress = Behind(f"{type(outcome).__name__}: {outcome}", "")
        elif outcome is not None and outcome.plans.setup == self._asked:
            self._take(outcome)
        self._show()

    def _take(self, outcome: Curves) -> None:
        live, left = drawn(outcome.plans.setup), outcome.planned - outcome.done
        text = f"{outcome.done} of {outcome.planned} sprinklings behind" if left and live else ""
        text = "; ".join(filter(None, (text, *outcome.failures[:1])))
        self.progress = Behind(text, "halt" if left and live else "")
        self._average = outcome.plans.setup, outcome.average
        for name in SWEEPS:
            curve, keys = getattr(outcome, name), tuple(getattr(outcome.plans, name))
            # An earlier sweep stays until the new one shows anything.
            if curve.done or not curve.planned or not self._sweeps.get(name, (curve, ()))[0].done:
                self._sweeps[name] = curve, keys
