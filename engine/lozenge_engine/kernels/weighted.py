"""The Pauli-Jordan operator on evenly laid points of a curved patch, each with its weight."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.errors import refuse
from lozenge_engine.kernels.order import Commutator

__all__ = ["WeightedCommutator"]

Vectors = NDArray[np.float64]


class WeightedCommutator:
    """D A D with D = sqrt(w): a quadrature of the operator with the measure Omega^2 du dv.

    The eigenvalue problem of the kernel K(x, y) with weights w is K W f = lambda f; with
    g = sqrt(w) f it is symmetric (skew here), sqrt(w) K sqrt(w) g = lambda g (common practice, no
    source).

    Parameters
    ----------
    operator : Commutator
        A on the points, of size N.
    weights : ndarray, shape (N,), float64
        w > 0.

    Raises
    ------
    InputError
        If the weights do not fit the operator or one is not above 0.
    """

    def __init__(self, operator: Commutator, weights: NDArray[np.float64]) -> None:
        if weights.shape != (operator.size,) or not (weights > 0).all():
            raise refuse(
                "weights",
                given=f"an array of shape {weights.shape}",
                allowed=f"{operator.size} numbers above 0",
                do="give one weight for each point",
            )
        self._operator = operator
        self._root = np.sqrt(weights)

    @property
    def size(self) -> int:
        """Number of points N."""
        return self._operator.size

    def apply(self, x: Vectors) -> Vectors:
        """Apply D A D.

        Parameters
        ----------
        x : (N,) or (N, s) ndarray of float64
            One vector or a panel of columns.

        Returns
        -------
        ndarray of float64
            Of the shape of x. Cost: that of A and 2 N flops per vector.
        """
        root = self._root if x.ndim == 1 else self._root[:, None]
        # In the layout of a panel's columns, which the operator reads one by one.
        out = self._operator.apply(np.asfortranarray(x * root))
        out *= root
        return out

    def squared_norm(self) -> float | None:
        """Return None: the weighted sum over all related pairs has no fast route here."""
        return None
