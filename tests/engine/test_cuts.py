"""Truncation rules: which eigenvalues each keeps."""

from __future__ import annotations

import math

import numpy as np
import pytest

from lozenge_engine.config import Rule
from lozenge_engine.kernels.cuts import keep, keep_by_support, needed_floor, threshold

VALUES = np.array([10.0, 5.0, 3.0, 2.0, 1.0, 0.5])
ROOT = 1.0 / (4.0 * math.pi)


@pytest.mark.parametrize(
    ("rule", "expected"),
    [
        (Rule(kind="none"), 0.0),
        (Rule(kind="fixed_number", number=3), 0.0),
        (Rule(kind="root_count"), ROOT * math.sqrt(100)),
        (Rule(kind="root_count", alpha=2.5), 2.5 * ROOT * math.sqrt(100)),
        (Rule(kind="union_count"), ROOT * math.sqrt(450)),
        (Rule(kind="equal_share"), ROOT * math.sqrt(150)),
        (Rule(kind="equal_share", alpha=0.5), 0.5 * ROOT * math.sqrt(150)),
    ],
    ids=lambda value: getattr(value, "kind", ""),
)
def test_threshold_is_alpha_root_n_over_4_pi_with_the_count_of_the_rule(
    rule: Rule, expected: float
) -> None:
    assert threshold(rule, own=100, union=450, regions=3) == pytest.approx(expected, rel=1e-15)


@pytest.mark.parametrize("kind", ["root_count", "union_count", "equal_share"])
def test_a_rule_with_a_threshold_keeps_what_exceeds_it_strictly(kind: str) -> None:
    rule = Rule(kind=kind)  # type: ignore[arg-type]
    assert keep(VALUES, rule, cut=2.0).tolist() == [True, True, True, False, False, False]


def test_the_rule_none_keeps_all_but_the_kernel() -> None:
    values = np.array([10.0, 1.0, 1.1e-9, 0.9e-9, 0.0])
    assert keep(values, Rule(kind="none"), cut=0.0).tolist() == [True, True, True, False, False]


@pytest.mark.parametrize("number", [1, 4, 6, 100])
def test_a_fixed_number_keeps_the_largest(number: int) -> None:
    kept = keep(VALUES, Rule(kind="fixed_number", number=number), cut=0.0)
    assert kept.tolist() == [k < number for k in range(6)]


def test_a_fixed_number_never_keeps_the_kernel() -> None:
    values = np.array([10.0, 1.0, 1e-12])
    assert keep(values, Rule(kind="fixed_number", number=3), cut=0.0).sum() == 2


@pytest.mark.parametrize("kind", ["none", "root_count", "fixed_number"])
def test_nothing_is_kept_of_nothing(kind: str) -> None:
    rule = Rule(kind=kind)  # type: ignore[arg-type]
    assert keep(np.empty(0), rule, cut=1.0).shape == (0,)
    kept = keep_by_support(np.empty(0), np.empty((0, 2)), rule, cuts=np.ones(2))
    assert kept.shape == (0,)


SHARES = np.array([[0.9, 0.1], [0.2, 0.8], [0.6, 0.4], [0.3, 0.7], [0.8, 0.2], [0.1, 0.9]])


def test_by_support_each_mode_meets_the_cut_of_the_region_that_holds_most_of_it() -> None:
    kept = keep_by_support(VALUES, SHARES, Rule(), cuts=np.array([4.0, 1.5]))
    # Owners A B A B A B.
    assert kept.tolist() == [True, True, False, True, False, False]


def test_by_support_a_fixed_number_is_kept_of_each_region() -> None:
    rule = Rule(kind="fixed_number", number=2)
    kept = keep_by_support(VALUES, SHARES, rule, cuts=np.zeros(2))
    assert kept.tolist() == [True, True, True, True, False, False]


def test_by_support_a_region_that_owns_no_mode_keeps_none() -> None:
    shares = np.tile([1.0, 0.0], (6, 1))
    kept = keep_by_support(VALUES, shares, Rule(), cuts=np.array([4.0, 0.0]))
    assert kept.tolist() == [True, True, False, False, False, False]


def test_by_support_the_kernel_is_that_of_the_whole_union() -> None:
    values = np.array([10.0, 1e-12])
    shares = np.array([[1.0, 0.0], [0.0, 1.0]])
    kept = keep_by_support(values, shares, Rule(kind="none"), cuts=np.zeros(2))
    assert kept.tolist() == [True, False]


def test_equal_cuts_make_the_support_irrelevant() -> None:
    rule = Rule(kind="union_count")
    kept = keep_by_support(VALUES, SHARES, rule, cuts=np.array([1.5, 1.5]))
    assert np.array_equal(kept, keep(VALUES, rule, cut=1.5))


@pytest.mark.parametrize(
    ("rule", "floor"),
    [
        (Rule(kind="none"), 0.0),
        (Rule(kind="root_count", alpha=0.5), 0.5 * ROOT * 20),
        (Rule(kind="fixed_number", number=30), 400 / (2 * math.pi * 32)),
    ],
    ids=lambda value: getattr(value, "kind", ""),
)
def test_the_patch_has_to_be_known_down_to_the_threshold(rule: Rule, floor: float) -> None:
    assert needed_floor(rule, elements=400) == pytest.approx(floor)
