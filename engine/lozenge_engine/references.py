"""References beside a setup's data: the continuum twin and the harmonic chain, planned and read."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, NamedTuple

from lozenge_engine.averages import Readings
from lozenge_engine.chainline import ChainLine, ChainTask, chain_line, chain_task
from lozenge_engine.config import Setup
from lozenge_engine.sweeps import ScalingCurve
from lozenge_engine.twin import Level, Twin
from lozenge_engine.twinline import (
    Outcomes,
    TwinLine,
    TwinSeparation,
    density_line,
    front_twin,
    separation_lines,
    size_line,
)
from lozenge_engine.twinplan import TwinPlan, TwinTask, twin_plan

__all__ = [
    "KNOWN_LEVELS",
    "LEVELS",
    "Beside",
    "Company",
    "ReferencePlan",
    "front_only",
    "no_twin",
    "plan",
    "read",
]

LEVELS: tuple[Level, ...] = ("preview", "refined")
"""Levels of the twin in the order in which they are wanted."""
KNOWN_LEVELS: tuple[Level, ...] = ("preview", "exact")
"""The same where the modes are known in closed form, which comes first; sets then check it."""


class Beside(NamedTuple):
    """What stands beside one sweep of scale; None where it is not wanted or not known.

    Attributes
    ----------
    twin, chain : TwinLine or None, ChainLine or None
        The references.
    failed : bool
        Whether the chain refused the geometry.
    """

    twin: TwinLine | None = None
    chain: ChainLine | None = None
    failed: bool = False


class Company(NamedTuple):
    """What stands beside a setup's data.

    Attributes
    ----------
    front : Twin or None
        The twin of the present geometry.
    check : Twin or None
        Where that is in closed form, what quasi-uniform sets give for it.
    density, size : Beside
        Beside the two sweeps of scale.
    separation : TwinSeparation or None
        Beside the sweep of separation.
    done, planned : int
        Tasks that are done, failed ones included, and all.
    """

    front: Twin | None
    check: Twin | None
    density: Beside
    size: Beside
    separation: TwinSeparation | None
    done: int
    planned: int


class ReferencePlan(NamedTuple):
    """Tasks of a setup's references.

    Attributes
    ----------
    twin, along : tuple of TwinPlan
        For the front and for the sweeps, one for each level, in order; empty if no twin is wanted.
    chain : mapping of str to ChainTask
        By the axis of the sweep; empty if no chain is wanted.
    """

    twin: tuple[TwinPlan, ...]
    along: tuple[TwinPlan, ...]
    chain: dict[str, ChainTask]

    def front(self, level: int) -> dict[str, Any]:
        """The task of the present geometry at one level.

        Parameters
        ----------
        level : int
            Place of the level in `twin`.

        Returns
        -------
        dict of str to TwinTask
            By its key; empty where there is none.
        """
        return {t.key: t for plan in self.twin[level : level + 1] for t in plan.tasks("front")}

    def quick(self) -> dict[str, Any]:
        """The task of the present geometry in closed form, a moment of work, if there is one."""
        return {key: task for key, task in self.front(1).items() if task.level == "exact"}

    def sweep(self, name: str, level: int) -> dict[str, Any]:
        """The tasks beside one sweep at one level; the chain comes after the first.

        Parameters
        ----------
        name : {"density", "size", "separation"}
            The sweep.
        level : int
            Place of the level in `along`.

        Returns
        -------
        dict of str to TwinTask or ChainTask
            By their keys, in the order wanted.
        """
        found: dict[str, Any] = {
            t.key: t for plan in self.along[level : level + 1] for t in plan.tasks(name)
        }
        if level == 0 and name in self.chain:
            found[self.chain[name].key] = self.chain[name]
        return found

    def around(self, name: str, draws: Mapping[str, Any]) -> dict[str, Any]:
        """The draws of a sweep and its first references: before them what takes a moment.

        Parameters
        ----------
        name : {"density", "size", "separation"}
            The sweep.
        draws : mapping of str to Draw
            By their keys.

        Returns
        -------
        dict of str to Draw, TwinTask or ChainTask
            By their keys, in the order wanted.
        """
        beside = self.sweep(name, 0)
        first = {k: t for k, t in beside.items() if getattr(t, "level", "") == "exact"}
        return first | dict(draws) | beside

    def keys(self) -> tuple[str, ...]:
        """All keys, each once."""
        names = ("density", "size", "separation")
        found: dict[str, Any] = {}
        for level in range(len(LEVELS)):
            found |= self.front(level)
            for name in names:
                found |= self.sweep(name, level)
        return tuple(found)


def no_twin(setup: Setup) -> str:
    """Why a setup has no twin; empty if it has one.

    Parameters
    ----------
    setup : Setup
        What is shown.

    Returns
    -------
    str
        In words, with the way out.
    """
    if setup.rules()[0].kind == "none":
        return "nothing is cut on the patch, so there is no wavenumber to share: cut both stages"
    return ""


def plan(setup: Setup, *, twin: bool, chain: bool) -> ReferencePlan:
    """Plan what stands beside a setup's data.

    Parameters
    ----------
    setup : Setup
        What is shown.
    twin, chain : bool
        What is wanted.

    Returns
    -------
    ReferencePlan
        Nothing is computed.
    """
    wanted = twin and not no_twin(setup)
    known = setup.mass == 0.0 and not setup.points.curved
    levels = [twin_plan(setup, one) for one in (KNOWN_LEVELS if known else LEVELS) if wanted]
    chains = {axis: chain_task(setup, axis) for axis in ("density", "size")} if chain else {}
    return ReferencePlan(
        tuple(levels),
        tuple(levels[-1:] if known else levels),
        {axis: task for axis, task in chains.items() if task is not None},
    )


def read(
    setup: Setup,
    planned: ReferencePlan,
    outcomes: Outcomes,
    readings: Readings,
    *,
    density: ScalingCurve,
    size: ScalingCurve,
) -> Company:
    """Read what is known, each from the highest level that is there.

    Parameters
    ----------
    setup : Setup
        What is shown.
    planned : ReferencePlan
        Its plan.
    outcomes : mapping of str to tuple
        What the tasks gave so far.
    readings : mapping of str to tuple of Reading
        The data.
    density, size : ScalingCurve
        Read from them.

    Returns
    -------
    Company
        With None where nothing is known.
    """
    keys = planned.keys()
    levels = planned.along
    fronts = [front_twin(one, outcomes) for one in planned.twin]
    apart = [separation_lines(one, outcomes, setup=setup) for one in levels]
    along = _whole(levels, outcomes, "density")
    across = _whole(levels, outcomes, "size")
    return Company(
        _last(fronts),
        fronts[0] if fronts and fronts[-1] is not None and not fronts[-1].sets else None,
        Beside(
            along and density_line(along, outcomes, density),
            chain_line(planned.chain.get("density"), outcomes, density, setup=setup),
            _failed(planned, outcomes, "density"),
        ),
        Beside(
            across and size_line(across, outcomes, size, setup=setup, readings=readings),
            chain_line(planned.chain.get("size"), outcomes, size, setup=setup),
            _failed(planned, outcomes, "size"),
        ),
        _last(apart),
        done=sum(key in outcomes for key in keys),
        planned=len(keys),
    )


def _failed(planned: ReferencePlan, outcomes: Outcomes, axis: str) -> bool:
    """Whether the chain beside a sweep is done without an outcome."""
    task = planned.chain.get(axis)
    return task is not None and outcomes.get(task.key) == ()


def front_only(planned: ReferencePlan, outcomes: Outcomes) -> Company:
    """Read the twin of the present geometry, where no sweep was drawn.

    Parameters
    ----------
    planned : ReferencePlan
        A setup's plan.
    outcomes : mapping of str to tuple
        What the tasks gave so far.

    Returns
    -------
    Company
        With nothing beside the sweeps.
    """
    front = _last([front_twin(one, outcomes) for one in planned.twin])
    return Company(front, None, Beside(), Beside(), None, len(outcomes), len(outcomes))


def _whole(levels: tuple[TwinPlan, ...], outcomes: Outcomes, name: str) -> TwinPlan | None:
    """The highest level that is known at every point, else the lowest that is known at some.

    Levels are never mixed along a curve: their errors are of one kind.
    """
    for one in reversed(levels):
        tasks: tuple[TwinTask, ...] = one.tasks(name)
        if tasks and all(outcomes.get(task.key) for task in tasks):
            return one
    for one in levels:
        if any(outcomes.get(task.key) for task in one.tasks(name)):
            return one
    return None


def _last(found: list[Any]) -> Any:
    """The last that is known."""
    return next((one for one in reversed(found) if one is not None), None)
