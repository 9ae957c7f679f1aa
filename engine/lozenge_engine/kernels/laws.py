"""Reference formulas that the measured numbers are set beside."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray
from scipy import optimize, special

__all__ = [
    "CENTRAL_CHARGE",
    "calabrese_cardy_slope",
    "diamond_eigenvalues",
    "mean_massive_propagator",
    "nested_diamond_fit",
    "nominal_modes",
    "root_count_cut",
]

FloatArray = NDArray[np.float64]
CENTRAL_CHARGE = 1.0


def root_count_cut(elements: float, alpha: float = 1.0) -> float:
    """Threshold alpha sqrt(n)/(4 pi) on the eigenvalues of i Delta.

    Source: Class. Quantum Grav. 35 (2018) 074004, arXiv:1611.10281.

    Parameters
    ----------
    elements : float
        Elements n of the operator's own region.
    alpha : float
        Multiple of the published threshold.

    Returns
    -------
    float
        The threshold, dimensionless.
    """
    return alpha * math.sqrt(elements) / (4.0 * math.pi)


def nominal_modes(elements: float) -> float:
    """Positive modes above the threshold in the continuum, 2 sqrt(n).

    From the count n/(2 pi lambda) of eigenvalues above lambda at lambda = sqrt(n)/(4 pi).

    Parameters
    ----------
    elements : float
        Elements n of the region.

    Returns
    -------
    float
        The count, not rounded.
    """
    return 2.0 * math.sqrt(elements)


def diamond_eigenvalues(count: int, *, elements: float) -> FloatArray:
    """Largest positive eigenvalues of i Delta on a causal diamond, massless, continuum.

    Source: "A ground state for the causal diamond in 2 dimensions", JHEP 10 (2012) 088,
    arXiv:1205.1296: k L = n pi and the positive roots of tan(kL) = 2 kL, lambda = rho L / k,
    with the diamond's half-side L in u and v, so that rho L**2 = elements/4.

    Parameters
    ----------
    count : int
        How many, >= 1.
    elements : float
        Expected elements of the diamond, rho times its area (2 L)**2.

    Returns
    -------
    ndarray, shape (count,), float64
        Descending, in causal-set units.
    """
    n = np.arange(1, count // 2 + 2)
    # One root of tan y = 2 y in each (n pi, n pi + pi/2), and one in (1, pi/2).
    roots = [
        optimize.brentq(lambda y: math.sin(y) - 2.0 * y * math.cos(y), low, high, xtol=1e-14)
        for low, high in (
            (1.0 if k == 0 else k * math.pi, (k + 0.5) * math.pi) for k in range(count // 2 + 2)
        )
    ]
    k_times_l = np.sort(np.concatenate([n * math.pi, roots]))[:count]
    return np.asarray(elements / 4.0 / k_times_l, dtype=np.float64)


def calabrese_cardy_slope(ends: int, *, order: float = 1.0) -> float:
    """Slope of S against ln(l/a): (c/6)(1 + 1/q)/2 for each end, c = 1.

    Source: J. Phys. A 42 (2009) 504005, arXiv:0905.4013, equations for one interval, (c/3) with
    both ends inside and (c/6)(1 + 1/q) for the Renyi entropy of order q.

    Parameters
    ----------
    ends : int
        Ends of the regions that lie inside the patch (2 for one region, 1 at a corner).
    order : float
        Renyi order q; 1 is the von Neumann entropy.

    Returns
    -------
    float
        1/6 per end for q = 1.
    """
    return ends * CENTRAL_CHARGE / 12.0 * (1.0 + 1.0 / order)


def nested_diamond_fit(elements: float) -> tuple[float, float]:
    """Published fit for one nested diamond of half the patch's size, both stages cut.

    S = b ln(sqrt(n)/4 pi) + c with b = 0.346(28), c = 1.883(35), Class. Quantum Grav. 35 (2018)
    074004, arXiv:1611.10281 (values from memory).

    Parameters
    ----------
    elements : float
        Elements n of the nested diamond.

    Returns
    -------
    tuple of float
        S and its standard error in nats, errors of b and c taken as independent.
    """
    x = math.log(math.sqrt(elements) / (4.0 * math.pi))
    return 0.346 * x + 1.883, math.hypot(0.028 * x, 0.035)


def mean_massive_propagator(proper_time: FloatArray, *, mass: float) -> FloatArray:
    """Mean over sprinklings of the retarded function, J0(m tau)/2.

    Source: Class. Quantum Grav. 25 (2008) 202001, arXiv:0806.3083; DLMF 10.2.2.

    Parameters
    ----------
    proper_time : ndarray
        tau of related pairs, in patch half-widths.
    mass : float
        In inverse patch half-widths.

    Returns
    -------
    ndarray
        Same shape as `proper_time`.
    """
    return np.asarray(0.5 * special.j0(mass * proper_time), dtype=np.float64)
