"""What was computed, as the methods paragraph and the sources ask for it."""

from __future__ import annotations

from typing import NamedTuple

from lozenge_dashboard.campaigns import Watch
from lozenge_dashboard.records import EvidenceScene, Scene
from lozenge_engine.config import Rule, Setup
from lozenge_engine.presets import Preset

__all__ = ["Facts"]


class Facts(NamedTuple):
    """All that was computed and is shown; None for what was not.

    Attributes
    ----------
    preset : Preset
        The configuration.
    versions : tuple of str
        Versions that computed, each like ``lozenge 0.1, numpy 2.4``.
    scene : Scene or None
        The bench.
    watch : Watch or None
        A results file.
    evidence : EvidenceScene or None
        The evidence page.
    failures : tuple of str
        Why sprinklings of the bench are missing.
    """

    preset: Preset
    versions: tuple[str, ...]
    scene: Scene | None = None
    watch: Watch | None = None
    evidence: EvidenceScene | None = None
    failures: tuple[str, ...] = ()

    @property
    def setups(self) -> tuple[Setup, ...]:
        """Every setup that was computed."""
        found = [self.preset.setup] if self.scene is not None or self.evidence is not None else []
        if self.watch is not None:
            found += [self.watch.design.points[c.point].setup for c in self.watch.design.cells]
        return tuple(found)

    @property
    def rules(self) -> tuple[tuple[Rule, Rule], ...]:
        """Pairs of rules that were used, each once."""
        return tuple(dict.fromkeys(setup.rules() for setup in self.setups))

    @property
    def entropies(self) -> bool:
        """Whether entropies were computed."""
        return bool(self.setups)

    @property
    def several(self) -> bool:
        """Whether any point has more than one region."""
        return any(len(setup.regions()) > 1 for setup in self.setups)

    @property
    def thresholds_used(self) -> bool:
        """Whether a rule with a threshold was used, or one is shown."""
        kinds = {rule.kind for pair in self.rules for rule in pair}
        shown = self.evidence is not None and (self.evidence.cuts or self.evidence.thresholds)
        return bool(kinds & {"root_count", "union_count", "equal_share"}) or bool(shown)

    @property
    def reference_shown(self) -> bool:
        """Whether a reference slope stands beside a number."""
        scene, watch, due = self.scene, self.watch, self.evidence and self.evidence.due
        found = []
        if scene is not None and scene.density is not None:
            found.append(scene.density.used.any() and scene.density.reference_slope is not None)
        if watch is not None:
            fits = [fit for fit in watch.estimates.fits if fit.report is not None]
            found.append(any(fit.reference is not None for fit in fits))
        if due:
            found.append(any(row.reference is not None for row in due.rows))
        return any(found)

    @property
    def twin_shown(self) -> bool:
        """Whether a continuum twin was computed for the bench."""
        beside = self.scene.beside if self.scene is not None else None
        return beside is not None and beside.front is not None

    @property
    def chain_shown(self) -> bool:
        """Whether a harmonic chain was computed."""
        beside = self.scene.beside if self.scene is not None else None
        drawn = beside is not None and any(
            side.chain is not None for side in (beside.density, beside.size)
        )
        found = self.evidence
        due = found is not None and found.due and any(r.chain is not None for r in found.due.rows)
        return drawn or bool(due) or "chain" in self.mutual_kinds

    @property
    def currents_shown(self) -> bool:
        """Whether mutual information of currents was computed."""
        return "currents" in self.mutual_kinds

    @property
    def mutual_kinds(self) -> frozenset[str]:
        """Routes of the mutual information against the cross ratio."""
        record = self.evidence.mutual if self.evidence is not None else None
        return frozenset(curve.kind for curve in record.curves) if record else frozenset()
