"""A causal set that somebody brings: its modes, its regions' entropies, what it is assumed to be.

Relations alone carry no coordinates: the thresholds hold for sprinklings of 1+1 dimensions, so
every output says that this is assumed, and two numbers are set beside what it would give.
"""

from __future__ import annotations

import hashlib
import itertools
import math
import time
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from lozenge_engine.config import Config, Rule
from lozenge_engine.entropies import Block, Entropies
from lozenge_engine.errors import refuse
from lozenge_engine.geometry import equal_row
from lozenge_engine.kernels import cuts, gaussian, laws, modes
from lozenge_engine.kernels.bitorder import BitCommutator, BitOrder, between, checked_order, related
from lozenge_engine.ownresult import OwnResult, OwnSet, count_of, ordering_of
from lozenge_engine.pipeline import MARGIN, versions
from lozenge_engine.relationfile import RelationFile
from lozenge_engine.result import PatchSpectrum
from lozenge_engine.threads import blas_threads

__all__ = ["compute_own", "own_set"]

Index = NDArray[np.intp]
Report = Callable[[float], None]

MOST_BYTES = 4e9
"""Memory of the modes and of the space they are searched in."""


def own_set(file: RelationFile, *, close: bool = False, only_links: bool = False) -> OwnSet:
    """Check a relation that was read, and close it if that is asked for.

    Parameters
    ----------
    file : RelationFile
        The relation.
    close : bool
        Add what transitivity asks for.
    only_links : bool
        It holds links alone; this implies closing.

    Returns
    -------
    OwnSet
        A strict partial order with at least one relation.

    Raises
    ------
    InputError
        If it is none; see `lozenge_engine.kernels.bitorder.checked_order`.
    """
    order = checked_order(file.words, close=close, only_links=only_links)
    if not order.relations:
        raise refuse(
            f"relation file {file.name}",
            given="no relations",
            allowed="at least one pair of related elements",
            do="give another set: without relations i Delta is 0",
        )
    words = np.ascontiguousarray(order.original(), dtype="<u8")
    return OwnSet(file.name, order, hashlib.sha256(words.tobytes()).hexdigest())


def compute_own(
    own: OwnSet,
    *,
    members: Sequence[Index] = (),
    alpha: float = 1.0,
    report: Report = lambda _fraction: None,
) -> OwnResult:
    """Compute a causal set's modes and its regions' entropies, both stages cut by counts.

    Parameters
    ----------
    own : OwnSet
        The set.
    members : sequence of ndarray of intp
        Elements of each region, at most eight; none for the spectrum alone.
    alpha : float
        Multiple of alpha sqrt(n)/(4 pi) in both stages, 0.05 to 20.
    report : callable
        Called with a fraction in [0, 1] while modes are searched; may raise to stop.

    Returns
    -------
    OwnResult
        Massless, entropies of order 1 in nats.

    Raises
    ------
    InputError
        If alpha is out of range, or so low that the modes take more than 4 GB.

    Notes
    -----
    Cost: `lozenge_engine.kernels.modes.certified_modes`, with n^2/16 table entries for each
    product; n^2/4 bytes beyond its own.
    """
    rule = Rule(alpha=alpha)
    _check_memory(own.order.elements, rule.alpha)
    seconds: dict[str, float] = {}
    with blas_threads(1):
        start = time.perf_counter()
        patch, certificate, vectors = _first_stage(own.order, rule, report)
        seconds["modes"] = time.perf_counter() - start
        start = time.perf_counter()
        parts = _second_stage(patch, vectors, members, rule)
        seconds["entropies"] = time.perf_counter() - start
    n = own.order.elements
    threshold = max(patch.cut, laws.root_count_cut(n))
    found = int((patch.eigenvalues > threshold).sum())
    return OwnResult(
        own=own,
        alpha=rule.alpha,
        ordering=ordering_of(own.order.relations, n),
        count=count_of(found, elements=n, threshold=threshold),
        patch=patch,
        certificate=certificate,
        members=tuple(members),
        region_orderings=tuple(
            ordering_of(related(own.order, rows, rows), rows.size) for rows in members
        ),
        between=tuple(between(own.order, rows) for rows in members),
        related={
            (a, b): related(own.order, members[a], members[b])
            + related(own.order, members[b], members[a])
            for a, b in itertools.combinations(range(len(members)), 2)
        },
        seconds=seconds,
        versions=versions(),
        **parts,
    )


def _check_memory(elements: int, alpha: float) -> None:
    """Refuse a threshold so low that the modes do not fit, before anything is computed."""
    found = min(elements / 2, 2.0 * math.sqrt(elements) / (MARGIN * min(alpha, 1.0)))
    dimension = min(elements, modes.RATIO * found + 24)
    needed = 8.8 * elements * dimension + 16.0 * elements * found
    if needed > MOST_BYTES:
        raise refuse(
            "alpha",
            given=f"{alpha:g} with {elements} elements: modes of {needed / 1e9:.2g} GB",
            allowed=f"modes of at most {MOST_BYTES / 1e9:g} GB",
            do="raise alpha, or give a smaller set",
        )


def _first_stage(
    order: BitOrder, rule: Rule, report: Report
) -> tuple[PatchSpectrum, modes.Certificate, NDArray[np.float64]]:
    """The whole set's modes down to the cut."""
    n = order.elements
    cut = cuts.threshold(rule, own=n, union=n, regions=1)
    found, certificate = modes.certified_modes(
        BitCommutator(order), floor=MARGIN * min(cut, laws.root_count_cut(n)), report=report
    )
    patch = PatchSpectrum(
        eigenvalues=found.values,
        kept=cuts.keep(found.values, rule, cut=cut),
        cut=cut,
        nominal_modes=laws.nominal_modes(n),
        floor=found.floor,
        krylov_dimension=found.dimension,
    )
    return patch, certificate, found.vectors


def _second_stage(
    patch: PatchSpectrum, vectors: NDArray[np.float64], members: Sequence[Index], rule: Rule
) -> dict[str, Any]:
    """Regions, unions, pairs and triples, as fields of `OwnResult`."""
    if not members:
        empty: dict[str, Any] = {"unions": {}, "total_correlation": {}}
        return {"regions": (), "pairs": (), "triples": (), **empty}
    # A configuration wants regions with a place; only their number and sequence act here.
    config = Config(regions=equal_row(len(members), 0.05, 0.1), patch_rule=rule, region_rule=rule)
    counts = [rows.size for rows in members]
    blocks = []
    for rows in members:
        factor = gaussian.restricted(patch.eigenvalues[patch.kept], vectors, rows)
        spectrum = gaussian.restricted_spectrum(gaussian.compressed(factor))
        cut = cuts.threshold(rule, own=rows.size, union=sum(counts), regions=len(counts))
        kept = cuts.keep(spectrum.pairs.values, rule, cut=cut)
        blocks.append(Block(spectrum, cut, kept, gaussian.projected(spectrum, kept)))
    counted = [float(k) for k in counts]
    numbers = Entropies(config, 2 * patch.kept_modes, blocks, counts, counted)
    regions = numbers.regions()
    unions = numbers.union(tuple(range(len(blocks)))) if len(blocks) > 1 else {}
    return {
        "regions": regions,
        "unions": unions,
        "pairs": numbers.pairs(),
        "triples": numbers.triples(),
        "total_correlation": {
            rule_: sum(r.entropy for r in regions) - union.entropy
            for rule_, union in unions.items()
        },
    }
