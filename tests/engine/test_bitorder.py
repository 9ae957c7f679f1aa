"""Packed orders: the same checks, closure, counts and products as entry by entry."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from lozenge_engine.errors import InputError
from lozenge_engine.kernels.bitorder import BitCommutator, between, checked_order, related
from lozenge_engine.kernels.bitrows import (
    first_bit,
    members,
    pack_pairs,
    pack_rows,
    permuted,
    transposed,
    unpack_rows,
    words_of,
)
from lozenge_engine.kernels.points import sprinkle
from lozenge_engine.kernels.relation import strict_partial_order

Bools = NDArray[np.bool_]
SIZES = (1, 2, 5, 63, 64, 65, 130, 400)


def causal(n: int, seed: int = 1) -> Bools:
    """The relation of a sprinkling, elements in a random sequence."""
    points = sprinkle(density=n / 2, seed=seed, fixed=True)
    mixed = np.random.default_rng(seed).permutation(n)
    u, v = points.u[mixed], points.v[mixed]
    return (u[:, None] < u) & (v[:, None] < v)


def acyclic(n: int, seed: int, share: float) -> Bools:
    """Random pairs without a cycle, elements in a random sequence; in general not transitive."""
    rng = np.random.default_rng([n, seed])
    c = np.triu(rng.random((n, n)) < share, 1)
    mixed = rng.permutation(n)
    return c[mixed][:, mixed]


def naive_closure(c: Bools) -> Bools:
    closed = c.copy()
    for k in range(c.shape[0]):
        closed |= closed[:, k : k + 1] & closed[k]
    return closed


def naive_links(c: Bools) -> Bools:
    return c & ~((c.astype(float) @ c.astype(float)) > 0)


# -------------------------------------------------------------------------- rows


@pytest.mark.parametrize("n", SIZES)
def test_rows_are_numpys_packed_bits(n: int) -> None:
    c = causal(n)
    words = pack_rows(c)
    assert words.shape == (n, words_of(n))
    data = words.astype("<u8").view(np.uint8)[:, : -(-n // 8)]
    np.testing.assert_array_equal(data, np.packbits(c, axis=1, bitorder="little"))
    np.testing.assert_array_equal(unpack_rows(words, n), c)


@pytest.mark.parametrize("n", [*SIZES, 1100])
def test_transposing_and_permuting_are_those_of_the_table(n: int) -> None:
    c = causal(n)
    words = pack_rows(c)
    order = np.random.default_rng(n).permutation(n)
    np.testing.assert_array_equal(unpack_rows(transposed(words), n), c.T)
    np.testing.assert_array_equal(unpack_rows(permuted(words, order), n), c[order][:, order])


@pytest.mark.parametrize("n", SIZES)
def test_pairs_in_any_sequence_give_the_same_rows(n: int) -> None:
    c = causal(n)
    i, j = np.nonzero(c)
    mixed = np.random.default_rng(n).permutation(i.size)
    np.testing.assert_array_equal(pack_pairs(i[mixed], j[mixed], elements=n), pack_rows(c))


def test_a_pair_given_twice_is_named() -> None:
    with pytest.raises(InputError, match=r"relations: given 3 precedes 1 twice"):
        pack_pairs(np.array([0, 3, 3]), np.array([1, 1, 1]), elements=4)


def test_members_and_first_bit_count_from_zero() -> None:
    c = np.zeros((200, 200), dtype=bool)
    c[7, [64, 127, 199]] = True
    words = pack_rows(c)
    assert members(words, 7).tolist() == [64, 127, 199]
    assert first_bit(words[7]) == 64


# ------------------------------------------------------------------------ checks


def violations() -> dict[str, Bools]:
    chain = np.triu(np.ones((6, 6), dtype=bool), 1)
    missing = chain.copy()
    missing[1, 4] = False
    reflexive = chain.copy()
    reflexive[2, 2] = True
    both = chain.copy()
    both[4, 1] = True
    three = np.zeros((5, 5), dtype=bool)
    three[[1, 2, 3], [2, 3, 1]] = True
    wide = np.zeros((150, 150), dtype=bool)
    wide[[100, 70, 5], [70, 140, 100]] = True
    return {
        "reflexive": reflexive,
        "both": both,
        "three": three,
        "missing": missing,
        "wide": wide,
        "random": acyclic(40, 3, 0.2),
    }


@pytest.mark.parametrize("name", sorted(violations()))
def test_the_first_violation_has_the_words_of_the_relation_entry_by_entry(name: str) -> None:
    c = violations()[name]
    with pytest.raises(InputError) as slow:
        strict_partial_order(c)
    with pytest.raises(InputError) as packed:
        checked_order(pack_rows(c))
    assert str(packed.value).rstrip(".").startswith(str(slow.value).rstrip("."))


@settings(max_examples=60)
@given(st.integers(2, 90), st.integers(0, 10**6), st.floats(0.0, 0.4))
def test_random_pairs_are_refused_or_taken_as_entry_by_entry(
    n: int, seed: int, share: float
) -> None:
    c = np.random.default_rng([n, seed]).random((n, n)) < share * share / 2
    np.fill_diagonal(c, False)
    words = [""] * 2
    for k, check in enumerate((strict_partial_order, lambda x: checked_order(pack_rows(x)))):
        try:
            check(c)
        except InputError as error:
            words[k] = str(error).split(";")[0]
    if words[0].count(" precedes ") > 2 and "not" not in words[0]:
        # A cycle: another one may be named, and each of its steps is in the relation.
        named = words[1].split("given ")[1].split(" precedes ")
        cut_short = "..." in named[-1]
        cycle = [int(k) for k in (named[:-1] if cut_short else named)]
        assert cut_short or cycle[0] == cycle[-1]
        assert all(c[i, j] for i, j in itertools.pairwise(cycle))
    else:
        assert words[0] == words[1]


def test_a_long_cycle_behind_many_elements_is_found() -> None:
    n = 300
    c = np.zeros((n, n), dtype=bool)
    c[np.arange(99), np.arange(1, 100)] = True  # a chain that leads into it
    c[np.arange(99, 199), np.arange(100, 200)] = True
    c[199, 150] = True
    with pytest.raises(InputError, match=r"given 150 precedes 151 precedes 152"):
        checked_order(pack_rows(c), close=True)


def test_a_cycle_in_a_dense_relation_is_found_at_once() -> None:
    n = 3000
    c = np.triu(np.ones((n, n), dtype=bool), 1)
    c[0, n - 1] = False
    c[n - 1, 0] = True
    with pytest.raises(InputError, match=r"given 0 precedes (\d+) precedes 2999 precedes 0;"):
        checked_order(pack_rows(c))


# ----------------------------------------------------------------------- closure


@settings(max_examples=60)
@given(st.integers(1, 150), st.integers(0, 10**6), st.floats(0.0, 0.3))
def test_closure_equals_a_naive_one(n: int, seed: int, share: float) -> None:
    c = acyclic(n, seed, share)
    order = checked_order(pack_rows(c), close=True)
    expected = naive_closure(c)
    np.testing.assert_array_equal(unpack_rows(order.original(), n), expected)
    assert order.relations == expected.sum()
    assert order.added == expected.sum() - c.sum()
    assert order.links == naive_links(expected).sum()


@pytest.mark.parametrize("n", SIZES)
def test_links_alone_give_the_order_back(n: int) -> None:
    c = causal(n)
    order = checked_order(pack_rows(naive_links(c)), only_links=True)
    np.testing.assert_array_equal(unpack_rows(order.original(), n), c)
    assert order.links == naive_links(c).sum()


def test_an_entry_that_is_no_link_is_named() -> None:
    c = np.zeros((8, 8), dtype=bool)
    c[[5, 3, 5], [3, 0, 0]] = True
    with pytest.raises(InputError, match=r"links: given 5 precedes 0, with 3 between them"):
        checked_order(pack_rows(c), only_links=True)


def test_a_topological_order_has_the_earlier_first() -> None:
    c = causal(200)
    order = checked_order(pack_rows(c)).order
    assert sorted(order.tolist()) == list(range(200))
    assert not np.tril(c[order][:, order]).any()


# ---------------------------------------------------------- counts and products


@pytest.mark.parametrize("n", SIZES)
def test_the_product_is_that_of_the_table(n: int) -> None:
    c = causal(n)
    commutator = BitCommutator(checked_order(pack_rows(c)))
    a = (c.astype(float) - c.T) / 2
    x = np.random.default_rng(n).standard_normal((n, 5))
    # n terms of size |x|, added in any sequence.
    bound = 8 * np.finfo(float).eps * n * np.abs(x).sum(axis=0).max()
    np.testing.assert_allclose(commutator.apply(x), a @ x, rtol=0, atol=bound)
    np.testing.assert_allclose(commutator.apply(x[:, 2]), a @ x[:, 2], rtol=0, atol=bound)
    assert commutator.size == n
    assert commutator.squared_norm() == pytest.approx(float((a**2).sum()), rel=1e-14)


def test_a_column_has_the_bits_that_it_has_alone() -> None:
    commutator = BitCommutator(checked_order(pack_rows(causal(130))))
    x = np.random.default_rng(0).standard_normal((130, 3))
    np.testing.assert_array_equal(commutator.apply(x)[:, 1], commutator.apply(x[:, 1].copy()))


def test_relations_between_elements_are_counted() -> None:
    c = causal(300)
    order = checked_order(pack_rows(c))
    rng = np.random.default_rng(5)
    a, b = rng.permutation(300)[:80], rng.permutation(300)[:130]
    assert related(order, a, b) == c[np.ix_(a, b)].sum()
    assert related(order, np.arange(300), np.arange(300)) == order.relations


def test_what_lies_between_elements_is_counted() -> None:
    c = causal(300)
    order = checked_order(pack_rows(c))
    rng = np.random.default_rng(6)
    chosen = rng.permutation(300)[:12]
    expected = c[chosen].any(axis=0) & c[:, chosen].any(axis=1)
    expected[chosen] = False
    assert between(order, chosen) == expected.sum() > 0
    i = int(np.argmax(c.sum(axis=1)))
    j = int(np.flatnonzero(c[i])[-1])
    interval = np.flatnonzero((c[i] & c[:, j]) | np.isin(np.arange(300), (i, j)))
    assert between(order, interval) == 0
    assert between(order, interval[:0]) == 0
