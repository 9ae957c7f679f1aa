"""Generalised least squares on means whose covariance is estimated, many data sets at once.

Groups are independent of each other; inside a group the cells share their realisations.  Leading
axes of the arrays are data sets, so that a bootstrap or a study of coverage is one call.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy import special

__all__ = ["Solution", "solve"]

FloatArray = NDArray[np.float64]


class Solution(NamedTuple):
    """Coefficients of a linear model with what is known of their errors; q of them, G groups.

    Attributes
    ----------
    beta : ndarray, shape (..., q), float64
        The coefficients.
    shares : ndarray, shape (..., G, q), float64
        Each group's contribution to the variance of each coefficient.
    expected : ndarray, shape (..., G, q), float64
        The same with what the residuals contribute at its mean, if the model is right.
    freedom : ndarray, shape (..., q), float64
        Degrees of freedom of that variance, for Student's t.
    group_chi2 : ndarray, shape (..., G), float64
        Squared residuals in units of the means' covariance; NaN without weighting.
    p_value : ndarray, shape (...), float64
        Probability of a larger sum of them if the model is right; NaN if unknown.
    """

    beta: FloatArray
    shares: FloatArray
    expected: FloatArray
    freedom: FloatArray
    group_chi2: FloatArray
    p_value: FloatArray


def solve(
    means: Sequence[FloatArray],
    covariances: Sequence[FloatArray],
    designs: Sequence[FloatArray],
    *,
    counts: FloatArray,
    weighted: bool = True,
) -> Solution:
    """Fit one linear model to the means of all groups.

    Parameters
    ----------
    means : sequence of ndarray, shape (..., P_g), float64
        Of the realisations, for each cell of each group.
    covariances : sequence of ndarray, shape (..., P_g, P_g), float64
        Sample covariance of one realisation, with denominator R_g - 1; positive definite if
        `weighted`.
    designs : sequence of ndarray, shape (P_g, q), float64
        The model's columns; of rank q together.
    counts : ndarray, shape (..., G), float64
        Realisations R_g, at least 2; at least P_g + 3 if `weighted`.
    weighted : bool
        Weight with the estimated covariance; otherwise all samples weigh the same and the
        covariance only gives the errors, which needs no inverse.

    Returns
    -------
    Solution
        In the order of `designs`' columns.

    Raises
    ------
    numpy.linalg.LinAlgError
        If a covariance is not positive definite.

    Notes
    -----
    The covariance being estimated, plain errors are too small, for two reasons.  With whitened
    residuals e, hat matrix H, nu = R - 1 and a group's part a of a coefficient's weights,

    - the weights' own errors move the coefficient by a.E.e, E a Wishart matrix minus its mean:
      a.a grows to a.a + [(a.a)(e.e) + (a.e)**2]/nu for each group;
    - weighting seeks out cells whose variance came out small: nu/(nu - k) makes up for it,
      k = 1 + P - tr H_gg - a.H_gg.a/a.a, with nu - k degrees of freedom in Satterthwaite's sum.

    On average this is, to first order in 1/nu, Kenward and Roger's correction ("Small sample
    inference for fixed effects from restricted maximum likelihood", Biometrics 53 (1997) 983).
    For one group a.e = 0, k = P - q, and the t interval is exact: the growth-curve model as
    an analysis of covariance.  For one cell in each group k = 2 (1 - h), the textbook's term for
    weighted means.

    Cost: sum of P_g**3 + N q**2 flops for each data set, N = sum of P_g.
    """
    x, y = _whitened(means, covariances, designs, counts, weighted=weighted)
    q, r = np.linalg.qr(np.concatenate(x, axis=-2))
    values = np.concatenate(y, axis=-1)[..., None]
    projected = np.swapaxes(q, -1, -2) @ values
    beta = np.linalg.solve(r, projected)[..., 0]
    edges = np.cumsum([d.shape[0] for d in designs])[:-1]
    hats = np.split(q, edges, axis=-2)
    across = np.swapaxes(np.linalg.inv(r), -1, -2)
    weights = [h @ across for h in hats]
    free = counts - 1.0
    if not weighted:
        shares = np.stack(
            [np.sum(w * (c @ w), axis=-2) for w, c in zip(weights, covariances, strict=True)],
            axis=-2,
        )
        unknown = np.full(free.shape, np.nan)
        freedom = _satterthwaite(shares, free[..., None])
        return Solution(beta, shares, shares, freedom, unknown, unknown[..., 0])
    residuals = np.split((values - q @ projected)[..., 0], edges, axis=-1)
    chi2 = np.stack([np.sum(e**2, axis=-1) for e in residuals], axis=-1)
    grams = [np.swapaxes(h, -1, -2) @ h for h in hats]
    shares, expected, left = _corrected(hats, weights, grams, free, residuals)
    p_value = _p_value(hats, grams, free, chi2)
    return Solution(beta, shares, expected, _satterthwaite(shares, left), chi2, p_value)


def _whitened(
    means: Sequence[FloatArray],
    covariances: Sequence[FloatArray],
    designs: Sequence[FloatArray],
    counts: FloatArray,
    *,
    weighted: bool,
) -> tuple[list[FloatArray], list[FloatArray]]:
    """Columns and means of every group in units where errors are alike, L L^T = Sigma/R."""
    if not weighted:
        roots = np.sqrt(counts)
        return (
            [roots[..., g, None, None] * d for g, d in enumerate(designs)],
            [roots[..., g, None] * m for g, m in enumerate(means)],
        )
    factors = [
        np.linalg.cholesky(c / counts[..., g, None, None]) for g, c in enumerate(covariances)
    ]
    x = [
        np.linalg.solve(f, np.broadcast_to(d, f.shape[:-2] + d.shape))
        for f, d in zip(factors, designs, strict=True)
    ]
    y = [np.linalg.solve(f, m[..., None])[..., 0] for f, m in zip(factors, means, strict=True)]
    return x, y


def _satterthwaite(shares: FloatArray, free: FloatArray) -> FloatArray:
    """Degrees of freedom of a sum of independent variances."""
    total = np.sum(shares, axis=-2)
    return np.asarray(total**2 / np.sum(shares**2 / free, axis=-2))


def _corrected(
    hats: Sequence[FloatArray],
    weights: Sequence[FloatArray],
    grams: Sequence[FloatArray],
    free: FloatArray,
    residuals: Sequence[FloatArray],
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Contributions to the variances, their means, and each group's degrees of freedom left."""
    plain = np.stack([np.sum(w**2, axis=-2) for w in weights], axis=-2)
    # a.H a / a.a; a group without any weight contributes nothing, whatever its correction.
    inner = np.stack(
        [
            np.sum((np.swapaxes(h, -1, -2) @ w) ** 2, axis=-2)
            for h, w in zip(hats, weights, strict=True)
        ],
        axis=-2,
    ) / np.where(plain > 0.0, plain, 1.0)
    trace = np.stack([np.trace(g, axis1=-2, axis2=-1) for g in grams], axis=-1)
    size = np.array([h.shape[-2] for h in hats], dtype=float)
    lost = (1.0 + size - trace)[..., None] - inner
    nu = free[..., None]
    left = nu - lost
    moved = np.stack(
        [
            p * np.sum(e**2, axis=-1)[..., None] + np.sum(w * e[..., None], axis=-2) ** 2
            for p, w, e in zip(np.moveaxis(plain, -2, 0), weights, residuals, strict=True)
        ],
        axis=-2,
    )
    return (plain + moved / nu) * nu / left, plain * (nu + lost) / left, left


def _p_value(
    hats: Sequence[FloatArray], grams: Sequence[FloatArray], free: FloatArray, chi2: FloatArray
) -> FloatArray:
    """Lack of fit: F distribution with Kenward and Roger's two moments (same source, section 3).

    In the N - q residual contrasts, N = I - H: E (tr N dV)**2 = 2 tr N_gg**2/nu and
    E tr (N dV N dV) = [tr N_gg**2 + (tr N_gg)**2]/nu for Wishart dV.  Exact for one group
    (Hotelling).
    """
    size = np.array([h.shape[-2] for h in hats], dtype=float)
    contrasts = size.sum() - hats[0].shape[-1]
    trace = np.stack([np.trace(g, axis1=-2, axis2=-1) for g in grams], axis=-1)
    square = np.stack([np.sum(g**2, axis=(-2, -1)) for g in grams], axis=-1)
    squared = size - 2.0 * trace + square
    a1 = np.sum(2.0 * squared / free, axis=-1)
    a2 = np.sum((squared + (size - trace) ** 2) / free, axis=-1)
    b = (a1 + 6.0 * a2) / (2.0 * contrasts)
    g = ((contrasts + 1.0) * a1 - (contrasts + 4.0) * a2) / ((contrasts + 2.0) * a2)
    scale = 3.0 * contrasts + 2.0 * (1.0 - g)
    mean = 1.0 / (1.0 - a2 / contrasts)
    variance = (2.0 / contrasts) * (1.0 + g / scale * b)
    variance /= (1.0 - (contrasts - g) / scale * b) ** 2
    variance /= 1.0 - (contrasts + 2.0 - g) / scale * b
    ratio = variance / (2.0 * mean**2)
    second = 4.0 + (contrasts + 2.0) / (contrasts * ratio - 1.0)
    statistic = second / (mean * (second - 2.0)) * np.sum(chi2, axis=-1) / contrasts
    known = (a2 < contrasts) & (variance > 0.0) & (second > 2.0)
    p = special.fdtrc(contrasts, np.where(known, second, 1.0), np.where(known, statistic, 1.0))
    return np.asarray(np.where(known, p, np.nan))
