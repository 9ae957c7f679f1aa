"""One mode on the elements: whose it is, where it lives, and the continuum's beside it."""

from __future__ import annotations

import hashlib
import math
import time
from collections.abc import Callable
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Config
from lozenge_engine.errors import refuse
from lozenge_engine.evidence import Operator
from lozenge_engine.geometry import Region, region_letter
from lozenge_engine.kernels.modeshape import (
    Splitting,
    aligned,
    anchored,
    block_shares,
    diamond_mode,
    lifted_pairs,
    overlaps,
    splitting,
)
from lozenge_engine.kernels.skew import SkewPairs
from lozenge_engine.patchstate import PatchState, patch_state, positions
from lozenge_engine.pipeline import search_key
from lozenge_engine.pointfile import PointFile
from lozenge_engine.stages import Stages
from lozenge_engine.threads import blas_threads

__all__ = ["Continuum", "ModeRecord", "mode_record"]

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]
Report = Callable[[str, float], None]

GRID = 36
"""Cells along u and along v of the grid that the continuum mode is shown on."""
NEAR = 10
"""Ranks up and down among which the continuum mode with the largest overlap is looked for."""
PATCH = Region(half_width=1.0)


class Continuum(NamedTuple):
    """The continuum's mode beside a mode.

    Attributes
    ----------
    t, x : ndarray, shape (M,), float64
        A grid on the diamond, in patch half-widths.
    values : ndarray, shape (M,), complex128
        The continuum mode of the same rank there, of mean square 1.
    overlap : float
        |<mode|continuum>| on the elements, 0 to 1.
    nearest_rank, nearest_overlap : int, float
        The continuum mode with the largest overlap among those within `NEAR` ranks.
    """

    t: FloatArray
    x: FloatArray
    values: ComplexArray
    overlap: float
    nearest_rank: int
    nearest_overlap: float


class ModeRecord(NamedTuple):
    """One positive mode of the patch's, a region's or the union's operator.

    Attributes
    ----------
    config : Config
        The geometry; the modes are those of one sprinkling.
    operator : {"patch", "region", "union"}
        Whose mode it is; after the first cut for regions and the union.
    region : int
        Index of the region, for a region's operator; otherwise -1.
    rank, ranks : int
        Which mode, 1 for the largest eigenvalue, and how many are known.
    eigenvalue, cut : float
        In causal-set units; for the union the cut is that of the region that holds most of it.
    kept : bool
        Whether the rules keep it.
    t, x : ndarray, shape (n,), float64
        Elements that the operator acts on, in patch half-widths.
    values : ndarray, shape (n,), complex128
        The mode there, of mean square 1; its phase makes the overlap with the continuum mode real
        and positive, or without one its largest value.
    empty_t, empty_x : ndarray, shape (N - n,), float64
        The other elements.
    shares : ndarray, shape (K,), float64
        Squared norm on each region; for the patch they need not sum to 1.
    continuum : Continuum or None
        Where it is known: massless and flat, on the patch or on one region (uncut).
    unknown : str
        Why there is none; otherwise empty.
    splitting : Splitting or None
        Of the union's kept modes, by support; None for one region.
    cross_block : float
        Largest norm of a pair's cross block, scaled by both diagonal blocks; NaN for one region.
    seconds : float
        From call to record.
    """

    config: Config
    operator: Operator
    region: int
    rank: int
    ranks: int
    eigenvalue: float
    cut: float
    kept: bool
    t: FloatArray
    x: FloatArray
    values: ComplexArray
    empty_t: FloatArray
    empty_x: FloatArray
    shares: FloatArray
    continuum: Continuum | None
    unknown: str
    splitting: Splitting | None
    cross_block: float
    seconds: float


class _Operator(NamedTuple):
    """The operator whose mode is asked for, with all its modes on its rows."""

    region: int
    rows: NDArray[np.intp]
    pairs: SkewPairs
    kept: NDArray[np.bool_]
    name: str


def mode_record(
    config: Config,
    *,
    stages: Stages,
    operator: Operator = "patch",
    region: int = 0,
    rank: int = 1,
    points: PointFile | None = None,
    report: Report | None = None,
) -> ModeRecord:
    """Pick one positive mode of an operator and lay it out on the elements.

    Parameters
    ----------
    config : Config
        The geometry and one sprinkling.
    stages : Stages
        Cache that holds the modes, or is filled with them.
    operator : {"patch", "region", "union"}
        The whole patch's i Delta before the cut, or the cut one restricted to a region or to the
        union of all regions.
    region : int
        Index of the region, for a region's operator.
    rank : int
        1 for the largest eigenvalue.
    points : PointFile or None
        The imported points, when the configuration asks for them.
    report : callable or None
        As for `lozenge_engine.pipeline.compute`.

    Returns
    -------
    ModeRecord
        With the continuum mode where it is known.

    Raises
    ------
    InputError
        If the rank or the region does not exist; as for `lozenge_engine.pipeline.compute`.
    Cancelled
        If `report` raises it.

    Notes
    -----
    Cost beyond the cached stages: `lifted_pairs` of the operator's rows once for each set of
    regions, and of the union's for the splitting; then O(n).
    """
    start = time.perf_counter()
    state = patch_state(config, stages=stages, points=points, report=report)
    if report is not None:
        report("mode", 0.0)
    with blas_threads(1):
        union = _union(state, stages, points) if len(config.regions) > 1 else None
        chosen = _chosen(state, stages, points, operator=operator, region=region, union=union)
    if rank > chosen.pairs.values.size:
        raise refuse(
            "rank",
            given=rank,
            allowed=f"1 to {chosen.pairs.values.size}, the modes known of {chosen.name}",
            do="lower the rank, or cut less so that more modes are known",
        )
    return _record(state, chosen, operator=operator, rank=rank, union=union, start=start)


def _rows_of(state: PatchState, k: int) -> NDArray[np.intp]:
    """Elements of a region."""
    return np.nonzero(state.result.region_of == k)[0]


def _lifted(
    state: PatchState,
    stages: Stages,
    points: PointFile | None,
    members: tuple[int, ...],
) -> tuple[NDArray[np.intp], SkewPairs]:
    """Rows of some regions and the modes of the cut operator on them, from the cache."""
    config = state.result.config
    rows = [_rows_of(state, k) for k in members]
    basis = hashlib.sha256(state.modes.vectors[:4, : 2 * state.kept.size].tobytes()).digest()
    regions = tuple(config.regions[k] for k in members)
    key = ("lifted", *search_key(config, points)[1:], state.kept.size, regions, basis)
    pairs, _ = stages.get(key, lambda: lifted_pairs([state.factor(own) for own in rows]))
    return np.concatenate(rows), pairs


def _union(state: PatchState, stages: Stages, points: PointFile | None) -> _Operator:
    """The union's operator, kept by support."""
    members = tuple(range(len(state.result.regions)))
    rows, pairs = _lifted(state, stages, points, members)
    return _Operator(-1, rows, pairs, state.result.unions["support"].kept, "the union")


def _chosen(
    state: PatchState,
    stages: Stages,
    points: PointFile | None,
    *,
    operator: Operator,
    region: int,
    union: _Operator | None,
) -> _Operator:
    """The operator that was asked for."""
    result = state.result
    if operator == "patch":
        a, b = state.modes.vectors[:, 0::2], state.modes.vectors[:, 1::2]
        pairs = SkewPairs(state.modes.values, a, b)
        return _Operator(-1, np.arange(result.elements), pairs, result.patch.kept, "the patch")
    if operator == "union" and union is not None:
        return union
    wanted = region if operator == "region" else 0  # the union of one region is that region
    if wanted >= len(result.regions):
        raise refuse(
            "region",
            given=f"region {region_letter(wanted)}",
            allowed=f"A to {region_letter(len(result.regions) - 1)}",
            do="choose one of these, or add regions",
        )
    rows, pairs = _lifted(state, stages, points, (wanted,))
    name = f"region {region_letter(wanted)}"
    return _Operator(wanted, rows, pairs, result.regions[wanted].kept, name)


def _record(
    state: PatchState,
    chosen: _Operator,
    *,
    operator: Operator,
    rank: int,
    union: _Operator | None,
    start: float,
) -> ModeRecord:
    """Lay one mode out."""
    result, rows = state.result, chosen.rows
    a, b = chosen.pairs.a[:, rank - 1], chosen.pairs.b[:, rank - 1]
    mode = np.asarray((a + 1j * b) / math.sqrt(2.0), dtype=np.complex128)
    shares = np.array(
        [
            float(np.sum(np.abs(mode[result.region_of[rows] == k]) ** 2))
            for k in range(len(result.regions))
        ]
    )
    region = chosen.region if operator != "union" else -1
    domain, unknown = _domain(state, operator, chosen)
    roots = state.weight_roots(rows)
    continuum = None
    if domain is None:
        mode = anchored(mode)
    else:
        mode, continuum = _beside(mode, domain, result.u[rows], result.v[rows], rank)
    values = mode / roots
    t, x = positions(result.u[rows], result.v[rows])
    free = np.setdiff1d(np.arange(result.elements), rows, assume_unique=True)
    empty_t, empty_x = positions(result.u[free], result.v[free])
    return ModeRecord(
        config=result.config,
        operator=operator,
        region=region,
        rank=rank,
        ranks=chosen.pairs.values.size,
        eigenvalue=float(chosen.pairs.values[rank - 1]),
        cut=_cut(state, operator, chosen, shares),
        kept=bool(chosen.kept[rank - 1]),
        t=t,
        x=x,
        values=values / math.sqrt(float(np.mean(np.abs(values) ** 2))),
        empty_t=empty_t,
        empty_x=empty_x,
        shares=shares,
        continuum=continuum,
        unknown=unknown,
        splitting=_splitting(state, union),
        cross_block=max((p.cross_block for p in result.pairs), default=math.nan),
        seconds=time.perf_counter() - start,
    )


def _cut(state: PatchState, operator: Operator, chosen: _Operator, shares: FloatArray) -> float:
    """Threshold that the mode is cut with."""
    if operator == "patch":
        return state.result.patch.cut
    holder = chosen.region if chosen.region >= 0 else int(shares.argmax())
    return state.result.regions[holder].cut


def _splitting(state: PatchState, union: _Operator | None) -> Splitting | None:
    """How well the union's kept modes split by region."""
    if union is None:
        return None
    sizes = [r.elements for r in state.result.regions]
    return splitting(block_shares(union.pairs, sizes), union.kept)


def _domain(state: PatchState, operator: Operator, chosen: _Operator) -> tuple[Region | None, str]:
    """The diamond whose continuum modes are known, or why none is."""
    config = state.result.config
    if config.mass > 0:
        return None, "no closed form with a mass"
    if config.points.curved:
        return None, "no closed form in a curved patch"
    if operator == "patch":
        return PATCH, ""
    if chosen.region < 0:
        return None, "no closed form for several regions"
    return config.regions[chosen.region], ""


def _beside(
    mode: ComplexArray, domain: Region, u: FloatArray, v: FloatArray, rank: int
) -> tuple[ComplexArray, Continuum]:
    """A mode in the phase of the continuum's, and that one."""
    e = domain.extent
    middle = (e.u_low + e.u_high) / 2.0, (e.v_low + e.v_high) / 2.0
    sides = (e.u_high - e.u_low) / 2.0, (e.v_high - e.v_low) / 2.0
    inner = (u - middle[0]) / sides[0], (v - middle[1]) / sides[1]
    ranks = range(max(1, rank - NEAR), rank + NEAR + 1)
    known = [diamond_mode(*inner, rank=k) for k in ranks]
    found = overlaps(mode, known)
    own = rank - ranks[0]
    steps = (np.arange(GRID) + 0.5) / GRID * 2.0 - 1.0
    grid_u, grid_v = (w.ravel() for w in np.meshgrid(steps, steps, indexing="ij"))
    shape = diamond_mode(grid_u, grid_v, rank=rank)
    t, x = positions(middle[0] + sides[0] * grid_u, middle[1] + sides[1] * grid_v)
    return aligned(mode, known[own]), Continuum(
        t,
        x,
        shape / math.sqrt(float(np.mean(np.abs(shape) ** 2))),
        float(found[own]),
        ranks[int(found.argmax())],
        float(found.max()),
    )
