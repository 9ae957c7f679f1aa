"""Results files: nothing that was recorded is lost, nothing else is let in."""

from __future__ import annotations

import errno
import hashlib
import json
import os
import re
import shutil
import signal
import sqlite3
import struct
import subprocess
import sys
import tempfile
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import closing
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from lozenge_engine import recorded
from lozenge_engine.config import PointSource, Setup
from lozenge_engine.design import Design, child_seed, design
from lozenge_engine.errors import InputError
from lozenge_engine.geometry import Region
from lozenge_engine.plan import Axis, CampaignPlan, Target
from lozenge_engine.presets import Preset
from lozenge_engine.realisation import Record, Sample, realise
from lozenge_engine.results_schema import APPLICATION_ID, SCHEMA, VERSION
from lozenge_engine.store import Results, Table, create, inspect, resume

SETUP = Setup(points=PointSource(density=150.0, seed=5), half_width=0.2, separation=0.1)
PLAN = CampaignPlan(
    axes=(
        Axis(name="density", values=(150.0, 300.0)),
        Axis(name="region_count", values=(1, 2, 3)),
    ),
    realisations=20,
)
PRESET = Preset(title="Store", sentence="Invented.", invented=True, setup=SETUP, campaign=PLAN)
DESIGN = design(SETUP, PLAN)
UNUSUAL = (float("nan"), float("inf"), -float("inf"), -0.0, 5e-324, 1.7e308, 0.1)


def made(
    sprinkling: int, realisation: int, *, layout: Design = DESIGN, reason: str = "", other: int = 0
) -> Record:
    """An invented record, the same for the same arguments."""
    own = layout.sprinklings[sprinkling]
    rng = np.random.default_rng([sprinkling, realisation, other])
    samples = []
    for i in () if reason else own.cells:
        k = len(layout.cells[i].config.regions)
        p = k * (k - 1) // 2
        numbers = [rng.normal(size=k) for _ in range(3)]
        pairs = [rng.normal(size=p) for _ in range(3)]
        union = rng.normal(size=2).tolist()
        samples.append(Sample(*numbers, *union, *pairs, bool(rng.random() < 0.9)))
    seed = child_seed(
        layout.setup.points.seed, kind=own.kind, density=own.density, realisation=realisation
    )
    return Record(
        sprinkling,
        realisation,
        seed,
        float(rng.random()),
        int(rng.integers(1000)),
        float(rng.random()),
        tuple(samples),
        reason,
    )


def same_bits(left: np.ndarray, right: np.ndarray) -> bool:
    left, right = np.ascontiguousarray(left), np.ascontiguousarray(right)
    return (left.shape, left.dtype) == (right.shape, right.dtype) and (
        left.tobytes() == right.tobytes()
    )


def equal(left: Table, right: Table) -> bool:
    return all(
        all(map(same_bits, a, b)) if isinstance(a, tuple) else same_bits(a, b)
        for a, b in zip(left, right, strict=True)
    )


def entropy_of(record: Record) -> list[list[float]]:
    return [sample.entropy.tolist() for sample in record.samples]


def raw(path: Path) -> sqlite3.Connection:
    return sqlite3.connect(path, isolation_level=None)


@pytest.fixture
def path(tmp_path: Path) -> Path:
    return tmp_path / "a b?#%.results"


@pytest.fixture
def results(path: Path) -> Iterator[Results]:
    with create(path, PRESET) as made_results:
        yield made_results


@pytest.fixture
def unprivileged() -> Iterator[Path]:
    """A folder, in a process whose user has to obey the rights of files."""
    folder = Path(tempfile.mkdtemp())
    root = os.geteuid() == 0
    if root:
        shutil.chown(folder, 65534)
        os.seteuid(65534)
    try:
        yield folder
    finally:
        if root:
            os.seteuid(0)
        folder.chmod(0o700)
        shutil.rmtree(folder)


# ---------------------------------------------------------------------------------- what is kept


def test_numbers_come_back_to_the_bit(results: Results) -> None:
    record = made(0, 0)
    results.add(record, elapsed=1.0)
    table = results.table(0)
    fields = {
        "elements": table.region_elements,
        "kept": table.kept,
        "entropy": table.entropy,
        "union_support": table.union_support.T[:, :, None],
        "union_direct_sum": table.union_direct_sum.T[:, :, None],
        "pair_support": table.pair_support,
        "pair_direct_sum": table.pair_direct_sum,
        "cross_block": table.cross_block,
    }
    for c, sample in enumerate(record.samples):
        for name, columns in fields.items():
            expected = np.atleast_1d(np.asarray(getattr(sample, name)))
            assert same_bits(columns[c][0], expected), name


def test_what_fixes_a_realisation_comes_back_to_the_bit(results: Results) -> None:
    record = made(1, 3)
    results.add(record, elapsed=1.0)
    table = results.table(1)
    assert table.realisation.tolist() == [3]
    assert (table.seconds[0], table.elements[0], table.ordering_fraction[0]) == (
        record.seconds,
        record.elements,
        record.ordering_fraction,
    )
    assert table.trusted.tolist() == [[sample.trusted for sample in record.samples]]


@pytest.mark.parametrize("value", UNUSUAL)
def test_unusual_doubles_come_back_to_the_bit(results: Results, value: float) -> None:
    record = made(0, 0)
    samples = tuple(
        s._replace(entropy=np.full_like(s.entropy, value), union_support=value)
        for s in record.samples
    )
    results.add(record._replace(samples=samples), elapsed=1.0)
    table = results.table(0)
    expected = np.array([value]).tobytes()
    found = [*table.union_support[0], *(x for entropy in table.entropy for x in entropy[0])]
    assert {np.float64(x).tobytes() for x in found} == {expected}


def test_the_payload_of_a_nan_comes_back(results: Results) -> None:
    value = np.frombuffer(bytes.fromhex("efbeadde0000f87f"), dtype="<f8").astype(float)
    record = made(0, 0)
    first = record.samples[0]._replace(entropy=value)
    results.add(record._replace(samples=(first, *record.samples[1:])), elapsed=1.0)
    assert same_bits(results.table(0).entropy[0][0], value)


def test_an_ordering_fraction_of_no_pairs_comes_back_as_nan(results: Results) -> None:
    results.add(made(0, 0)._replace(ordering_fraction=float("nan")), elapsed=1.0)
    assert np.isnan(results.table(0).ordering_fraction).tolist() == [True]


def test_what_the_engine_computes_goes_in_and_comes_out(results: Results) -> None:
    record = realise(results.design, 0, 0)
    results.add(record, elapsed=1.0)
    assert [e[0].tolist() for e in results.table(0).entropy] == entropy_of(record)


def test_a_table_ascends_whatever_the_order_of_recording(results: Results) -> None:
    for r in (5, 0, 3):
        results.add(made(0, r), elapsed=1.0)
    table = results.table(0)
    assert table.realisation.tolist() == [0, 3, 5]
    assert table.entropy[1].tolist() == [entropy_of(made(0, r))[1] for r in (0, 3, 5)]


def test_cells_are_in_the_sprinklings_order(tmp_path: Path) -> None:
    plan = CampaignPlan(axes=(Axis(name="mass", values=(2.0, 0.0, 1.0)),))
    preset = replace(PRESET, campaign=plan)
    layout = design(preset.setup, plan)
    assert layout.sprinklings[0].cells == (1, 2, 0)
    with create(tmp_path / "m", preset) as results:
        results.add(made(0, 0, layout=layout), elapsed=1.0)
        found = [e[0].tolist() for e in results.table(0).entropy]
    assert found == entropy_of(made(0, 0, layout=layout))


def test_a_table_without_realisations_has_the_shapes_of_none(results: Results) -> None:
    table = results.table(0)
    assert (table.trusted.shape, table.union_support.shape) == ((0, 3), (0, 3))
    assert [e.shape for e in table.entropy] == [(0, 1), (0, 2), (0, 3)]
    assert [e.shape for e in table.pair_support] == [(0, 0), (0, 1), (0, 3)]


def test_a_table_cannot_be_written_to(results: Results) -> None:
    results.add(made(0, 0), elapsed=1.0)
    table = results.table(0)
    for array in (table.entropy[0], table.union_support, table.realisation, table.trusted):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 0


def test_failed_realisations_are_counted_and_stay_out_of_the_table(results: Results) -> None:
    results.add(made(0, 0), elapsed=1.0)
    results.add(made(0, 1, reason="not enough memory"), elapsed=2.0)
    results.add(made(1, 0, reason="not enough memory"), elapsed=2.0)
    results.add(made(1, 4, reason="zwölf \udcff"), elapsed=2.0)
    assert results.counts() == ((2, 1), (2, 2))
    assert results.done() == {(0, 0), (0, 1), (1, 0), (1, 4)}
    assert results.failures() == (("not enough memory", 2), ("zwölf ?", 1))
    assert results.table(0).realisation.tolist() == [0]


def test_running_time_only_grows(results: Results) -> None:
    assert results.elapsed == 0.0
    results.add(made(0, 0), elapsed=7.5)
    results.add(made(0, 1), elapsed=7.25)
    assert results.elapsed == 7.5


def test_predictions_are_kept(path: Path) -> None:
    predicted = ((0.1, 1e6), (0.25, 3e6))
    create(path, PRESET, predicted=predicted).close()
    with inspect(path) as results:
        assert results.predicted == predicted


@pytest.mark.parametrize("predicted", [((1.0, 2.0),), ((1.0, float("nan")),) * 2, ((1.0,),) * 2])
def test_predictions_of_another_campaign_are_refused(path: Path, predicted: tuple) -> None:
    with pytest.raises(InputError, match="predicted"):
        create(path, PRESET, predicted=predicted)
    assert list(path.parent.iterdir()) == []


def test_the_preset_and_its_design_come_back_equal(path: Path) -> None:
    create(path, PRESET).close()
    with inspect(path) as results:
        assert results.preset == PRESET
        assert results.design == DESIGN


def test_each_realisation_keeps_the_versions_it_was_computed_with(
    path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    for r, version in enumerate(("1.0", "2.0", "2.0")):
        monkeypatch.setattr(recorded, "versions", lambda v=version: {"numpy": v})
        with resume(path) if r else create(path, PRESET) as results:
            assert results.versions == {"numpy": version}
            results.add(made(0, r), elapsed=1.0)
    with inspect(path) as results:
        assert results.computed_with() == (({"numpy": "1.0"}, 1), ({"numpy": "2.0"}, 2))
        assert results.versions == {"numpy": "2.0"}


def test_a_run_writes_ahead_and_waits_for_the_disk(results: Results) -> None:
    connection = results._connection
    assert connection.execute("PRAGMA journal_mode").fetchone() == ("wal",)
    assert connection.execute("PRAGMA synchronous").fetchone() == (2,)  # FULL


def test_the_file_says_what_it_is(path: Path) -> None:
    create(path, PRESET).close()
    data = path.read_bytes()
    assert data[68:72] == b"LZNG"
    assert data[60:64] == VERSION.to_bytes(4, "big")


def test_numbers_can_be_read_without_this_program(path: Path) -> None:
    record = made(0, 0)
    with create(path, PRESET) as results:
        results.add(record, elapsed=1.0)
    with closing(raw(path)) as connection:
        rows = connection.execute("SELECT numbers FROM samples ORDER BY cell").fetchall()
    for (numbers,), sample in zip(rows, record.samples, strict=True):
        flat = [x for field in sample[:-1] for x in np.atleast_1d(field)]
        assert list(struct.unpack(f"<{len(flat)}d", numbers)) == flat


# --------------------------------------------------------------------- finished rows never change


def test_a_record_that_is_there_already_changes_nothing(results: Results) -> None:
    results.add(made(0, 0), elapsed=1.0)
    before = results.table(0)
    results.add(made(0, 0)._replace(seconds=99.0), elapsed=5.0)
    assert equal(results.table(0), before)
    assert results.elapsed == 1.0


@pytest.mark.parametrize(
    "other",
    [
        made(0, 0, other=1),
        made(0, 0, reason="not enough memory"),
        made(0, 0)._replace(elements=1234),
        made(0, 0)._replace(
            samples=(
                made(0, 0).samples[0]._replace(trusted=not made(0, 0).samples[0].trusted),
                *made(0, 0).samples[1:],
            )
        ),
    ],
    ids=["numbers", "failed", "elements", "trusted"],
)
def test_a_record_with_other_numbers_is_refused(results: Results, other: Record) -> None:
    results.add(made(0, 0), elapsed=1.0)
    before = results.table(0)
    with pytest.raises(InputError, match="realisation 0 of sprinkling 0: given other numbers"):
        results.add(other, elapsed=2.0)
    assert equal(results.table(0), before)


@pytest.mark.parametrize(
    "statement",
    [
        "UPDATE realisations SET seconds = 0",
        "DELETE FROM realisations",
        "UPDATE samples SET trusted = 1",
        "DELETE FROM samples WHERE cell = 0",
        "UPDATE versions SET document = ''",
        "DELETE FROM versions",
        "UPDATE meta SET identity = ''",
        "DELETE FROM meta",
        "INSERT OR REPLACE INTO realisations SELECT * FROM realisations",
        "INSERT OR REPLACE INTO realisations SELECT id, 0, 9, seed, 1.0, 1, 1.0, status, reason,"
        " elapsed, versions FROM realisations",
        "INSERT OR REPLACE INTO samples SELECT * FROM samples",
        "INSERT INTO samples VALUES (0, 0, 77, 1, x'00', 0)",
        "INSERT OR REPLACE INTO samples (rowid, sprinkling, realisation, cell, trusted, numbers,"
        " checksum) VALUES (1, 0, 9, 0, 1, x'00', 0)",
        "INSERT OR REPLACE INTO meta SELECT * FROM meta",
    ],
)
def test_the_file_itself_keeps_finished_rows(results: Results, statement: str) -> None:
    results.add(made(0, 0), elapsed=1.0)
    with closing(raw(results.path)) as connection:
        before = list(connection.iterdump())
        with pytest.raises(sqlite3.IntegrityError, match="never changed"):
            connection.execute(statement)
        assert list(connection.iterdump()) == before


@pytest.mark.parametrize(
    "record",
    [
        made(0, 0)._replace(seed=1),
        made(0, 0)._replace(realisation=1),
        made(0, 0)._replace(samples=()),
        made(0, 0)._replace(reason="but it has samples"),
        made(0, 0)._replace(samples=made(0, 0).samples[::-1]),
        made(0, 0)._replace(sprinkling=2),
        made(0, 0)._replace(sprinkling=-1),
        made(0, 0)._replace(seconds=float("nan")),
    ],
    ids=["seed", "realisation", "no samples", "reason", "shapes", "high", "negative", "seconds"],
)
def test_a_record_of_another_campaign_is_refused(results: Results, record: Record) -> None:
    with pytest.raises(InputError, match="given"):
        results.add(record, elapsed=1.0)
    assert results.counts() == ((0, 0), (0, 0))


@pytest.mark.parametrize("elapsed", [-1.0, float("nan"), float("inf")])
def test_a_running_time_that_is_none_is_refused(results: Results, elapsed: float) -> None:
    with pytest.raises(InputError, match="elapsed"):
        results.add(made(0, 0), elapsed=elapsed)


def test_the_schema_changes_only_with_its_version() -> None:
    digest = hashlib.sha256("\n".join(SCHEMA).encode()).hexdigest()
    assert (VERSION, digest[:16]) == (1, "a08d20bca0e60b94")


# ------------------------------------------------------------------------------ kills, full disks

MANY = """
import sys
sys.path[:0] = {paths!r}
from pathlib import Path
from test_store import made, PRESET
from lozenge_engine.store import create, resume
path = Path({path!r})
with resume(path) if path.exists() else create(path, PRESET) as results:
    done = len(results.done())
    for r in range(done // 2, 100_000):
        for sprinkling in range(2):
            results.add(made(sprinkling, r), elapsed=float(r))
            print(sprinkling, r, flush=True)
"""


def start(path: Path) -> subprocess.Popen[str]:
    code = MANY.format(paths=[str(Path(__file__).parent), *sys.path], path=str(path))
    return subprocess.Popen([sys.executable, "-c", code], stdout=subprocess.PIPE, text=True)


def killed(path: Path, *, after: int, pause: float) -> set[tuple[int, int]]:
    """What a process said it had recorded when it was killed among its many records."""
    with start(path) as process:
        said = [process.stdout.readline() for _ in range(after)]
        time.sleep(pause)
        process.send_signal(signal.SIGKILL)
        said += process.stdout.readlines()
        assert process.wait() == -signal.SIGKILL
    pairs = [tuple(map(int, line.split())) for line in said if line.endswith("\n")]
    return {(s, r) for s, r in pairs}


def check_prefix(results: Results, said: set[tuple[int, int]]) -> None:
    """Whole realisations in the order of recording, at most one more than was said."""
    count = len(results.done())
    assert said <= results.done()
    assert count <= len(said) + 1
    assert results.done() == {(k % 2, k // 2) for k in range(count)}
    for sprinkling in range(2):
        table = results.table(sprinkling)
        for c in range(3):
            expected = [entropy_of(made(sprinkling, r))[c] for r in table.realisation.tolist()]
            assert table.entropy[c].tolist() == expected


def test_a_process_killed_among_many_records_leaves_all_that_it_said_it_recorded(
    path: Path,
) -> None:
    said: set[tuple[int, int]] = set()
    for k in range(4):
        said |= killed(path, after=3 + 7 * k, pause=0.0037 * k)
        with resume(path) as results:
            check_prefix(results, said)
            said = results.done()


def test_a_file_left_by_a_kill_can_be_looked_at_as_it_is(path: Path) -> None:
    said = killed(path, after=20, pause=0.0)
    with inspect(path) as results:
        check_prefix(results, said)


def test_a_kill_leaves_no_lock(path: Path) -> None:
    killed(path, after=3, pause=0.0)
    assert path.with_name(path.name + ".lock").exists()
    resume(path).close()


def test_the_wal_file_of_a_killed_run_moves_with_its_file(path: Path, tmp_path: Path) -> None:
    said = killed(path, after=20, pause=0.0)
    other = tmp_path / "elsewhere"
    other.mkdir()
    for end in ("", "-wal"):
        shutil.copy(path.with_name(path.name + end), other / f"moved{end}")
    with resume(other / "moved") as results:
        check_prefix(results, said)


def test_a_full_disk_loses_nothing_and_the_run_goes_on_when_there_is_space(
    results: Results,
) -> None:
    connection = results._connection
    (pages,) = connection.execute("PRAGMA page_count").fetchone()
    connection.execute(f"PRAGMA max_page_count = {pages + 2}")

    def fill() -> None:
        for r in range(1000):
            results.add(made(0, r), elapsed=1.0)

    with pytest.raises(InputError, match=r"a disk that is full.*free some space"):
        fill()
    count, _ = results.counts()[0]
    assert results.table(0).realisation.tolist() == list(range(count))
    connection.execute("PRAGMA max_page_count = 100000")
    results.add(made(0, count), elapsed=1.0)
    assert results.table(0).entropy[2].tolist() == [
        entropy_of(made(0, r))[2] for r in range(count + 1)
    ]


LIMITED = """
import resource, sys
sys.path[:0] = {paths!r}
from pathlib import Path
from test_store import made
from lozenge_engine.errors import InputError
from lozenge_engine.store import resume
with resume(Path({path!r})) as results:
    resource.setrlimit(resource.RLIMIT_FSIZE, (1_000_000, 1_000_000))
    try:
        for r in range(10_000):
            results.add(made(0, r), elapsed=1.0)
    except InputError as error:
        print(r, error)
"""


def test_a_disk_that_takes_no_more_keeps_what_it_took(path: Path) -> None:
    create(path, PRESET).close()
    code = LIMITED.format(paths=[str(Path(__file__).parent), *sys.path], path=str(path))
    run = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True
    ).stdout
    count = int(run.split()[0])
    assert count > 10
    assert "all realisations recorded so far are kept" in run
    with resume(path) as results:
        assert results.table(0).realisation.tolist() == list(range(count))
        results.add(made(0, count), elapsed=1.0)


def test_a_refused_sample_leaves_no_part_of_its_realisation(
    results: Results, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(recorded.zlib, "crc32", lambda _: None)  # refused by the second table
    with pytest.raises(InputError):
        results.add(made(0, 0), elapsed=1.0)
    monkeypatch.undo()
    assert results.counts() == ((0, 0), (0, 0))
    results.add(made(0, 0), elapsed=1.0)


# --------------------------------------------------------------------- one writer, many readers


def test_a_second_run_is_refused_while_the_first_lives(results: Results) -> None:
    with pytest.raises(InputError, match=r"another run is writing; .*wait for that run"):
        resume(results.path)
    results.add(made(0, 0), elapsed=1.0)
    with pytest.raises(InputError, match="another run"):
        resume(results.path)


def test_a_second_process_is_refused_while_the_first_lives(path: Path) -> None:
    with start(path) as process:
        process.stdout.readline()
        with pytest.raises(InputError, match="another run"):
            resume(path)
        process.kill()


def test_another_name_of_the_file_does_not_get_round_the_lock(
    results: Results, tmp_path: Path
) -> None:
    link = tmp_path / "link"
    link.symlink_to(results.path)
    with pytest.raises(InputError, match="another run"):
        resume(link)


def test_a_closed_run_leaves_one_file_and_makes_room_for_the_next(path: Path) -> None:
    with create(path, PRESET) as results:
        results.add(made(0, 0), elapsed=1.0)
    assert list(path.parent.iterdir()) == [path]
    resume(path).close()
    assert list(path.parent.iterdir()) == [path]


def test_a_closed_file_says_the_same_elsewhere(path: Path, tmp_path: Path) -> None:
    with create(path, PRESET) as results:
        for r in range(30):
            results.add(made(0, r), elapsed=1.0)
        before = results.table(0)
    moved = tmp_path / "elsewhere" / "b"
    moved.parent.mkdir()
    path.rename(moved)
    with inspect(moved) as results:
        assert equal(results.table(0), before)
    assert list(moved.parent.iterdir()) == [moved]


def test_a_reader_sees_what_is_recorded_meanwhile(results: Results) -> None:
    with inspect(results.path) as reader:
        for r in range(3):
            results.add(made(0, r), elapsed=r + 1.0)
            assert reader.counts()[0] == (r + 1, 0)
            assert reader.table(0).realisation.tolist() == list(range(r + 1))
            assert reader.elapsed == r + 1.0


def test_a_reader_from_before_sees_the_run_that_resumes(path: Path) -> None:
    create(path, PRESET).close()
    with inspect(path) as reader:
        assert reader.counts()[0] == (0, 0)
        with resume(path) as results:
            results.add(made(0, 0), elapsed=1.0)
            assert reader.counts()[0] == (1, 0)
        assert reader.counts()[0] == (1, 0)


def test_a_reader_left_open_does_not_hold_up_the_end_of_a_run(path: Path) -> None:
    with create(path, PRESET) as results:
        reader = inspect(path)
        results.add(made(0, 0), elapsed=1.0)
    assert path.with_name(path.name + "-wal").stat().st_size == 0
    assert reader.counts()[0] == (1, 0)
    reader.close()
    with inspect(path) as again:
        assert again.counts()[0] == (1, 0)


def test_a_reader_sees_more_realisations_planned_by_the_run(results: Results) -> None:
    with inspect(results.path) as reader:
        assert reader.preset.campaign.realisations == 20
        results.replan(replace(PLAN, realisations=50))
        assert reader.preset.campaign.realisations == 50
        assert reader.design.plan.realisations == 50


def test_a_reader_cannot_write(results: Results) -> None:
    with inspect(results.path) as reader:
        with pytest.raises(InputError, match="opened to look at"):
            reader.add(made(0, 0), elapsed=1.0)
        with pytest.raises(InputError, match="opened to look at"):
            reader.replan(PLAN)


def test_threads_take_turns(results: Results) -> None:
    seen: list[int] = []

    def record(sprinkling: int) -> None:
        for r in range(20):
            results.add(made(sprinkling, r), elapsed=1.0)

    threads = [threading.Thread(target=record, args=(s,)) for s in range(2)]
    for thread in threads:
        thread.start()
    while any(thread.is_alive() for thread in threads):
        seen.append(results.table(0).realisation.size)
    assert results.counts() == ((20, 0), (20, 0))
    assert seen == sorted(seen)


def test_closing_twice_is_no_error(path: Path) -> None:
    results = create(path, PRESET)
    results.close()
    results.close()


def test_closed_results_refuse_in_words_and_still_know_their_campaign(path: Path) -> None:
    results = create(path, PRESET)
    results.close()
    with pytest.raises(InputError, match="closed"):
        results.counts()
    assert results.preset == PRESET


# ------------------------------------------------------------------------------------ another plan


def test_a_preset_with_other_aims_goes_on_with_the_file(path: Path) -> None:
    create(path, PRESET).close()
    plan = replace(
        PLAN,
        realisations=99,
        target=Target(quantity="slope", error=0.02, relative=True),
        budget=60.0,
        smallest_region=10,
    )
    resume(path, replace(PRESET, title="Another title", campaign=plan)).close()
    with inspect(path) as results:
        assert results.preset == replace(PRESET, campaign=plan)


@pytest.mark.parametrize(
    ("changed", "said"),
    [
        (
            replace(PRESET, setup=SETUP.with_(points=PointSource(density=150.0, seed=6))),
            r"given another preset: points.seed 6; allowed is .*this file: points.seed 5;",
        ),
        (replace(PRESET, setup=SETUP.with_(mass=0.5)), r"mass 0.5; allowed .* mass 0.0;"),
        (
            replace(PRESET, setup=SETUP.with_(points=PointSource(density=151.0, seed=5))),
            r"points.density 151.0; .* points.density 150.0;",
        ),
        (
            replace(
                PRESET, setup=SETUP.with_(region_list=(Region(half_width=0.3),)), campaign=PLAN
            ),
            r"regions.row.count not set, .*and \d more; .*regions.row.count 2, ",
        ),
        (replace(PRESET, setup=SETUP.with_(alpha=1.5)), r"truncation.alpha 1.5;"),
        (replace(PRESET, setup=SETUP.with_(order=2.0)), r"order 2.0;"),
        (
            replace(PRESET, campaign=replace(PLAN, placements=((0.0, 0.1),))),
            r"placements \[\[0.0, 0.1\]\]; .*placements \[\[0.0, 0.0\]\];",
        ),
        (
            replace(
                PRESET,
                campaign=replace(PLAN, axes=(Axis(name="density", values=(150.0,)), PLAN.axes[1])),
            ),
            r"axis density \[150.0\]; .*axis density \[150.0, 300.0\];",
        ),
        (
            replace(PRESET, campaign=replace(PLAN, axes=PLAN.axes[::-1])),
            r'axes \["region_count", "density"\]; .*axes \["density", "region_count"\];',
        ),
        (replace(PRESET, campaign=None), "no campaign"),
    ],
    ids=[
        "seed",
        "mass",
        "density",
        "regions",
        "alpha",
        "order",
        "placements",
        "axis",
        "axes",
        "no",
    ],
)
def test_another_preset_is_refused_and_what_differs_is_said(
    path: Path, changed: Preset, said: str
) -> None:
    create(path, PRESET).close()
    before = path.read_bytes()
    with pytest.raises(InputError, match=said):
        resume(path, changed)
    assert path.read_bytes()[100:] == before[100:]  # but for counters in the header
    resume(path, PRESET).close()


def test_more_realisations_are_kept(path: Path) -> None:
    with create(path, PRESET) as results:
        results.replan(replace(PLAN, realisations=50))
        assert results.design.plan.realisations == 50
    with resume(path) as results:
        assert results.preset.campaign == replace(PLAN, realisations=50)


def test_a_plan_with_other_axes_is_refused(results: Results) -> None:
    plan = replace(PLAN, axes=PLAN.axes[:1])
    with pytest.raises(InputError, match="another preset: axes"):
        results.replan(plan)
    assert results.preset == PRESET


def test_a_preset_without_a_campaign_is_refused(path: Path) -> None:
    with pytest.raises(InputError, match=r"preset: given no campaign"):
        create(path, replace(PRESET, campaign=None))


# -------------------------------------------------------------------------------- files of no use


def text_file(path: Path) -> None:
    path.write_text("t,x\n0.1,0.2\n" * 100)


def short_file(path: Path) -> None:
    path.write_text("x")


def empty_file(path: Path) -> None:
    path.touch()


def other_sqlite_file(path: Path) -> None:
    with closing(raw(path)) as connection:
        connection.execute("CREATE TABLE things (a)")


def folder(path: Path) -> None:
    path.mkdir()


def pipe(path: Path) -> None:
    os.mkfifo(path)


def nothing(path: Path) -> None:
    pass


def newer_file(path: Path) -> None:
    create(path, PRESET).close()
    with closing(raw(path)) as connection:
        connection.execute(f"PRAGMA user_version = {VERSION + 1}")


def claimed_file(path: Path) -> None:
    other_sqlite_file(path)
    with closing(raw(path)) as connection:
        connection.execute(f"PRAGMA application_id = {APPLICATION_ID}")
        connection.execute(f"PRAGMA user_version = {VERSION}")


def untriggered_file(path: Path) -> None:
    create(path, PRESET).close()
    with closing(raw(path)) as connection:
        connection.execute("DROP TRIGGER samples_no_update")


def file_of_another_identity(path: Path) -> None:
    create(path, PRESET).close()
    with closing(raw(path)) as connection:
        (text,) = connection.execute("SELECT preset FROM meta").fetchone()
        document = json.loads(text)
        document["points"]["seed"] = 6
        connection.execute("UPDATE meta SET preset = ?", (json.dumps(document),))


def file_with_no_preset(path: Path) -> None:
    create(path, PRESET).close()
    with closing(raw(path)) as connection:
        connection.execute("UPDATE meta SET preset = '{}'")


@pytest.mark.parametrize("opened", [resume, inspect])
@pytest.mark.parametrize(
    ("lay", "said"),
    [
        (text_file, "a file that is no results file"),
        (short_file, "a file that is no results file"),
        (empty_file, "an empty file"),
        (other_sqlite_file, "a file that is no results file"),
        (folder, "a folder"),
        (pipe, "a device or a pipe"),
        (nothing, "no such file"),
        (newer_file, "a results file of format 2, .*update this program"),
        (claimed_file, "a damaged file"),
        (untriggered_file, "a damaged file"),
        (file_of_another_identity, "a damaged file"),
        (file_with_no_preset, "a damaged file"),
    ],
)
def test_what_is_no_results_file_of_this_version_is_refused_and_left_alone(
    path: Path, opened: Callable[[Path], Results], lay: Callable[[Path], None], said: str
) -> None:
    lay(path)
    before = path.read_bytes() if path.is_file() else b""
    with pytest.raises(InputError, match=f"given {said}") as caught:
        opened(path)
    assert str(path) in str(caught.value)
    assert (path.read_bytes() if path.is_file() else b"")[100:] == before[100:]
    assert list(path.parent.iterdir()) in ([path], [])


def test_a_missing_folder_is_refused_by_all(tmp_path: Path) -> None:
    path = tmp_path / "none" / "a"
    for opened in (resume, inspect):
        with pytest.raises(InputError, match="a folder that does not exist"):
            opened(path)
    with pytest.raises(InputError, match="a folder that exists"):
        create(path, PRESET)


@pytest.mark.parametrize("name", ["a\0b", "a" * 300, "a" * 252])
def test_an_impossible_name_is_refused_by_all(tmp_path: Path, name: str) -> None:
    for opened in (resume, inspect, lambda path: create(path, PRESET)):
        with pytest.raises(InputError, match="given"):
            opened(tmp_path / name)


@pytest.mark.parametrize("lay", [text_file, empty_file, newer_file])
def test_a_new_file_takes_the_place_of_none(path: Path, lay: Callable[[Path], None]) -> None:
    lay(path)
    before = path.read_bytes()
    with pytest.raises(InputError, match="a new results file where one lies"):
        create(path, PRESET)
    assert path.read_bytes() == before
    assert list(path.parent.iterdir()) == [path]


def test_a_new_file_does_not_take_in_what_is_left_of_an_old_one(path: Path) -> None:
    killed(path, after=5, pause=0.0)
    path.unlink()
    with pytest.raises(InputError, match=r"results-wal: given a part of a file"):
        create(path, PRESET)


def filled(path: Path, count: int = 60) -> None:
    with create(path, PRESET) as results:
        for r in range(count):
            results.add(made(0, r), elapsed=1.0)


@pytest.mark.parametrize("part", [0.1, 0.5, 0.95])
def test_a_truncated_file_is_refused(path: Path, part: float) -> None:
    filled(path)
    with path.open("r+b") as file:
        file.truncate(int(part * path.stat().st_size))
    with pytest.raises(InputError, match="damaged"):
        resume(path)
    with pytest.raises(InputError, match="damaged"), inspect(path) as results:
        results.table(0)


def test_a_flipped_bit_in_a_sample_is_found(path: Path) -> None:
    filled(path)
    numbers = made(0, 30).samples[2].entropy.astype("<f8").tobytes()
    data = bytearray(path.read_bytes())
    data[data.index(numbers)] ^= 1
    path.write_bytes(data)
    with inspect(path) as results, pytest.raises(InputError, match=r"damaged.*bytes have changed"):
        results.table(0)


@pytest.mark.parametrize("seed", range(20))
def test_random_damage_is_refused_in_words_or_does_no_harm(path: Path, seed: int) -> None:
    filled(path)
    with inspect(path) as results:
        before = results.table(0)
    rng = np.random.default_rng(seed)
    data = bytearray(path.read_bytes())
    place = int(rng.integers(len(data) - 64))
    data[place : place + 64] = rng.bytes(64)
    path.write_bytes(data)
    try:
        with resume(path) as results:
            after = results.table(0)
    except InputError:
        return
    for name in ("entropy", "kept", "pair_support"):
        assert all(map(same_bits, getattr(before, name), getattr(after, name)))


def test_a_missing_sample_is_found(path: Path) -> None:
    filled(path)
    with closing(raw(path)) as connection:
        (trigger,) = connection.execute(
            "SELECT sql FROM sqlite_schema WHERE name = 'samples_no_delete'"
        ).fetchone()
        connection.execute("DROP TRIGGER samples_no_delete")
        connection.execute("DELETE FROM samples WHERE realisation = 3 AND cell = 1")
        connection.execute(trigger)
    with inspect(path) as results, pytest.raises(InputError, match="damaged"):
        results.table(0)


# ------------------------------------------------------------------------------------------ rights


def test_a_file_that_may_only_be_read_is_refused_for_a_run(unprivileged: Path) -> None:
    path = unprivileged / "a"
    create(path, PRESET).close()
    path.chmod(0o444)
    with pytest.raises(InputError, match="takes no writing"):
        resume(path)
    with inspect(path) as results:
        assert results.counts() == ((0, 0), (0, 0))


def test_a_folder_that_takes_no_files_is_refused_for_a_run(unprivileged: Path) -> None:
    path = unprivileged / "a"
    create(path, PRESET).close()
    unprivileged.chmod(0o555)
    with pytest.raises(InputError, match=r"cannot be written \(Permission denied\)"):
        resume(path)
    with pytest.raises(InputError, match=r"cannot be written \(Permission denied\)"):
        create(unprivileged / "b", PRESET)
    with inspect(path) as results:
        assert results.counts() == ((0, 0), (0, 0))


def test_a_file_that_may_not_be_read_is_refused(unprivileged: Path) -> None:
    path = unprivileged / "a"
    create(path, PRESET).close()
    path.chmod(0)
    for opened in (resume, inspect):
        with pytest.raises(InputError, match="cannot be opened"):
            opened(path)


def test_a_killed_runs_file_in_a_folder_that_takes_no_files_is_read_or_refused_in_words(
    unprivileged: Path,
) -> None:
    """Its newest rows are beside it: they are shown, or it is said why not, and never left out."""
    path = unprivileged / "a"
    with create(path, PRESET) as results:
        results.add(made(0, 0), elapsed=1.0)
        for end in ("", "-wal"):
            shutil.copy(unprivileged / f"a{end}", unprivileged / f"b{end}")
    unprivileged.chmod(0o555)

    def said() -> str:
        try:
            with inspect(unprivileged / "b") as looked_at:
                return str(looked_at.counts()[0])
        except InputError as error:
            return str(error)

    assert re.search(r"^\(1, 0\)$|in a folder that takes files", said())


def test_a_closed_file_in_write_ahead_mode_is_read_where_no_files_are_taken(
    unprivileged: Path,
) -> None:
    path = unprivileged / "a"
    create(path, PRESET).close()
    with closing(raw(path)) as connection:
        connection.execute("PRAGMA journal_mode = WAL")
    unprivileged.chmod(0o555)
    with inspect(path) as results:
        assert results.counts()[0] == (0, 0)


def test_a_lock_that_is_no_lock_is_refused_by_its_name(path: Path) -> None:
    create(path, PRESET).close()
    path.with_name(path.name + ".lock").write_text("something else" * 100)
    with pytest.raises(InputError, match=r"results\.lock: given"):
        resume(path)


def test_rights_are_what_is_said_and_not_how_the_system_counts_them(unprivileged: Path) -> None:
    """Negative control for the fixture: without its rights a folder takes no files."""
    unprivileged.chmod(0o555)
    with pytest.raises(OSError, match="Permission denied") as caught:
        (unprivileged / "x").touch()
    assert caught.value.errno == errno.EACCES
