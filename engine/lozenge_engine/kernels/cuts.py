"""Truncation rules: which eigenvalues of i Delta count, stage by stage."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Rule
from lozenge_engine.kernels.laws import root_count_cut

__all__ = ["KERNEL_TOLERANCE", "keep", "keep_by_support", "needed_floor", "threshold"]

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

KERNEL_TOLERANCE = 1e-10
"""Eigenvalues below this multiple of the largest belong to the kernel of Delta."""


def threshold(rule: Rule, *, own: float, union: float, regions: int, ratio: float = 1.0) -> float:
    """Threshold of a rule on the positive eigenvalues of one operator.

    Parameters
    ----------
    rule : Rule
        The rule of this stage.
    own : float
        Elements of the operator's own region, n: points over `ratio`, weighted in curved patches
        (`lozenge_engine.kernels.curved.Counting.elements`).
    union : float
        Elements of all regions together.
    regions : int
        Number of regions.
    ratio : float
        Points laid per element, f: eigenvalues are f times larger at the same wavenumber.

    Returns
    -------
    float
        f alpha sqrt(n)/(4 pi) with the n of the rule (arXiv:1611.10281; for several regions
        arXiv:2110.07627); 0 for rules without a threshold.
    """
    counts = {"root_count": own, "union_count": union, "equal_share": union / regions}
    if rule.kind not in counts:
        return 0.0
    return ratio * root_count_cut(counts[rule.kind], rule.alpha)


def keep(values: FloatArray, rule: Rule, *, cut: float) -> BoolArray:
    """Which positive eigenvalues a rule keeps.

    Parameters
    ----------
    values : ndarray, shape (r,), float64
        Positive eigenvalues, descending.
    rule : Rule
        The rule of this stage.
    cut : float
        Its `threshold`.

    Returns
    -------
    ndarray, shape (r,), bool
        Never an eigenvalue in the kernel of Delta.
    """
    kernel = KERNEL_TOLERANCE * float(values[0]) if values.size else 0.0
    kept = values > max(cut, kernel)
    if rule.kind == "fixed_number":
        kept[rule.number :] = False
    return kept


def keep_by_support(
    values: FloatArray, shares: FloatArray, rule: Rule, *, cuts: FloatArray
) -> BoolArray:
    """Which eigenvalues of a union's operator the rule keeps, each cut with its region's count.

    An eigenvector belongs to the region that holds most of it (arXiv:2110.07627).

    Parameters
    ----------
    values : ndarray, shape (r,), float64
        Positive eigenvalues of the union's operator, descending.
    shares : ndarray, shape (r, K), float64
        Squared norm of each eigenvector on each region.
    rule : Rule
        The rule of the regions' stage.
    cuts : ndarray, shape (K,), float64
        Threshold of each region.

    Returns
    -------
    ndarray, shape (r,), bool
        Modes kept.
    """
    kept = np.zeros(values.size, dtype=bool)
    owner = shares.argmax(axis=1)
    kernel = KERNEL_TOLERANCE * float(values[0]) if values.size else 0.0
    for k, cut in enumerate(cuts):
        own = np.nonzero(owner == k)[0]
        kept[own] = keep(values[own], rule, cut=max(float(cut), kernel))
    return kept


def needed_floor(rule: Rule, *, elements: float, ratio: float = 1.0) -> float:
    """How far down the patch's modes have to be known for a rule of the patch's stage.

    Parameters
    ----------
    rule : Rule
        Rule of the patch's stage.
    elements : float
        Elements of the patch, N.
    ratio : float
        Points laid per element, f.

    Returns
    -------
    float
        The threshold; for a fixed number the expected eigenvalue f N/(2 pi (number + 2)); 0 when
        every mode is needed.
    """
    if rule.kind == "fixed_number":
        return ratio * elements / (2.0 * np.pi * (rule.number + 2))
    return threshold(rule, own=elements, union=elements, regions=1, ratio=ratio)
