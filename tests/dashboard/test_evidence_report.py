"""`lozenge run PRESET --evidence`: the evidence page's numbers on the terminal."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest

from lozenge_dashboard import cli, evidence_report
from lozenge_engine import presets
from lozenge_engine.config import Averaging, PointSource, Setup, SweepPlan
from lozenge_engine.evidence import EvidencePlan
from lozenge_engine.presets import Preset

PLAN = EvidencePlan(alphas=3, alpha_low=0.8, alpha_high=1.5, realisations=2, level="exact")
SWEEPS = SweepPlan(
    density_low=150.0, density_high=300.0, density_points=3, separation_points=3, smallest_region=20
)


def saved(path: Path, *, regions: int) -> str:
    """A preset of so many regions."""
    setup = Setup(
        points=PointSource(density=300.0, seed=4),
        region_count=regions,
        half_width=0.4 if regions == 1 else 0.3,
        averaging=Averaging(sprinklings=2),
        sweeps=SWEEPS,
    )
    preset = Preset(title="Small", sentence="A small one.", setup=setup, evidence=PLAN)
    presets.write(path, preset)
    return str(path)


@pytest.fixture(scope="module")
def document(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Any]:
    """What is written of two regions."""
    folder = tmp_path_factory.mktemp("evidence")
    preset = saved(folder / "two.json", regions=2)
    assert cli.main(["run", preset, "--evidence", "--json", str(folder / "out.json")]) == cli.OK
    return json.loads((folder / "out.json").read_text())


def test_every_study_is_written(document: dict[str, Any]) -> None:
    assert document["refused"] == {}
    assert all(document[field] for field in evidence_report.FIELDS.values())


def test_the_plan_that_was_followed_is_written(document: dict[str, Any]) -> None:
    assert document["plan"]["alphas"] == 3
    assert len(document["mutual"]["curves"]) >= 2


def test_what_one_region_has_not_is_named(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert cli.main(["run", saved(tmp_path / "one.json", regions=1), "--evidence"]) == (
        cli.NOT_TRUSTED
    )
    out, _ = capsys.readouterr()
    assert "not computed, mutual: " in out
    assert "b of the twin" in out
    assert "derived threshold, patch" in out
    assert "slope of Re W against ln |τ|" in out


@pytest.mark.parametrize("option", [["--one"], ["--sweeps"], ["--arrays", "x.npz"]])
def test_options_of_the_other_computation_are_refused(
    option: list[str], capsys: pytest.CaptureFixture[str]
) -> None:
    assert cli.main(["run", "nested-diamond", "--evidence", *option]) == cli.BAD_INPUT
    assert "with --evidence" in capsys.readouterr().err
