"""The massless field on the flat diamond without any points: its modes are known in closed form.

"A ground state for the causal diamond in 2 dimensions", JHEP 10 (2012) 088, arXiv:1205.1296: with
the half-side L in u and v,

    exp(-iku) - exp(-ikv),                   k L = n pi,
    exp(-iku) + exp(-ikv) - 2 cos(kL),       tan(kL) = 2 kL,

with eigenvalues lambda = rho L/k.  Every mode is a function of u plus a function of v, so that on
a region it splits into three orthogonal parts: of u with mean 0, of v with mean 0, a constant.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.geometry import PATCH_EXTENT, Extent
from lozenge_engine.kernels.laws import diamond_eigenvalues

__all__ = ["DiamondModes", "diamond_modes", "region_factor"]

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

NODES_PER_RADIAN = 0.6
"""Gauss nodes for each radian that the fastest mode turns through; 0.5 would just resolve it."""
SPARE_NODES = 24


class DiamondModes(NamedTuple):
    """Positive modes of i Delta on the diamond.

    Attributes
    ----------
    values : ndarray, shape (r,), float64
        Eigenvalues, descending, in causal-set units.
    wavenumbers : ndarray, shape (r,), float64
        k, ascending, in inverse patch half-widths along u.
    odd : ndarray, shape (r,), bool
        Whether the mode is of the first family, k L = n pi.
    """

    values: FloatArray
    wavenumbers: FloatArray
    odd: NDArray[np.bool_]


def diamond_modes(*, density: float, floor: float) -> DiamondModes:
    """All modes of the diamond with eigenvalues above a floor.

    Parameters
    ----------
    density : float
        Elements per unit area, rho.
    floor : float
        On lambda = rho L/k, > 0.

    Returns
    -------
    DiamondModes
        The largest eigenvalue first.

    Notes
    -----
    Cost: one root for every second mode, about 20 microseconds each.
    """
    elements = 4.0 * density * PATCH_EXTENT**2
    # In each interval (n pi, (n + 1) pi) of kL one root, and n pi itself.
    count = 2 * math.ceil(density * PATCH_EXTENT**2 / (floor * math.pi)) + 2
    values = diamond_eigenvalues(count, elements=elements)
    values = values[values > floor]
    turns = density * PATCH_EXTENT**2 / values
    odd = np.abs(turns / math.pi - np.round(turns / math.pi)) < 1e-9
    return DiamondModes(values, turns / PATCH_EXTENT, odd)


def region_factor(modes: DiamondModes, extent: Extent) -> FloatArray:
    """Factor of the cut state on a region, as `lozenge_engine.kernels.gaussian` takes it.

    Parameters
    ----------
    modes : DiamondModes
        The r modes that the first stage keeps.
    extent : Extent
        Of the region, inside the diamond.

    Returns
    -------
    ndarray, shape (d, 2 r), float64
        Equal to Q^T F for an isometry Q and the factor F on infinitely many points; d is the sum
        of the Gauss nodes in u and in v, plus 1.

    Notes
    -----
    Cost: of the order of d r complex exponentials.  The rule with m nodes is exact for
    polynomials of degree 2 m - 1, and converges faster than exponentially beyond half a node for
    each radian.
    """
    k = modes.wavenumbers
    cosine = np.cos(k * PATCH_EXTENT)
    # Squared norms over the diamond: 8 L^2, and 8 L^2 - 16 L^2 cos^2(kL) (arXiv:1205.1296).
    norm2 = 8.0 * PATCH_EXTENT**2 * np.where(modes.odd, 1.0, 1.0 - 2.0 * cosine**2)
    scale = np.sqrt(2.0 * modes.values / norm2)  # the density cancels: rho du dv over rho norm2
    sign = np.where(modes.odd, -1.0, 1.0)
    constant = np.where(modes.odd, 0.0, -2.0 * cosine)
    width, height = extent.u_high - extent.u_low, extent.v_high - extent.v_low
    of_u, mean_u = _waves(k, extent.u_low, extent.u_high)
    of_v, mean_v = _waves(k, extent.v_low, extent.v_high)
    rows = np.concatenate(
        [
            math.sqrt(height) * of_u,
            math.sqrt(width) * sign * of_v,
            math.sqrt(width * height) * (mean_u + sign * mean_v + constant)[None, :],
        ]
    )
    rows *= scale
    factor = np.empty((rows.shape[0], 2 * k.size))
    factor[:, 0::2], factor[:, 1::2] = rows.real, rows.imag
    return factor


def _waves(k: FloatArray, low: float, high: float) -> tuple[ComplexArray, ComplexArray]:
    """exp(-ikz) less its mean at Gauss nodes, times the roots of their weights, and the means."""
    count = math.ceil(NODES_PER_RADIAN * float(k.max(initial=0.0)) * (high - low)) + SPARE_NODES
    nodes, weights = np.polynomial.legendre.leggauss(count)
    half = (high - low) / 2.0
    z, w = low + half * (nodes + 1.0), half * weights
    waves = np.exp(-1j * np.outer(z, k))
    mean = w @ waves / (high - low)
    return (waves - mean) * np.sqrt(w)[:, None], mean
