"""What data minus a known reference does along a ladder: a line, and a constant, with errors."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy import special

__all__ = ["Block", "Departure", "departure"]

FloatArray = NDArray[np.float64]


class Block(NamedTuple):
    """Cells that share their realisations, with the reference's value at each.

    Attributes
    ----------
    samples : ndarray, shape (R, P), float64
        Data, one row for each realisation.
    reference, reference_error : ndarray, shape (P,), float64
        The reference and its error, independent between cells.
    x : ndarray, shape (P,), float64
        Abscissae.
    placement : ndarray, shape (P,), int
        Class of each cell, with a constant of its own.
    """

    samples: FloatArray
    reference: FloatArray
    reference_error: FloatArray
    x: FloatArray
    placement: NDArray[np.int_]


class Departure(NamedTuple):
    """Data minus reference.

    Attributes
    ----------
    slope, slope_error : float
        Of the line with one constant for each class; NaN with fewer than three abscissae.
    chi2, dof, p_value : float, int, float
        Of that line, in units of the variance of data and reference together.
    mean, mean_error : float
        Mean over the classes of what is left if there is no slope; the reference's errors are
        taken as common to all cells here.
    flat_chi2, flat_dof, flat_p : float, int, float
        Of one constant for each class.
    reference_slope : float
        The reference's slope with the weights of the line, so that the data's slope with those
        weights is the sum of the two.
    """

    slope: float
    slope_error: float
    chi2: float
    dof: int
    p_value: float
    mean: float
    mean_error: float
    flat_chi2: float
    flat_dof: int
    flat_p: float
    reference_slope: float


def departure(blocks: Sequence[Block]) -> Departure | None:
    """Fit data minus reference by generalised least squares.

    Parameters
    ----------
    blocks : sequence of Block
        Independent of each other.

    Returns
    -------
    Departure or None
        None without two realisations of every block.

    Notes
    -----
    The covariance of a block's means is that of its samples where it has at least 2 P + 6 rows
    for P cells, else only their variances, as in `lozenge_engine.kernels.trend.fit`.  Rows with a
    number missing are left out.  p is that of chi-squared: the covariance counts as known.  Cost:
    R P**2.
    """
    if not blocks:
        return None
    means, parts = [], []
    for block in blocks:
        rows = block.samples[np.isfinite(block.samples).all(axis=1)]
        if rows.shape[0] < 2:
            return None
        means.append(rows.mean(axis=0) - block.reference)
        parts.append(_covariance(rows))
    y = np.concatenate(means)
    error = np.concatenate([block.reference_error for block in blocks])
    reference = np.concatenate([block.reference for block in blocks])
    x = np.concatenate([block.x for block in blocks])
    classes = np.concatenate([block.placement for block in blocks])
    data = _stacked(parts)
    covariance = data + np.diag(error**2)
    constants = (classes[:, None] == np.unique(classes)).astype(float)
    flat = _solved(constants, y, covariance)
    even = np.full(constants.shape[1], 1.0 / constants.shape[1]) @ flat.weights
    mean_error = math.sqrt(float(even @ data @ even) + float(np.abs(even) @ error) ** 2)
    line = _line(x, constants, y, covariance)
    slope_weights = line.weights[0] if line is not None else np.full(y.size, math.nan)
    return Departure(
        float(slope_weights @ y),
        math.sqrt(float(slope_weights @ covariance @ slope_weights)),
        *(line[1:4] if line is not None else (math.nan, 0, math.nan)),
        float(even @ y),
        mean_error,
        *flat[1:4],
        float(slope_weights @ reference),
    )


class _Solution(NamedTuple):
    """Rows of weights that turn values into coefficients, and what is left."""

    weights: FloatArray
    chi2: float
    dof: int
    p_value: float


def _covariance(rows: FloatArray) -> FloatArray:
    """Covariance of the means; of the variances alone where there are few rows."""
    count, cells = rows.shape
    found = np.atleast_2d(np.cov(rows, rowvar=False)) / count
    return found if count >= 2 * cells + 6 else np.diag(np.diag(found))


def _stacked(parts: list[FloatArray]) -> FloatArray:
    size = sum(part.shape[0] for part in parts)
    whole = np.zeros((size, size))
    at = 0
    for part in parts:
        own = part.shape[0]
        whole[at : at + own, at : at + own] = part
        at += own
    return whole


def _line(
    x: FloatArray, constants: FloatArray, y: FloatArray, covariance: FloatArray
) -> _Solution | None:
    """The line, if there are three abscissae."""
    if np.unique(np.round(x, 9)).size < 3:
        return None
    return _solved(np.column_stack([x - x.mean(), constants]), y, covariance)


def _solved(design: FloatArray, y: FloatArray, covariance: FloatArray) -> _Solution:
    """(A^T V^-1 A)^-1 A^T V^-1 and the weighted residuals."""
    lower = np.linalg.cholesky(covariance)
    a, b = np.linalg.solve(lower, design), np.linalg.solve(lower, y)
    inverse = np.linalg.pinv(a)
    left = b - a @ (inverse @ b)
    chi2, dof = float(left @ left), y.size - design.shape[1]
    p = float(special.chdtrc(dof, chi2)) if dof > 0 else math.nan
    return _Solution(np.linalg.solve(lower.T, inverse.T).T, chi2, dof, p)
