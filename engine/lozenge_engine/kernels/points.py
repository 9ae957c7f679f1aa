"""Point sets on the patch: Poisson sprinklings, fixed counts, quasi-uniform sets, membership.

All coordinates are light-cone coordinates u, v in [-1/sqrt 2, 1/sqrt 2].
"""

from __future__ import annotations

import decimal
import functools
import hashlib
import math
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.errors import refuse
from lozenge_engine.geometry import (
    PATCH,
    PATCH_AREA,
    PATCH_EXTENT,
    Curvature,
    Region,
    region_letter,
    volume,
)
from lozenge_engine.kernels.curved import conformal_factor

__all__ = [
    "Coordinates",
    "from_t_x",
    "golden_lattice",
    "in_natural_order",
    "membership",
    "points_hash",
    "scrambled_sobol",
    "sprinkle",
]

FloatArray = NDArray[np.float64]

SLAB_MEAN = 64
"""Expected elements in one slab of the sprinkling's density axis."""
UNIT = 2.0**-53
STREAM_TAG = 0x4C5A  # separates this stream from any other use of the same seed
CHUNK = 4096
"""Slabs drawn at a time."""


class Coordinates(NamedTuple):
    """Light-cone coordinates of points in natural order.

    Attributes
    ----------
    u, v : ndarray, shape (N,), float64
        u ascending, no value of u or v twice; u = (t + x)/sqrt 2, v = (t - x)/sqrt 2 in patch
        half-widths.
    """

    u: FloatArray
    v: FloatArray


@functools.cache
def _poisson_table() -> NDArray[np.uint64]:
    """Thresholds floor(2**64 P(X <= k)) of the Poisson law with mean `SLAB_MEAN`.

    Exact integer arithmetic on 60 correctly rounded decimal digits: the same on every platform.
    The table ends where the tail is below 2**-64.
    """
    with decimal.localcontext() as context:
        context.prec = 60
        term = (-decimal.Decimal(SLAB_MEAN)).exp()
        total = term
        scale = decimal.Decimal(2**64)
        table = []
        k = 0
        while (threshold := int(total * scale)) < 2**64 - 1:
            table.append(threshold)
            k += 1
            term = term * SLAB_MEAN / k
            total += term
    return np.array(table, dtype=np.uint64)


def sprinkle(
    *,
    density: float,
    seed: int,
    realisation: int = 0,
    fixed: bool = False,
    curvature: Curvature = "flat",
    radius: float = 1.0,
) -> Coordinates:
    """Sprinkle the patch; with one seed, a higher density only adds elements.

    A homogeneous Poisson process on (patch) x (density axis) is drawn slab by slab of the
    density axis, each slab from a record of fixed length of the generator's raw 64-bit output:
    one word for its Poisson count (by integer thresholds), three words for each element (its
    place in the slab, u, v).  The sprinkling of density rho is what lies below rho; in a curved
    patch, what lies below rho Omega^2 at its place, exact by thinning.

    Parameters
    ----------
    density : float
        Elements per unit volume, > 0; the flat patch has 2.
    seed : int
        0 <= seed < 2**53.
    realisation : int
        Number of the sprinkling, >= 0; each is independent of the others.
    fixed : bool
        Take exactly round(density times volume) elements, the lowest of the density axis: drawn
        independently with the density Omega^2.
    curvature : {"flat", "positive", "negative"}
        Metric of the patch.
    radius : float
        Curvature radius > 2/pi in patch half-widths; unused when flat.

    Returns
    -------
    Coordinates
        Ascending u; bit-identical on every platform (in a curved patch up to the last bit of a
        cosine, which decides on one element in 1e16).

    Raises
    ------
    InputError
        If two elements share u or v (improbable: 53 random bits each).

    Notes
    -----
    Cost: 7 words of the generator for each element drawn, which are max(Omega^2) times those of
    the flat patch; O(N log N) for the sort, about 100 bytes per element at the peak.
    """
    target = volume(PATCH, curvature=curvature, radius=radius) * density
    highest = PATCH_AREA * density  # where the marks end that stand for this density
    if fixed:
        highest *= 1.0 + (10 * math.sqrt(target) + SLAB_MEAN) / target  # ten standard deviations
    steepest = 1.0 if curvature == "flat" else math.cos(1.0 / radius) ** -2
    words = [seed & 0xFFFFFFFF, seed >> 32, realisation, STREAM_TAG]
    generator = np.random.PCG64(np.random.SeedSequence(words))
    slabs = math.ceil(highest * steepest * (1.0 + 1e-12) / SLAB_MEAN) + 1
    parts: list[tuple[FloatArray, ...]] = []
    for first in range(0, slabs, CHUNK):
        mark, u, v = _slabs(generator, first, min(CHUNK, slabs - first))
        if curvature != "flat":
            mark = mark / conformal_factor(u, v, curvature=curvature, radius=radius)
        chosen = mark < highest
        parts.append((mark[chosen], u[chosen], v[chosen]))
    mark, u, v = (np.concatenate(column) for column in zip(*parts, strict=True))
    if fixed:
        lowest = np.argsort(mark, kind="stable")[: round(target)]
        u, v = u[lowest], v[lowest]
    return in_natural_order(u, v)


def _slabs(
    generator: np.random.PCG64, first: int, count: int
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Marks on the density axis and places u, v of the next slabs' elements."""
    width = _poisson_table().size
    raw = generator.random_raw(count * (1 + 3 * width)).reshape(count, 1 + 3 * width)
    counts = np.searchsorted(_poisson_table(), raw[:, 0], side="right")
    taken = np.arange(width) < counts[:, None]
    unit = (raw[:, 1:].reshape(count, -1, 3)[taken] >> np.uint64(11)) * UNIT
    mark: FloatArray = (first + np.nonzero(taken)[0] + unit[:, 0]) * SLAB_MEAN
    places = np.asarray((unit[:, 1:] - 0.5) * (2 * PATCH_EXTENT), dtype=np.float64)
    return mark, places[:, 0], places[:, 1]


def golden_lattice(count: int, *, offset: tuple[float, float] = (0.25, 0.25)) -> Coordinates:
    """Square lattice turned by the golden angle: about `count` quasi-uniform points.

    The lattice directions have slope 1/phi in (u, v), so no two points share u or v.

    Parameters
    ----------
    count : int
        Wanted number of points; the cell has area 2/count, the number found differs by
        O(count**(1/3)).
    offset : tuple of float
        Shift of the lattice in cells.

    Returns
    -------
    Coordinates
        Ascending u.
    """
    cell = math.sqrt(PATCH_AREA / count)
    angle = math.atan(2.0 / (1.0 + math.sqrt(5.0)))
    reach = math.ceil(2.0 / cell) + 2
    i, j = np.meshgrid(np.arange(-reach, reach + 1.0), np.arange(-reach, reach + 1.0))
    a, b = (i.ravel() + offset[0]) * cell, (j.ravel() + offset[1]) * cell
    u = math.cos(angle) * a - math.sin(angle) * b
    v = math.sin(angle) * a + math.cos(angle) * b
    inside = (np.abs(u) < PATCH_EXTENT) & (np.abs(v) < PATCH_EXTENT)
    return in_natural_order(u[inside], v[inside])


def scrambled_sobol(log2_count: int, *, seed: int) -> Coordinates:
    """Scrambled Sobol set of 2**log2_count points in (u, v).

    Parameters
    ----------
    log2_count : int
        Base-2 logarithm of the number of points, >= 0.
    seed : int
        Seed of the scrambling (of scipy.stats.qmc, whose streams may change with SciPy).

    Returns
    -------
    Coordinates
        Ascending u.
    """
    from scipy.stats import qmc  # slow to import, and needed by few

    unit = qmc.Sobol(d=2, scramble=True, rng=np.random.default_rng(seed)).random_base2(log2_count)
    u, v = (unit[:, k] * (2 * PATCH_EXTENT) - PATCH_EXTENT for k in (0, 1))
    return in_natural_order(u, v)


def from_t_x(t: FloatArray, x: FloatArray) -> Coordinates:
    """Light-cone coordinates of given points, checked and in natural order.

    Parameters
    ----------
    t, x : ndarray, shape (N,), float64
        Inside the patch |t| + |x| <= 1, in patch half-widths.

    Returns
    -------
    Coordinates
        Ascending u.

    Raises
    ------
    InputError
        If a value is not finite, a point is outside, or two points share u or v.
    """
    for name, values in (("t", t), ("x", x)):
        bad = np.nonzero(~np.isfinite(values))[0]
        if bad.size:
            raise refuse(
                f"points, row {bad[0] + 1}",
                given=f"{name} = {values[bad[0]]}",
                allowed="finite numbers",
                do="remove or correct that row",
            )
    outside = np.nonzero(np.abs(t) + np.abs(x) > 1.0 + 1e-12)[0]
    if outside.size:
        k = outside[0]
        raise refuse(
            f"points, row {k + 1}",
            given=f"(t, x) = ({t[k]:.6g}, {x[k]:.6g}), one of {outside.size} outside the patch",
            allowed="points with |t| + |x| <= 1",
            do="rescale the points to the patch of half-width 1",
        )
    return in_natural_order((t + x) * PATCH_EXTENT, (t - x) * PATCH_EXTENT)


def in_natural_order(u: FloatArray, v: FloatArray) -> Coordinates:
    """Sort points by u and refuse those that share u or v with another.

    Parameters
    ----------
    u, v : ndarray, shape (N,), float64
        Light-cone coordinates.

    Returns
    -------
    Coordinates
        Ascending u.

    Raises
    ------
    InputError
        If two points share u or v (their order relation would be undefined).
    """
    natural = np.argsort(u, kind="stable")
    u, v = u[natural], v[natural]
    for name, values in (("u", u), ("v", np.sort(v))):
        equal = np.nonzero(values[1:] == values[:-1])[0]
        if equal.size:
            raise refuse(
                "points",
                given=f"{equal.size + 1} points that share {name} = {float(values[equal[0]])!r}",
                allowed="distinct u = (t + x)/sqrt 2 and distinct v = (t - x)/sqrt 2",
                do="remove duplicates, or take another seed",
            )
    return Coordinates(u, v)


def membership(points: Coordinates, regions: tuple[Region, ...]) -> NDArray[np.int8]:
    """Index of the region that holds each point, -1 for none.

    Parameters
    ----------
    points : Coordinates
        N points.
    regions : tuple of Region
        Disjoint regions; a point on a shared corner goes to the first.

    Returns
    -------
    ndarray, shape (N,), int8
        From -1 to K - 1 for K regions.

    Raises
    ------
    InputError
        If a region holds fewer than 2 points.

    Notes
    -----
    Cost: O(K N).
    """
    index = np.full(points.u.size, -1, dtype=np.int8)
    for k, region in reversed(list(enumerate(regions))):
        e = region.extent
        inside = (points.u >= e.u_low) & (points.u <= e.u_high)
        inside &= (points.v >= e.v_low) & (points.v <= e.v_high)
        index[inside] = k
    for k, region in enumerate(regions):
        held = int((index == k).sum())
        if held < 2:
            raise refuse(
                f"region {region_letter(k)}",
                given=f"{held} elements in a region of half-width {region.half_width:g}",
                allowed="at least 2 elements (80 and more to be in the scaling regime)",
                do="raise the density or the half-width",
            )
    return index


def points_hash(points: Coordinates) -> str:
    """Hash of a point set.

    Parameters
    ----------
    points : Coordinates
        N points in natural order.

    Returns
    -------
    str
        SHA-256, in hexadecimal, of u_0, v_0, u_1, v_1, ... as little-endian float64.
    """
    data = np.column_stack(points).astype("<f8", copy=False)
    return hashlib.sha256(np.ascontiguousarray(data).tobytes()).hexdigest()
