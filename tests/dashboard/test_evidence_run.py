"""`lozenge evidence`: what it prints, writes, runs first and refuses."""

from __future__ import annotations

import json
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from pathlib import Path

import pytest

from lozenge_dashboard import campaign_run
from lozenge_dashboard.evidence_run import run_evidence
from lozenge_engine import store
from lozenge_engine.config import PointSource, Setup
from lozenge_engine.errors import InputError
from lozenge_engine.evidence import EvidencePlan
from lozenge_engine.plan import Axis, CampaignPlan
from lozenge_engine.presets import Preset

SETUP = Setup(points=PointSource(density=120.0, seed=5), region_count=1, half_width=0.3)
PLAN = CampaignPlan(
    axes=(
        Axis(name="density", values=(60.0, 100.0, 160.0)),
        Axis(name="region_count", values=(1, 2)),
    ),
    realisations=8,
    smallest_region=5,
)
PRESET = Preset(
    title="Two courts", sentence="A small one.", invented=True, setup=SETUP, campaign=PLAN
)


@pytest.fixture(autouse=True)
def quick(monkeypatch: pytest.MonkeyPatch) -> None:
    """Threads instead of processes, whose start takes seconds."""
    monkeypatch.setattr(campaign_run, "Processes", ThreadPoolExecutor)


@pytest.fixture(scope="module")
def finished(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A results file that the command itself has run."""
    path = tmp_path_factory.mktemp("evidence") / "rows.sqlite"
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(campaign_run, "Processes", ThreadPoolExecutor)
        told = run_evidence(PRESET, results=path, level="exact", workers=1)
    assert not told.paused
    return path


def test_the_campaign_runs_first_and_its_report_leaves_the_table_alone(
    finished: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    with store.inspect(finished) as results:
        assert all(done == PLAN.realisations for done, _ in results.counts())
    run_evidence(PRESET, results=finished, level="exact", workers=1)
    out, err = capsys.readouterr()
    assert "data - twin" in out
    assert "versions" not in out
    assert "fit over density" in err  # the campaign's own report
    assert out.startswith("Two courts (invented scenario)")


def test_every_slope_stands_in_the_table_with_its_error(
    finished: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    numbers = tmp_path / "numbers.json"
    run_evidence(PRESET, results=finished, level="exact", as_is=True, json_file=numbers)
    out = capsys.readouterr().out
    made = json.loads(numbers.read_text())
    assert [row["label"] for row in made["rows"]] == ["region count 1", "region count 2"]
    for row in made["rows"]:
        assert row["verdict"].split(";")[0][:40] in " ".join(out.split())
        for name in ("data", "twin", "chain", "minus"):
            assert row["slopes"][name]["error"] is not None
        assert row["reference_slope"] == pytest.approx(len(row["regions"]) / 3)
        assert f"{row['reference_slope']:.4f}" in out
        assert len(row["points"]) == 3
    assert made["combinations"][0]["label"] == "S(2) - 2 S(1)"
    assert "S(2) - 2 S(1)" in out
    assert "fractions (0.35, 0.65]" in out
    assert "window" in out


def test_json_on_the_standard_output_takes_the_tables_place(
    finished: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    run_evidence(PRESET, results=finished, level="exact", as_is=True, json_file=Path("-"))
    assert json.loads(capsys.readouterr().out)["level"] == "exact"


def test_without_results_twin_and_chain_stand_alone(capsys: pytest.CaptureFixture[str]) -> None:
    told = run_evidence(PRESET)
    out = capsys.readouterr().out
    assert told == (False, True)
    assert "the campaign has not run" in out
    assert "twin: level smooth" in out  # the closed form is there for a massless field
    assert out.count("Not settled") == 2


def test_a_section_evidence_brings_level_and_thresholds(
    capsys: pytest.CaptureFixture[str],
) -> None:
    plan = replace(EvidencePlan(), realisations=2)
    one = replace(PLAN, axes=(PLAN.axes[0],))
    run_evidence(replace(PRESET, campaign=one, evidence=plan), json_file=Path("-"))
    made = json.loads(capsys.readouterr().out)
    assert made["level"] == "preview"
    (limits,) = made["thresholds"]
    assert limits["delta"] == plan.delta
    assert [one["name"] for one in limits["operators"]]


def test_a_preset_without_a_campaign_is_refused() -> None:
    with pytest.raises(InputError, match="campaign"):
        run_evidence(replace(PRESET, campaign=None))


def test_a_level_that_there_is_not_is_refused() -> None:
    with pytest.raises(InputError, match="preview, refined, long"):
        run_evidence(PRESET, level="finest")


def test_results_of_another_campaign_are_refused(finished: Path) -> None:
    other = replace(PRESET, setup=SETUP.with_(half_width=0.25))
    with pytest.raises(InputError, match="half"):
        run_evidence(other, results=finished, as_is=True)


def test_one_file_is_not_written_twice(finished: Path) -> None:
    before = finished.read_bytes()
    with pytest.raises(InputError, match="twice"):
        run_evidence(PRESET, results=finished, json_file=finished, as_is=True)
    assert finished.read_bytes() == before
