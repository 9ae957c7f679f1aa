"""Pauli-Jordan operators on points: massless, massive, and from an explicit order.

Element i precedes j iff u_i < u_j and v_i < v_j; C_ij = 1 iff i precedes j, else 0. With the
retarded function G the Pauli-Jordan operator is i Delta = i A, A = G - G^T real and skew
(up to a sign that no entropy sees). Massless G = C/2; massive
G = (C/2)(1 + (m^2/(2 rho)) C)^-1 ("Particle propagators on discrete spacetime",
Class. Quantum Grav. 25 (2008) 202001, arXiv:0806.3083). No operator on points holds an
N x N array.
"""

from __future__ import annotations

import math
from typing import Any, Literal, Protocol

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.linalg import solve_triangular
from scipy.sparse import csc_array, eye_array
from scipy.sparse.linalg import splu

from lozenge_engine.errors import refuse
from lozenge_engine.kernels.ranks import ascending_pairs, count_relations, v_order
from lozenge_engine.kernels.relation import strict_partial_order

__all__ = [
    "Commutator",
    "ExplicitCommutator",
    "MassiveCommutator",
    "MasslessCommutator",
    "count_relations",
    "warm",
]

Vectors = NDArray[np.float64]


class Commutator(Protocol):
    """Anything that applies the real skew operator A = G - G^T, i Delta = i A."""

    @property
    def size(self) -> int:
        """Number of elements n."""
        ...

    def apply(self, x: Vectors) -> Vectors:
        """Apply A.

        Parameters
        ----------
        x : (n,) or (n, s) ndarray of float64
            One vector or a panel of columns.

        Returns
        -------
        ndarray of float64
            A x, of the shape of x, in any memory layout.
        """
        ...

    def squared_norm(self) -> float | None:
        """Return sum_ij A_ij^2 exactly, or None where that costs more than O(n log n)."""
        ...


class MasslessCommutator:
    """A = (C - C^T)/2 of points in the plane, applied by running sums.

    (C - C^T)_ij = [sgn(u_j - u_i) + sgn(v_j - v_i)]/2, hence with T = sum(x) and inclusive
    running sums cu (ascending u) and cv (ascending v): (C - C^T) x = T + x - cu - cv.

    Parameters
    ----------
    u, v : (n,) array_like of float
        Light-cone coordinates, in natural order: u ascending; no value twice.
    compiled : bool, default False
        Use the compiled loop instead of NumPy: same bits, 3 to 4 times faster. The first use in a
        process imports and compiles it (see `warm`).

    Raises
    ------
    InputError
        If u is not ascending, a value of u or v stands twice, or is not finite.
    """

    def __init__(self, u: ArrayLike, v: ArrayLike, *, compiled: bool = False) -> None:
        self._by_v, self._rank = v_order(u, v)
        self._compiled = compiled

    @property
    def size(self) -> int:
        """Number of elements n."""
        return self._rank.size

    def apply(self, x: Vectors) -> Vectors:
        """Apply A.

        Parameters
        ----------
        x : (n,) or (n, s) ndarray of float64
            One vector or a panel of columns, in any memory layout.

        Returns
        -------
        ndarray of float64
            A x, of the shape of x; a panel comes back in Fortran order. Each column has the
            bits that it has alone. Cost O(n) per vector.
        """
        # Column by column: running sums along a strided axis cost twice as much.
        x = _checked(x, self.size)
        out = np.empty(x.shape, order="F")
        for column, result in zip(np.atleast_2d(x.T), np.atleast_2d(out.T), strict=True):
            self._apply_one(np.ascontiguousarray(column), result)
        return out

    def _apply_one(self, x: Vectors, out: Vectors) -> None:
        """Write A x of one contiguous vector to `out`."""
        if self._compiled:
            from lozenge_engine.kernels import fenwick

            fenwick.massless_loop()(x, self._by_v, out)
            return
        cu = np.cumsum(x)
        cv = np.cumsum(x[self._by_v])[self._rank]
        np.add(x, cu[-1], out=out)  # T + x - cu - cv, added up in this order by both routes
        out -= cu
        out -= cv
        out *= 0.5

    def squared_norm(self) -> float:
        """Return sum_ij A_ij^2 = R/2, R the number of relations, in O(n log n)."""
        return ascending_pairs(self._by_v) / 2


class MassiveCommutator:
    """A = G - G^T of a massive field on points in the plane.

    G = (C/2)(1 + (m^2/(2 rho)) C)^-1 by one backward sweep over a Fenwick tree of v-ranks, G^T
    by a forward sweep. C y is read from the tree, never formed as (x - y)/coupling, so that
    m -> 0 gives the massless operator without cancellation. Always compiled.

    Parameters
    ----------
    u, v : (n,) array_like of float
        Light-cone coordinates, in natural order: u ascending; no value twice.
    mass : float
        m in inverse half-widths of the patch, 0 <= m <= 0.3 sqrt(density).
    density : float
        rho, elements per unit area.

    Raises
    ------
    InputError
        If the points are refused as in `MasslessCommutator`, or mass or density is out of range.
    """

    def __init__(self, u: ArrayLike, v: ArrayLike, *, mass: float, density: float) -> None:
        _, self._rank = v_order(u, v)
        self._coupling = _coupling(mass, density)

    @property
    def size(self) -> int:
        """Number of elements n."""
        return self._rank.size

    def retarded(self, x: Vectors) -> Vectors:
        """Apply G, the retarded function.

        Parameters
        ----------
        x : (n,) or (n, s) ndarray of float64
            One vector or a panel of columns, in any memory layout.

        Returns
        -------
        ndarray of float64
            G x, of the shape of x. Cost O(n log n) per vector, half that of `apply`.
        """
        return 0.5 * self._sweep(x, backward=True)

    def advanced(self, x: Vectors) -> Vectors:
        """Apply G^T, the advanced function.

        Parameters
        ----------
        x : (n,) or (n, s) ndarray of float64
            One vector or a panel of columns, in any memory layout.

        Returns
        -------
        ndarray of float64
            G^T x, of the shape of x. Cost O(n log n) per vector, half that of `apply`.
        """
        return 0.5 * self._sweep(x, backward=False)

    def apply(self, x: Vectors) -> Vectors:
        """Apply A.

        Parameters
        ----------
        x : (n,) or (n, s) ndarray of float64
            One vector or a panel of columns, in any memory layout.

        Returns
        -------
        ndarray of float64
            A x = G x - G^T x, of the shape of x. Each column has the bits that it has alone.
            Cost O(n log n) per vector, work space as large as x.
        """
        out = self._sweep(x, backward=True)
        out -= self._sweep(x, backward=False)
        out *= 0.5
        return out

    def _sweep(self, x: Vectors, *, backward: bool) -> Vectors:
        """Return C (1 + coupling C)^-1 x, of C or (forward) of its transpose."""
        from lozenge_engine.kernels import fenwick

        x = np.ascontiguousarray(_checked(x, self.size))
        out = np.empty_like(x)
        loop = fenwick.vector_tree_loop() if x.ndim == 1 else fenwick.panel_tree_loop()
        loop(x, self._rank, self._coupling, backward, out)
        return out

    def squared_norm(self) -> float | None:
        """Return None: the sum over all entries has no fast route here."""
        return None


class ExplicitCommutator:
    """A = G - G^T of an order relation given entry by entry.

    Parameters
    ----------
    relations : (n, n) array_like or scipy.sparse matrix, of bool or of the numbers 0 and 1
        C: entry (i, j) is 1 iff element i precedes j. The elements may stand in any order; `apply`
        takes and returns vectors in that order. Dense input is kept dense: 8 n^2 bytes, 16 n^2
        with a mass, and about 24 n^2 while it is checked.
    mass : float, default 0
        m in inverse half-widths of the patch, 0 <= m <= 0.3 sqrt(density).
    density : float, optional
        rho, elements per unit area; needed with a mass.

    Raises
    ------
    InputError
        If the array is not square, holds anything but 0 and 1, or is no strict partial order
        (the first violation is named); if mass or density is out of range or density is missing.

    Notes
    -----
    Checking that the relation is transitive costs 2 n^3 flops for dense input.
    """

    def __init__(self, relations: Any, *, mass: float = 0.0, density: float | None = None) -> None:
        given = strict_partial_order(relations)
        # Who precedes more comes later: a topological order of any strict partial order.
        self._order = np.argsort(given.sum(axis=0), kind="stable")
        self._later: Any = given[self._order][:, self._order]  # C, upper triangular
        coupling = 0.0 if mass == 0 and density is None else _coupling(mass, density)
        self._dense_unit: Vectors | None = None  # 1 + coupling C, whichever form C has
        self._sparse_unit: Any = None
        if coupling and isinstance(self._later, np.ndarray):
            self._dense_unit = coupling * self._later  # its unit diagonal is implied
        elif coupling:
            unit = csc_array(eye_array(self.size) + coupling * self._later)
            # Already triangular: this factorisation copies it, without pivoting or fill.
            self._sparse_unit = splu(
                unit, permc_spec="NATURAL", diag_pivot_thresh=0.0, options={"Equil": False}
            )

    @property
    def size(self) -> int:
        """Number of elements n."""
        return self._order.size

    def apply(self, x: Vectors) -> Vectors:
        """Apply A.

        Parameters
        ----------
        x : (n,) or (n, s) ndarray of float64
            One vector or a panel of columns, in the order of `relations`.

        Returns
        -------
        ndarray of float64
            A x, of the shape of x. Cost per vector: 4 n^2 flops dense and 4 R sparse, R the number
            of relations; twice that with a mass.
        """
        ordered = _checked(x, self.size)[self._order]
        retarded = self._unit_solve(self._later @ ordered, "N")
        advanced = self._unit_solve(self._later.T @ ordered, "T")
        out = np.empty(x.shape)
        out[self._order] = 0.5 * (retarded - advanced)
        return out

    def _unit_solve(self, b: Vectors, trans: Literal["N", "T"]) -> Vectors:
        """Solve (1 + coupling C) y = b, or with the transpose."""
        if self._dense_unit is not None:
            b = solve_triangular(
                self._dense_unit, b, trans=trans, unit_diagonal=True, check_finite=False
            )
        elif self._sparse_unit is not None:
            b = self._sparse_unit.solve(b, trans)
        return b

    def squared_norm(self) -> float | None:
        """Return sum_ij A_ij^2 = R/2 (R relations) for a massless field, None with a mass."""
        massive = self._dense_unit is not None or self._sparse_unit is not None
        return None if massive else float(self._later.sum()) / 2


def warm() -> None:
    """Compile every loop, or read it from numba's cache; meant for a background thread.

    Takes a few seconds in the first process on a machine and about one second later on.
    """
    from lozenge_engine.kernels import fenwick

    fenwick.massless_loop()
    fenwick.vector_tree_loop()
    fenwick.panel_tree_loop()


def _coupling(mass: float, density: float | None) -> float:
    """Return m^2/(2 rho), mass and density checked."""
    if density is None or not (math.isfinite(density) and density > 0):
        raise refuse(
            "density",
            given=density,
            allowed="a finite number above 0 (elements per unit area)",
            do="pass the density of the points",
        )
    high = 0.3 * math.sqrt(density)
    if not 0 <= mass <= high:
        raise refuse(
            "mass",
            given=mass,
            allowed=f"0 to 0.3 sqrt(density) = {high:.6g} inverse half-widths",
            do="lower the mass or raise the density",
        )
    return mass**2 / (2 * density)


def _checked(x: Vectors, size: int) -> Vectors:
    """Return x, a vector or a panel for `size` elements, or refuse it."""
    is_array = isinstance(x, np.ndarray)
    if not is_array or x.dtype != np.float64 or x.ndim not in (1, 2) or x.shape[0] != size:
        raise refuse(
            "x",
            given=f"{x.dtype} of shape {x.shape}" if is_array else type(x).__name__,
            allowed=f"a float64 array of shape ({size},) or ({size}, s)",
            do="pass one vector or a panel of columns, a row for every element",
        )
    return x
