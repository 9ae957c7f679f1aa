"""Conformally flat patches, and how the elements of a point set are counted.

ds^2 = Omega^2 (dt^2 - dx^2) has the causal order of the flat patch and the volume element
Omega^2 dt dx.  Massless only: in two dimensions the massless commutator does not see Omega, so
curvature enters by the density of the elements alone.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.geometry import PATCH_AREA, PATCH_EXTENT, Curvature
from lozenge_engine.source import PointSource

__all__ = ["Counting", "conformal_factor", "counting", "ordering_fraction"]

FloatArray = NDArray[np.float64]


def conformal_factor(
    u: FloatArray, v: FloatArray, *, curvature: Curvature, radius: float
) -> FloatArray:
    """Volume element Omega^2 of the metric at points of the patch.

    Positive: Omega^2 = 1/cos^2(t/l), the global form of two-dimensional de Sitter space in
    conformal time (common practice, no source), Ricci scalar 2/l^2.  Negative: 1/cos^2(x/l), the
    same with t and x exchanged, anti-de Sitter space, -2/l^2.  Tests differentiate both.

    Parameters
    ----------
    u, v : ndarray, shape (N,), float64
        Light-cone coordinates in the patch.
    curvature : {"flat", "positive", "negative"}
        Which metric.
    radius : float
        Curvature radius l > 2/pi, in patch half-widths; unused when flat.

    Returns
    -------
    ndarray, shape (N,), float64
        At least 1, and 1/cos^2(1/l) at most.
    """
    if curvature == "flat":
        return np.ones_like(u)
    place = (u + v) if curvature == "positive" else (u - v)
    return np.asarray(np.cos(place * (PATCH_EXTENT / radius)) ** -2.0, dtype=np.float64)


def ordering_fraction(*, curvature: Curvature, radius: float, nodes: int = 200) -> float:
    """Expected fraction of related pairs among the elements of the patch.

    Two independent elements have the density Omega^2/V each; the later one lies in the patch's
    part of the first one's future, a diamond up to the patch's upper corner of volume
    V(u, v) in closed form (`lozenge_engine.geometry.volume`).  So the fraction is
    2 int Omega^2 V(u, v) du dv / V^2 (own derivation), by Gauss-Legendre quadrature.

    Parameters
    ----------
    curvature : {"flat", "positive", "negative"}
        Metric.
    radius : float
        Curvature radius >= 0.7 in patch half-widths; unused when flat.
    nodes : int
        Nodes in each direction.

    Returns
    -------
    float
        1/2 when flat; larger for positive, smaller for negative curvature.

    Notes
    -----
    Cost: O(nodes**2); the error is below 1e-10 at 200 nodes (radius 0.7: compared with 400).
    """
    x, w = np.polynomial.legendre.leggauss(nodes)
    u, v = np.meshgrid(x * PATCH_EXTENT, x * PATCH_EXTENT, indexing="ij")
    top, future = PATCH_EXTENT, (PATCH_EXTENT - u) * (PATCH_EXTENT - v)
    if curvature != "flat":

        def f(s: FloatArray | float) -> FloatArray:
            angle = np.asarray(s) * (PATCH_EXTENT / radius)
            return np.asarray(-2.0 * radius**2 * np.log(np.cos(angle)))

        if curvature == "positive":
            future = f(2.0 * top) + f(u + v) - f(u + top) - f(top + v)
        else:
            future = f(top - v) + f(u - top) - f(0.0) - f(u - v)
    measure = conformal_factor(u, v, curvature=curvature, radius=radius) * np.outer(w, w)
    weight = PATCH_EXTENT**2
    total = float(measure.sum()) * weight
    return 2.0 * float((measure * future).sum()) * weight / total**2


class Counting(NamedTuple):
    """How the points of a set count in the truncation rules.

    Attributes
    ----------
    ratio : float
        Points laid over points of the geometry at its own density, f; 1 but for quasi-uniform
        sets.  Eigenvalues of the set are f times those of the geometry.
    weights : ndarray, shape (N,), float64, or None
        Volume element at each point, where points lie evenly in a curved patch.
    """

    ratio: float = 1.0
    weights: FloatArray | None = None

    def elements(self, rows: NDArray[np.intp]) -> float:
        """Elements that points stand for, at the density of the geometry.

        Parameters
        ----------
        rows : ndarray of int
            Indices of the points of a region.

        Returns
        -------
        float
            n/f; the plain number of points of a sprinkling.
        """
        n = float(rows.size) if self.weights is None else float(self.weights[rows].sum())
        return n / self.ratio

    def total(self, size: int) -> float:
        """Elements that the whole set stands for.

        Parameters
        ----------
        size : int
            Number of points, N.

        Returns
        -------
        float
            As `elements` of all points.
        """
        return (float(size) if self.weights is None else float(self.weights.sum())) / self.ratio


def counting(u: FloatArray, v: FloatArray, *, source: PointSource) -> Counting:
    """How the points of a source count.

    Parameters
    ----------
    u, v : ndarray, shape (N,), float64
        The points, as `lozenge_engine.kernels.laying.laid` gives them.
    source : PointSource
        Where they come from.

    Returns
    -------
    Counting
        Ratio N/(2 density), and weights in a curved patch, for quasi-uniform points; otherwise
        every point is an element.

    Notes
    -----
    Cost: O(N).
    """
    if not source.quasi_uniform:
        return Counting()
    ratio = u.size / (PATCH_AREA * source.density)
    if not source.curved:
        return Counting(ratio)
    weights = conformal_factor(u, v, curvature=source.curvature, radius=source.radius)
    return Counting(ratio, weights)
