"""Size of a results file, and the time that writing, opening and reading it take.

Run on an idle machine:

    python -m pytest -m benchmark -s tests/benchmarks/test_store_size.py
"""

import time

import numpy as np
import pytest

from lozenge_engine.config import PointSource, Setup
from lozenge_engine.design import child_seed, design
from lozenge_engine.plan import Axis, CampaignPlan
from lozenge_engine.presets import Preset
from lozenge_engine.realisation import Record, Sample
from lozenge_engine.store import create, inspect, resume

SAMPLES = 100_000


def campaign(regions, densities, placements):
    """A campaign of so many sprinklings, of so many cells of so many regions each."""
    plan = CampaignPlan(
        axes=(Axis(name="density", values=tuple(500.0 + 50 * k for k in range(densities))),),
        placements=tuple((0.001 * k, 0.0) for k in range(placements)),
    )
    setup = Setup(
        points=PointSource(density=500.0),
        region_count=regions,
        half_width=0.4 / regions,
        separation=0.2 / regions,
    )
    return Preset(title="Size", sentence="Invented.", invented=True, setup=setup, campaign=plan)


def invented(layout, sprinkling, realisation, rng):
    """A record of random numbers."""
    own = layout.sprinklings[sprinkling]
    samples = []
    for i in own.cells:
        k = len(layout.cells[i].config.regions)
        p = k * (k - 1) // 2
        numbers, pairs = rng.random((3, k)), rng.random((3, p))
        samples.append(Sample(*numbers, 1.0, 2.0, *pairs, True))
    seed = child_seed(
        layout.setup.points.seed, kind=own.kind, density=own.density, realisation=realisation
    )
    return Record(sprinkling, realisation, seed, 0.5, 1000, rng.random(), tuple(samples))


def timed(work):
    start = time.perf_counter()
    value = work()
    return value, time.perf_counter() - start


def fill(path, preset):
    """One hundred thousand samples, sprinklings in turn, without waiting for the disk."""
    layout = design(preset.setup, preset.campaign)
    rng = np.random.default_rng(1)
    with create(path, preset) as results:
        results._connection.execute("PRAGMA synchronous = OFF")
        records = SAMPLES // len(layout.cells)
        for r in range(records):
            for s in range(len(layout.sprinklings)):
                results.add(invented(layout, s, r, rng), elapsed=float(r))
    return layout


@pytest.mark.parametrize(
    ("regions", "densities", "placements"),
    [(1, 1, 1), (1, 10, 1), (3, 10, 4), (8, 10, 1), (8, 5, 4)],
)
def test_a_hundred_thousand_samples(tmp_path, regions, densities, placements):
    path = tmp_path / "results"
    preset = campaign(regions, densities, placements)
    layout, writing = timed(lambda: fill(path, preset))

    def read():
        with inspect(path) as results:
            tables = [results.table(s) for s in range(len(layout.sprinklings))]
        return sum(table.trusted.size for table in tables)

    before = time.process_time()
    count, reading = timed(read)
    reading = min(reading, *(timed(read)[1] for _ in range(2)))
    work = (time.process_time() - before) / 3
    with inspect(path) as results:
        _, counting = timed(results.counts)
        _, listing = timed(results.done)
    opened, opening = timed(lambda: resume(path))
    opened.close()
    size = path.stat().st_size
    print(
        f"\n{count} samples of {regions} regions, {densities} sprinklings of {placements} cells: "
        f"{size / 1e6:.1f} MB, opened and all tables read in {reading:.2f} s "
        f"({work:.2f} s of CPU time), counts "
        f"{1e3 * counting:.1f} ms, done {1e3 * listing:.0f} ms, checked and resumed in "
        f"{opening:.2f} s; {1e6 * writing / count:.0f} us a sample to write without waiting"
    )
    assert count >= SAMPLES - len(layout.cells)
    assert size < 100e6
    assert reading < 1.0


def test_a_record_on_the_disk(tmp_path):
    preset = campaign(3, 1, 4)
    layout = design(preset.setup, preset.campaign)
    rng = np.random.default_rng(1)
    with create(tmp_path / "results", preset) as results:
        records = [invented(layout, 0, r, rng) for r in range(500)]
        seconds = [
            timed(lambda record=record: results.add(record, elapsed=1.0))[1] for record in records
        ]
        wal = (tmp_path / "results-wal").stat().st_size
    print(
        f"\nadd, 4 cells of 3 regions, on the disk: median {1e3 * np.median(seconds):.1f} ms, "
        f"largest {1e3 * max(seconds):.0f} ms; FILE-wal {wal / 1e6:.1f} MB"
    )
    assert np.median(seconds) < 0.1
