"""From a frozen configuration to its result, stage by stage.

points -> order -> modes -> restriction -> cut -> entropies.  Every stage is cached under a key
of what it depends on: moving a region or changing a rule above the floor never touches the
patch's modes.
"""

from __future__ import annotations

import hashlib
import os
import platform
import time
from collections.abc import Callable, Hashable, Iterator
from contextlib import contextmanager
from importlib import metadata
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from lozenge_engine import __version__
from lozenge_engine.config import Config
from lozenge_engine.cost import Prediction, predict, shared_model
from lozenge_engine.entropies import UNION_RULES, Block, Entropies, UnionRule
from lozenge_engine.errors import refuse
from lozenge_engine.geometry import PATCH_AREA, Region
from lozenge_engine.kernels import cuts, gaussian, laws, modes
from lozenge_engine.kernels.curved import Counting, counting
from lozenge_engine.kernels.laying import laid
from lozenge_engine.kernels.modes import DENSE_LIMIT
from lozenge_engine.kernels.order import Commutator, MassiveCommutator, MasslessCommutator
from lozenge_engine.kernels.points import Coordinates, membership, points_hash
from lozenge_engine.kernels.weighted import WeightedCommutator
from lozenge_engine.pointfile import PointFile
from lozenge_engine.result import PatchSpectrum, Result
from lozenge_engine.stages import Stages
from lozenge_engine.threads import blas_threads

__all__ = [
    "DENSE_LIMIT",
    "UNION_RULES",
    "Prediction",
    "UnionRule",
    "compute",
    "predict",
    "prepare",
    "search_key",
    "versions",
]

FloatArray = NDArray[np.float64]
Report = Callable[[str, float], None]

MARGIN = 0.97
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
    Cancelled
        If `report` raises it.

    Notes
    -----
    Cost: `lozenge_engine.kernels.modes.certified_modes`; the second stage adds 8 n r**2 flops for
    each region and of the order of 100 r**3 for each region, pair, triple and union, r the kept
    modes of the patch; less where a region holds n < 2 r elements.
    """
    with blas_threads(1):
        computation = _Computation(config, points, stages or Stages(), report)
        result = computation.result()
    if computation.afresh and shared_model().calibrated:
        shared_model().learn(config, sum(result.seconds.values()))
    return result


def search_key(config: Config, points: PointFile | None = None) -> tuple[Any, ...]:
    """Key under which a cache holds the patch's modes of a configuration.

    Parameters
    ----------
    config : Config
        The configuration.
    points : PointFile or None
        The imported points, when it asks for them.

    Returns
    -------
    tuple
        Hashable.
    """
    return _Computation(config, points, Stages(), None).modes_key


def prepare(
    config: Config, *, points: PointFile | None = None, stages: Stages
) -> tuple[Hashable, object]:
    """Search the patch's modes and no more, so that another process can be sent them.

    Parameters
    ----------
    config : Config
        What will be computed.
    points : PointFile or None
        The imported points, when the configuration asks for them.
    stages : Stages
        Cache that the modes go into.

    Returns
    -------
    key : Hashable
        Under which a `Stages` holds the modes.
    modes : object
        What to put there; `compute` with the other cache then skips the search.

    Raises
    ------
    InputError
        As for `compute`.
    """
    with blas_threads(1):
        computation = _Computation(config, points, stages, None)
        computation.first_stage()
    return computation.modes_key, stages.peek(computation.modes_key)


def _mode_threads(elements: int, stages: Stages) -> int:
    """Threads for the patch's modes: one keeps a page fluid, a large basis pays for all cores."""
    if elements <= stages.threads_from:
        return 1
    wanted = os.environ.get("LOZENGE_THREADS", "")
    if wanted and not (wanted.isdigit() and int(wanted)):
        raise refuse(
            "LOZENGE_THREADS",
            given=wanted,
            allowed="a whole number above 0",
            do="change or unset this environment variable",
        )
    return int(wanted) if wanted else os.cpu_count() or 1


class _Patch(NamedTuple):
    """First stage: the modes, which are kept, and the cut."""

    modes: modes.Modes
    certificate: modes.Certificate
    cut: float
    kept: NDArray[np.bool_]


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
        self.afresh = False
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
            self.points_key = (source, config.realisation)
        self.counting = Counting()

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
        points, sha256, region_of, patch = self.first_stage()
        rows = [np.nonzero(region_of == k)[0] for k in range(len(self.config.regions))]
        with self._timed("restriction"):
            spectra = [
                self._spectrum(patch, region, own)
                for region, own in zip(self.config.regions, rows, strict=True)
            ]
        counted = [self.counting.elements(own) for own in rows]
        with self._timed("cut"):
            blocks = [
                self._block(spectrum, own, sum(counted))
                for spectrum, own in zip(spectra, counted, strict=True)
            ]
        with self._timed("entropies"):
            numbers = Entropies(
                self.config,
                2 * int(patch.kept.sum()),
                blocks,
                [own.size for own in rows],
                counted,
            )
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
                nominal_modes=laws.nominal_modes(self.counting.total(points.u.size)),
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
            oversampling=self.counting.ratio,
        )

    def first_stage(self) -> tuple[Coordinates, str, NDArray[np.int8], _Patch]:
        """Points and their hash, the region that holds each, and the patch's modes."""
        with self._timed("points"):
            points, sha256 = self.stages.get(("points", *self.points_key), self._points)[0]
            region_of = membership(points, self.config.regions)
            self.counting = counting(points.u, points.v, source=self.config.points)
        with self._timed("order"):
            key = ("order", *self.points_key, self.config.mass)
            operator = self.stages.get(key, lambda: self._operator(points))[0]
        with self._timed("modes"), blas_threads(_mode_threads(operator.size, self.stages)):
            patch = self._patch(operator)
        return points, sha256, region_of, patch

    @property
    def modes_key(self) -> tuple[Any, ...]:
        """Key of the patch's modes in the cache."""
        return ("modes", *self.points_key, self.config.mass)

    def _points(self) -> tuple[Coordinates, str]:
        """First stage of all: the elements and their hash."""
        if self.file is not None and self.config.points.kind == "file":
            return self.file.points, self.file.sha256
        points = laid(self.config.points, realisation=self.config.realisation)
        return points, points_hash(points)

    def _operator(self, points: Coordinates) -> Commutator:
        """The commutator on these elements."""
        if self.config.mass > 0:
            density = self.counting.ratio * self.config.points.density
            return MassiveCommutator(points.u, points.v, mass=self.config.mass, density=density)
        massless = MasslessCommutator(points.u, points.v, compiled=self.stages.compiled)
        weights = self.counting.weights
        return massless if weights is None else WeightedCommutator(massless, weights)

    def _patch(self, operator: Commutator) -> _Patch:
        """The patch's modes down to what the rule needs, extended if the cache holds fewer."""
        rule, n = self.config.patch_rule, operator.size
        counted, ratio = self.counting.total(n), self.counting.ratio
        floor = cuts.needed_floor(rule, elements=counted, ratio=ratio)
        if rule.kind == "fixed_number" and rule.number > n // 8:
            floor = 0.0  # deep in the spectrum a search costs more than all modes
        while True:
            found, certificate = self._modes(operator, floor)
            if rule.kind != "fixed_number" or found.values.size > rule.number or floor == 0.0:
                break
            floor *= 0.8
        cut = cuts.threshold(rule, own=counted, union=counted, regions=1, ratio=ratio)
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
        key = self.modes_key
        known = self.stages.peek(key)
        self.afresh = known is None
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

    def _block(self, spectrum: gaussian.Spectrum, own: float, union: float) -> Block:
        """What the regions' rule keeps of one region, of `own` of the `union`'s elements."""
        rule = self.config.region_rule
        cut = cuts.threshold(
            rule,
            own=own,
            union=union,
            regions=len(self.config.regions),
            ratio=self.counting.ratio,
        )
        kept = cuts.keep(spectrum.pairs.values, rule, cut=cut)
        return Block(spectrum, cut, kept, gaussian.projected(spectrum, kept))


def versions() -> dict[str, str]:
    """Versions that a result may depend on: of Python, NumPy, SciPy and this program."""
    return {
        "python": platform.python_version(),
        **{name: metadata.version(name) for name in ("numpy", "scipy")},
        "lozenge": __version__,
    }
