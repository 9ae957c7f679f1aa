"""The cells of a fit: their samples' means and covariance, a model's columns, or why not.

The covariance is the samples' own: cells that share realisations are correlated, groups are not.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Literal, NamedTuple, get_args

import numpy as np
from numpy.typing import NDArray

__all__ = ["MODELS", "Group", "Model", "Prepared", "Refused", "prepare", "weightable"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

Model = Literal["log", "log_root", "volume"]
MODELS: tuple[Model, ...] = get_args(Model)
SMALLEST_RATIO = 1e-10
"""Least eigenvalue of the cells' correlation matrix; below it a combination of them is certain."""


class Group(NamedTuple):
    """Cells that share their realisations; independent of every other group.

    Attributes
    ----------
    samples : ndarray, shape (R, P), float64
        One row for each realisation; rows that are not finite are left out.
    x : ndarray, shape (P,), float64
        ln(l/a) of each cell.
    placement : ndarray, shape (P,), int
        Placement class of each cell.
    elements : ndarray, shape (P,), float64
        Expected elements of each cell's smallest region, above 0.
    """

    samples: FloatArray
    x: FloatArray
    placement: IntArray
    elements: FloatArray


class Refused(NamedTuple):
    """No fit, and why.

    Attributes
    ----------
    reason : str
        What was given, what is needed.
    """

    reason: str


class Prepared(NamedTuple):
    """What a fit works on; G groups of P_g cells, q coefficients.

    Attributes
    ----------
    samples : list of ndarray, shape (R_g, P_g), float64
        Finite rows.
    means, covariances : list of ndarray, shapes (P_g,) and (P_g, P_g), float64
        Of the rows; the covariance of one row, with denominator R_g - 1.
    designs : list of ndarray, shape (P_g, q), float64
        The model's columns: slope, for log_root 1/sqrt(elements), one for each class.
    counts : ndarray, shape (G,), float64
        Rows R_g.
    classes : tuple of int
        Placement classes, ascending.
    weighted : bool
        Whether every covariance is known well enough to weight with: R_g >= 2 P_g + 6.
    left_out : int
        Rows that were not finite.
    """

    samples: list[FloatArray]
    means: list[FloatArray]
    covariances: list[FloatArray]
    designs: list[FloatArray]
    counts: FloatArray
    classes: tuple[int, ...]
    weighted: bool
    left_out: int


def prepare(groups: Sequence[Group], model: Model) -> Prepared | Refused:
    """Take means, covariances and columns.

    Parameters
    ----------
    groups : sequence of Group
        Independent of each other.
    model : {"log", "log_root", "volume"}
        The law.

    Returns
    -------
    Prepared or Refused
        Refused as said in `lozenge_engine.kernels.trend.fit`.
    """
    if not groups:
        return Refused("no samples: at least three sizes are needed")
    finite = [np.isfinite(group.samples).all(axis=1) for group in groups]
    samples = [group.samples[rows] for group, rows in zip(groups, finite, strict=True)]
    counts = np.array([rows.shape[0] for rows in samples], dtype=float)
    if counts.min() < 2.0:
        few = groups[int(counts.argmin())]
        return Refused(
            f"{_counted(int(counts.min()))} of the sprinkling with regions of "
            f"{few.elements.min():.0f} elements: at least 2 of each are needed for an error"
        )
    designs, classes = _designs(groups, model)
    reason = _too_few(designs, model)
    means = [rows.mean(axis=0) for rows in samples]
    covariances = [_covariance(rows, mean) for rows, mean in zip(samples, means, strict=True)]
    sizes = np.array([mean.size for mean in means])
    weighted = bool(weightable(counts, sizes))
    reason = reason or _degenerate(groups, means, covariances, weighted)
    if reason:
        return Refused(reason)
    left_out = sum(int(np.count_nonzero(~rows)) for rows in finite)
    return Prepared(samples, means, covariances, designs, counts, classes, weighted, left_out)


def weightable(counts: FloatArray, sizes: IntArray) -> NDArray[np.bool_]:
    """Whether all covariances are known well enough to weight with.

    Parameters
    ----------
    counts : ndarray, shape (..., G), float64
        Realisations of each group.
    sizes : ndarray, shape (G,), int
        Cells of each group.

    Returns
    -------
    ndarray, shape (...), bool
        R >= 2 P + 6 in all groups: about where weights start to be worth their own errors.
    """
    return np.asarray(np.all(counts >= 2 * sizes + 6, axis=-1))


def _counted(count: int) -> str:
    return "1 realisation" if count == 1 else f"{count or 'no'} realisations"


def _covariance(rows: FloatArray, mean: FloatArray) -> FloatArray:
    deviations = rows - mean
    return np.asarray(deviations.T @ deviations / (rows.shape[0] - 1.0))


def _designs(groups: Sequence[Group], model: Model) -> tuple[list[FloatArray], tuple[int, ...]]:
    """Columns: slope, for log_root 1/sqrt(elements), one constant for each class."""
    classes = tuple(int(k) for k in np.unique(np.concatenate([g.placement for g in groups])))
    designs = []
    for group in groups:
        columns = [group.elements if model == "volume" else group.x]
        if model == "log_root":
            columns.append(1.0 / np.sqrt(group.elements))
        columns += [(group.placement == k).astype(float) for k in classes]
        designs.append(np.column_stack(columns))
    return designs, classes


def _too_few(designs: list[FloatArray], model: Model) -> str:
    """Why the cells cannot carry the model; empty if they can."""
    stacked = np.concatenate(designs)
    first = stacked[:, 0] - stacked[0, 0]
    different = np.unique(np.round(first / (np.ptp(first) or 1.0), 9)).size
    need = 4 if model == "log_root" else 3
    if different < need:
        return f"{different} different sizes: at least {need} are needed"
    if stacked.shape[0] <= stacked.shape[1]:
        return (
            f"{stacked.shape[0]} cells for {stacked.shape[1]} coefficients: "
            "at least one more is needed to see whether the line fits"
        )
    scaled = stacked / np.linalg.norm(stacked, axis=0)
    if np.linalg.matrix_rank(scaled, tol=1e-9) < stacked.shape[1]:
        return "each placement class has one size only: none of them shows a slope"
    return ""


def _degenerate(
    groups: Sequence[Group],
    means: list[FloatArray],
    covariances: list[FloatArray],
    weighted: bool,
) -> str:
    """Why the samples give no covariance to weight with; empty if they do."""
    for group, mean, covariance in zip(groups, means, covariances, strict=True):
        scatter = np.sqrt(np.diag(covariance))
        flat = scatter <= 1e-13 * np.abs(mean)
        if flat.any():
            size = group.elements[int(flat.argmax())]
            return f"the samples with regions of {size:.0f} elements do not vary: no error is known"
        if not weighted:
            continue
        correlation = covariance / np.outer(scatter, scatter)
        if np.linalg.eigvalsh(correlation)[0] < SMALLEST_RATIO * mean.size:
            above = np.abs(np.triu(correlation, 1))
            i, j = np.unravel_index(int(above.argmax()), above.shape)
            return (
                "cells of one sprinkling determine each other, most of all those with regions of "
                f"{group.elements[i]:.0f} and {group.elements[j]:.0f} elements: leave one out"
            )
    return ""
