"""The largest own causal set: time of every part, and memory.

Run on an idle machine: ``pytest -m benchmark -s tests/benchmarks/test_order_size.py``.
"""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from lozenge_engine.config import PointSource, Setup
from lozenge_engine.kernels.points import membership, sprinkle
from lozenge_engine.pipeline import compute

ELEMENTS = 20_000
BYTES = 1.5e9
SECONDS = 300.0

SCRIPT = """
import json, resource, sys, time
from pathlib import Path

from lozenge_engine.kernels.bitorder import BitCommutator
from lozenge_engine.ownset import compute_own, own_set
from lozenge_engine.relationfile import read_members, read_relation
import numpy as np

folder, seconds = Path(sys.argv[1]), {}

def timed(name, work):
    start = time.perf_counter()
    value = work()
    seconds[name] = time.perf_counter() - start
    return value

file = timed("read", lambda: read_relation(folder / "large.npy"))
own = timed("check", lambda: own_set(file))
members = read_members(folder / "regions.csv", elements=own.order.elements)
commutator = BitCommutator(own.order)
x = np.ones(own.order.elements)
commutator.apply(x)
timed("product", lambda: [commutator.apply(x) for _ in range(10)])
seconds["product"] /= 10
del commutator
result = timed("compute", lambda: compute_own(own, members=members))
print(json.dumps({
    "seconds": seconds,
    "bytes": 1024 * resource.getrusage(resource.RUSAGE_SELF).ru_maxrss,
    "met": result.certificate.met,
    "mismatches": result.mismatches(),
    "entropies": [r.entropy for r in result.regions],
}))
"""


@pytest.mark.benchmark
def test_the_largest_set_in_memory_and_time(tmp_path: Path) -> None:
    setup = Setup(
        points=PointSource(kind="fixed", density=ELEMENTS / 2, seed=1),
        region_count=2,
        half_width=0.3,
        separation=0.2,
    ).config()
    points = sprinkle(density=ELEMENTS / 2, seed=1, fixed=True)
    u, v = points.u, points.v
    table = np.lib.format.open_memmap(
        tmp_path / "large.npy", mode="w+", dtype=bool, shape=(ELEMENTS, ELEMENTS)
    )
    for k in range(0, ELEMENTS, 1000):
        table[k : k + 1000] = (u[k : k + 1000, None] < u) & (v[k : k + 1000, None] < v)
    table.flush()
    region_of = membership(points, setup.regions)
    (tmp_path / "regions.csv").write_text(
        "region,element\n"
        + "".join(f"{'AB'[region_of[k]]},{k}\n" for k in np.flatnonzero(region_of >= 0))
    )
    # A process of its own, so that its peak is that of the set alone.
    ran = subprocess.run(
        [sys.executable, "-c", SCRIPT, str(tmp_path)], capture_output=True, text=True, check=True
    )
    found = json.loads(ran.stdout)
    parts = ", ".join(f"{name} {s:.3g} s" for name, s in found["seconds"].items())
    print(f"\n{ELEMENTS} elements: {parts}; peak {found['bytes'] / 1e6:.0f} MB")
    expected = [r.entropy for r in compute(setup).regions]
    np.testing.assert_allclose(found["entropies"], expected, rtol=0, atol=1e-9)
    assert found["met"]
    assert found["mismatches"] == []
    assert found["bytes"] < BYTES
    assert sum(found["seconds"].values()) < SECONDS
