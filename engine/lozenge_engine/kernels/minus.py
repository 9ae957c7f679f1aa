"""Samples minus a reference that has errors of its own: a line, and how well it fits."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray
from scipy import special

from lozenge_engine.kernels.scaling import Fit

__all__ = ["fit_minus"]

FloatArray = NDArray[np.float64]


def fit_minus(
    x: FloatArray, samples: FloatArray, reference: FloatArray, errors: FloatArray
) -> Fit | None:
    """Fit a line to means minus a reference, where the points share their sprinklings.

    Parameters
    ----------
    x : ndarray, shape (M,), float64
        Abscissae, M >= 3.
    samples : ndarray, shape (R, M), float64
        One row for each sprinkling.
    reference, errors : ndarray, shape (M,), float64
        What is subtracted, and its standard errors, independent of the sprinklings and of each
        other.

    Returns
    -------
    Fit or None
        None with fewer than three points or two sprinklings, or without a spread in x; chi2 and p
        are NaN with too few sprinklings for the M - 2 contrasts.

    Notes
    -----
    Ordinary least squares, so that a reference without errors only shifts the slope of
    `lozenge_engine.kernels.scaling.fit_shared`.  With C = cov(samples)/R + diag(errors**2) the
    coefficients' covariance is A C A^T; the lack of fit is Hotelling's T**2 of the M - 2 residual
    contrasts with that covariance, its p-value by F(M - 2, R - M + 2) as if it had been estimated
    from the samples alone (exact without errors; textbook growth-curve model).  Cost: M**3.
    """
    count, m = samples.shape
    if m < 3 or count < 2 or np.ptp(x) == 0.0:
        return None
    design = np.column_stack([x, np.ones_like(x)])
    q, r = np.linalg.qr(design, mode="complete")
    solve = np.linalg.solve(r[:2], q[:, :2].T)
    gap = samples.mean(axis=0) - reference
    covariance = np.cov(samples, rowvar=False) / count + np.diag(errors**2)
    beta = solve @ gap
    error = np.sqrt(np.diag(solve @ covariance @ solve.T))
    chi2, p_value = _lack_of_fit(q[:, 2:], gap, covariance, count)
    return Fit(
        float(beta[0]),
        float(error[0]),
        float(beta[1]),
        float(error[1]),
        chi2,
        m - 2,
        p_value,
        m,
        "minus a reference with errors of its own; the points share their sprinklings",
    )


def _lack_of_fit(
    contrasts: FloatArray, gap: FloatArray, covariance: FloatArray, count: int
) -> tuple[float, float]:
    """T**2 of the contrasts that vanish on a line, and its p-value."""
    dof = contrasts.shape[1]
    if count <= dof:
        return math.nan, math.nan
    left = contrasts.T @ gap
    try:
        t2 = float(left @ np.linalg.solve(contrasts.T @ covariance @ contrasts, left))
    except np.linalg.LinAlgError:
        return math.nan, math.nan
    ratio = t2 * (count - dof) / (dof * (count - 1))
    return t2, float(special.fdtrc(dof, count - dof, ratio))
