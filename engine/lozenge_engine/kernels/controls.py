"""Control variates: quantities with exactly known means, to lower the variance of another."""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.kernels.cells import Refused

__all__ = ["Reduction", "reduction"]

FloatArray = NDArray[np.float64]


class Reduction(NamedTuple):
    """What control variates do to a mean.

    Attributes
    ----------
    ratio : float
        Variance of the plain mean over that of the adjusted one, the coefficients' own
        uncertainty included; below 1 the controls do harm.
    mean, error : float
        Adjusted mean and its standard error.
    plain, plain_error : float
        The same without controls.
    shift : float
        Adjusted minus plain mean in units of that difference's standard error: a standard normal
        number if the known means are right; 0 if the controls do not vary.
    coefficients : tuple of float
        Of each control, in its order.
    realisations : int
        Rows used.
    left_out : int
        Rows that were not finite.
    """

    ratio: float
    mean: float
    error: float
    plain: float
    plain_error: float
    shift: float
    coefficients: tuple[float, ...]
    realisations: int
    left_out: int


def reduction(samples: FloatArray, controls: FloatArray, known: FloatArray) -> Reduction | Refused:
    """Regress samples on controls whose means are known.

    Parameters
    ----------
    samples : ndarray, shape (R,), float64
        One for each realisation.
    controls : ndarray, shape (R, Q), float64
        Of the same realisations.
    known : ndarray, shape (Q,), float64
        Exact means of the controls.

    Returns
    -------
    Reduction or Refused
        Refused unless at least Q + 4 rows are finite and the samples vary.

    Notes
    -----
    Adjusted mean = intercept of the regression on controls - known.  Its error is exact for
    normal numbers, R - 1 - Q degrees of freedom; the ratio holds the factor
    (R - 2)/(R - Q - 2) by which estimating the coefficients raises the variance on average
    (textbook result).  Controls that do not vary, or follow from others, cost nothing.
    """
    rows = np.isfinite(samples) & np.isfinite(controls).all(axis=1)
    y, c = samples[rows], controls[rows] - known
    count, columns = c.shape
    if count < columns + 4:
        return Refused(
            f"{count} realisations for {columns} controls: at least {columns + 4} are needed"
        )
    plain, centre = float(y.mean()), c.mean(axis=0)
    total = float(np.sum((y - plain) ** 2))
    deviations = c - centre
    scales = np.sqrt(np.mean(deviations**2, axis=0))
    varying = scales > 1e-13 * np.abs(known)
    scales = np.where(varying, scales, 1.0)
    unit = np.where(varying, deviations / scales, 0.0)
    solution, _, rank, _ = np.linalg.lstsq(unit, y - plain, rcond=1e-10)
    predicted = unit @ solution
    residual = max(total - float(predicted @ predicted), 0.0)
    if total <= (1e-13 * plain) ** 2 * count or residual <= 1e-24 * total:
        return Refused("the samples do not vary apart from the controls: no error is known")
    offset = centre / scales
    free = count - 1 - int(rank)
    variance = residual / free
    # Squared distance of the controls' mean from the known one, in units of their own scatter.
    distance = float(offset @ np.linalg.pinv(unit.T @ unit, rcond=1e-10) @ offset)
    plain_variance = total / (count - 1)
    spread = math.sqrt(float(predicted @ predicted) / (count - 1) / count)
    change = -float(offset @ solution)
    return Reduction(
        plain_variance / (variance * (count - 2) / (count - 2 - int(rank))),
        plain + change,
        math.sqrt(variance * (1.0 / count + distance)),
        plain,
        math.sqrt(plain_variance / count),
        change / spread if spread > 0.0 else 0.0,
        tuple(float(s) for s in np.where(varying, solution / scales, 0.0)),
        count,
        int(rows.size - count),
    )
