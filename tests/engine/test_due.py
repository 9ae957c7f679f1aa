"""What a slope is due to: ladders, data minus twin, constants, and the sentence."""

from __future__ import annotations

import math
from dataclasses import replace
from multiprocessing import Pipe
from pathlib import Path

import numpy as np
import pytest

from lozenge_engine import store
from lozenge_engine.campaign import attempt
from lozenge_engine.config import PointSource, Setup, SweepPlan
from lozenge_engine.design import design
from lozenge_engine.due import DueRecord, due_of_plan, due_of_results, due_record
from lozenge_engine.evidence import EvidencePlan
from lozenge_engine.kernels.departure import Block, departure
from lozenge_engine.ladders import planned_ladders
from lozenge_engine.plan import Axis, CampaignPlan
from lozenge_engine.presets import Preset
from lozenge_engine.verdict import Slope, verdict

SETUP = Setup(points=PointSource(density=200.0), region_count=1, half_width=0.3, separation=0.2)
PLAN = CampaignPlan(
    axes=(
        Axis(name="density", values=(150.0, 250.0, 400.0)),
        Axis(name="region_count", values=(1, 2)),
    ),
    realisations=5,
    smallest_region=10,
)


# ------------------------------------------------------------------ data minus reference


def _blocks(generator: np.random.Generator, slope: float, error: float) -> list[Block]:
    """Six sizes in two classes, two of them on each sprinkling, with a reference of slope 0.3."""
    blocks = []
    for x in np.linspace(2.0, 3.0, 6):
        shared = generator.normal(0.0, 0.1, (40, 1))
        own = generator.normal(0.0, 0.1, (40, 2))
        reference = np.array([1.0, 1.5]) + 0.3 * x
        truth = reference + np.array([0.2, 0.3]) + slope * (x - 2.5)
        off = generator.normal(0.0, error, 2)
        blocks.append(
            Block(
                truth + shared + own,
                reference + off,
                np.full(2, error),
                np.full(2, x),
                np.array([0, 1]),
            )
        )
    return blocks


def test_departure_finds_slope_and_mean_within_errors_that_hold() -> None:
    """400 draws: the share within one error is that of a normal law, 0.683 +- 4 * 0.023."""
    generator = np.random.default_rng(7)
    hits = mean_hits = 0
    for _ in range(400):
        found = departure(_blocks(generator, 0.1, 0.02))
        assert found is not None
        hits += abs(found.slope - 0.1) < found.slope_error
        mean_hits += abs(found.mean - 0.25) < found.mean_error
    assert 0.59 < hits / 400 < 0.78
    assert mean_hits / 400 > 0.62  # the reference's errors count as common: it holds more


def test_departure_without_the_references_error_is_too_sure() -> None:
    """Negative control: told that the reference is exact, chi2 shows that it is not."""
    generator = np.random.default_rng(11)
    found = departure(
        [b._replace(reference_error=np.zeros(2)) for b in _blocks(generator, 0.0, 0.1)]
    )
    assert found is not None
    assert found.p_value < 1e-3


def test_a_slope_is_no_constant() -> None:
    found = departure(_blocks(np.random.default_rng(3), 0.5, 0.01))
    assert found is not None
    assert found.flat_p < 1e-6
    assert found.p_value > 1e-3
    assert found.reference_slope == pytest.approx(0.3, abs=0.05)


def test_two_sizes_have_a_mean_but_no_slope() -> None:
    found = departure(_blocks(np.random.default_rng(3), 0.0, 0.01)[:2])
    assert found is not None
    assert math.isnan(found.slope)
    assert found.mean == pytest.approx(0.25, abs=0.1)


def test_one_realisation_gives_nothing() -> None:
    block = _blocks(np.random.default_rng(3), 0.0, 0.01)[0]
    assert departure([block._replace(samples=block.samples[:1])]) is None
    assert departure([]) is None


# ------------------------------------------------------------------ the sentence


@pytest.mark.parametrize(
    ("data", "twin", "minus", "words"),
    [
        ((0.34, 0.01), (0.34, 0.01), (0.0, 0.01), "No deviation is seen"),
        ((0.28, 0.01), (0.28, 0.01), (0.0, 0.01), "geometry and cut: the twin"),
        ((0.28, 0.01), (0.33, 0.01), (-0.05, 0.01), "; discreteness: data minus twin"),
        ((0.28, 0.01), (0.30, 0.01), (-0.03, 0.01), "(the twin), discreteness"),
        ((0.28, 0.02), (0.32, 0.03), (-0.03, 0.03), "not settled by these data"),
    ],
)
def test_the_sentence_follows_the_numbers(
    data: tuple[float, float], twin: tuple[float, float], minus: tuple[float, float], words: str
) -> None:
    slopes = [Slope(*pair) for pair in (data, twin, minus)]
    said = verdict(*slopes, reference=1 / 3, settled=True, why="")
    assert words in said
    assert said.endswith(".")
    assert "own fit" not in said


def test_doubts_stand_in_the_sentence() -> None:
    said = verdict(
        Slope(0.28, 0.01),
        Slope(0.33, 0.01),
        Slope(-0.05, 0.01, 30.0, 5, 1e-5),
        reference=1 / 3,
        settled=False,
        why="p = 0.01",
    )
    assert "own fit is not settled: p = 0.01" in said
    assert "no straight line" in said


def test_without_data_or_twin_or_reference_nothing_is_settled() -> None:
    none = Slope(note="the campaign has not run")
    known = Slope(0.2, 0.01)
    assert verdict(none, known, none, reference=0.3, settled=False, why="").startswith("Not settl")
    assert "no twin" in verdict(known, none, none, reference=0.3, settled=True, why="")
    assert "No asymptotic slope" in verdict(known, known, known, reference=None, settled=True,
                                            why="")  # fmt: skip


# ------------------------------------------------------------------ the table


@pytest.fixture(scope="module")
def results_path(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A finished small campaign."""
    path = tmp_path_factory.mktemp("due") / "rows.sqlite"
    preset = Preset(title="rows", sentence="one and two", setup=SETUP, campaign=PLAN)
    with store.create(path, preset) as results:
        for g in range(len(results.design.sprinklings)):
            for r in range(PLAN.realisations):
                results.add(attempt(results.design, g, r), elapsed=0.0)
    return path


@pytest.fixture(scope="module")
def table(results_path: Path) -> DueRecord:
    with store.inspect(results_path) as results:
        return due_of_results(results, level="exact")


def test_every_region_count_has_its_row_with_all_slopes(table: DueRecord) -> None:
    assert [row.label for row in table.rows] == ["region count 1", "region count 2"]
    for row, reference in zip(table.rows, (1 / 3, 2 / 3), strict=True):
        assert row.reference == pytest.approx(reference)
        assert abs(row.chain_slope.value - reference) < row.chain_slope.error
        for slope in (row.data_slope, row.twin_slope, row.minus_slope, row.constant):
            assert slope.known
        assert row.minus == pytest.approx(row.data - row.twin)
        assert row.regime is not None
        assert row.verdict


def test_data_are_the_means_of_the_samples(results_path: Path, table: DueRecord) -> None:
    with store.inspect(results_path) as results:
        for g, own in enumerate(results.design.sprinklings):
            samples = results.table(g).union_support
            for column, i in enumerate(own.cells):
                point = results.design.points[results.design.cells[i].point].values
                row = table.rows[int(point["region_count"]) - 1]
                k = list(row.density).index(point["density"])
                assert row.data[k] == pytest.approx(samples[:, column].mean())
                assert row.data_error[k] == pytest.approx(
                    samples[:, column].std(ddof=1) / math.sqrt(PLAN.realisations)
                )


def test_slope_of_the_difference_is_the_difference_of_the_slopes(table: DueRecord) -> None:
    """On the same weights: three sizes of nearly equal variance, so nearly the same weights."""
    for row in table.rows:
        plain = np.polyfit(row.x, row.minus, 1)[0]
        assert abs(row.minus_slope.value - plain) < row.minus_slope.error


def test_constants_are_paired_on_every_sprinkling(results_path: Path, table: DueRecord) -> None:
    (one,) = table.combinations
    assert one.label == "S(2) - 2 S(1)"
    with store.inspect(results_path) as results:
        differences = []
        for g, own in enumerate(results.design.sprinklings):
            samples = results.table(g).union_support
            counts = [len(results.design.cells[i].config.regions) for i in own.cells]
            pair = samples[:, counts.index(2)] - 2 * samples[:, counts.index(1)]
            differences.append((pair.mean(), pair.std(ddof=1) / math.sqrt(pair.size)))
    values, errors = np.array(differences).T
    weighted = np.sum(values / errors**2) / np.sum(errors**-2.0)
    assert one.data.value == pytest.approx(weighted, rel=1e-6)
    assert one.data.error == pytest.approx(np.sum(errors**-2.0) ** -0.5, rel=1e-6)
    assert one.chain.known
    assert one.twin.known


def test_a_cutoff_changes_no_combination_of_the_chain() -> None:
    """The same fractions on coarser lattices give the same constant."""
    from lozenge_engine.constants import combinations
    from lozenge_engine.routes import chain_route

    ladders = planned_ladders(design(SETUP, PLAN))
    values = []
    for first in (20, 40):
        chains = [chain_route(x.cells[0].regions, first=first, doublings=4) for x in ladders]
        (found,) = combinations(ladders, chains, {})
        values.append(found.chain)
        assert not found.data.known
    assert abs(values[0].value - values[1].value) < values[0].error + values[1].error


def test_twin_and_chain_do_without_data() -> None:
    table = due_of_plan(design(SETUP, PLAN), level="exact")
    for row in table.rows:
        assert row.twin_slope.known
        assert row.chain_slope.known
        assert not row.data_slope.known
        assert row.verdict.startswith("Not settled")


def test_the_bench_has_a_ladder_of_its_own_and_parts_are_shown() -> None:
    sweeps = SweepPlan(density_low=50.0, density_high=150.0, density_points=3, smallest_region=5)
    setup = SETUP.with_(sweeps=sweeps)
    parts: list[DueRecord] = []
    plan = replace(EvidencePlan(), realisations=3)
    table = due_record(setup, plan, stages=None, publish=parts.append)
    (row,) = table.rows
    assert row.data_slope.known
    assert row.twin_slope.known
    assert not parts[0].complete
    assert table.complete
    assert not parts[0].rows[0].twin_slope.known
    here, there = Pipe()
    here.send(table)
    assert there.recv().rows[0].verdict == row.verdict


def test_a_results_file_without_a_ladder_has_no_rows(tmp_path: Path) -> None:
    plan = CampaignPlan(axes=(Axis(name="alpha", values=(1.0, 2.0)),), realisations=2)
    preset = Preset(title="a", sentence="b", setup=SETUP, campaign=plan)
    with store.create(tmp_path / "a.sqlite", preset) as results:
        assert due_of_results(results).rows == ()


def test_what_has_no_cell_is_told() -> None:
    """A mass of 3 needs a density of 100 or more."""
    plan = CampaignPlan(axes=(Axis(name="density", values=(60.0, 110.0, 130.0)),))
    table = due_of_plan(design(SETUP.with_(mass=3.0), plan), level="exact")
    assert any("density 60" in note for note in table.notes)
    assert any("no twin" in note for note in table.notes)
    assert not table.rows[0].twin_slope.known
