"""Export: figures, tables, methods and sources say what was computed, in files that stand alone."""

from __future__ import annotations

import csv
import functools
import io
import math
import re
import zlib
from concurrent.futures import Executor, Future
from dataclasses import replace
from pathlib import Path
from typing import Any
from xml.etree import ElementTree as ET

import matplotlib as mpl
import pytest
from tests.dashboard.scenes import SMALL, bare, full

from lozenge_dashboard import export
from lozenge_dashboard.campaigns import Campaigns, Watch
from lozenge_dashboard.palette import LIGHT, MARKERS, UNION_MARKERS
from lozenge_dashboard.publish import findings, latex, methods, numbers, shots, sources, tables
from lozenge_dashboard.publish.facts import Facts
from lozenge_dashboard.publish.figures import DOUBLE, DPI, SINGLE, drawn, printed
from lozenge_dashboard.publish.ink import SYMBOLS, TEXT_SIZE
from lozenge_dashboard.publish.shots import BENCH, CAMPAIGN, EVIDENCE, Shot
from lozenge_dashboard.publish.tables import Estimated, Head, Table
from lozenge_dashboard.publish.wording import typeset
from lozenge_dashboard.records import EvidenceScene
from lozenge_dashboard.views import cutstudy
from lozenge_engine import campaign, store
from lozenge_engine.config import Averaging, PointSource, Setup
from lozenge_engine.errors import InputError
from lozenge_engine.evidence import EvidencePlan
from lozenge_engine.kernels.scaling import Estimate
from lozenge_engine.plan import Axis, CampaignPlan, Target
from lozenge_engine.presets import Preset, ViewState, parse

VIEW = ViewState()
TINY = Setup(
    points=PointSource(density=100.0, seed=3),
    half_width=0.35,
    separation=0.2,
    averaging=Averaging(sprinklings=2),
    sweeps=replace(SMALL.sweeps, density_low=80.0, density_high=160.0, density_points=3),
)
DENSE = TINY.with_(points=PointSource(density=320.0, seed=3))
PLAN = EvidencePlan(
    alphas=3, alpha_low=0.7, alpha_high=1.4, realisations=2, rules=("root_count",), level="exact"
)


def preset(setup: Setup = SMALL, **more: Any) -> Preset:
    return Preset(
        title="Tarn Vellis 100 %", sentence="A trial.", invented=True, setup=setup, **more
    )


class Here(Executor):
    """Calls at once, in this thread."""

    def submit(self, fn: Any, /, *args: Any, **kwargs: Any) -> Future[Any]:
        future: Future[Any] = Future()
        future.set_result(fn(*args, **kwargs))
        return future


@pytest.fixture(scope="module")
def results(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A small finished campaign over density, three sizes, two classes of placements."""
    plan = CampaignPlan(
        axes=(Axis(name="density", values=(90.0, 130.0, 190.0)),),
        placements=((0.0, 0.0), (0.1, 0.0)),
        realisations=12,
        target=Target(quantity="slope", error=0.5, relative=True),
        smallest_region=10,
    )
    path = tmp_path_factory.mktemp("results") / "small.sqlite"
    with store.create(path, preset(TINY, campaign=plan)) as made:
        campaign.run(made, executor=Here(), capacity=1)
    return path


@pytest.fixture(scope="module")
def watch(results: Path) -> Watch:
    return Campaigns(results.parent).watch(results.name)


@functools.cache
def evidence() -> EvidenceScene:
    """The evidence page's quick records, and none of the others."""
    asked = preset(DENSE, evidence=PLAN)
    quick = ("cutstudy", "thresholds", "modeshape", "statecheck")
    scene, notes = export._evidence(asked, None, chosen=quick, results=None)
    assert scene is not None
    assert not notes
    return scene


def bench() -> list[Shot]:
    return shots.bench_shots(full(), VIEW, chosen=BENCH)


def shot(name: str) -> Shot:
    return next(one for one in bench() if one.name == name)


def facts(**parts: Any) -> Facts:
    given: dict[str, Any] = {"scene": full(), **parts}
    return Facts(preset(), ("lozenge 0",), **given)


# ---------------------------------------------------------------------- figures


@functools.cache
def files(name: str) -> dict[str, bytes]:
    one = shot(name)
    return dict(printed(one.figure, one.data, column=SINGLE, title="A <title>", letters=True))


def fonts(pdf: bytes) -> str:
    """The text of a PDF with its compressed parts written out."""
    parts = [pdf]
    for found in re.finditer(rb"stream\r?\n(.*?)endstream", pdf, re.DOTALL):
        try:
            parts.append(zlib.decompress(found[1]))
        except zlib.error:
            continue
    return b"\n".join(parts).decode("latin-1")


def test_pdf_embeds_its_font_as_truetype() -> None:
    text = fonts(files("scaling-density")["pdf"])
    assert "/FontFile2" in text
    assert "DejaVuSans" in text
    assert "/Type3" not in text


def test_svg_parses_and_names_nothing_outside_itself() -> None:
    svg = files("scaling-density")["svg"]
    root = ET.fromstring(svg)
    assert root.tag == "{http://www.w3.org/2000/svg}svg"
    assert b"<!DOCTYPE" not in svg
    links = [v for node in root.iter() for k, v in node.attrib.items() if k.endswith("href")]
    assert links
    assert all(link.startswith("#") for link in links)
    named = {v for node in root.iter() for v in node.attrib.values()}
    texts = {node.text or "" for node in root.iter()}
    assert not any(re.search(r"https?:|url\((?!#)", value) for value in named | texts)
    assert not root.findall(".//{http://www.w3.org/2000/svg}text")  # outlines: no font is needed


@pytest.mark.parametrize(("column", "mm"), [(SINGLE, 86), (DOUBLE, 178)])
def test_png_has_300_dpi_at_the_width_of_its_column(column: Any, mm: int) -> None:
    one = shot("counts")
    made = dict(printed(one.figure, one.data, column=column, title="T"))["png"]
    width = int.from_bytes(made[16:20], "big")
    assert width == pytest.approx(mm / 25.4 * DPI, abs=1)
    density = made[made.index(b"pHYs") + 4 :]
    assert int.from_bytes(density[:4], "big") == round(DPI / 0.0254)


def test_equal_columns_give_equal_bytes() -> None:
    one = shot("counts")
    again = dict(printed(one.figure, one.data, column=SINGLE, title="A <title>", letters=True))
    assert again == files("counts")


def checked(one: Shot, column: Any) -> None:
    """Draw and look: nothing empty, nothing below 7 points, no words beyond the sheet."""
    sheet = drawn(one.figure, one.data, column=column, letters=one.letters)
    axes = sheet.axes[0]
    with mpl.rc_context({"text.parse_math": False}):
        sheet.draw_without_rendering()
    assert axes.collections or axes.lines, one.name
    assert axes.get_xlabel(), one.name
    shown = [*axes.texts, axes.xaxis.label, axes.yaxis.label]
    for axis, ends in ((axes.xaxis, axes.get_xlim()), (axes.yaxis, axes.get_ylim())):
        places = zip(axis.get_majorticklocs(), axis.get_ticklabels(), strict=True)
        shown += [label for at, label in places if min(ends) <= at <= max(ends)]
    box = sheet.bbox
    for text in [each for each in shown if each.get_text().strip()]:
        assert text.get_fontsize() >= TEXT_SIZE, (one.name, text.get_text())
        at = text.get_window_extent()
        inside = (
            at.x0 >= box.x0 - 1
            and at.x1 <= box.x1 + 1
            and at.y0 >= box.y0 - 1
            and at.y1 <= box.y1 + 1
        )
        assert inside, (one.name, text.get_text())


def test_every_view_of_the_bench_fits_a_column() -> None:
    for one in bench():
        checked(one, SINGLE)
    assert {one.name.split("-")[0] for one in bench()} == set(BENCH)


def test_every_view_of_a_campaign_fits_a_column(watch: Watch) -> None:
    found = shots.campaign_shots(watch, chosen=CAMPAIGN)
    assert {one.name.split("-")[0] for one in found} == set(CAMPAIGN)
    for one in found:
        assert not one.empty, one.name
        checked(one, SINGLE)


def test_a_view_without_anything_to_show_is_empty() -> None:
    one = TINY.with_(region_count=1)
    found = shots.bench_shots(full(one), VIEW, chosen=["separation", "scaling"])
    assert {each.name: each.empty for each in found} == {
        "scaling-density": False,
        "scaling-size": False,
        "separation-mutual": True,
        "separation-union": True,
    }


def test_evidence_that_was_computed_draws_and_the_rest_is_left_out() -> None:
    found = shots.evidence_shots(evidence(), VIEW, chosen=EVIDENCE)
    drawn_views = {one.name.split("-")[0] for one in found if not one.empty}
    assert drawn_views == {"cutstudy", "thresholds", "modeshape", "statecheck"}
    for one in found:
        if not one.empty:
            checked(one, SINGLE)


def test_marks_have_the_pages_colours_and_fills() -> None:
    sheet = drawn(*shot("spectrum")[3:5], column=SINGLE)
    points = [c for c in sheet.axes[0].collections if len(c.get_offsets()) > 1]
    edges = {mpl.colors.to_hex(one) for c in points for one in c.get_edgecolor()}
    faces = {mpl.colors.to_hex(one) for c in points for one in c.get_facecolor()}
    assert set(LIGHT.regions[:2]) <= edges | faces
    assert any(len(c.get_facecolor()) == 0 for c in points)  # dropped modes are hollow


def test_every_marker_of_the_page_has_a_symbol() -> None:
    used = {*MARKERS, *UNION_MARKERS.values(), *cutstudy.RULE_MARKERS.values()}
    assert {*used, cutstudy.UNCUT_MARKER} <= set(SYMBOLS)


def test_region_letters_stand_where_hues_are_regions_only() -> None:
    modes = shot("entropies-modes")
    with_key = drawn(modes.figure, modes.data, column=SINGLE, letters=True).axes[0].get_legend()
    assert [text.get_text() for text in with_key.get_texts()][:2] == ["A", "B"]
    assert drawn(modes.figure, modes.data, column=SINGLE).axes[0].get_legend() is None
    named = shot("counts")
    assert drawn(named.figure, named.data, column=SINGLE, letters=True).axes[0].get_legend() is None


def test_nothing_global_is_left_behind() -> None:
    from matplotlib import _pylab_helpers

    before = dict(mpl.rcParams)
    one = shot("counts")
    drawn(one.figure, one.data, column=SINGLE)
    assert not _pylab_helpers.Gcf.figs
    assert dict(mpl.rcParams) == before


# ----------------------------------------------------------------------- tables

SAMPLE = Table(
    "sample",
    "50 % of n_A",
    (Head("name"), Head("S", "nats", estimated=True), Head("count"), Head("p", digits=".2g")),
    (
        ("A & B", Estimated(0.3333, 0.012), 8, 3.3e-5),
        ("C", Estimated(-12.3, 1.4), 12, math.nan),
        ("D", Estimated(math.nan, math.nan), 0, 0.5),
    ),
)


def test_csv_reads_back_as_the_same_numbers() -> None:
    head, *rows = csv.reader(io.StringIO(tables.csv_text(SAMPLE)))
    assert head == ["name", "S (nats)", "standard error of S (nats)", "count", "p"]
    assert [float(cell) for cell in rows[0][1:]] == [0.3333, 0.012, 8.0, 3.3e-5]
    assert rows[2][1:3] == ["", ""]


def test_latex_aligns_decimals_and_writes_errors_in_brackets() -> None:
    text = tables.latex_text(SAMPLE)
    assert r"A \& B & 0 & .333(12) & 8 & $\times$" not in text
    assert r"A \& B & 0 & .333(12) & 8 & 3 & .3$\times$10$^-$$^5$ \\" in text
    assert r"$-$12 & .3(14)" in text
    assert r"\caption{50 \% of n\_A}" in text
    assert r"\multicolumn{2}{c}{(nats)}" in text


@pytest.mark.parametrize("kind", ["bench", "campaign", "evidence"])
def test_every_row_of_every_table_has_all_columns(kind: str, watch: Watch) -> None:
    found = {
        "bench": lambda: numbers.bench_tables(full()),
        "campaign": lambda: numbers.campaign_tables(watch),
        "evidence": lambda: findings.evidence_tables(evidence()),
    }[kind]()
    assert len(found) >= 3
    for table in found:
        head, *rows = csv.reader(io.StringIO(tables.csv_text(table)))
        assert rows, table.name
        assert {len(row) for row in rows} == {len(head)}, table.name
        text = tables.latex_text(table)
        layout = re.search(r"\\begin\{tabular\}\{(.*)\}\n", text)
        assert layout is not None
        columns = len(re.findall("[lr]", layout[1]))
        body = text.split("\\midrule\n")[1].split("\\bottomrule")[0].strip().splitlines()
        for line in body:
            wide = line.count(r"\multicolumn{2}")
            assert len(re.findall(r"(?<!\\)&", line)) + 1 + wide == columns, (table.name, line)


def test_values_are_those_of_the_average() -> None:
    table = numbers.bench_tables(full())[0]
    row = next(row for row in table.rows if row[0] == "S(A)")
    estimate = full().average.regions[0]
    assert row[2] == Estimated(estimate.mean, estimate.error)
    assert "3 sprinklings" in table.caption
    assert "no error is known" in numbers.bench_tables(bare())[0].caption


def test_latex_escapes_what_would_be_a_command() -> None:
    assert latex.escaped(r"\input{x} 5 % & _^~") == (
        r"\textbackslash{}input\{x\} 5 \% \& \_\textasciicircum{}\textasciitilde{}"
    )


def test_minus_signs_and_powers_are_typeset_and_words_are_not() -> None:
    assert typeset("b = -0.4, half-width, 3e-05, 2-3 of 1e+06") == (
        "b = −0.4, half-width, 3×10⁻⁵, 2-3 of 1×10⁶"
    )


# ---------------------------------------------------------------------- methods


def said(**parts: Any) -> str:
    return methods.paragraph(facts(**parts))


def of(setup: Setup, **parts: Any) -> str:
    given: dict[str, Any] = {"scene": bare()._replace(setup=setup), **parts}
    return methods.paragraph(Facts(preset(setup), ("lozenge 0",), **given))


def test_methods_say_mean_only_of_a_mean() -> None:
    assert "means over 3 sprinklings" in said()
    alone = said(scene=bare())
    assert "one sprinkling; no error is known" in alone
    assert "means over" not in alone


def test_methods_say_fits_only_where_there_is_one() -> None:
    fitted = said()
    fit = full().density.fit
    assert f"fitted to its {fit.points} points" in fitted
    unfitted = replace(full().density, fit=None, note="no fit: a reason")
    text = said(scene=full()._replace(density=unfitted, size=None))
    assert "was fitted" not in text
    assert "no fit: a reason" in text
    assert "reference slope" not in text


def test_methods_say_sweeps_only_if_drawn() -> None:
    assert "separation was varied" in said()
    assert "sweep" not in said(scene=bare())
    assert "separation was varied" not in said(scene=bare())


def test_methods_say_certificate_of_what_was_certified() -> None:
    assert "are certified" in said()
    result = bare().result
    broken = replace(
        result, certificate=result.certificate._replace(met=False, reasons=("a reason",))
    )
    text = said(scene=full()._replace(result=broken))
    assert "are certified" not in text
    assert "not met (a reason)" in text


def test_methods_say_same_checks_hold_only_if_all_are_trusted() -> None:
    words = "same checks hold for all 3"
    assert words in said()
    marked = replace(full().average, trusted=False)
    assert words not in said(scene=full()._replace(average=marked))


def test_methods_say_union_rules_only_of_several_regions() -> None:
    assert "by support" in said()
    one = of(Setup(points=SMALL.points, region_count=1, half_width=0.4))
    assert "by support" not in one
    assert "S(AB)" not in one
    assert "The region is the causal diamond A" in one


def test_methods_say_cuts_as_they_were() -> None:
    assert of(SMALL).count("√n/(4π)") == 2
    assert "no mode was cut" in of(SMALL.with_(truncation_mode="regions_only"))
    assert "2 √n/(4π)" in of(SMALL.with_(alpha=2.0))
    assert "n the elements of the union" in of(SMALL.with_(truncation_mode="union_count"))
    text = of(SMALL.with_(truncation_mode="fixed_number", number=7))
    assert "the 7 largest positive modes were kept" in text


def test_methods_say_mass_order_and_metric_only_if_set() -> None:
    plain = of(SMALL)
    assert "without mass" in plain
    assert "Rényi" not in plain
    assert "metric" not in plain
    assert "m = 2 inverse half-widths" in of(SMALL.with_(mass=2.0))
    assert "order 2" in of(SMALL.with_(order=2.0))
    curved = replace(SMALL.points, curvature="positive", radius=2.0)
    assert "Ω = 1/cos(t/l), l = 2" in of(SMALL.with_(points=curved))


def test_methods_say_how_points_were_laid() -> None:
    assert "Poisson process" in of(SMALL)
    laid = replace(SMALL.points, kind="lattice", oversampling=4)
    text = of(SMALL.with_(points=laid))
    assert "Poisson" not in text
    assert "4 times as many points" in text


def test_methods_say_failures() -> None:
    assert "left out" not in said(scene=bare())
    assert "1 sprinkling left out" in said(failures=("sprinkling 2 is left out: a reason",))


def test_methods_say_references_only_if_they_were_computed() -> None:
    assert "twin" not in said()
    assert "harmonic chain" not in said()


def test_methods_of_a_campaign_claim_its_fits_and_target(watch: Watch) -> None:
    text = methods.paragraph(Facts(watch.preset, ("lozenge 0",), watch=watch))
    fit = watch.estimates.fits[0]
    assert fit.report is not None
    assert "12 realisations at each of 3 densities" in text
    assert f"fitted to {fit.report.fit.cells} points" in text
    assert "constant of its own in the fits" in text
    assert "certificate of the patch's modes is met in every realisation" in text
    assert ("is settled" in text) == fit.report.settled
    assert "means over" not in text  # nothing of the bench


def test_methods_of_an_unfinished_campaign_claim_no_fit_and_no_error(watch: Watch) -> None:
    cells = tuple(
        cell._replace(entropy=Estimate(1.0, math.nan, math.nan, 1))
        for cell in watch.estimates.cells
    )
    fits = tuple(fit._replace(report=None, note="too few") for fit in watch.estimates.fits)
    early = watch._replace(
        counts=((1, 0),) * 3,
        estimates=watch.estimates._replace(cells=cells, fits=fits, done=3, error=math.inf),
    )
    text = methods.paragraph(Facts(watch.preset, (), watch=early))
    assert "no error is known" in text
    assert "was fitted" not in text
    assert "in the fits" not in text
    assert "target" not in text
    assert "There is no fit over density: too few." in text
    assert "Computed with" not in text


def test_methods_of_a_campaign_with_failures_do_not_claim_certificates(watch: Watch) -> None:
    bad = watch._replace(estimates=watch.estimates._replace(failed=2))
    text = methods.paragraph(Facts(watch.preset, (), watch=bad))
    assert "2 realisations failed" in text
    assert "met in every realisation" not in text


def test_methods_of_evidence_speak_of_the_records_that_are_there() -> None:
    asked = preset(DENSE, evidence=PLAN)
    text = methods.paragraph(Facts(asked, (), evidence=evidence()))
    assert "under the rules root count, on 2 sprinklings" in text
    assert "by more than 5 %" in text
    assert "Re W falls" in text
    assert "cross ratio" not in text
    assert "Slopes were compared" not in text
    none = EvidenceScene(DENSE, PLAN)
    assert "Re W falls" not in methods.paragraph(Facts(asked, (), evidence=none))


def test_evidence_that_is_refused_is_said_and_claimed_nowhere() -> None:
    asked = preset(TINY, evidence=PLAN)
    scene, notes = export._evidence(asked, None, chosen=["statecheck"], results=None)
    assert scene is not None
    assert scene.state is None
    assert any(note.startswith("state: ") and "raise the density" in note for note in notes)
    assert "Re W falls" not in methods.paragraph(Facts(asked, (), evidence=scene))


# ---------------------------------------------------------------------- sources


def cited(found: Facts) -> set[str]:
    return {source.key for source in sources.rested_on(found)}


def test_sources_are_those_of_what_was_computed() -> None:
    assert cited(facts()) == {
        "propagators",
        "ground-state",
        "entropy",
        "truncation",
        "disjoint",
        "conformal",
    }
    uncut = Setup(points=SMALL.points, region_count=1, half_width=0.4, truncation_mode="none")
    alone = Facts(preset(uncut), (), scene=bare()._replace(setup=uncut))
    assert cited(alone) == {"propagators", "ground-state", "entropy"}


def test_sources_are_named_by_title_and_arxiv_number() -> None:
    text = sources.list_text(sources.rested_on(facts()))
    assert "“A ground state for the causal diamond in 2 dimensions”" in text
    assert "arXiv:1205.1296" in text
    assert all(re.fullmatch(r"\d{4}\.\d{4,5}", s.arxiv) for s in sources.SOURCES.values())


# ---------------------------------------------------------------------- command


def test_a_preset_is_exported_whole(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    to = tmp_path / "paper"
    tiny = preset(TINY)
    assert export.export_preset(tiny, to=to, views=["sprinkling", "counts"], double=True)
    names = {path.name for path in to.iterdir()}
    assert {"sprinkling.svg", "sprinkling-double.pdf", "counts.png", "methods.txt"} <= names
    assert {"table-values.csv", "table-values.tex", "sources.tex", "captions.txt"} <= names
    assert not any(name.startswith(("spectrum", "table-scaling")) for name in names)
    assert parse((to / "preset.json").read_bytes()) == tiny
    assert "2 figures" in capsys.readouterr().out
    assert [path.name for path in tmp_path.iterdir()] == ["paper"]


def test_an_existing_folder_keeps_what_is_not_replaced(
    results: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    (tmp_path / "own.txt").write_text("mine", encoding="utf-8")
    (tmp_path / "methods.txt").write_text("old", encoding="utf-8")
    export.export_results(results, to=tmp_path, views=["count"])
    assert (tmp_path / "own.txt").read_text(encoding="utf-8") == "mine"
    assert "campaign" in (tmp_path / "methods.txt").read_text(encoding="utf-8")
    assert "1 files replaced" in capsys.readouterr().out
    assert (tmp_path / "samples.csv").stat().st_size > 0


@pytest.mark.parametrize("views", [["nonsense"], [], ["quantity"]])
def test_unknown_views_are_refused_before_anything_is_computed(
    views: list[str], tmp_path: Path
) -> None:
    with pytest.raises(InputError, match="--views"):
        export.export_preset(preset(), to=tmp_path / "x", views=views)
    assert not list(tmp_path.iterdir())


def test_a_folder_that_cannot_be_written_is_refused_first(tmp_path: Path) -> None:
    file = tmp_path / "file"
    file.write_text("x", encoding="utf-8")
    with pytest.raises(InputError, match="allowed is a folder"):
        export.export_preset(preset(), to=file)
    with pytest.raises(InputError, match="cannot be written"):
        export.export_preset(preset(), to=tmp_path / "none" / "paper")
    assert file.read_text(encoding="utf-8") == "x"


def test_a_new_folder_is_written_whole_or_not_at_all(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    written: list[Path] = []

    def full_disk(path: Path, data: bytes) -> None:
        if written:
            raise OSError(28, "No space left on device")
        written.append(path)
        path.write_bytes(data)

    monkeypatch.setattr(export, "write_bytes", full_disk)
    with pytest.raises(InputError, match="No space left"):
        export._write(tmp_path / "paper", {"a": b"1", "b": b"2"}, [])
    assert not list(tmp_path.iterdir())
