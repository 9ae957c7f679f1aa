"""Engine speed as ratios in one run, growth with size, and peak memory.

Run on an idle machine: python -m pytest -m benchmark -s tests/benchmarks/test_engine_speed.py
"""

import math
import os
import resource
import subprocess
import sys
import time

import numpy as np
import pytest
import scipy.linalg

from lozenge_engine.config import PointSource, Setup
from lozenge_engine.kernels.gaussian import contributions
from lozenge_engine.kernels.order import MasslessCommutator, warm
from lozenge_engine.kernels.points import membership, sprinkle
from lozenge_engine.pipeline import compute
from lozenge_engine.stages import Stages

ELEMENTS = 4000
SEED = 1


def nested(elements, half_width=0.5):
    """One nested diamond on a fixed number of elements."""
    points = PointSource(kind="fixed", density=elements / 2, seed=SEED)
    return Setup(points=points, region_count=1, half_width=half_width).config()


def timed(work):
    start = time.perf_counter()
    value = work()
    return value, time.perf_counter() - start


def complex_dense_entropy(a, rows):
    """The textbook route: full complex eigenproblem, cut, restrict, cut, entropies."""
    n = a.shape[0]
    values, vectors = np.linalg.eigh(1j * a)
    kept = values > math.sqrt(n) / (4 * math.pi)
    some = vectors[rows][:, kept]
    w = (some * values[kept]) @ some.conj().T
    return _second_stage(w, 1j * (w - w.conj()).imag, rows.size)


def real_dense_entropy(a, rows):
    """The best dense route: real, A^T A, only above the cut."""
    n = a.shape[0]
    cut = math.sqrt(n) / (4 * math.pi)
    squares, y = scipy.linalg.eigh(
        a.T @ a, subset_by_value=(cut**2, np.inf), driver="evr", check_finite=False
    )
    some = y[rows]
    r = (some * np.sqrt(squares) / 2) @ some.T
    delta = some @ (y.T @ a @ y) @ some.T
    return _second_stage(r + 0.5j * delta, 1j * delta, rows.size)


def _second_stage(w, i_delta, n):
    mu, v = np.linalg.eigh(i_delta)
    v = v[:, np.abs(mu) > math.sqrt(n) / (4 * math.pi)]
    values = scipy.linalg.eigh(v.conj().T @ i_delta @ v, v.conj().T @ w.real @ v, eigvals_only=True)
    return float(contributions(1 / values[values > 0]).sum())


@pytest.mark.benchmark
def test_four_thousand_elements_against_dense_routes():
    config = nested(ELEMENTS)
    warm()  # compiled loops, as in the page and in long runs
    compute(nested(300))  # imports and first calls
    result, fast = timed(lambda: compute(config, stages=Stages(compiled=True)))
    again = [timed(lambda: compute(config, stages=Stages(compiled=True)))[1] for _ in range(4)]
    best = min(fast, *again)
    points = sprinkle(density=ELEMENTS / 2, seed=SEED, fixed=True)
    a = MasslessCommutator(points.u, points.v).apply(np.eye(ELEMENTS))
    rows = np.nonzero(membership(points, config.regions) == 0)[0]
    real, real_seconds = timed(lambda: real_dense_entropy(a, rows))
    slow, slow_seconds = timed(lambda: complex_dense_entropy(a, rows))
    entropy = result.regions[0].entropy
    print(
        f"\nN = {ELEMENTS}, all stages: {best:.3f} s; dense real {real_seconds:.1f} s = "
        f"{real_seconds / best:.0f} times; dense complex {slow_seconds:.1f} s = "
        f"{slow_seconds / best:.0f} times; S = {entropy:.12f}, differences "
        f"{real - entropy:.1e} and {slow - entropy:.1e}"
    )
    assert abs(slow - entropy) < 1e-9


@pytest.mark.benchmark
def test_time_grows_about_as_the_square_of_the_elements():
    compute(nested(300))
    seconds = {n: timed(lambda n=n: compute(nested(n)))[1] for n in (10_000, 20_000, 40_000)}
    print("\n" + ", ".join(f"N = {n}: {s:.1f} s" for n, s in seconds.items()))
    print(f"10 000 to 40 000: {seconds[40_000] / seconds[10_000]:.1f}-fold")
    assert seconds[40_000] < 20 * seconds[10_000]


ONE_LARGE = """
import resource, sys, time
sys.path.insert(0, {here!r})
from test_engine_speed import nested
from lozenge_engine.kernels.order import warm
from lozenge_engine.pipeline import compute
from lozenge_engine.stages import Stages
warm()
start = time.perf_counter()
result = compute(nested({elements}), stages=Stages(compiled=True))
print(time.perf_counter() - start, resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024,
      result.regions[0].entropy, result.certificate.met, dict(result.seconds))
"""


@pytest.mark.benchmark
def test_hundred_thousand_elements_fit_in_four_gibibytes():
    code = ONE_LARGE.format(here=os.path.dirname(__file__), elements=100_000)
    environment = {**os.environ, "PYTHONPATH": os.pathsep.join(sys.path)}
    environment.pop("OPENBLAS_NUM_THREADS", None)
    run = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, env=environment, check=True
    )
    print("\nN = 100 000, one nested diamond (s, bytes, S, certificate, stages):", run.stdout)
    assert float(run.stdout.split()[1]) < 4 * 2**30
    assert run.stdout.split()[3] == "True"
    assert resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss * 1024 < 4 * 2**30
