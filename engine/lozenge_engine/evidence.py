"""What the evidence page and `lozenge evidence` are to compute, as one checked value."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, get_args

import numpy as np

from lozenge_engine.checks import checked_number, checked_whole
from lozenge_engine.errors import refuse
from lozenge_engine.geometry import MAX_REGIONS

__all__ = [
    "LEVELS",
    "OPERATORS",
    "RULES",
    "STAGES",
    "CutRule",
    "EvidencePlan",
    "Level",
    "Operator",
    "Stage",
]

Stage = Literal["patch", "regions", "both"]
STAGES: tuple[Stage, ...] = get_args(Stage)
CutRule = Literal["root_count", "union_count", "equal_share", "fixed_number"]
RULES: tuple[CutRule, ...] = get_args(CutRule)
Level = Literal["preview", "refined", "long", "exact", "smooth"]
LEVELS: tuple[Level, ...] = get_args(Level)
Operator = Literal["patch", "region", "union"]
OPERATORS: tuple[Operator, ...] = get_args(Operator)
CutQuantity = Literal["entropy", "mutual", "slope", "kept", "modes"]
ModePart = Literal["real", "imaginary", "modulus"]
StateCheck = Literal["fit", "deviation", "loss"]

ALPHA_LOW, ALPHA_HIGH = 0.25, 4.0
"""Ends that a cut study may not pass: below, the search for modes becomes the whole operator's."""
DELTA_LOW, DELTA_HIGH = 0.03, 0.10
MAX_RANK = 1_000_000

_CHOICES: dict[str, tuple[str, ...]] = {
    "stage": STAGES,
    "level": LEVELS,
    "operator": OPERATORS,
    "cut_quantity": get_args(CutQuantity),
    "mode_part": get_args(ModePart),
    "state_check": get_args(StateCheck),
}


@dataclass(frozen=True, slots=True, kw_only=True)
class EvidencePlan:
    """What is asked about a geometry beyond its entropies.

    Parameters
    ----------
    alpha_low, alpha_high : float
        Ends of the cut study's multiples of the threshold, 0.25 <= low < high <= 4.
    alphas : int
        Their number, 2 to 200, equally spaced in the logarithm.
    stage : {"patch", "regions", "both"}
        The stage whose threshold the cut study moves.
    rules : tuple of str
        Rules of the regions that the cut study compares: one to four of `RULES`, each once.
    uncut_space : bool
        Whether the cut study also takes the regions' kept space from the uncut restricted
        operator (the space only; commutator and W stay the cut ones).
    delta : float
        Relative departure of the sprinkled spectrum from the twin's at which modes are said to
        be lost, 0.03 to 0.10.
    realisations : int
        Sprinklings that thresholds and the cut study's error bars are taken from, 1 to 1 000.
    level : {"preview", "refined", "long", "exact", "smooth"}
        How densely the continuum twin is laid; ``exact`` and ``smooth`` take the closed form that
        the massless field has on the flat patch, ``smooth`` averages over counts that fluctuate
        as a sprinkling's do.
    operator : {"patch", "region", "union"}
        Whose mode is drawn.
    region : int
        Which region, 0 for A, where the operator is a region's; 0 to 7.
    rank : int
        Which mode, 1 for the largest eigenvalue; 1 to 1 000 000.
    cut_quantity : {"entropy", "mutual", "slope", "kept", "modes"}
        What the cut study draws.
    mode_part : {"real", "imaginary", "modulus"}
        Which part of the mode is drawn.
    state_check : {"fit", "deviation", "loss"}
        What the check of the state draws.
    """

    alpha_low: float = ALPHA_LOW
    alpha_high: float = ALPHA_HIGH
    alphas: int = 40
    stage: Stage = "both"
    rules: tuple[CutRule, ...] = RULES
    uncut_space: bool = False
    delta: float = 0.05
    realisations: int = 8
    level: Level = "preview"
    operator: Operator = "patch"
    region: int = 0
    rank: int = 1
    cut_quantity: CutQuantity = "entropy"
    mode_part: ModePart = "real"
    state_check: StateCheck = "fit"

    def __post_init__(self) -> None:
        for name, allowed in _CHOICES.items():
            if getattr(self, name) not in allowed:
                raise refuse(
                    name,
                    given=getattr(self, name),
                    allowed=", ".join(allowed),
                    do="choose one of them",
                )
        if not isinstance(self.uncut_space, bool):
            raise refuse(
                "uncut_space", given=self.uncut_space, allowed="true or false", do="choose one"
            )
        self._check_alphas()
        object.__setattr__(self, "rules", self._checked_rules())
        delta = checked_number(
            "delta", self.delta, low=DELTA_LOW, high=DELTA_HIGH, allowed="0.03 to 0.10"
        )
        object.__setattr__(self, "delta", delta)
        checked_whole("realisations", self.realisations, low=1, high=1000)
        checked_whole("region", self.region, low=0, high=MAX_REGIONS - 1)
        checked_whole("rank", self.rank, low=1, high=MAX_RANK)

    def _check_alphas(self) -> None:
        """Check the ends of the range and the number of values."""
        allowed = f"{ALPHA_LOW:g} to {ALPHA_HIGH:g}"
        for name in ("alpha_low", "alpha_high"):
            end = checked_number(
                name, getattr(self, name), low=ALPHA_LOW, high=ALPHA_HIGH, allowed=allowed
            )
            object.__setattr__(self, name, end)
        if not self.alpha_low < self.alpha_high:
            raise refuse(
                "alpha_high",
                given=self.alpha_high,
                allowed=f"above alpha_low, which is {self.alpha_low:g}",
                do="raise alpha_high or lower alpha_low",
            )
        checked_whole("alphas", self.alphas, low=2, high=200)

    def _checked_rules(self) -> tuple[CutRule, ...]:
        """The rules in the order of `RULES`."""
        given = tuple(self.rules)
        if not given or len(set(given)) < len(given) or not set(given) <= set(RULES):
            raise refuse(
                "rules",
                given=", ".join(map(str, given)) or "none",
                allowed=f"one to four of {', '.join(RULES)}, each once",
                do="change the rules",
            )
        return tuple(rule for rule in RULES if rule in given)

    def alpha_values(self) -> tuple[float, ...]:
        """The multiples of the threshold that the cut study takes.

        Returns
        -------
        tuple of float
            `alphas` values from `alpha_low` to `alpha_high`, both included, equally spaced in
            the logarithm, increasing.
        """
        inner = np.geomspace(self.alpha_low, self.alpha_high, self.alphas)[1:-1]
        return (self.alpha_low, *(float(value) for value in inner), self.alpha_high)
