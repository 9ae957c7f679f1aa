"""The fast route against full complex matrices, mode by mode and entropy by entropy.

Source of every comparison: the definitions in arXiv:1205.2953 (entropy), arXiv:1611.10281 (cut of
the patch and of a region), arXiv:2110.07627 (cut of a union), arXiv:0806.3083 (massive G), written
out in dense.py.  Points are the engine's own sprinklings; all else is computed again from u and v.

Tolerances of the issue: eigenvalues 1e-11 of the largest, entropies 1e-9 nats.
"""

import itertools
from functools import cache

import numpy as np
import pytest
from tests.outside import dense

from lozenge_engine.config import MODES, Config, PointSource, Rule
from lozenge_engine.geometry import Region, equal_row
from lozenge_engine.pipeline import compute
from lozenge_engine.stages import Stages

EIGENVALUES = 1e-11
ENTROPIES = 1e-9

# name: (density, seed, mass); fixed counts of 1 500, 1 000 and 600 elements.
SETS = {
    "massless": (750.0, 31, 0.0),
    "massive": (500.0, 32, 4.0),
    "small": (300.0, 33, 0.0),
}
ROWS = {
    "one": (Region(half_width=0.4),),
    "boosted": (Region(t0=-0.1, x0=0.2, half_width=0.25, boost=0.7),),
    "two": equal_row(2, 0.3, 0.1),
    "three": equal_row(3, 0.25, 0.1),
    "unequal": (Region(x0=-0.35, half_width=0.4), Region(t0=0.1, x0=0.45, half_width=0.2)),
}
CASES = list(itertools.product(("massless", "massive"), ROWS))
SEVERAL = [case for case in CASES if case[1] not in ("one", "boosted")]
STAGES = Stages()


@cache
def fast(name, row, mode="two_stages", order=1.0):
    density, seed, mass = SETS[name]
    patch, region = MODES[mode]
    config = Config(
        points=PointSource(kind="fixed", density=density, seed=seed),
        mass=mass,
        regions=ROWS[row] if row in ROWS else SPECIAL[row],
        patch_rule=Rule(kind=patch),
        region_rule=Rule(kind=region, number=8),
        order=order,
    )
    return compute(config, stages=STAGES)


@cache
def naive_state(name, patch_rule):
    density, seed, mass = SETS[name]
    points = compute(
        Config(points=PointSource(kind="fixed", density=density, seed=seed), mass=mass),
        stages=STAGES,
    )
    u, v = points.u, points.v
    i_delta = dense.pauli_jordan(u, v, mass=mass, density=density)
    cut = dense.cut_of(patch_rule, own=u.size, union=u.size, count=1)
    return u, v, dense.sorkin_johnston(i_delta, cut=cut)


class Naive:
    """Regions, union and pairs of one configuration from dense.py."""

    def __init__(self, name, row, mode="two_stages"):
        patch, region = MODES[mode]
        u, v, self.state = naive_state(name, patch)
        layout = ROWS[row] if row in ROWS else SPECIAL[row]
        self.rows = [dense.inside(u, v, r) for r in layout]
        union = sum(len(r) for r in self.rows)
        self.number = 8 if region == "fixed_number" else None
        self.cuts = [
            dense.cut_of(region, own=len(r), union=union, count=len(layout)) for r in self.rows
        ]
        modes = [
            dense.region_modes(self.state, r, cut=c, number=self.number)
            for r, c in zip(self.rows, self.cuts, strict=True)
        ]
        self.values = [m[0] for m in modes]
        self.vectors = [m[1] for m in modes]

    def region(self, k):
        return dense.solutions(self.state, self.rows[k], self.vectors[k])

    def union(self, members, rule):
        rows = [self.rows[k] for k in members]
        if rule == "support":
            space = dense.by_support(self.state, rows, [self.cuts[k] for k in members], self.number)
        else:
            space = dense.direct_sum(rows, [self.vectors[k] for k in members])
        return dense.solutions(self.state, *space)


@cache
def naive(name, row, mode="two_stages"):
    return Naive(name, row, mode)


def worst(found, expected):
    """Largest difference relative to the largest eigenvalue, over those that both list."""
    n = min(found.size, expected.size)
    return float(np.abs(found[:n] - expected[:n]).max() / expected[0])


# ------------------------------------------------------------------------- eigenvalues


@pytest.mark.parametrize("name", SETS)
def test_patch_eigenvalues_equal_those_of_the_full_complex_matrix(name):
    found, (_, _, state) = fast(name, "one").patch.eigenvalues, naive_state(name, "root_count")
    assert found.size > 40
    assert worst(found, state.values) < EIGENVALUES


@pytest.mark.parametrize("name", SETS)
def test_no_patch_eigenvalue_above_the_cut_is_missing(name):
    result, (u, _, state) = fast(name, "one"), naive_state(name, "root_count")
    assert result.patch.kept_modes == (state.values > np.sqrt(u.size) / (4 * np.pi)).sum()


@pytest.mark.parametrize(("name", "row"), CASES)
def test_region_eigenvalues_equal_those_of_the_restricted_complex_matrix(name, row):
    for found, expected in zip(fast(name, row).regions, naive(name, row).values, strict=True):
        assert worst(found.eigenvalues, expected) < EIGENVALUES


@pytest.mark.parametrize(("name", "row"), CASES)
def test_each_region_keeps_as_many_modes_as_the_naive_rule(name, row):
    expected = [v.shape[1] for v in naive(name, row).vectors]
    assert [r.kept_modes for r in fast(name, row).regions] == expected
    assert min(expected) > 3


# --------------------------------------------------------------------------- entropies


@pytest.mark.parametrize(("name", "row"), CASES)
def test_entropy_of_each_region_equals_the_naive_one(name, row):
    for k, found in enumerate(fast(name, row).regions):
        expected = dense.entropy(naive(name, row).region(k))
        assert expected > 0.5
        assert found.entropy == pytest.approx(expected, abs=ENTROPIES)


@pytest.mark.parametrize("rule", ["support", "direct_sum"])
@pytest.mark.parametrize(("name", "row"), SEVERAL)
def test_entropy_of_the_union_equals_the_naive_one_under_both_rules(name, row, rule):
    members = tuple(range(len(ROWS[row])))
    expected = dense.entropy(naive(name, row).union(members, rule))
    found = fast(name, row).unions[rule].entropy
    assert found == pytest.approx(expected, abs=ENTROPIES)


@pytest.mark.parametrize("rule", ["support", "direct_sum"])
@pytest.mark.parametrize(("name", "row"), SEVERAL)
def test_mutual_information_of_each_pair_equals_the_naive_one(name, row, rule):
    reference = naive(name, row)
    for pair in fast(name, row).pairs:
        both = (pair.a, pair.b)
        expected = sum(dense.entropy(reference.region(k)) for k in both)
        expected -= dense.entropy(reference.union(both, rule))
        assert getattr(pair, rule) == pytest.approx(expected, abs=3 * ENTROPIES)


@pytest.mark.parametrize("rule", ["support", "direct_sum"])
@pytest.mark.parametrize("name", ["massless", "massive"])
def test_tripartite_information_equals_the_naive_one(name, rule):
    # S_A + S_B + S_C - S_AB - S_BC - S_CA + S_ABC: textbook definition, from memory.
    reference = naive(name, "three")
    expected = sum(
        (-1) ** (size + 1) * dense.entropy(reference.union(members, rule))
        for size in (1, 2, 3)
        for members in itertools.combinations(range(3), size)
    )
    found = getattr(fast(name, "three").triples[0], rule)
    assert found == pytest.approx(expected, abs=7 * ENTROPIES)


@pytest.mark.parametrize(("name", "row"), SEVERAL)
def test_cross_block_of_each_pair_equals_the_naive_one(name, row):
    # Definition of this project (no source); it is not zero after the first cut.
    reference = naive(name, row)
    for pair in fast(name, row).pairs:
        expected = dense.cross_block(
            reference.state,
            [reference.rows[k] for k in (pair.a, pair.b)],
            [reference.vectors[k] for k in (pair.a, pair.b)],
        )
        assert expected > 0.01
        assert pair.cross_block == pytest.approx(expected, abs=ENTROPIES)


@pytest.mark.parametrize("name", ["massless", "massive"])
def test_the_two_union_rules_differ_by_far_more_than_the_tolerance(name):
    # Negative control: a union computed under one rule only would fail one of the two above.
    unions = fast(name, "two").unions
    assert abs(unions["support"].entropy - unions["direct_sum"].entropy) > 1e3 * ENTROPIES


@pytest.mark.parametrize("q", [0.5, 2.0, 3.0])
@pytest.mark.parametrize("row", ["one", "two"])
def test_renyi_entropy_of_a_region_equals_the_direct_formula(row, q):
    # arXiv:0905.2562 in the variables of arXiv:1205.2953.  Below q = 1 the term (lambda - 1)^q of
    # a pure mode carries eps^q: sqrt(1e-14 cond) for q = 1/2 on either side, hence the tolerance.
    tolerance = 1e-5 if q < 1 else ENTROPIES
    for k, found in enumerate(fast("massless", row, order=q).regions):
        expected = dense.renyi(naive("massless", row).region(k), q)
        assert found.entropy == pytest.approx(expected, abs=tolerance)


# -------------------------------------------------------------------- truncation modes

# Without a second cut the state must not be pure by rank: few elements, 2 r >= n.
SPECIAL = {
    "tiny": (Region(half_width=0.15),),
    "two tiny": equal_row(2, 0.12, 0.3),
}
MODE_CASES = [
    ("two_stages", "unequal"),
    ("union_count", "unequal"),
    ("equal_share", "unequal"),
    ("fixed_number", "unequal"),
    ("regions_only", "unequal"),
    ("none", "tiny"),
    ("none", "two tiny"),
    ("patch_only", "tiny"),
]


@pytest.mark.parametrize(("mode", "row"), MODE_CASES)
def test_every_truncation_mode_gives_the_naive_entropy_of_each_region(mode, row):
    for k, found in enumerate(fast("small", row, mode).regions):
        expected = dense.entropy(naive("small", row, mode).region(k))
        assert found.entropy == pytest.approx(expected, abs=ENTROPIES)


@pytest.mark.parametrize("rule", ["support", "direct_sum"])
@pytest.mark.parametrize(
    ("mode", "row"), [case for case in MODE_CASES if case[1] in ("unequal", "two tiny")]
)
def test_every_truncation_mode_gives_the_naive_entropy_of_the_union(mode, row, rule):
    expected = dense.entropy(naive("small", row, mode).union((0, 1), rule))
    assert fast("small", row, mode).unions[rule].entropy == pytest.approx(expected, abs=ENTROPIES)


def test_the_truncation_modes_are_told_apart():
    # Negative control: no two of these modes have the same entropy on these points.
    modes = [mode for mode, row in MODE_CASES if row == "unequal"]
    found = sorted(fast("small", "unequal", mode).regions[1].entropy for mode in modes)
    assert min(np.diff(found)) > 1e3 * ENTROPIES
