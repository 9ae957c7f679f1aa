"""The uncut operator i Delta restricted to the regions: its modes, region by region.

Regions are causal diamonds, so whatever lies between two of their elements lies in them, and the
restriction of the commutator, massless or massive, is the commutator of the region's own elements.
Regions are spacelike to each other: the uncut operator of their union is that of each, side by
side, and its eigenvectors lie on one region each.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.kernels.modes import Modes, all_modes, find_modes
from lozenge_engine.kernels.order import Commutator, MassiveCommutator, MasslessCommutator
from lozenge_engine.kernels.points import Coordinates
from lozenge_engine.kernels.skew import singular_values_of_pairs

__all__ = ["commutator", "region_modes", "region_values"]

DENSE = 400
"""Up to this many elements all modes by the dense route are cheaper than a search."""


def commutator(
    points: Coordinates, rows: NDArray[np.intp] | slice, *, mass: float, density: float
) -> Commutator:
    """Commutator of the elements of one causal diamond.

    Parameters
    ----------
    points : Coordinates
        Of the patch.
    rows : ndarray of int or slice
        The diamond's elements.
    mass, density : float
        Inverse half-widths; elements laid per unit area, which a massive field needs.

    Returns
    -------
    Commutator
        The uncut one, restricted.
    """
    u, v = points.u[rows], points.v[rows]
    if mass > 0:
        return MassiveCommutator(u, v, mass=mass, density=density)
    return MasslessCommutator(u, v)


def region_modes(operator: Commutator, *, floor: float) -> Modes:
    """Modes of an uncut operator above a floor.

    Parameters
    ----------
    operator : Commutator
        Of n elements.
    floor : float
        > 0.

    Returns
    -------
    Modes
        Those above the floor, descending.

    Notes
    -----
    Cost: 7 n**3 flops up to 400 elements, otherwise `kernels.modes.find_modes`.  Exact
    multiplicities, which no sprinkling has, are not looked for.
    """
    if operator.size > DENSE:
        return find_modes(operator, floor=floor)
    found = all_modes(operator)
    count = int((found.values > floor).sum())
    return found._replace(
        values=found.values[:count], vectors=found.vectors[:, : 2 * count], floor=floor
    )


def region_values(operator: Commutator, *, floor: float) -> NDArray[np.float64]:
    """Eigenvalues of an uncut operator above a floor, without their vectors.

    Parameters
    ----------
    operator : Commutator
        Of n elements.
    floor : float
        > 0.

    Returns
    -------
    ndarray, shape (r,), float64
        Those above the floor, descending.

    Notes
    -----
    Cost: 3 n**3 flops up to 400 elements, otherwise as `region_modes`.
    """
    if operator.size > DENSE:
        return find_modes(operator, floor=floor).values
    matrix = operator.apply(np.eye(operator.size, order="F"))
    values = singular_values_of_pairs((matrix - matrix.T) / 2.0)
    return values[values > floor]
