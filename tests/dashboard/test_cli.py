"""The command line: what it prints and writes, how it refuses, and that it needs no page."""

from __future__ import annotations

import json
import os
import re
import signal
import subprocess
import sys
import time
from dataclasses import replace
from pathlib import Path
from types import ModuleType
from typing import Any

import numpy as np
import pytest

import lozenge_dashboard
from lozenge_dashboard import cli, run
from lozenge_dashboard.report import cautions
from lozenge_engine import __version__, presets
from lozenge_engine.agreement import Sender
from lozenge_engine.config import Averaging, PointSource, Setup, SweepPlan
from lozenge_engine.cost import Prediction
from lozenge_engine.errors import InputError
from lozenge_engine.geometry import Region
from lozenge_engine.pipeline import compute
from lozenge_engine.pointfile import read_points
from lozenge_engine.presets import Preset
from lozenge_engine.samples import take
from lozenge_engine.sweeps import density_curve, density_draws

PYTHONPATH = [str(Path(m.__file__ or "").parents[1]) for m in (lozenge_dashboard, presets)]
PYTHONPATH += filter(None, [os.environ.get("PYTHONPATH")])
SMALL = Setup(
    points=PointSource(density=250.0, seed=5),
    region_count=2,
    half_width=0.45,
    separation=0.1,
    averaging=Averaging(sprinklings=1),
)


def saved(path: Path, setup: Setup = SMALL, **changes: Any) -> Path:
    """A preset file."""
    presets.write(path, Preset(title="Small", sentence="A small one.", setup=setup, **changes))
    return path


@pytest.fixture
def small(tmp_path: Path) -> Path:
    """A preset of one quick sprinkling of two regions."""
    return saved(tmp_path / "small.json")


@pytest.fixture
def points_csv(tmp_path: Path) -> Path:
    """Own points: 600 of them, in a diamond."""
    rng = np.random.default_rng(3)
    u, v = (rng.random((2, 600)) - 0.5) * np.sqrt(2.0)
    t, x = (u + v) / np.sqrt(2.0), (u - v) / np.sqrt(2.0)
    path = tmp_path / "own.csv"
    rows = "".join(f"{a!r},{b!r}\n" for a, b in zip(t.tolist(), x.tolist(), strict=True))
    path.write_text(f"t,x\n{rows}")
    return path


def one_line(text: str) -> str:
    """The text, which is one line that begins with the program's name."""
    assert text.endswith("\n")
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


# --------------------------------------------------------------------- what it gives


def test_the_table_holds_every_number_with_its_counts_and_both_union_rules(
    small: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert cli.main(["run", str(small)]) == cli.OK
    out, err = capsys.readouterr()
    assert err == ""
    for name in ("patch", "region A", "region B", "union, by support", "union, direct sum"):
        assert re.search(rf"^{name} +\d+ +\d+/\d+\.\d = \d\.\d\d", out, re.MULTILINE), name
    for name in ("I(A:B), by support", "I(A:B), direct sum"):
        assert re.search(rf"^{re.escape(name)} +-?\d\.\d+ +\d\.\d\d$", out, re.MULTILINE), name
    assert "one sprinkling: no error is known" in out
    assert "certificate: met" in out


def test_several_sprinklings_give_means_with_errors_and_scatter(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = saved(tmp_path / "four.json", SMALL.with_(averaging=Averaging(sprinklings=4)))
    assert cli.main(["run", str(path)]) == cli.OK
    out = capsys.readouterr().out
    assert re.search(r"^region A .* \d\.\d+ +\d\.\d+\(\d+\) +0\.\d+$", out, re.MULTILINE)
    assert "mean of 4 sprinklings" in out
    assert cli.main(["run", str(path), "--one"]) == cli.OK
    assert "no error is known" in capsys.readouterr().out


def test_the_average_is_that_of_the_sprinklings_one_by_one(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    setup = SMALL.with_(averaging=Averaging(sprinklings=3))
    path = saved(tmp_path / "three.json", setup)
    assert cli.main(["run", str(path), "--json", "-"]) == cli.OK
    found = json.loads(capsys.readouterr().out)["average"]["regions"][0]
    samples = [compute(setup.config(k)).regions[0].entropy for k in range(3)]
    assert found["mean"] == pytest.approx(np.mean(samples), abs=1e-12)
    assert found["standard_error"] == pytest.approx(np.std(samples, ddof=1) / 3**0.5, abs=1e-12)
    assert found["scatter"] == pytest.approx(np.std(samples, ddof=1), abs=1e-12)


def test_the_json_has_the_promised_keys_and_the_engines_numbers(
    small: Path, tmp_path: Path
) -> None:
    path = tmp_path / "out.json"
    assert cli.main(["run", str(small), "--json", str(path)]) == cli.OK
    found = json.loads(path.read_text(encoding="utf-8"))
    assert set(found) >= {
        "patch_modes",
        "regions",
        "union",
        "mutual_information",
        "certificate",
        "seconds",
        "versions",
        "preset",
    }
    region = {"t0", "x0", "half_width", "boost", "elements", "kept_modes", "nominal_modes"}
    assert set(found["regions"][0]) >= region | {"entropy"}
    for rule in ("support", "direct_sum"):
        assert set(found["union"][rule]) >= {"kept_modes", "entropy"}
    assert set(found["mutual_information"][0]) >= {"a", "b", "support", "direct_sum"}
    result = compute(SMALL.config())
    assert found["regions"][1]["entropy"] == pytest.approx(result.regions[1].entropy, abs=1e-12)
    assert found["points_sha256"] == result.points_sha256
    assert found["preset"] == json.loads(small.read_text(encoding="utf-8"))
    assert found["seconds"]["modes"] > 0
    assert {"numpy", "python", "lozenge"} <= set(found["versions"])


def test_one_region_has_no_union(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = saved(tmp_path / "one.json", SMALL.with_(region_count=1, half_width=0.5))
    assert cli.main(["run", str(path), "--json", "-"]) == cli.OK
    found = json.loads(capsys.readouterr().out)
    assert "union" not in found
    assert found["mutual_information"] == []


def test_the_arrays_hold_points_spectra_masks_and_symplectic_values(
    small: Path, tmp_path: Path
) -> None:
    path = tmp_path / "arrays.npz"
    assert cli.main(["run", str(small), "--arrays", str(path)]) == cli.OK
    result = compute(SMALL.config())
    with np.load(path, allow_pickle=False) as found:
        assert set(found) == {"u", "v", "region_of", "patch_eigenvalues", "patch_kept"} | {
            f"{part}_{kind}"
            for part in ("region_A", "region_B", "union_support", "union_direct_sum")
            for kind in ("eigenvalues", "kept", "symplectic", "contributions")
        }
        np.testing.assert_array_equal(found["u"], result.u)
        np.testing.assert_array_equal(found["region_of"], result.region_of)
        assert found["patch_kept"].sum() == result.patch.kept_modes
        region = result.regions[1]
        np.testing.assert_allclose(found["region_B_eigenvalues"], region.eigenvalues, atol=1e-9)
        assert found["region_B_kept"].sum() == region.kept_modes
        assert found["region_B_symplectic"].shape == (region.kept_modes,)
        assert found["region_B_contributions"].sum() == pytest.approx(region.entropy, abs=1e-9)


def test_own_points_take_the_place_of_the_sprinkling(
    small: Path, points_csv: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert cli.main(["run", str(small), "--points", str(points_csv), "--json", "-"]) == cli.OK
    found = json.loads(capsys.readouterr().out)
    own = read_points(points_csv)
    assert found["elements"] == 600
    assert found["points_sha256"] == own.sha256
    assert found["preset"]["points"] == {
        "kind": "file",
        "density": 300.0,
        "seed": 5,
        "file": "own.csv",
        "sha256": own.sha256,
    }
    assert "average" not in found


def test_points_named_by_a_preset_are_found_beside_it_if_they_are_the_same(
    points_csv: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    own = read_points(points_csv)
    source = PointSource(kind="file", density=300.0, file="own.csv", sha256=own.sha256)
    path = saved(tmp_path / "own.json", SMALL.with_(points=source))
    assert cli.main(["run", str(path)]) == cli.OK
    assert "600 elements, points of own.csv" in capsys.readouterr().out

    lines = points_csv.read_text().splitlines()
    points_csv.write_text("\n".join(lines[:-1]))
    assert cli.main(["run", str(path)]) == cli.BAD_INPUT
    assert "beside the preset, with hash" in one_line(capsys.readouterr().err)
    assert cli.main(["run", str(path), "--points", str(points_csv)]) == cli.OK
    assert "599 elements" in capsys.readouterr().out

    points_csv.unlink()
    assert cli.main(["run", str(path)]) == cli.BAD_INPUT
    assert "name it with --points" in one_line(capsys.readouterr().err)


def test_the_senders_numbers_are_compared(
    tmp_path: Path, points_csv: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    result = compute(SMALL.config())
    path = saved(tmp_path / "sent.json", sender=Sender.of(result))
    assert cli.main(["run", str(path)]) == cli.OK
    assert re.search(
        r"sender's numbers: same points, S equal (in every digit|to \d+e-\d+)\n",
        capsys.readouterr().out,
    )
    assert cli.main(["run", str(path), "--points", str(points_csv)]) == cli.OK
    assert "sender's numbers: different points: " in capsys.readouterr().out

    numbers = json.loads(path.read_text())
    numbers["sender"]["numbers"]["regions"][0]["entropy"] += 0.5
    path.write_text(json.dumps(numbers))
    assert cli.main(["run", str(path)]) == cli.OK
    assert "same points, but S of A differs by 0.5" in capsys.readouterr().out


@pytest.mark.parametrize("count", [1, 2])
def test_the_sweeps_are_told_with_their_fits(
    count: int, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    plan = SweepPlan(
        density_low=200.0, density_high=400.0, density_points=3, size_points=3, separation_points=2
    )
    setup = SMALL.with_(region_count=count, averaging=Averaging(sprinklings=3), sweeps=plan)
    path, out = saved(tmp_path / "sweeps.json", setup), tmp_path / "out.json"
    assert cli.main(["run", str(path), "--sweeps", "--json", str(out)]) == cli.OK
    text = capsys.readouterr().out
    assert re.search(r"^density +elements +ln\(l/a\) +S of all regions", text, re.MULTILINE)
    assert re.search(r"b = -?\d\.\d+\(\d+\), c = ", text)
    assert "asymptotic" in text
    assert ("one region has no separation" in text) == (count == 1)

    found = json.loads(out.read_text(encoding="utf-8"))["sweeps"]
    draws = density_draws(setup)
    curve = density_curve(setup, {draw.key: take(draw) for draw in draws.draws})
    assert curve.fit is not None
    assert found["density"]["fit"]["slope"] == pytest.approx(curve.fit.slope, abs=1e-9)
    assert [p["density"] for p in found["density"]["points"]] == pytest.approx(
        [200, 283, 400], 1e-2
    )
    assert len(found["separation"]["points"]) == (0 if count == 1 else 2)


def test_a_sprinkling_that_cannot_be_read_is_left_out_with_its_reason(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    def sometimes(draw: Any, **options: Any) -> Any:
        if draw.config.realisation == 1:
            raise InputError("region A: given 1 element")
        return take(draw, **options)

    monkeypatch.setattr(run.samples, "take", sometimes)
    path = saved(tmp_path / "three.json", SMALL.with_(averaging=Averaging(sprinklings=3)))
    assert cli.main(["run", str(path)]) == cli.OK
    out = capsys.readouterr().out
    assert "mean of 2 sprinklings" in out
    assert "caution: sprinkling 1 is left out: region A: given 1 element" in out


def test_progress_is_shown_on_a_terminal_for_long_work_only(
    small: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    reports = []

    def reporting(*arguments: Any, report: Any, **options: Any) -> Any:
        reports.append(report)
        return compute(*arguments, report=report, **options)

    monkeypatch.setattr(run, "compute", reporting)
    monkeypatch.setattr(sys.stderr, "isatty", lambda: True)
    for seconds in (1.0, 60.0):
        monkeypatch.setattr(run, "predict", lambda _config, s=seconds: Prediction(s, 1e6, 0.1))
        assert cli.main(["run", str(small)]) == cli.OK
    assert [report is None for report in reports] == [True, False]
    monkeypatch.setattr(sys.stderr, "isatty", lambda: False)
    assert cli.main(["run", str(small)]) == cli.OK
    assert reports[-1] is None
    assert "sprinkling" not in capsys.readouterr().out.replace("one sprinkling", "")


def test_the_shipped_presets_are_listed_and_printed(capsys: pytest.CaptureFixture[str]) -> None:
    assert cli.main(["presets"]) == cli.OK
    out = capsys.readouterr().out
    assert [line for line in out.splitlines() if not line.startswith(" ")] == [*presets.SHIPPED]
    assert out.count("(invented scenario)") == len(presets.SHIPPED)
    assert cli.main(["presets", "volume-law"]) == cli.OK
    assert presets.parse(capsys.readouterr().out) == presets.shipped()["volume-law"]


@pytest.mark.parametrize("name", presets.SHIPPED)
def test_every_shipped_preset_runs_and_can_be_trusted(
    name: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert cli.main(["run", name, "--one"]) == cli.OK
    out = capsys.readouterr().out
    assert out.startswith(presets.shipped()[name].title + " (invented scenario)\n")
    # That one is small on the screen, for its campaign at higher densities; it has to say so.
    assert ("not in the scaling regime" in out) == (name == "rows-of-tenths")


def test_the_version_is_told(capsys: pytest.CaptureFixture[str]) -> None:
    for option in ("-V", "--version"):
        with pytest.raises(SystemExit) as caught:
            cli.main([option])
        assert caught.value.code == 0
        assert capsys.readouterr().out == f"lozenge {__version__}\n"


# ---------------------------------------------------------------------- how it refuses


@pytest.mark.parametrize(
    ("arguments", "telling"),
    [
        (["run"], "required: PRESET; see lozenge run --help"),
        (["run", "none.json"], "none.json: given no such file"),
        (["run", "two-equal-region"], "write two-equal-regions"),
        (["run", "nonsense"], "see lozenge presets"),
        (["run", "volume-law", "--points", "none.csv"], "none.csv"),
        (["run", "volume-law", "--json", "none/out.json"], "choose another path"),
        (["run", "volume-law", "--arrays", "."], "a directory"),
        (["run", "volume-law", "--json", "a", "--arrays", "./a"], "one file twice"),
        (["run", "volume-law", "--colour"], "unrecognized arguments: --colour"),
        (["presets", "corner-regions"], "write corner-region"),
        (["--port", "70000"], "allowed is a whole number from 0 to 65535"),
        (["--port", "http"], "given http"),
        (["volume-law", "more"], "unrecognized arguments: more"),
        (["none.json"], "none.json: given no such file"),
    ],
)
def test_bad_input_ends_with_status_2_and_one_line_that_says_what_to_do(
    arguments: list[str],
    telling: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.chdir(tmp_path)
    assert cli.main(arguments) == cli.BAD_INPUT
    out, err = capsys.readouterr()
    assert out == ""
    assert telling in one_line(err)
    assert list(tmp_path.iterdir()) == []


def test_a_bad_preset_is_refused_with_its_path_and_its_key(
    small: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    small.write_text(small.read_text().replace('"half_width": 0.45', '"half_width": 0.55'))
    assert cli.main(["run", str(small)]) == cli.BAD_INPUT
    err = one_line(capsys.readouterr().err)
    assert err.startswith(f"lozenge: {small}: regions.row: ")
    assert "lower half_width to at most 0.475" in err


def test_an_unwritable_output_is_refused_before_anything_is_computed(
    small: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(run, "compute", lambda *_a, **_k: pytest.fail("computed"))
    assert cli.main(["run", str(small), "--json", str(small / "out.json")]) == cli.BAD_INPUT


def test_a_disk_that_fills_up_does_not_cost_the_table(
    small: Path,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    def full_disk(_descriptor: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "fsync", full_disk)
    assert cli.main(["run", str(small), "--json", str(tmp_path / "a.json")]) == cli.BAD_INPUT
    out, err = capsys.readouterr()
    assert "region A" in out
    assert "No space left on device" in one_line(err)
    assert [path.name for path in tmp_path.iterdir()] == ["small.json"]


def test_an_unmet_certificate_ends_with_status_3_and_marks_every_number(
    small: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    def doubtful(*arguments: Any, **options: Any) -> Any:
        result = compute(*arguments, **options)
        unmet = result.certificate._replace(met=False, reasons=("a mode is missing",))
        return replace(result, certificate=unmet)

    monkeypatch.setattr(run, "compute", doubtful)
    assert cli.main(["run", str(small)]) == cli.NOT_TRUSTED
    out = capsys.readouterr().out
    assert "certificate: NOT met" in out
    assert "a mode is missing" in out
    rows = re.findall(r"^(?:region|union|I\().*$", out, re.MULTILINE)
    assert len(rows) == 6
    assert all(re.search(r"\d\*", row) for row in rows)


def test_a_refused_entropy_ends_with_status_3_and_its_reason(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    setup = SMALL.with_(region_count=1, half_width=0.9, truncation_mode="patch_only")
    assert cli.main(["run", str(saved(tmp_path / "p.json", setup))]) == cli.NOT_TRUSTED
    out = capsys.readouterr().out
    assert re.search(r"^region A .* –\*$", out, re.MULTILINE)
    assert "caution: region A: refused: S = 0" in " ".join(out.split())


def test_a_reader_that_has_gone_is_no_error(small: Path) -> None:
    with process("run", str(small)) as child:
        assert child.stdout is not None
        assert child.stderr is not None
        child.stdout.close()
        assert child.stderr.read() == ""
    assert child.returncode == cli.OK


@pytest.mark.skipif(os.name == "nt", reason="a console event there")
def test_ctrl_c_ends_with_status_130_and_one_line(tmp_path: Path) -> None:
    setup = SMALL.with_(averaging=Averaging(sprinklings=10_000))
    path, out = saved(tmp_path / "long.json", setup), tmp_path / "out.json"
    code = (
        "from lozenge_dashboard import cli, run\n"
        "take = run.samples.take\n"
        "def told(*a, **k):\n"
        "    print('started', flush=True)\n"
        "    return take(*a, **k)\n"
        "run.samples.take = told\n"
        "raise SystemExit(cli.main())"
    )
    with process("run", str(path), "--json", str(out), code=code) as child:
        assert child.stdout is not None
        assert child.stderr is not None
        assert child.stdout.readline() == "started\n"
        child.send_signal(signal.SIGINT)
        start = time.monotonic()
        err = child.stderr.read()
    assert time.monotonic() - start < 5
    assert child.returncode == cli.STOPPED
    assert one_line(err) == "lozenge: stopped by Ctrl-C\n"
    assert not out.exists()


# ------------------------------------------------------------- what it does not need


def test_run_imports_neither_panel_nor_bokeh(small: Path) -> None:
    code = (
        "import sys\n"
        "from lozenge_dashboard.cli import main\n"
        "status = main()\n"
        "names = ('panel', 'bokeh', 'holoviews', 'param', 'tornado', 'pandas', 'matplotlib')\n"
        "print(sorted(set(names) & set(sys.modules)), file=sys.stderr)\n"
        "raise SystemExit(status)"
    )
    with process("run", str(small), code=code) as child:
        out, err = child.communicate()
    assert child.returncode == cli.OK
    assert "region A" in out
    assert err == "[]\n"


# --------------------------------------------------------------------------- the page


@pytest.fixture
def served(monkeypatch: pytest.MonkeyPatch) -> list[tuple[Any, ...]]:
    """What the page was asked to serve, in a stand-in for it."""
    calls: list[tuple[Any, ...]] = []
    app = ModuleType("lozenge_dashboard.app")
    app.serve = lambda *arguments: calls.append(arguments)  # type: ignore[attr-defined]
    monkeypatch.setitem(sys.modules, "lozenge_dashboard.app", app)
    monkeypatch.setattr(lozenge_dashboard, "app", app, raising=False)
    return calls


def test_without_a_preset_the_page_opens_with_the_first(served: list[tuple[Any, ...]]) -> None:
    assert cli.main([]) == cli.OK
    assert served == [(presets.shipped()[presets.FIRST], None, None, True)]


def test_the_page_gets_the_preset_its_path_and_the_port(
    served: list[tuple[Any, ...]], small: Path
) -> None:
    assert cli.main([str(small), "--no-browser", "--port", "5050"]) == cli.OK
    assert served == [(presets.read(small), small, 5050, False)]


def test_a_refused_preset_never_reaches_the_page(
    served: list[tuple[Any, ...]], small: Path
) -> None:
    small.write_text("{")
    assert cli.main([str(small)]) == cli.BAD_INPUT
    assert served == []


# ------------------------------------------------------------------------- cautions


@pytest.mark.parametrize(
    ("changes", "telling"),
    [
        ({"half_width": 0.2}, "fewer than 80 elements (A "),
        ({"truncation_mode": "union_count"}, "known to be wrong for several regions"),
        ({"truncation_mode": "none"}, "S grows with the region's volume"),
        (
            {"region_list": (Region(half_width=0.4, boost=0.3),)},
            "not invariant under boosts",
        ),
    ],
)
def test_where_a_number_could_mislead_a_caution_stands_beside_it(
    changes: dict[str, Any], telling: str
) -> None:
    setup = SMALL.with_(**changes)
    assert any(telling in note for note in cautions(setup, compute(setup.config())))


def test_good_numbers_carry_no_caution() -> None:
    assert cautions(SMALL, compute(SMALL.config())) == []
