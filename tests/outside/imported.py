"""A given point set through the whole pipeline, as if it had come from a file."""

from __future__ import annotations

from lozenge_engine.config import Config, PointSource, Rule
from lozenge_engine.kernels.points import points_hash
from lozenge_engine.pipeline import compute
from lozenge_engine.pointfile import PointFile


def compute_on(points, regions, *, alpha=1.0, mass=0.0, stages=None):
    """Result on these points with the default rule times alpha in both stages."""
    sha256 = points_hash(points)
    source = PointSource(kind="file", density=points.u.size / 2, file="points.csv", sha256=sha256)
    rule = Rule(alpha=alpha)
    config = Config(points=source, mass=mass, regions=regions, patch_rule=rule, region_rule=rule)
    return compute(config, points=PointFile(points, "points.csv", sha256), stages=stages)


def twin(density, *, ratio, offset):
    """Quasi-uniform stand-in for the continuum: `ratio` times the density on a turned lattice.

    Cut at the same wavenumber as the default rule at `density`: eigenvalues are rho L/k, so the
    threshold grows with the density, and alpha sqrt(n)/(4 pi) with alpha = sqrt(ratio).
    """
    from lozenge_engine.kernels.points import golden_lattice

    return golden_lattice(round(2 * density * ratio), offset=offset), ratio**0.5
