"""Time of a twin at N = 2 000 with two regions: first preview, after a move, without sets.

Run on an idle machine: python -m pytest -m benchmark -s tests/benchmarks/test_twin_speed.py
"""

import time

import pytest

from lozenge_engine.config import Config
from lozenge_engine.geometry import Region
from lozenge_engine.kernels.order import warm
from lozenge_engine.source import PointSource
from lozenge_engine.stages import ONE_THREAD, Stages
from lozenge_engine.twin import LEVELS, twin

DENSITY = 1000.0


def pair(gap):
    x = 0.2 + gap / 2
    return Config(
        points=PointSource(density=DENSITY),
        regions=(Region(half_width=0.2, x0=-x), Region(half_width=0.2, x0=x)),
    )


def timed(work):
    start, used = time.perf_counter(), time.process_time()
    value = work()
    return value, time.perf_counter() - start, time.process_time() - used


@pytest.fixture(scope="module")
def stages():
    warm()
    return Stages(compiled=True, threads_from=ONE_THREAD)


def test_preview_of_a_live_geometry_is_there_in_three_seconds(stages):
    found, wall, used = timed(lambda: twin(pair(0.2), stages=stages))
    print(f"\npreview, {found.sets} sets: {wall:.2f} s, {used:.2f} s of one core")
    print(f"union {found.union_support.value:.4f} +- {found.union_support.error:.4f}")
    assert wall < 3.0


def test_a_moved_region_needs_no_new_modes(stages):
    twin(pair(0.2), stages=stages)
    _, wall, used = timed(lambda: twin(pair(0.3), stages=stages))
    print(f"\nregions moved: {wall:.2f} s, {used:.2f} s of one core")
    assert wall < 1.0


@pytest.mark.parametrize(("level", "limit"), [("exact", 0.3), ("smooth", 3.0)])
def test_without_sets_it_takes_a_fraction(level, limit):
    twin(pair(0.1), level=level)
    found, wall, used = timed(lambda: twin(pair(0.2), level=level))
    print(f"\n{level}: {wall:.2f} s, {used:.2f} s of one core, {found.union_support}")
    assert wall < limit


@pytest.mark.slow
@pytest.mark.parametrize("level", ["refined", "long"])
def test_more_sets_take_time_in_proportion_to_their_points(stages, level):
    def points(name):
        return sum(one.oversampling for one in LEVELS[name])

    fresh = Stages(compiled=True, threads_from=ONE_THREAD)
    first = timed(lambda: twin(pair(0.2), level="preview", stages=fresh))[2]
    found, wall, used = timed(lambda: twin(pair(0.2), level=level, stages=stages))
    print(f"\n{level}, {found.sets} sets: {wall:.1f} s, {used:.1f} s of one core, ", end="")
    print(f"union {found.union_support.value:.4f} +- {found.union_support.error:.4f}")
    assert used < 2.0 * first * points(level) / points("preview")
