"""Straight-line fits of entropy against ln(l/a), with the uncertainty that the samples show."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy import special

__all__ = ["Estimate", "Fit", "estimate", "fit_independent", "fit_shared"]

FloatArray = NDArray[np.float64]


class Estimate(NamedTuple):
    """Mean of samples.

    Attributes
    ----------
    mean : float
        Their mean; NaN without samples.
    error : float
        Standard error of the mean; NaN with fewer than two samples: none is invented.
    scatter : float
        Standard deviation of one sample; NaN with fewer than two.
    count : int
        Samples.
    """

    mean: float
    error: float
    scatter: float
    count: int  # type: ignore[assignment]  # hides tuple.count, which nobody needs here


class Fit(NamedTuple):
    """S = slope x + intercept by least squares.

    Attributes
    ----------
    slope, slope_error, intercept, intercept_error : float
        Values and standard errors.
    chi2 : float
        Weighted sum of squared residuals, from the samples' own (co)variance (Hotelling's T**2
        for shared sprinklings); NaN if unknown.
    dof : int
        Points minus two.
    p_value : float
        Probability of a worse chi2 if the line is right, with the variance estimated from the
        same samples (F distribution); NaN if unknown.
    points : int
        Points fitted.
    method : str
        How the samples' correlation was treated, in words.
    """

    slope: float
    slope_error: float
    intercept: float
    intercept_error: float
    chi2: float
    dof: int
    p_value: float
    points: int
    method: str


def estimate(samples: FloatArray) -> Estimate:
    """Mean, standard error and scatter of independent samples; NaN samples are left out.

    Parameters
    ----------
    samples : ndarray, shape (R,), float64
        One value for each sprinkling.

    Returns
    -------
    Estimate
        Without an error for fewer than two samples.
    """
    valid = samples[np.isfinite(samples)]
    count = int(valid.size)
    if count == 0:
        return Estimate(math.nan, math.nan, math.nan, 0)
    scatter = float(valid.std(ddof=1)) if count > 1 else math.nan
    return Estimate(float(valid.mean()), scatter / math.sqrt(count), scatter, count)


def _design(x: FloatArray) -> FloatArray:
    """Columns x and 1."""
    return np.column_stack([x, np.ones_like(x)])


def fit_independent(x: FloatArray, samples: list[FloatArray]) -> Fit | None:
    """Fit a line to means whose samples are independent between points.

    All points share one scatter, estimated from the samples around their own means; each mean is
    weighted with its number of samples.

    Parameters
    ----------
    x : ndarray, shape (M,), float64
        Abscissae, M >= 3.
    samples : list of ndarray, length M
        Independent samples at each abscissa.

    Returns
    -------
    Fit or None
        None with fewer than three points, a point without samples, no spread in x, or without a
        spare sample: no error would be known.

    Notes
    -----
    Weighted least squares; with nu = sum(R_j - 1), chi2/dof follows F(M - 2, nu) if the line is
    right (textbook result for a common variance).
    """
    counts = np.array([s.size for s in samples])
    spare = int((counts - 1).sum())
    if x.size < 3 or counts.min() < 1 or spare < 1 or np.ptp(x) == 0.0:
        return None
    means = np.array([s.mean() for s in samples])
    variance = sum(float(((s - s.mean()) ** 2).sum()) for s in samples) / spare
    design = _design(x)
    normal = np.linalg.inv(design.T @ (design * counts[:, None]))
    beta = normal @ (design.T @ (counts * means))
    covariance = variance * normal
    chi2 = float(np.sum(counts * (means - design @ beta) ** 2) / variance) if variance else math.nan
    dof = x.size - 2
    return Fit(
        float(beta[0]),
        math.sqrt(covariance[0, 0]),
        float(beta[1]),
        math.sqrt(covariance[1, 1]),
        chi2,
        dof,
        float(special.fdtrc(dof, spare, chi2 / dof)),
        int(x.size),
        "independent sprinklings at every point, one common scatter",
    )


def fit_shared(x: FloatArray, samples: FloatArray) -> Fit | None:
    """Fit a line to means that share their sprinklings.

    The line is fitted to every sprinkling by itself; the scatter of the slopes is the slope's
    uncertainty, whatever the correlation between the points.

    Parameters
    ----------
    x : ndarray, shape (M,), float64
        Abscissae, M >= 3.
    samples : ndarray, shape (R, M), float64
        One row for each sprinkling.

    Returns
    -------
    Fit or None
        None with fewer than three points or two sprinklings, or without a spread in x.

    Notes
    -----
    Lack of fit by Hotelling's T**2 on the M - 2 residual contrasts, which needs R > M - 2;
    with fewer sprinklings chi2 and p are NaN.  (Textbook growth-curve model.)
    """
    count, m = samples.shape
    if m < 3 or count < 2 or np.ptp(x) == 0.0:
        return None
    design = _design(x)
    q, r = np.linalg.qr(design, mode="complete")
    beta = np.linalg.solve(r[:2], q[:, :2].T @ samples.T)
    errors = beta.std(axis=1, ddof=1) / math.sqrt(count)
    chi2, p_value = _lack_of_fit(samples @ q[:, 2:])
    return Fit(
        float(beta[0].mean()),
        float(errors[0]),
        float(beta[1].mean()),
        float(errors[1]),
        chi2,
        m - 2,
        p_value,
        m,
        "one line for each sprinkling, since the points share their sprinklings",
    )


def _lack_of_fit(contrasts: FloatArray) -> tuple[float, float]:
    """Hotelling's T**2 of contrasts that vanish on a line, and its p-value."""
    count, dof = contrasts.shape
    if count <= dof:
        return math.nan, math.nan
    mean = contrasts.mean(axis=0)
    covariance = np.atleast_2d(np.cov(contrasts, rowvar=False))
    try:
        t2 = float(count * mean @ np.linalg.solve(covariance, mean))
    except np.linalg.LinAlgError:
        return math.nan, math.nan
    ratio = t2 * (count - dof) / (dof * (count - 1))
    return t2, float(special.fdtrc(dof, count - dof, ratio))
