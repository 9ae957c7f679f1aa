"""One trend through the means of all cells: a slope, one constant for each placement class."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray
from scipy import special

from lozenge_engine.kernels.cells import Group, Model, Prepared, Refused, prepare
from lozenge_engine.kernels.whitening import Solution, solve

__all__ = ["LineFit", "fit", "slope_weights"]

FloatArray = NDArray[np.float64]


class LineFit(NamedTuple):
    """A fitted trend.

    Attributes
    ----------
    model : {"log", "log_root", "volume"}
        S = b x + c; S = b x + d/sqrt(elements) + c; S = b elements + c.
    slope, slope_error : float
        b and its standard error, in nats.
    low, high : float
        Ends of its 95 % interval (Student's t).
    constants : tuple of (int, float, float)
        Placement class, its constant c and that one's standard error, ascending.
    chi2 : float
        Squared residuals in units of the means' estimated covariance; NaN if that is unknown.
    dof : int
        Cells minus coefficients.
    p_value : float
        Probability of a larger chi2 if the model is right, the covariance being estimated; NaN if
        unknown.
    aicc : float
        Corrected information criterion of the normal likelihood of all samples, up to a constant
        that the models share; NaN if unknown.
    cells, realisations : int
        Cells fitted; the least number of realisations of a group.
    method : str
        How the covariance was treated, in words.
    root, root_error : float
        d and its standard error; NaN in other models.
    freedom : float
        Degrees of freedom of the slope's error.
    left_out : int
        Rows that were not finite.
    """

    model: Model
    slope: float
    slope_error: float
    low: float
    high: float
    constants: tuple[tuple[int, float, float], ...]
    chi2: float
    dof: int
    p_value: float
    aicc: float
    cells: int
    realisations: int
    method: str
    root: float
    root_error: float
    freedom: float
    left_out: int


def fit(groups: Sequence[Group], *, model: Model = "log") -> LineFit | Refused:
    """Fit a trend by generalised least squares with the samples' own covariance.

    Parameters
    ----------
    groups : sequence of Group
        Independent of each other.
    model : {"log", "log_root", "volume"}
        The law.

    Returns
    -------
    LineFit or Refused
        Refused with fewer than two realisations in a group, fewer than three abscissae, no spare
        cell, or samples that do not vary or determine each other.

    Notes
    -----
    With fewer than 2 P + 6 realisations of a group of P cells the covariance is not known well
    enough to weight with: then all samples weigh the same, the line's scatter between
    realisations gives the error, and chi2 is unknown.  Cost: R P**2 for the covariances.
    """
    data = prepare(groups, model)
    if isinstance(data, Refused):
        return data
    return _line_fit(data, _solved(data), model)


def _solved(data: Prepared) -> Solution:
    return solve(
        data.means, data.covariances, data.designs, counts=data.counts, weighted=data.weighted
    )


def _line_fit(data: Prepared, solution: Solution, model: Model) -> LineFit:
    errors = np.sqrt(solution.shares.sum(axis=0))
    slope, freedom = float(solution.beta[0]), float(solution.freedom[0])
    half = float(special.stdtrit(freedom, 0.975) * errors[0])
    extra = 2 if model == "log_root" else 1
    size = sum(mean.size for mean in data.means)
    return LineFit(
        model,
        slope,
        float(errors[0]),
        slope - half,
        slope + half,
        tuple(
            (label, float(solution.beta[extra + k]), float(errors[extra + k]))
            for k, label in enumerate(data.classes)
        ),
        float(solution.group_chi2.sum()),
        size - solution.beta.size,
        float(solution.p_value),
        _aicc(data, solution),
        size,
        int(data.counts.min()),
        _METHODS[data.weighted],
        float(solution.beta[1]) if extra == 2 else math.nan,
        float(errors[1]) if extra == 2 else math.nan,
        freedom,
        data.left_out,
    )


_METHODS = {
    True: "generalised least squares with the samples' covariance",
    False: "equal weights, since there are too few realisations to know the covariance",
}


def _aicc(data: Prepared, solution: Solution) -> float:
    """-2 ln L + 2 p + 2 p (p + 1)/(n - p - 1) over all n numbers, relative to the means' own.

    -2 ln L = sum R ln(1 + chi2/(R - 1)) with the covariance at its own maximum; its entries count
    among the p parameters.
    """
    sizes = np.array([mean.size for mean in data.means], dtype=float)
    p = solution.beta.size + float(np.sum(sizes * (sizes + 1.0)) / 2.0)
    n = float(np.sum(sizes * data.counts))
    if n <= p + 1.0:
        return math.nan
    likelihood = data.counts * np.log1p(solution.group_chi2 / (data.counts - 1.0))
    return float(np.sum(likelihood)) + 2.0 * p + 2.0 * p * (p + 1.0) / (n - p - 1.0)


def slope_weights(groups: Sequence[Group], *, model: Model = "log") -> FloatArray:
    """Where more realisations would help: v_g with variance of the slope = sum of v_g/R_g.

    Parameters
    ----------
    groups : sequence of Group
        Independent of each other.
    model : {"log", "log_root", "volume"}
        The law.

    Returns
    -------
    ndarray, shape (G,), float64
        In the order of the groups; NaN where `fit` would refuse.  One more realisation of
        group g lowers the variance by v_g/R_g**2 to first order, the weights being at their
        optimum.

    Notes
    -----
    Residuals do not count here: to look again wherever the line happens to fit badly would make
    chi2 too small.
    """
    data = prepare(groups, model)
    if isinstance(data, Refused):
        return np.full(len(groups), np.nan)
    return np.asarray(_solved(data).expected[:, 0] * data.counts)
