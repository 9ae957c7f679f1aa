"""Derived thresholds beside sqrt(n)/(4 pi), for one diamond and for several.

That they agree with sqrt(n)/(4 pi) is asked of the tool and has no source.  It holds at one size
for each delta: the departure stands at a fixed share of the elements.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
import pytest

from lozenge_engine.config import PointSource, Setup
from lozenge_engine.cutstudy import cut_study
from lozenge_engine.evidence import EvidencePlan
from lozenge_engine.kernels.laws import diamond_eigenvalues, root_count_cut
from lozenge_engine.stages import Stages
from lozenge_engine.thresholds import (
    OperatorRecord,
    sprinkled_spectra,
    threshold_record,
)

MEETING = 250.0
"""Elements at which a departure of 5 % stands at sqrt(n)/(4 pi) (measured)."""


class Case(NamedTuple):
    """A row of regions of `MEETING` elements each."""

    count: int
    half_width: float
    realisations: int


def operators(case: Case, *, lowest: float = 0.75) -> dict[str, OperatorRecord]:
    """Thresholds of a case, by the operator's name."""
    density = MEETING / (2 * case.half_width**2)
    setup = Setup(
        points=PointSource(density=density, seed=11),
        region_count=case.count,
        half_width=case.half_width,
        separation=0.0,
    )
    plan = EvidencePlan(realisations=case.realisations, alpha_low=lowest)
    record = threshold_record(setup, plan, cache=Stages())
    return {each.name: each for each in record.operators}


def test_diamonds_derived_threshold_is_the_root_count_at_one_size() -> None:
    found = operators(Case(1, 0.7, 40))["A"]
    assert found.departure.threshold == pytest.approx(root_count_cut(MEETING), rel=0.1)
    assert found.departure.threshold_error < 0.1 * found.departure.threshold
    assert found.count_at == pytest.approx(found.departure.rank, rel=0.05)


def test_derived_threshold_does_not_grow_with_the_root_of_the_count() -> None:
    """Rank 0.126 n: four times the elements, four times the rank, the same eigenvalue."""
    plan = EvidencePlan(realisations=8, alpha_low=0.42)
    setup = Setup(points=PointSource(density=500.0, seed=5), region_count=1, half_width=0.5)
    found = threshold_record(setup, plan, cache=Stages()).operators
    patch, small = found[0].departure, found[1].departure
    assert patch.threshold == pytest.approx(small.threshold, rel=0.15)
    assert patch.rank / small.rank == pytest.approx(4.0, rel=0.15)
    assert patch.threshold < 0.65 * root_count_cut(1000.0)


@pytest.mark.parametrize("case", [Case(2, 0.5, 12), Case(3, 1 / 3, 6)], ids=["K=2", "K=3"])
def test_equal_regions_give_the_regions_count_and_not_the_unions(case: Case) -> None:
    union = operators(case)["union"]
    share, whole = union.thresholds["equal_share"], union.thresholds["union_count"]
    assert share == pytest.approx(root_count_cut(MEETING))
    assert whole == pytest.approx(math.sqrt(case.count) * share)
    assert union.departure.threshold == pytest.approx(share, rel=0.1)
    assert abs(union.departure.threshold / whole - 1.0) > 0.2


def test_laid_restricted_uncut_spectrum_is_the_diamonds() -> None:
    """The reference's own path, where the closed form (arXiv:1205.1296) is known."""
    points = PointSource(kind="sobol", density=100.0, oversampling=41)
    setup = Setup(points=points, region_count=1, half_width=0.6)
    patch, region = sprinkled_spectra(setup.config(), lowest=1.0)
    for found, elements, most in ((patch, 200.0, 0.01), (region, 72.0, 0.02)):
        exact = diamond_eigenvalues(found.size, elements=elements)
        assert np.abs(found / exact - 1.0).max() < most


@pytest.mark.parametrize("count", [2, 3])
def test_unions_count_gives_the_wrong_growth_with_the_number_of_regions(count: int) -> None:
    """It raises each region's cut by sqrt(K): by the logarithmic law ln(K)/6 less for each."""
    points = PointSource(kind="lattice", density=500.0, oversampling=4)
    setup = Setup(points=points, region_count=count, half_width=0.3, separation=0.05)
    lost, share = [], []
    for offset in range(3):
        found = cut_study(
            setup.config(offset),
            alphas=(1.0, 1.1),
            stages=("regions",),
            rules=("root_count", "union_count", "equal_share"),
            cache=Stages(),
        )
        own, union, equal = (curve.entropy[0].mean() for curve in found.curves)
        lost.append(own - union)
        share.append(own - equal)
    expected = math.log(count) / 6
    assert 0.5 * expected < np.mean(lost) < 1.5 * expected
    assert abs(np.mean(share)) < 0.1 * expected
