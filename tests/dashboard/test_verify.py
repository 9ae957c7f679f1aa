"""Bundles are computed again, row by row."""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pytest

from lozenge_dashboard import bundle_run, campaign_run, cli, verify
from lozenge_engine import bundle, presets
from lozenge_engine.bundle import Bundle
from lozenge_engine.config import PointSource, Setup
from lozenge_engine.pipeline import compute, versions
from lozenge_engine.plan import Axis, CampaignPlan
from lozenge_engine.presets import Preset

SETUP = Setup(
    points=PointSource(density=80.0, seed=5), region_count=2, half_width=0.4, separation=0.1
)
PLAN = CampaignPlan(
    axes=(Axis(name="density", values=(60.0, 90.0)),),
    placements=((0.0, 0.0), (0.05, 0.0)),
    realisations=3,
)


@pytest.fixture(scope="module")
def results(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A finished results file of two densities, three realisations, two placements."""
    folder = tmp_path_factory.mktemp("results")
    preset = Preset(title="Small", sentence="A small one.", setup=SETUP, campaign=PLAN)
    presets.write(folder / "small.json", preset)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(campaign_run, "Processes", ThreadPoolExecutor)
        status = cli.main(
            ["run", str(folder / "small.json"), "--results", str(folder / "small.sqlite")]
        )
    assert status in (cli.OK, cli.NOT_TRUSTED)
    return folder / "small.sqlite"


@pytest.fixture(scope="module")
def made(results: Path) -> Bundle:
    return bundle_run.bundle_of_results(results)


def with_field(made: Bundle, line: int, column: str, change: Callable[[str], str]) -> Bundle:
    """The bundle with one field of its samples changed."""
    rows = list(csv.reader(io.StringIO(made.samples)))
    at = rows[0].index(column)
    rows[line][at] = change(rows[line][at])
    return made._replace(samples="".join(",".join(row) + "\n" for row in rows))


def checked(made: Bundle, realisations: int | None = None) -> verify.Verification:
    return verify.verify(made, here=versions(), realisations=realisations)


def test_all_rows_come_out_identical(made: Bundle) -> None:
    found = checked(made)
    assert found.agrees
    assert (len(found.rows), found.held) == (12, 12)
    assert {row.verdict for row in found.rows} == {"identical"}


def test_a_part_is_spread_over_the_densities(made: Bundle) -> None:
    found = checked(made, 2)
    assert (len(found.rows), found.held) == (4, 12)
    assert {row.name.split(",")[0] for row in found.rows} == {"density 60", "density 90"}


@pytest.mark.parametrize(("shift", "verdict"), [(1e-12, "equal"), (1e-6, "different")])
def test_a_moved_entropy_is_told_from_rounding(made: Bundle, shift: float, verdict: str) -> None:
    moved = with_field(made, 4, "A_entropy", lambda text: repr(float(text) + shift))
    found = checked(moved)
    odd = [row for row in found.rows if row.verdict != "identical"]
    assert [row.verdict for row in odd] == [verdict]
    assert odd[0].what == "A_entropy"
    assert odd[0].difference == pytest.approx(shift, rel=1e-3)
    assert found.agrees == (verdict == "equal")


def test_another_count_is_different_however_small(made: Bundle) -> None:
    found = checked(with_field(made, 1, "patch_elements", lambda text: str(int(text) + 1)))
    assert [row.what for row in found.rows if row.verdict == "different"] == ["patch_elements"]


def test_another_seed_is_different(made: Bundle) -> None:
    found = checked(with_field(made, 2, "child_seed", lambda text: str(int(text) + 1)))
    assert [row.what for row in found.rows if row.verdict == "different"] == ["child_seed"]


@pytest.mark.parametrize(
    ("column", "text"), [("kind", "fixed"), ("patch_density", "61.0"), ("realisation", "x")]
)
def test_rows_of_another_campaign_are_refused(made: Bundle, column: str, text: str) -> None:
    with pytest.raises(ValueError, match=r"samples\.csv: given line 2"):
        checked(with_field(made, 1, column, lambda _: text))


def test_a_cell_that_cannot_be_computed_hides_no_other(tmp_path: Path) -> None:
    """A region of hardly an element has no numbers here either; the larger one is checked."""
    plan = CampaignPlan(axes=(Axis(name="half_width", values=(0.02, 0.4)),), realisations=1)
    setup = Setup(points=PointSource(density=80.0, seed=5), region_count=1)
    preset = Preset(title="Small", sentence="A small one.", setup=setup, campaign=plan)
    presets.write(tmp_path / "small.json", preset)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(campaign_run, "Processes", ThreadPoolExecutor)
        names = (str(tmp_path / "small.json"), str(tmp_path / "small.sqlite"))
        assert cli.main(["run", names[0], "--results", names[1]]) == cli.NOT_TRUSTED
    found = checked(bundle_run.bundle_of_results(tmp_path / "small.sqlite"))
    assert {row.verdict for row in found.rows} == {"identical"}
    assert len(found.rows) == 2


def test_a_mode_near_a_cut_is_flagged(made: Bundle) -> None:
    result = compute(SETUP.config())
    cut = result.regions[0].cut
    values = np.append(result.regions[0].eigenvalues, cut * (1 + 1e-11))
    object.__setattr__(result.regions[0], "eigenvalues", values)
    near = verify.nearest_to_a_cut(result)
    assert near == pytest.approx(1e-11, rel=1e-3)
    row = verify.Checked("row", "identical", 0.0, "", near)
    assert row.may_flip
    assert not row._replace(near=1e-6).may_flip


def test_a_preset_travels_with_its_own_numbers(tmp_path: Path) -> None:
    preset = Preset(title="Small", sentence="A small one.", setup=SETUP)
    bundle.write(tmp_path / "small.zip", bundle_run.bundle_of_preset(preset))
    found = checked(bundle.read(tmp_path / "small.zip"))
    assert found.agrees
    assert found.text.startswith("same points, S equal")


def test_the_commands_pack_and_verify(
    results: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    file = tmp_path / "court.zip"
    assert cli.main(["bundle", str(results), "--to", str(file)]) == cli.OK
    assert "with 12 samples" in capsys.readouterr().out
    assert cli.main(["verify", str(file), "--realisations", "1"]) == cli.OK
    out = capsys.readouterr().out
    assert "2 of 12 rows computed again: 2 identical in every bit" in out
    assert "The others were not checked" in out


def test_a_difference_ends_with_status_1(
    made: Bundle, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    file = tmp_path / "court.zip"
    moved = with_field(made, 1, "union_support", lambda text: repr(float(text) + 0.01))
    bundle.write(file, moved)
    assert cli.main(["verify", str(file), "--all"]) == cli.DIFFERENT
    assert re.search(r"DIFFERENT, union_support by 1\.0e-02", capsys.readouterr().out)


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (["verify", "nowhere.zip"], "no such file"),
        (["bundle", "nested-diamond", "--to", "/nowhere/x.zip"], "cannot be written"),
        (["verify", "{results}"], "no readable zip file"),
        (["verify", "{results}", "--realisations", "0"], "a whole number from 1"),
    ],
)
def test_bad_input_is_refused_in_one_line(
    results: Path, arguments: list[str], words: str, capsys: pytest.CaptureFixture[str]
) -> None:
    given = [argument.format(results=results) for argument in arguments]
    assert cli.main(given) == cli.BAD_INPUT
    err = capsys.readouterr().err
    assert words in err
    assert err.count("\n") == 1
