"""Campaigns on the command line: what they print and write, how they pause and refuse."""

from __future__ import annotations

import csv
import io
import json
import os
import re
import shlex
import shutil
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import lozenge_dashboard
from lozenge_dashboard import campaign_run, cli
from lozenge_dashboard.campaign_checks import controls
from lozenge_dashboard.campaign_plan import progress_text
from lozenge_dashboard.exchange import as_preset
from lozenge_engine import campaign, presets, store
from lozenge_engine.config import PointSource, Setup
from lozenge_engine.design import child_seed
from lozenge_engine.errors import InputError
from lozenge_engine.plan import Axis, CampaignPlan, Target
from lozenge_engine.presets import Preset, ViewState
from lozenge_engine.realisation import realise

PYTHONPATH = [str(Path(m.__file__ or "").parents[1]) for m in (lozenge_dashboard, presets)]
PYTHONPATH += filter(None, [os.environ.get("PYTHONPATH")])
SETUP = Setup(points=PointSource(density=100.0, seed=5), region_count=1, half_width=0.6)
PLAN = CampaignPlan(
    axes=(Axis(name="density", values=(60.0, 90.0, 130.0, 190.0)),),
    realisations=16,
    smallest_region=40,
)
PAIRS = SETUP.with_(region_count=2, half_width=0.4, separation=0.1)
PAIRS_PLAN = CampaignPlan(
    axes=(
        Axis(name="region_count", values=(1, 2)),
        Axis(name="truncation_mode", values=("two_stages", "equal_share")),
    ),
    placements=((0.0, 0.0), (0.1, 0.0)),
    realisations=3,
    smallest_region=0,
)


def saved(path: Path, plan: CampaignPlan | None = PLAN, setup: Setup = SETUP) -> str:
    """A preset file."""
    presets.write(path, Preset(title="Small", sentence="A small one.", setup=setup, campaign=plan))
    return str(path)


@pytest.fixture(autouse=True)
def quick(monkeypatch: pytest.MonkeyPatch) -> None:
    """Threads instead of processes, whose start takes seconds; a machine of known speed."""
    monkeypatch.setattr(campaign_run, "Processes", ThreadPoolExecutor)


@pytest.fixture
def small(tmp_path: Path) -> str:
    """A preset of four densities, sixteen realisations each."""
    return saved(tmp_path / "small.json")


@pytest.fixture(scope="module")
def once(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A finished results file of that preset, to be copied."""
    folder = tmp_path_factory.mktemp("once")
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(campaign_run, "Processes", ThreadPoolExecutor)
        return computed(saved(folder / "small.json"), folder / "out.results")


@pytest.fixture
def finished(once: Path, tmp_path: Path) -> Path:
    """A finished results file of the small preset."""
    return Path(shutil.copy(once, tmp_path / "out.results"))


def computed(preset: str, file: Path) -> Path:
    """A finished results file."""
    cli.main(["run", preset, "--results", str(file), "--workers", "1"])
    return file


def one_line(text: str) -> str:
    """The text, which is one line that begins with the program's name."""
    assert text.count("\n") == 1
    assert text.startswith("lozenge: ")
    return text


def process(*arguments: str, code: str | None = None, **options: Any) -> subprocess.Popen[str]:
    """The command in a process of its own."""
    start = code or "from lozenge_dashboard.cli import main; raise SystemExit(main())"
    return subprocess.Popen(
        [sys.executable, "-W", "error", "-c", start, *arguments],
        env=os.environ | {"PYTHONPATH": os.pathsep.join(PYTHONPATH)},
        text=True,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        **options,
    )


# -------------------------------------------------------------------------- the plan


def test_the_plan_tells_points_times_memory_and_the_sum(
    small: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert cli.main(["plan", small, "--workers", "2"]) == cli.OK
    out, err = capsys.readouterr()
    assert err == ""
    for density, elements in ((60, 43), (90, 65), (130, 94), (190, 137)):
        assert re.search(rf"^{density} +{elements} +\d\.\d{{3}} +1$", out, re.MULTILINE)
        assert re.search(rf"^{density} +1 +16 +[\d.]+ m?s +\d+ MB +[\d.]+ s$", out, re.MULTILINE)
    assert re.search(r"predicted: .* with 2 workers of one thread each, \d+ MB", out)
    assert "caution" not in out


def test_the_plan_tells_what_is_left_out_and_why(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    plan = replace(PLAN, axes=(Axis(name="region_count", values=(1, 2)),))
    assert cli.main(["plan", saved(tmp_path / "wide.json", plan)]) == cli.OK
    out = " ".join(capsys.readouterr().out.split())
    assert "left out: region_count 2: " in out


def test_the_plan_says_that_a_target_is_beyond_the_budget(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    target = Target(quantity="slope", error=1e-4)
    plan = replace(PLAN, target=target, budget=2.0, realisations=1_000_000)
    assert cli.main(["plan", saved(tmp_path / "far.json", plan)]) == cli.OK
    out = " ".join(capsys.readouterr().out.split())
    assert "wanted: b to 0.0001" in out
    assert re.search(r"caution: .*the budget of .* will probably not do: the target will take", out)


def test_points_too_small_for_a_fit_are_named(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    plan = replace(PLAN, smallest_region=90)
    assert cli.main(["plan", saved(tmp_path / "few.json", plan)]) == cli.OK
    assert capsys.readouterr().out.count("too small for a fit") == 2


@pytest.mark.parametrize("name", presets.SHIPPED)
def test_every_shipped_preset_has_a_plan_that_its_budget_allows(
    name: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert cli.main(["plan", name]) == cli.OK
    out = capsys.readouterr().out
    assert out.startswith(presets.shipped()[name].title + " (invented scenario)\n")
    assert "left out:" not in out
    assert "too small for a fit" not in out
    assert "caution" not in out


# --------------------------------------------------------------------------- the run


def test_a_run_records_every_realisation_and_reports_points_fit_and_prediction(
    small: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    file = tmp_path / "out.results"
    assert cli.main(["run", small, "--results", str(file)]) == cli.OK
    out, err = capsys.readouterr()
    assert out.startswith("all 64 realisations of the plan are there\n\nSmall\n")
    for density in (60, 90, 130, 190):
        number = r"\d\.\d+\(\d+\)"
        assert re.search(rf"^{density} +\d+ +16 +{number} +\d\.\d\d$", out, re.MULTILINE)
    words = " ".join(out.split())
    for telling in (
        r"S = b ln\(l/a\) \+ c: b = \d\.\d+\(\d+\), 95 % interval \d\.\d+ to \d\.\d+; c = ",
        r"chi2/dof [\d.]+/2, p 0\.\d+, 4 cells, at least 16 realisations each; generalised",
        r"bootstrap over sprinklings: error of b 0\.\d+",
        r"laws by AICc above the best: .*S = a n \+ c",
        r"b against the smallest elements fitted: 43: \d\.\d+\(\d+\), 65: ",
        r"(NOT )?settled: ",
        r"reference slope 0\.3333, asymptotic: b is \d+\.\d sigma (above|below) it",
        r"regime: 43 to 137 elements per region .* kept/nominal .* region/patch 0\.6 .*one region",
        r"control variates tried, not used",
        r"predicted .* measured .*: [+-]\d+ %; by density 60 [+-]\d+ %, 90",
        r"seed 5, poisson points",
        r"computed with .*numpy \d",
    ):
        assert re.search(telling, words), telling
    assert "4 sprinklings" in err
    layout = _layout(file)
    with store.inspect(file) as results:
        table = results.table(2)
        assert results.counts() == ((16, 0),) * 4
    assert table.entropy[0][7, 0] == realise(layout, 2, 7).samples[0].entropy[0]


def _layout(file: Path) -> Any:
    with store.inspect(file) as results:
        return results.design


def test_a_second_run_has_nothing_left_to_do_and_gives_the_same_report(
    small: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    file = computed(small, tmp_path / "out.results")
    first = capsys.readouterr().out
    before = _numbers(file)
    assert cli.main(["run", small, "--results", str(file)]) == cli.OK
    out, err = capsys.readouterr()
    assert out == first
    assert "64 realisations are there already" in err
    assert cli.main(["results", str(file)]) == cli.OK
    assert first.endswith("\n\n" + capsys.readouterr().out)
    assert _numbers(file) == before


def test_more_realisations_go_into_the_same_file(finished: Path, tmp_path: Path) -> None:
    file = finished
    with store.inspect(file) as results:
        first = results.table(0).union_support
    more = saved(tmp_path / "more.json", replace(PLAN, realisations=18))
    assert cli.main(["run", more, "--results", str(file)]) == cli.OK
    with store.inspect(file) as results:
        table = results.table(0)
    assert table.realisation.tolist() == list(range(18))
    np.testing.assert_array_equal(table.union_support[:16], first)


def test_a_target_ends_the_run(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    plan = replace(PLAN, realisations=4000, target=Target(quantity="entropy", error=0.03))
    file = tmp_path / "out.results"
    assert cli.main(["run", saved(tmp_path / "p.json", plan), "--results", str(file)]) == cli.OK
    out = capsys.readouterr().out
    assert out.startswith("the target is reached: error 0.0")
    reached = re.search(r"wanted: S at every point to 0.03; reached: (0\.\d+)", out)
    assert reached is not None
    assert float(reached[1]) <= 0.03


def test_a_budget_ends_the_run_and_says_so(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    plan = replace(PLAN, realisations=100_000, budget=1.0)
    file = tmp_path / "out.results"
    assert cli.main(["run", saved(tmp_path / "p.json", plan), "--results", str(file)]) == cli.OK
    out, err = capsys.readouterr()
    assert out.startswith("the budget of 1.0 s is spent\n")
    assert err.endswith(f"--results {file}\n")
    assert "with a larger campaign.budget in the preset" in err


def test_regions_rules_and_classes_have_rows_of_their_own(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    preset = saved(tmp_path / "pairs.json", PAIRS_PLAN, PAIRS)
    cli.main(["run", preset, "--results", str(tmp_path / "out.results")])
    out = capsys.readouterr().out
    for count in (1, 2):
        for mode in ("two stages", "equal share"):
            for group in (1, 2):
                assert re.search(rf"^{count} +{mode} +{group} +32 +3 ", out, re.MULTILINE)
    words = " ".join(out.split())
    assert "1 t 0 x 0; 2 t 0.1 x 0" in words
    assert "no fit: neither density nor half_width is an axis" in words
    assert "which need not be positive" in words


def test_one_realisation_has_no_error(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    preset = saved(tmp_path / "one.json", replace(PLAN, realisations=1))
    assert cli.main(["run", preset, "--results", str(tmp_path / "out.results")]) == cli.OK
    out = capsys.readouterr().out
    assert len(re.findall(r" \d\.\d{3}\(\?\) ", out)) == 4
    assert "one realisation, no error is known" in out
    assert "no fit: 1 realisation" in out


def test_a_failed_realisation_is_counted_with_its_reason_and_ends_with_status_3(
    small: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    def sometimes(layout: Any, sprinkling: int, realisation: int) -> Any:
        if realisation == 3:
            raise InputError("region A: given 1 element")
        return realise(layout, sprinkling, realisation)

    monkeypatch.setattr(campaign, "realise", sometimes)
    file = tmp_path / "out.results"
    assert cli.main(["run", small, "--results", str(file)]) == cli.NOT_TRUSTED
    out = capsys.readouterr().out
    assert "4 failed" in out
    assert "failed: 4 x InputError: region A: given 1 element" in out
    assert cli.main(["results", str(file)]) == cli.NOT_TRUSTED


def test_samples_with_a_mark_are_starred_and_end_with_status_3(
    small: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    def doubtful(layout: Any, sprinkling: int, realisation: int) -> Any:
        record = realise(layout, sprinkling, realisation)
        own = tuple(sample._replace(trusted=sprinkling != 1) for sample in record.samples)
        return record._replace(samples=own)

    monkeypatch.setattr(campaign, "realise", doubtful)
    file = tmp_path / "out.results"
    assert cli.main(["run", small, "--results", str(file)]) == cli.NOT_TRUSTED
    out = capsys.readouterr().out
    assert re.search(r"^90 .*\(\d+\)\* .* 16 untrusted$", out, re.MULTILINE)
    assert out.count("untrusted") == 1


# ------------------------------------------------------------------ files of results


def test_the_json_holds_the_estimates_without_nan(
    small: str, finished: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    file, out = finished, tmp_path / "out.json"
    assert cli.main(["results", str(file), "--json", str(out)]) == cli.OK
    found = json.loads(out.read_text(encoding="utf-8"), parse_constant=pytest.fail)
    with store.inspect(file) as results:
        samples = results.table(1).union_support[:, 0]
    point = found["points"][1]
    assert point["values"] == {"density": 90.0}
    assert point["entropy"]["mean"] == pytest.approx(samples.mean(), abs=1e-12)
    assert point["entropy"]["error"] == pytest.approx(samples.std(ddof=1) / 16**0.5, abs=1e-12)
    assert point["control_variates"]["ratio"] > 0
    (fit,) = found["fits"]
    assert fit["report"]["fit"]["cells"] == 4
    assert fit["reference"] == pytest.approx(1 / 3)
    assert found["preset"] == json.loads(Path(small).read_text(encoding="utf-8"))
    assert found["prediction"]["measured"] > 0
    (made,) = found["versions"]
    assert {"numpy", "python", "lozenge"} <= set(made)
    assert made["realisations"] == 64
    capsys.readouterr()
    assert cli.main(["results", str(file), "--json", "-"]) == cli.OK
    assert json.loads(capsys.readouterr().out) == found


@pytest.mark.parametrize("several", [False, True])
def test_the_csv_gives_every_sample_back_to_the_bit(
    several: bool, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    preset = saved(tmp_path / "p.json", *((PAIRS_PLAN, PAIRS) if several else ()))
    file, out = computed(preset, tmp_path / "out.results"), tmp_path / "out.csv"
    cli.main(["results", str(file), "--csv", str(out)])
    rows = list(csv.DictReader(io.StringIO(out.read_text(encoding="utf-8"))))
    with store.inspect(file) as results:
        layout = results.design
        tables = [results.table(g) for g in range(len(layout.sprinklings))]
    expected = [
        (own, table, row, column, layout.cells[i])
        for own, table in zip(layout.sprinklings, tables, strict=True)
        for row in range(table.realisation.size)
        for column, i in enumerate(own.cells)
    ]
    assert len(rows) == len(expected)
    assert len(rows) == (24 if several else 64)
    for found, (own, table, row, column, cell) in zip(rows, expected, strict=True):
        realisation = int(found["realisation"])
        assert realisation == table.realisation[row]
        seed = child_seed(5, kind=own.kind, density=own.density, realisation=realisation)
        assert int(found["child_seed"]) == seed
        assert float(found["ordering_fraction"]) == table.ordering_fraction[row]
        values = layout.points[cell.point].values
        assert all(found[name] == str(value) for name, value in values.items())
        shift = layout.plan.placements[cell.placement]
        assert (float(found["placement_t"]), float(found["placement_x"])) == shift
        assert found["trusted"] == str(int(table.trusted[row, column]))
        for k in range(len(cell.config.regions)):
            letter = "AB"[k]
            assert float(found[f"{letter}_entropy"]) == table.entropy[column][row, k]
            assert float(found[f"{letter}_kept"]) == table.kept[column][row, k]
            assert float(found[f"{letter}_elements"]) == table.region_elements[column][row, k]
        assert float(found["union_support"]) == table.union_support[row, column]
        assert float(found["union_direct_sum"]) == table.union_direct_sum[row, column]
        if len(cell.config.regions) == 2:
            pair = table.pair_support[column][row, 0]
            assert float(found["AB_information_support"]) == pair
            assert float(found["AB_cross_block"]) == table.cross_block[column][row, 0]
        elif several:
            assert found["B_entropy"] == found["AB_information_support"] == ""


def test_known_means_of_controls_are_right(tmp_path: Path) -> None:
    plan = replace(PLAN, axes=(Axis(name="density", values=(190.0,)),), realisations=200)
    file = computed(saved(tmp_path / "p.json", plan), tmp_path / "out.results")
    with store.inspect(file) as results:
        table = results.table(0)
        for samples, known in (
            (table.elements, 380.0),
            (table.ordering_fraction, 0.5),
            (table.region_elements[0][:, 0], 136.8),
        ):
            error = samples.std(ddof=1) / 200**0.5
            assert abs(samples.mean() - known) < 4.5 * error  # false alarm 1e-5
        tried = controls(results)
    assert len(tried) == 1
    assert tried[0] is not None
    assert abs(tried[0].shift) < 4.5
    assert tried[0].ratio > 0.9


# --------------------------------------------------------------------- how it refuses


@pytest.mark.parametrize(
    ("arguments", "telling"),
    [
        (["plan"], "required: PRESET"),
        (["plan", "nested-diamnd"], "write nested-diamond"),
        (["plan", "PRESET", "--workers", "0"], "--workers: given 0"),
        (["plan", "PRESET", "--workers", "two"], "--workers"),
        (["plan", "BARE"], "no campaign"),
        (["run", "BARE", "--results", "r"], "no campaign"),
        (["run", "PRESET", "--results", "r", "--workers", "1000"], "--workers: given 1000"),
        (["run", "PRESET", "--results", "none/r"], "choose another path"),
        (["run", "PRESET", "--results", "PRESET"], "results file"),
        (["run", "PRESET", "--results", "r", "--one"], "--one: given with --results"),
        (["run", "PRESET", "--results", "r", "--json", "-"], "--json: given with --results"),
        (["run", "PRESET", "--workers", "2"], "--workers: given without --results"),
        (["run", "PRESET", "--dask", "tcp://127.0.0.1:1"], "--dask: given without --results"),
        (
            ["run", "PRESET", "--results", "r", "--dask", "tcp://127.0.0.1:1", "--workers", "1"],
            "--workers: given with --dask",
        ),
        (["results"], "required: FILE"),
        (["results", "none"], "none"),
        (["results", "PRESET"], "results file"),
        (["results", "none", "--csv", "."], "a directory"),
    ],
)
def test_bad_input_ends_with_status_2_and_one_line(
    arguments: list[str],
    telling: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.chdir(tmp_path)
    names = {"PRESET": saved(tmp_path / "p.json"), "BARE": saved(tmp_path / "bare.json", None)}
    assert cli.main([names.get(word, word) for word in arguments]) == cli.BAD_INPUT
    out, err = capsys.readouterr()
    assert out == ""
    assert telling in one_line(err)
    assert {path.name for path in tmp_path.iterdir()} == {"p.json", "bare.json"}


def test_a_file_of_another_campaign_is_refused_and_stays(
    finished: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    file = finished
    before = _numbers(file)
    other = saved(tmp_path / "other.json", PLAN, SETUP.with_(half_width=0.5))
    capsys.readouterr()
    assert cli.main(["run", other, "--results", str(file)]) == cli.BAD_INPUT
    assert "another preset" in one_line(capsys.readouterr().err)
    assert _numbers(file) == before


def test_one_path_twice_is_refused(finished: Path, capsys: pytest.CaptureFixture[str]) -> None:
    file = finished
    before = file.read_bytes()
    for more in (
        ["--csv", str(file)],
        ["--json", "a", "--csv", "a"],
        ["--json", "-", "--csv", "-"],
    ):
        assert cli.main(["results", str(file), *more]) == cli.BAD_INPUT
        assert "one file twice" in one_line(capsys.readouterr().err)
    assert file.read_bytes() == before


def test_without_the_extra_the_cluster_is_refused_with_what_installs_it(
    small: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.setitem(sys.modules, "distributed", None)
    file = tmp_path / "out.results"
    arguments = ["run", small, "--results", str(file), "--dask", "tcp://127.0.0.1:1"]
    assert cli.main(arguments) == cli.BAD_INPUT
    assert 'pip install "lozenge[cluster]"' in one_line(capsys.readouterr().err)
    assert not file.exists()


# ------------------------------------------------------------------------ the cluster


CLUSTER = """
import sys
from distributed import LocalCluster
if __name__ == "__main__":
    with LocalCluster(n_workers=2, threads_per_worker=1, dashboard_address=None) as cluster:
        worker = next(iter(cluster.workers.values()))
        print(cluster.scheduler_address, worker.process.pid, flush=True)
        sys.stdin.read()
"""


@contextmanager
def cluster() -> Iterator[tuple[str, int]]:
    """Address of a scheduler with two workers of one thread, and the process of one of them."""
    environment = os.environ | {"PYTHONPATH": os.pathsep.join(PYTHONPATH)}
    pipe = subprocess.PIPE
    with subprocess.Popen(
        [sys.executable, "-c", CLUSTER],
        env=environment,
        text=True,
        stdin=pipe,
        stdout=pipe,
        stderr=subprocess.DEVNULL,
    ) as child:
        assert child.stdout is not None
        address, pid = child.stdout.readline().split()
        yield address, int(pid)
        child.communicate("", timeout=30)


@pytest.mark.slow
def test_a_cluster_one_of_whose_workers_is_killed_computes_the_same_samples(
    tmp_path: Path,
) -> None:
    pytest.importorskip("distributed")
    plan = replace(PLAN, realisations=60)
    preset, there = saved(tmp_path / "p.json", plan), tmp_path / "there.results"
    here = computed(preset, tmp_path / "here.results")
    with (
        cluster() as (address, pid),
        process("run", preset, "--results", str(there), "--dask", address) as child,
    ):
        _wait_for(there)
        os.kill(pid, signal.SIGKILL)
        out, err = child.communicate(timeout=120)
    assert child.returncode == cli.OK, err
    assert "2 at a time" in err
    assert out.startswith("all 240 realisations of the plan are there\n")
    assert _numbers(there) == _numbers(here)


def _numbers(file: Path) -> list[tuple[object, ...]]:
    """All that a results file holds but times."""
    with store.inspect(file) as results:
        tables = [results.table(g) for g in range(len(results.design.sprinklings))]
    return [
        (table.realisation.tolist(), table.union_support.tolist(), table.elements.tolist())
        for table in tables
    ]


# -------------------------------------------------------------------- pause and resume


def stderr_of(child: subprocess.Popen[str]) -> Any:
    assert child.stderr is not None
    return child.stderr


@pytest.mark.skipif(os.name == "nt", reason="a console event there")
@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM])
def test_ctrl_c_pauses_and_prints_the_line_that_resumes(
    number: signal.Signals, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    few = saved(tmp_path / "few.json", replace(PLAN, realisations=40))
    many = saved(tmp_path / "my preset.json", replace(PLAN, realisations=100_000))
    file = tmp_path / "out.results"
    arguments = ["run", many, "--results", str(file), "--workers", "2"]
    with process(*arguments, start_new_session=True) as child:
        _wait_for(file)
        os.killpg(child.pid, number)  # as a terminal does: the workers get it too
        start = time.monotonic()
        out, err = child.communicate(timeout=30)
    assert time.monotonic() - start < 5
    assert child.returncode == cli.STOPPED
    assert out == ""
    assert "Traceback" not in err
    assert "paused after" in err
    line = err.splitlines()[-1]
    assert shlex.split(line) == ["lozenge", *arguments]
    with store.inspect(file) as results:
        done = sum(n for n, _ in results.counts())
    assert f"paused after {done} realisations" in err

    assert cli.main(["run", few, *arguments[2:]]) == cli.OK
    undisturbed = computed(few, tmp_path / "whole.results")
    taken = [
        (realisations[:40], entropies[:40], elements[:40])  # type: ignore[index]
        for realisations, entropies, elements in _numbers(file)
    ]
    assert taken == [tuple(part[:40] for part in row) for row in _numbers(undisturbed)]  # type: ignore[index]


def _wait_for(file: Path) -> None:
    """Until something is recorded."""
    end = time.monotonic() + 60
    while time.monotonic() < end:
        if file.exists():
            with store.inspect(file) as results:
                if sum(done for done, _ in results.counts()) > 3:
                    return
        time.sleep(0.1)
    pytest.fail("nothing was recorded in a minute")


# --------------------------------------------------------------------------- progress


def progress(**changes: Any) -> campaign.Progress:
    now = campaign.Progress(
        done=1200,
        failed=0,
        planned=4000,
        running=2,
        elapsed=60.0,
        seconds_left=140.0,
        error=0.031,
        wanted=0.02,
    )
    return now._replace(**changes)


def test_progress_tells_done_failed_error_and_time_left() -> None:
    target = Target(quantity="slope", error=0.02, relative=True)
    assert progress_text(progress(), target) == (
        "1 200 of 4 000 done, error 3.1 %, wanted 2 %, 60 s, about 2 min 20 s left"
    )
    nothing = progress(failed=3, error=float("inf"), seconds_left=float("nan"))
    assert progress_text(nothing, target) == (
        "1 200 of 4 000 done, 3 failed, error not known yet, wanted 2 %, 60 s"
    )
    assert "wanted" not in progress_text(progress(), None)


def test_without_a_terminal_a_line_comes_every_half_minute(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    now = [0.0]
    monkeypatch.setattr(campaign_run.time, "monotonic", lambda: now[0])
    monkeypatch.setattr(sys.stderr, "isatty", lambda: False)
    with campaign_run._progress(PLAN) as report:
        for now[0] in (0.0, 10.0, 29.9, 31.0, 60.0, 62.0):
            report(progress())
    assert capsys.readouterr().err.count("\n") == 3


def test_on_a_terminal_a_bar_is_drawn(
    small: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.setattr(sys.stderr, "isatty", lambda: True)
    monkeypatch.setenv("TERM", "xterm")
    assert cli.main(["run", small, "--results", str(tmp_path / "out.results")]) == cli.OK
    out, err = capsys.readouterr()
    assert "of 64 done" in err
    assert "of 64 done" not in out


# ------------------------------------------------------------- what it does not need


def test_campaigns_import_neither_panel_nor_bokeh_nor_dask(small: str, tmp_path: Path) -> None:
    code = (
        "import sys\n"
        "from concurrent.futures import ThreadPoolExecutor\n"
        "from lozenge_dashboard import campaign_run, cli\n"
        "campaign_run.Processes = ThreadPoolExecutor\n"
        "preset, file = sys.argv[1:]\n"
        "for given in (['plan', preset], ['run', preset, '--results', file], ['results', file]):\n"
        "    assert cli.main(given) == 0\n"
        "names = ('panel', 'bokeh', 'holoviews', 'param', 'tornado', 'pandas', 'matplotlib',\n"
        "         'distributed', 'dask')\n"
        "print(sorted(set(names) & set(sys.modules)), file=sys.stderr)\n"
    )
    with process(small, str(tmp_path / "out.results"), code=code) as child:
        out, err = child.communicate()
    assert child.returncode == 0, err
    assert "reference slope" in out
    assert err.splitlines()[-1] == "[]"


def test_the_page_keeps_the_campaign_of_a_preset_that_it_saves() -> None:
    loaded = presets.shipped()["nested-diamond"]
    kept = as_preset(loaded, SETUP, ViewState(), None)
    assert kept.campaign == loaded.campaign
    assert presets.parse(presets.dumps(kept)).campaign == loaded.campaign


@pytest.fixture(autouse=True)
def handlers() -> Iterator[None]:
    """Signal handlers are as before when a command ends."""
    before = signal.getsignal(signal.SIGINT), signal.getsignal(signal.SIGTERM)
    yield
    assert (signal.getsignal(signal.SIGINT), signal.getsignal(signal.SIGTERM)) == before


# -------------------------------------------------------------------------- other point sets


@pytest.mark.parametrize(
    ("points", "words"),
    [
        (
            replace(SETUP.points, kind="lattice", oversampling=4, curvature="negative"),
            "lattice points, laid at 4 times the density, negative curvature, radius 1",
        ),
        (
            replace(SETUP.points, curvature="positive", radius=1.5),
            "poisson points, positive curvature, radius 1.5",
        ),
    ],
)
def test_a_campaign_over_another_point_set_runs_and_says_which(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], points: PointSource, words: str
) -> None:
    plan = replace(PLAN, realisations=8, axes=(Axis(name="density", values=(60.0, 90.0)),))
    preset = saved(tmp_path / "a.json", plan, SETUP.with_(points=points))
    file = computed(preset, tmp_path / "a.results")
    assert words in " ".join(capsys.readouterr().out.split())
    with store.inspect(file) as results:
        assert results.preset.setup.points == points
        tried = controls(results)
        table = results.table(0)
    elements = table.region_elements[0].mean()
    assert elements == pytest.approx(
        replace(points, density=60.0).elements(SETUP.regions()[0]), rel=0.2
    )
    if points.quasi_uniform:
        assert elements > 1.05 * 60.0 * SETUP.regions()[0].area  # curvature adds volume
        assert tried == (None, None)  # no sprinkling noise to be taken out
    else:
        assert all(found is not None for found in tried)


def test_a_preset_over_a_lattice_is_run_with_what_its_error_means(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    points = replace(SETUP.points, kind="lattice", oversampling=4, curvature="positive")
    preset = saved(tmp_path / "a.json", None, SETUP.with_(points=points))
    assert cli.main(["run", preset]) == cli.OK
    out = " ".join(capsys.readouterr().out.split())
    assert (
        "lattice points, seed 5, laid at 4 times the density, positive curvature, radius 1" in out
    )
    assert "mean of 8 shifts" in out
    assert "no sprinkling noise" in out
    assert "massless only" in out
