"""From a frozen configuration to its result, stage by stage.

points -> order -> modes -> restriction -> cut -> entropies.  Every stage is cached under a key
of what it depends on: moving a region or changing a rule above the floor never touches the
patch's modes.
"""

from __future__ import annotations

import hashlib
import itertools
import os
import platform
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from importlib import metadata
from typing import Any, Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine import __version__
from lozenge_engine.config import Config
from lozenge_engine.cost import Prediction, predict
from lozenge_engine.errors import refuse
from lozenge_engine.geometry import PATCH_AREA, Region, gaps
from lozenge_engine.kernels import cuts, gaussian, laws, modes
from lozenge_engine.kernels.order import Commutator, MassiveCommutator, MasslessCommutator
from lozenge_engine.kernels.points import Coordinates, membership, points_hash, sprinkle
from lozenge_engine.pointfile import PointFile
from lozenge_engine.readout import Measured, read
from lozenge_engine.result import (
    Pair,
    PatchSpectrum,
    RegionResult,
    Result,
    Status,
    Triple,
    UnionResult,
)
from lozenge_engine.stages import Stages
from lozenge_engine.threads import blas_threads

__all__ = [
    "DENSE_LIMIT",
    "UNION_RULES",
    "Prediction",
    "UnionRule",
    "compute",
    "predict",
    "versions",
]

FloatArray = NDArray[np.float64]
Report = Callable[[str, float], None]
UnionRule = Literal["support", "direct_sum"]
UNION_RULES: tuple[UnionRule, UnionRule] = ("support", "direct_sum")

DENSE_LIMIT = 4000
"""Most elements for which every mode is computed (no cut in the first stage)."""
THREADS_FROM = 2500
"""Elements above which the search for modes uses all cores (or LOZENGE_THREADS of them)."""
MARGIN = 0.9
"""Floor of the search, as a multiple of the patch's cut: what lies between is shown as dropped."""
MARGIN_LIMIT = 20_000
"""Above this many elements the floor is the cut itself."""


def compute(
    config: Config,
    *,
    points: PointFile | None = None,
    stages: Stages | None = None,
    report: Report | None = None,
) -> Result:
    """Compute everything for one sprinkling.

    Parameters
    ----------
    config : Config
        What to compute.
    points : PointFile or None
        The imported points, when the configuration asks for them.
    stages : Stages or None
        Cache to use and fill; without one nothing is kept.
    report : callable or None
        Called as ``report(stage, fraction)`` while the patch's modes are searched and between
        stages; it may raise `lozenge_engine.errors.Cancelled` to stop.

    Returns
    -------
    Result
        The numbers; numbers that cannot be given or trusted say so in their status.

    Raises
    ------
    InputError
        If the configuration cannot be computed on these points.

    Notes
    -----
    Cost: see `lozenge_engine.kernels.modes.find_modes`; the second stage adds about
    8 n r**2 + 60 r**3 flops for each region, pair and union.
    """
    with blas_threads(1):
        return _Computation(config, points, stages or Stages(), report).result()


def _mode_threads(elements: int) -> int:
    """Threads for the patch's modes: one keeps a page fluid, a large basis pays for all cores."""
    if elements <= THREADS_FROM:
        return 1
    return int(os.environ.get("LOZENGE_THREADS", "0")) or os.cpu_count() or 1


class _Patch(NamedTuple):
    """First stage: the modes, which are kept, and the cut."""

    modes: modes.Modes
    certificate: modes.Certificate
    cut: float
    kept: NDArray[np.bool_]


class _Block(NamedTuple):
    """Second stage of one region."""

    spectrum: gaussian.Spectrum
    cut: float
    kept: NDArray[np.bool_]
    g: FloatArray


class _Computation:
    """The stages of one configuration."""

    def __init__(
        self, config: Config, file: PointFile | None, stages: Stages, report: Report | None
    ) -> None:
        self.config = config
        self.file = file
        self.stages = stages
        self.report = report or (lambda _stage, _fraction: None)
        self.seconds: dict[str, float] = {}
        source = config.points
        if source.kind == "file":
            if file is None or file.sha256 != source.sha256:
                raise refuse(
                    "points",
                    given="no such points" if file is None else f"the points of {file.name}",
                    allowed=f"the points of {source.file} with hash {str(source.sha256)[:12]}",
                    do="load that file",
                )
            if source.density != file.points.u.size / PATCH_AREA:
                raise refuse(
                    "density",
                    given=source.density,
                    allowed=f"N/2 = {file.points.u.size / PATCH_AREA:g} for imported points",
                    do="leave the density to the points",
                )
            self.points_key: tuple[Any, ...] = ("file", file.sha256)
        else:
            self.points_key = (source.kind, source.density, source.seed, config.realisation)

    @contextmanager
    def _timed(self, stage: str) -> Iterator[None]:
        """Add the wall time of a block to its stage."""
        self.report(stage, 0.0)
        start = time.perf_counter()
        try:
            yield
        finally:
            elapsed = time.perf_counter() - start
            self.seconds[stage] = self.seconds.get(stage, 0.0) + elapsed

    def result(self) -> Result:
        """Run all stages."""
        with self._timed("points"):
            points, sha256 = self.stages.get(("points", *self.points_key), self._points)[0]
            region_of = membership(points, self.config.regions)
        with self._timed("order"):
            key = ("order", *self.points_key, self.config.mass)
            operator = self.stages.get(key, lambda: self._operator(points))[0]
        with self._timed("modes"), blas_threads(_mode_threads(operator.size)):
            patch = self._patch(operator)
        rows = [np.nonzero(region_of == k)[0] for k in range(len(self.config.regions))]
        with self._timed("restriction"):
            spectra = [
                self._spectrum(patch, region, own)
                for region, own in zip(self.config.regions, rows, strict=True)
            ]
        with self._timed("cut"):
            blocks = [
                self._block(spectrum, own.size, region_of)
                for spectrum, own in zip(spectra, rows, strict=True)
            ]
        with self._timed("entropies"):
            numbers = _Numbers(self.config, patch, blocks, [own.size for own in rows])
            regions = numbers.regions()
            unions = numbers.union(tuple(range(len(blocks)))) if len(blocks) > 1 else {}
            pairs, triples = numbers.pairs(), numbers.triples()
        total = {
            rule: sum(r.entropy for r in regions) - union.entropy for rule, union in unions.items()
        }
        return Result(
            config=self.config,
            u=points.u,
            v=points.v,
            region_of=region_of,
            points_sha256=sha256,
            patch=PatchSpectrum(
                eigenvalues=patch.modes.values,
                kept=patch.kept,
                cut=patch.cut,
                nominal_modes=laws.nominal_modes(points.u.size),
                floor=patch.modes.floor,
                krylov_dimension=patch.modes.dimension,
            ),
            certificate=patch.certificate,
            regions=regions,
            unions=unions,
            pairs=pairs,
            triples=triples,
            total_correlation=total,
            seconds=dict(self.seconds),
            versions=versions(),
        )

    def _points(self) -> tuple[Coordinates, str]:
        """First stage of all: the elements and their hash."""
        if self.file is not None and self.config.points.kind == "file":
            return self.file.points, self.file.sha256
        source = self.config.points
        points = sprinkle(
            density=source.density,
            seed=source.seed,
            realisation=self.config.realisation,
            fixed=source.kind == "fixed",
        )
        return points, points_hash(points)

    def _operator(self, points: Coordinates) -> Commutator:
        """The commutator on these elements."""
        if self.config.mass > 0:
            return MassiveCommutator(
                points.u, points.v, mass=self.config.mass, density=self.config.points.density
            )
        return MasslessCommutator(points.u, points.v, compiled=self.stages.compiled)

    def _patch(self, operator: Commutator) -> _Patch:
        """The patch's modes down to what the rule needs, extended if the cache holds fewer."""
        rule, n = self.config.patch_rule, operator.size
        floor = cuts.needed_floor(rule, elements=n)
        if rule.kind == "fixed_number" and rule.number > n // 8:
            floor = 0.0  # deep in the spectrum a search costs more than all modes
        while True:
            found, certificate = self._modes(operator, floor)
            if rule.kind != "fixed_number" or found.values.size > rule.number or floor == 0.0:
                break
            floor *= 0.8
        cut = cuts.threshold(rule, own=n, union=n, regions=1)
        kept = cuts.keep(found.values, rule, cut=cut)
        if rule.kind == "fixed_number" and kept.any():
            cut = float(found.values[kept][-1])
        return _Patch(found, certificate, cut, kept)

    def _modes(self, operator: Commutator, floor: float) -> tuple[modes.Modes, modes.Certificate]:
        """Modes above a floor (0: all of them) from the cache, by extension, or afresh."""
        n = operator.size
        if floor == 0.0 and n > DENSE_LIMIT:
            raise refuse(
                "patch rule",
                given=f"none with {n} elements: every mode is needed, a dense problem of "
                f"{48 * n**2 / 1e9:.3g} GB",
                allowed=f"at most {DENSE_LIMIT} elements without a cut in the first stage",
                do="lower the density or cut in the first stage",
            )
        key = ("modes", *self.points_key, self.config.mass)
        known = self.stages.peek(key)
        if known is not None and known[0].floor <= floor:
            return known[0], known[1]
        if floor == 0.0:
            found = modes.all_modes(operator)
            pair = found, modes.certify(operator, found)
        else:
            margin = MARGIN if n <= MARGIN_LIMIT else 1.0
            pair = modes.certified_modes(
                operator,
                floor=floor * margin,
                known=None if known is None else known[0],
                report=lambda fraction: self.report("modes", fraction),
            )
        self.stages.put(key, pair)
        return pair

    def _spectrum(self, patch: _Patch, region: Region, rows: NDArray[np.intp]) -> gaussian.Spectrum:
        """The cut operator restricted to a region."""
        kept = patch.modes.values[patch.kept]

        def make() -> gaussian.Spectrum:
            factor = gaussian.restricted(kept, patch.modes.vectors, rows)
            return gaussian.restricted_spectrum(gaussian.compressed(factor))

        # Factors of several regions are stacked, so they have to be in one basis: the phases of
        # the modes are free, and differ between the dense route and the searches.
        basis = hashlib.sha256(patch.modes.vectors[:4, : 2 * kept.size].tobytes()).digest()
        key = ("restriction", *self.points_key, self.config.mass, kept.size, region, basis)
        return self.stages.get(key, make)[0]

    def _block(
        self, spectrum: gaussian.Spectrum, elements: int, region_of: NDArray[np.int8]
    ) -> _Block:
        """What the regions' rule keeps of one region."""
        rule = self.config.region_rule
        cut = cuts.threshold(
            rule,
            own=elements,
            union=int((region_of >= 0).sum()),
            regions=len(self.config.regions),
        )
        kept = cuts.keep(spectrum.pairs.values, rule, cut=cut)
        return _Block(spectrum, cut, kept, gaussian.projected(spectrum, kept))


class _Numbers:
    """Entropies of regions, pairs, triples and the union from the regions' blocks."""

    def __init__(
        self, config: Config, patch: _Patch, blocks: list[_Block], elements: list[int]
    ) -> None:
        self.config = config
        self.blocks = blocks
        self.elements = elements
        self.rank = 2 * int(patch.kept.sum()) if config.patch_rule.kind != "none" else None
        self._singles: dict[int, Measured] = {}
        self._unions: dict[tuple[int, ...], dict[str, UnionResult]] = {}

    def _read(
        self, spectrum: gaussian.Spectrum, kept: NDArray[np.bool_], g: FloatArray, elements: int
    ) -> Measured:
        """Entropy of a kept space, with what has to be said about it."""
        return read(
            spectrum,
            kept,
            g,
            order=self.config.order,
            uncut=self.config.region_rule.kind == "none",
            elements=elements,
            rank=self.rank,
        )

    def regions(self) -> tuple[RegionResult, ...]:
        """Every region."""
        return tuple(
            RegionResult(
                region=region,
                elements=n,
                eigenvalues=block.spectrum.pairs.values,
                kept=block.kept,
                cut=block.cut,
                nominal_modes=laws.nominal_modes(n),
                **self._single(k)._asdict(),
            )
            for k, (region, n, block) in enumerate(
                zip(self.config.regions, self.elements, self.blocks, strict=True)
            )
        )

    def union(self, members: tuple[int, ...]) -> dict[str, UnionResult]:
        """A union of regions under both rules."""
        if members not in self._unions:
            self._unions[members] = {
                "support": self._by_support(members),
                "direct_sum": self._direct_sum(members),
            }
        return self._unions[members]

    def _by_support(self, members: tuple[int, ...]) -> UnionResult:
        """The union's own modes, each cut with the count of the region that holds most of it."""
        parts = [self.blocks[k] for k in members]
        factor = np.vstack([part.spectrum.factor for part in parts])
        sizes = tuple(part.spectrum.factor.shape[0] for part in parts)
        if factor.shape[0] > factor.shape[1]:
            q, small = np.linalg.qr(factor)
            spectrum = gaussian.restricted_spectrum(small)
            lifted = spectrum.pairs._replace(a=q @ spectrum.pairs.a, b=q @ spectrum.pairs.b)
            held = gaussian.shares(spectrum._replace(pairs=lifted), sizes)
        else:
            spectrum = gaussian.restricted_spectrum(factor)
            held = gaussian.shares(spectrum, sizes)
        values = spectrum.pairs.values
        kept = cuts.keep_by_support(
            values, held, self.config.region_rule, cuts=np.array([part.cut for part in parts])
        )
        g = gaussian.projected(spectrum, kept)
        reading = self._read(spectrum, kept, g, sum(self.elements[k] for k in members))
        return UnionResult(
            rule="support", members=members, eigenvalues=values, kept=kept, **reading._asdict()
        )

    def _direct_sum(self, members: tuple[int, ...]) -> UnionResult:
        """The span of the regions' own kept modes, with its cross blocks."""
        parts = [self.blocks[k] for k in members]
        g = np.hstack([part.g for part in parts])
        values = np.sort(np.concatenate([p.spectrum.pairs.values[p.kept] for p in parts]))[::-1]
        kept = np.ones(values.size, dtype=bool)
        spectrum = self.blocks[members[0]].spectrum
        reading = self._read(spectrum, kept, g, sum(self.elements[k] for k in members))
        if reading.status == "ok" and self.config.region_rule.kind == "none":
            # The spaces are those of the regions, and so is their dependence on the tolerance.
            for k in members:
                own = self._single(k)
                if own.status == "undetermined":
                    reading = reading._replace(status=own.status, note=own.note)
        return UnionResult(
            rule="direct_sum", members=members, eigenvalues=values, kept=kept, **reading._asdict()
        )

    def _single(self, k: int) -> Measured:
        """Entropy of one region, read once."""
        if k not in self._singles:
            block = self.blocks[k]
            self._singles[k] = self._read(block.spectrum, block.kept, block.g, self.elements[k])
        return self._singles[k]

    def _mark(self, a: int, b: int) -> Status:
        """The first mark on anything that a pair's mutual information is made of."""
        singles = [self._single(k).status for k in (a, b)]
        marks = [*singles, *(union.status for union in self.union((a, b)).values())]
        return next((mark for mark in marks if mark != "ok"), "ok")

    def _entropy(self, members: tuple[int, ...], rule: UnionRule) -> float:
        """Entropy of one or several regions."""
        if len(members) == 1:
            return self._single(members[0]).entropy
        return self.union(members)[rule].entropy

    def pairs(self) -> tuple[Pair, ...]:
        """Mutual information of every pair, with the norm of its cross block."""
        single = [self._entropy((k,), "support") for k in range(len(self.blocks))]
        return tuple(
            Pair(
                a=a,
                b=b,
                gap=gaps((self.config.regions[a], self.config.regions[b]))[0],
                support=single[a] + single[b] - self._entropy((a, b), "support"),
                direct_sum=single[a] + single[b] - self._entropy((a, b), "direct_sum"),
                cross_block=gaussian.cross_block(self.blocks[a].g, self.blocks[b].g),
                status=self._mark(a, b),
            )
            for a, b in itertools.combinations(range(len(self.blocks)), 2)
        )

    def triples(self) -> tuple[Triple, ...]:
        """Tripartite information of every three neighbouring regions."""
        found = []
        for a in range(len(self.blocks) - 2):
            members = (a, a + 1, a + 2)
            values = {}
            for rule in UNION_RULES:
                values[rule] = sum(
                    (-1) ** (size + 1)
                    * sum(self._entropy(s, rule) for s in itertools.combinations(members, size))
                    for size in (1, 2, 3)
                )
            found.append(Triple(members=members, **values))
        return tuple(found)


def versions() -> dict[str, str]:
    """Versions that a result may depend on."""
    return {
        "python": platform.python_version(),
        **{name: metadata.version(name) for name in ("numpy", "scipy")},
        "lozenge": __version__,
    }
