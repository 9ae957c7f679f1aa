"""Own causal sets: the same numbers as a sprinkling's own, and a word where the set is none."""

from __future__ import annotations

import functools
import json
import math

import numpy as np
import pytest
import scipy.linalg
from numpy.typing import NDArray

from lozenge_engine.config import PointSource, Setup
from lozenge_engine.errors import InputError
from lozenge_engine.kernels.bitorder import BitOrder
from lozenge_engine.kernels.bitrows import pack_rows
from lozenge_engine.kernels.gaussian import contributions
from lozenge_engine.ownresult import ASSUMPTION, OwnResult, OwnSet, count_of, ordering_of
from lozenge_engine.ownset import compute_own, own_set
from lozenge_engine.pipeline import compute
from lozenge_engine.relationfile import RelationFile
from lozenge_engine.result import Result

Bools = NDArray[np.bool_]
Index = NDArray[np.intp]


def setup(elements: int = 700, regions: int = 3, alpha: float = 1.0) -> Setup:
    points = PointSource(kind="fixed", density=elements / 2, seed=5)
    row = Setup(points=points, region_count=regions, half_width=0.25, separation=0.1)
    return row.with_(alpha=alpha)


@functools.cache
def sprinkled(alpha: float = 1.0) -> Result:
    return compute(setup(alpha=alpha).config())


def relation(result: Result) -> Bools:
    u, v = result.u, result.v
    return (u[:, None] < u) & (v[:, None] < v)


def lists(result: Result) -> list[Index]:
    return [np.flatnonzero(result.region_of == k) for k in range(len(result.regions))]


def given(c: Bools) -> OwnSet:
    return own_set(RelationFile(pack_rows(c), "mine.npy"))


@functools.cache
def own(alpha: float = 1.0) -> OwnResult:
    result = sprinkled(alpha)
    return compute_own(given(relation(result)), members=lists(result), alpha=alpha)


@pytest.mark.parametrize("alpha", [0.8, 1.0, 1.5])
def test_relations_of_a_sprinkling_give_its_own_numbers(alpha: float) -> None:
    mine, its = own(alpha), sprinkled(alpha)
    assert mine.patch.kept_modes == its.patch.kept_modes
    np.testing.assert_allclose(
        mine.patch.eigenvalues[mine.patch.kept], its.patch.eigenvalues[its.patch.kept], atol=1e-9
    )
    pairs = [(a.entropy, b.entropy) for a, b in zip(mine.regions, its.regions, strict=True)]
    pairs += [(mine.unions[k].entropy, its.unions[k].entropy) for k in its.unions]
    pairs += [(mine.total_correlation[k], x) for k, x in its.total_correlation.items()]
    for a, b in zip(mine.pairs, its.pairs, strict=True):
        pairs += [(getattr(a, k), getattr(b, k)) for k in ("support", "direct_sum", "cross_block")]
    for c, d in zip(mine.triples, its.triples, strict=True):
        pairs += [(c.support, d.support), (c.direct_sum, d.direct_sum)]
    found, expected = np.array(pairs).T
    np.testing.assert_allclose(found, expected, rtol=0, atol=1e-9)
    assert min(found[:3]) > 0.5


def test_the_entropy_is_that_of_the_dense_complex_formulas() -> None:
    result = sprinkled()
    c = relation(result).astype(float)
    values, vectors = np.linalg.eigh(0.5j * (c - c.T))
    n = c.shape[0]
    kept = values > math.sqrt(n) / (4 * math.pi)
    rows = lists(result)[0]
    some = vectors[rows][:, kept]
    w = (some * values[kept]) @ some.conj().T
    i_delta = 1j * (w - w.conj()).imag
    mu, v = np.linalg.eigh(i_delta)
    v = v[:, np.abs(mu) > math.sqrt(rows.size) / (4 * math.pi)]
    s = scipy.linalg.eigh(v.conj().T @ i_delta @ v, v.conj().T @ w.real @ v, eigvals_only=True)
    assert own().regions[0].entropy == pytest.approx(contributions(1 / s[s > 0]).sum(), abs=1e-9)


def test_another_numbering_of_the_elements_changes_nothing() -> None:
    result = sprinkled()
    mixed = np.random.default_rng(2).permutation(result.elements)
    place = np.argsort(mixed)
    members = [np.sort(place[rows]) for rows in lists(result)]
    other = compute_own(given(relation(result)[mixed][:, mixed]), members=members)
    np.testing.assert_allclose(
        [r.entropy for r in other.regions], [r.entropy for r in own().regions], atol=1e-9
    )
    assert [p.support for p in other.pairs] == pytest.approx([p.support for p in own().pairs])
    assert other.ordering == own().ordering
    assert other.own.sha256 != own().own.sha256


def test_the_links_of_a_set_are_the_same_set() -> None:
    c = relation(sprinkled())
    links = c & ~((c.astype(float) @ c.astype(float)) > 0)
    file = RelationFile(pack_rows(links), "links.csv")
    for made in (own_set(file, only_links=True), own_set(file, close=True)):
        assert made.sha256 == own().own.sha256
        assert made.order.added == c.sum() - links.sum()
    with pytest.raises(InputError, match="or have the relation closed"):
        own_set(file)


def test_a_sprinkling_matches_what_is_assumed() -> None:
    mine = own()
    assert mine.mismatches() == []
    assert mine.trusted
    assert mine.ordering.found == pytest.approx(
        relation(sprinkled()).sum() / (700 * 699 / 2), rel=1e-14
    )
    assert set(mine.related.values()) == {0}


def test_numbers_are_plain_and_say_what_is_assumed() -> None:
    numbers = json.loads(json.dumps(own().numbers(), allow_nan=False))
    assert numbers["assumption"] == ASSUMPTION == "Assumes a 1+1 sprinkling"
    assert numbers["reference_slope"] is None
    assert numbers["ordering_fraction"]["matches"] is True
    assert numbers["regions"][1]["entropy"] == own().regions[1].entropy
    assert "half_width" not in json.dumps(numbers)
    assert "gap" not in json.dumps(numbers)


def test_the_spectrum_alone_needs_no_regions() -> None:
    mine = compute_own(own().own)
    assert mine.regions == mine.pairs == ()
    assert mine.patch.kept_modes == own().patch.kept_modes
    assert mine.trusted


# -------------------------------------------------------------------- mismatches


def higher_dimensional(n: int, dimension: int) -> Bools:
    """Elements ordered by all of several random coordinates: more than 1+1 dimensions."""
    x = np.random.default_rng(3).random((n, dimension))
    return (x[:, None] < x).all(axis=2)


def test_a_set_of_more_dimensions_is_told() -> None:
    mine = compute_own(given(higher_dimensional(500, 4)))
    assert not mine.ordering.matches
    assert mine.ordering.found == pytest.approx(1 / 8, abs=0.02)
    assert "the ordering fraction is 0.1" in mine.mismatches()[0]
    assert "a sprinkling gives 0.5000 within" in mine.mismatches()[0]
    assert not mine.count.matches
    assert any("the number of modes is" in text for text in mine.mismatches())


def test_a_chain_is_told_by_its_ordering_fraction() -> None:
    mine = compute_own(given(np.triu(np.ones((200, 200), dtype=bool), 1)))
    assert mine.ordering.found == 1.0
    assert not mine.ordering.matches


def test_regions_that_are_not_spacelike_are_told() -> None:
    result = sprinkled()
    t = result.u + result.v
    early, late = np.flatnonzero(t < np.quantile(t, 0.2)), np.flatnonzero(t > np.quantile(t, 0.8))
    mine = compute_own(given(relation(result)), members=[late, early])
    between = relation(result)[np.ix_(early, late)].sum()
    assert between > 0
    assert mine.related == {(0, 1): between}
    assert any(
        f"regions A and B are not spacelike: {between} relations" in text
        for text in mine.mismatches()
    )


def test_a_region_with_others_between_its_elements_is_told() -> None:
    rows = lists(sprinkled())[0]
    mine = compute_own(own().own, members=[rows[::2]])
    assert mine.between[0] > 0
    assert own().between == (0, 0, 0)
    text = f"region A is not causally convex: {mine.between[0]} elements lie between its own"
    assert any(text in note for note in mine.mismatches())


def test_a_set_without_relations_is_refused() -> None:
    with pytest.raises(InputError, match="given no relations"):
        given(np.zeros((9, 9), dtype=bool))


@pytest.mark.parametrize("alpha", [0.01, 21.0, math.nan])
def test_alpha_out_of_range_is_refused(alpha: float) -> None:
    with pytest.raises(InputError, match=r"allowed is 0\.05 to 20"):
        compute_own(own().own, alpha=alpha)


def test_a_threshold_whose_modes_do_not_fit_is_refused_before_any_work() -> None:
    n = 20_000
    nothing = np.zeros((0, 0), dtype=np.uint64)
    order = BitOrder(np.arange(n), nothing, 1, 1, 0)
    with pytest.raises(InputError, match=r"alpha: given 0\.05 with 20000 elements: modes of 5"):
        compute_own(OwnSet("large.npy", order, ""), alpha=0.05)


def test_the_scatter_of_ordering_fractions_is_that_of_random_permutations() -> None:
    n, tries = 60, 4000
    rng = np.random.default_rng(11)
    pairs = n * (n - 1) / 2
    found = []
    for _ in range(tries):
        v = rng.permutation(n)
        found.append(float(np.triu(v[:, None] < v, 1).sum()) / pairs)
    expected = ordering_of(0, n).tolerance / 4
    # The standard error of a standard deviation is 1/sqrt(2 tries); five of them.
    assert np.std(found) == pytest.approx(expected, rel=5 / math.sqrt(2 * tries))
    assert np.mean(found) == pytest.approx(0.5, abs=5 * expected / math.sqrt(tries))


def test_the_count_is_n_over_two_pi_lambda() -> None:
    one = count_of(60, elements=1000, threshold=math.sqrt(1000) / (4 * math.pi))
    assert one.expected == pytest.approx(2 * math.sqrt(1000))
    assert one.matches
    assert not count_of(57, elements=1000, threshold=math.sqrt(1000) / (4 * math.pi)).matches
