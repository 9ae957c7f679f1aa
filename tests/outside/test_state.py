"""Modes and state against the continuum and against dense complex matrices."""

import math
from functools import cache

import numpy as np
import pytest
import scipy.linalg
from scipy.optimize import brentq
from tests.outside.dense import (
    causal_matrix,
    cut_of,
    entropy,
    pauli_jordan,
    solutions,
    sorkin_johnston,
)

from lozenge_engine.config import Config, PointSource
from lozenge_engine.geometry import Region
from lozenge_engine.modeview import mode_record
from lozenge_engine.stages import Stages
from lozenge_engine.statecheck import state_record

STAGES = Stages()
REGION = (Region(half_width=0.5),)
SOBOL = Config(points=PointSource(kind="sobol", density=256.0, oversampling=4), regions=REGION)
SPRINKLED = Config(points=PointSource(kind="fixed", density=350.0, seed=8), regions=REGION)
LAW = -1 / (2 * math.pi)


def wavenumbers(count):
    """The first k L: n pi, and the roots of tan y = 2 y (JHEP 10 (2012) 088, arXiv:1205.1296)."""

    def f(y):
        return math.sin(y) - 2 * y * math.cos(y)

    roots = [brentq(f, max(1.0, n * math.pi), (n + 0.5) * math.pi) for n in range(count)]
    return np.sort([*(math.pi * np.arange(1, count + 1)), *roots])[:count]


def continuum_mode(u, v, rank):
    """The eigenfunctions as the paper writes them, u and v in units of the half-side."""
    k = wavenumbers(rank)[-1]
    if rank % 2 == 0:
        return np.exp(-1j * k * u) - np.exp(-1j * k * v)
    return np.exp(-1j * k * u) + np.exp(-1j * k * v) - 2 * math.cos(k)


@pytest.mark.parametrize("rank", range(1, 11))
def test_modes_on_evenly_laid_points_are_those_of_the_continuum_diamond(rank):
    # arXiv:1205.1296.  Tolerance: the ten modes' own eigenvalues are good to 2e-3 on such sets
    # (PHYSICS 3, measured), an overlap's defect is of second order in a vector's error.
    record = mode_record(SOBOL, stages=STAGES, rank=rank)
    wave = continuum_mode(record.t + record.x, record.t - record.x, rank)
    norms = np.linalg.norm(wave) * np.linalg.norm(record.values)
    overlap = abs(np.vdot(wave, record.values)) / norms
    assert overlap > 1 - 1e-3
    assert record.continuum.overlap == pytest.approx(overlap, abs=1e-9)
    assert record.continuum.nearest_rank == rank
    # Negative control: the mode of negative eigenvalue is the complex conjugate.
    assert abs(np.vdot(wave.conj(), record.values)) / norms < 0.5


def test_continuum_modes_are_eigenfunctions_of_the_integral_operator():
    # (i Delta f)(x) = i times the integral of [sgn(u' - u) + sgn(v' - v)] f / 4, common practice;
    # midpoint rule with 200 x 200 cells, whose error is of order (k/200)^2.
    n = 200
    side = (np.arange(n) + 0.5) / n * 2 - 1
    u, v = np.meshgrid(side, side, indexing="ij")
    sign = np.sign(side - side[:, None])
    for rank in (1, 2, 3, 4):
        f = continuum_mode(u, v, rank)
        along_u = sign @ f.sum(axis=1)
        along_v = sign @ f.sum(axis=0)
        image = 0.25j * (along_u[:, None] + along_v[None, :]) * (2 / n) ** 2
        expected = f / wavenumbers(rank)[-1]  # L = 1
        assert np.abs(image - expected).max() < 3e-3 * np.abs(expected).max()


def test_state_is_the_logarithm_of_flat_space_in_the_middle_of_the_patch():
    # Slope -1/(2 pi) at a sharp cut (JHEP 10 (2012) 088, arXiv:1205.1296; DLMF 6.2.13).  0.002: the
    # patch's finite size within |tau| < 0.3 (measured: -0.1596 at every density).  The constant
    # "about -0.024" of this patch is a measured value of PHYSICS 3.
    record = state_record(SOBOL, stages=STAGES)
    assert record.softened.slope == pytest.approx(LAW, abs=0.002)
    assert record.softened.law_constant == pytest.approx(-0.024, abs=0.001)
    # Negative control: half a state, W/2, would be seen at once.
    assert abs(record.softened.slope / 2 - LAW) > 0.05


@cache
def dense_state():
    """Elements and the cut state of the papers, 700 elements, full complex matrices."""
    record = mode_record(SPRINKLED, stages=STAGES)
    u, v = (record.t + record.x) / math.sqrt(2), (record.t - record.x) / math.sqrt(2)
    cut = cut_of("root_count", own=u.size, union=u.size, count=1)
    return u, v, sorkin_johnston(pauli_jordan(u, v), cut=cut)


@cache
def checked():
    return state_record(SPRINKLED, stages=STAGES)


def test_fit_near_the_centre_is_that_of_the_dense_matrix():
    # arXiv:1611.10281; rounding alone lies between the two.
    u, v, state = dense_state()
    record = checked()
    near = np.nonzero((np.abs(u) < 0.3 / math.sqrt(2)) & (np.abs(v) < 0.3 / math.sqrt(2)))[0]
    x, y = [], []
    for k, i in enumerate(near):
        for j in near[k + 1 :]:
            du, dv = abs(u[i] - u[j]), abs(v[i] - v[j])
            if min(du, dv) >= record.shortest and 2 * du * dv <= record.longest**2:
                x.append(0.5 * math.log(2 * du * dv))
                y.append(state.w[i, j].real)
    slope, constant = np.polyfit(x, y, 1)
    assert len(x) == record.fits[0].pairs
    assert record.slope == pytest.approx(slope, rel=1e-6)
    assert record.constant == pytest.approx(constant, rel=1e-6)


def test_what_the_cut_takes_is_the_norm_of_the_difference_of_dense_matrices():
    # Common practice, no source.
    u, v, state = dense_state()
    whole = pauli_jordan(u, v)
    lost = scipy.linalg.norm(whole - state.i_delta) / scipy.linalg.norm(whole)
    assert checked().lost == pytest.approx(lost, rel=1e-8)


def test_share_lost_in_a_cell_is_that_of_its_rows_of_dense_matrices():
    u, v, state = dense_state()
    whole = pauli_jordan(u, v)
    rows = np.sum(np.abs(whole) ** 2, axis=1)
    gone = np.sum(np.abs(whole - state.i_delta) ** 2, axis=1)
    record = checked().loss
    for t, x, value, held in zip(record.t, record.x, record.value, record.held, strict=True):
        half = math.sqrt(0.5) / record.bins
        inside = (np.abs(u - (t + x) / math.sqrt(2)) < half) & (
            np.abs(v - (t - x) / math.sqrt(2)) < half
        )
        assert inside.sum() == held
        assert value == pytest.approx(gone[inside].sum() / rows[inside].sum(), rel=1e-7)


def test_dense_state_is_positive_and_pure_as_the_record_says():
    # arXiv:1205.2953: S of the whole patch is 0 (pure).
    u, v, state = dense_state()
    record = checked()
    values = np.linalg.eigvalsh(state.w)
    assert record.positivity.highest == pytest.approx(values[-1], rel=1e-9)
    assert abs(values[0]) <= record.positivity.tolerance
    assert abs(record.positivity.lowest) <= record.positivity.tolerance
    whole, vectors = np.linalg.eigh(state.i_delta)
    kept = vectors[:, whole > 1e-6][:, ::-1]
    found = entropy(solutions(state, np.arange(u.size), kept))
    assert abs(found) < 1e-6
    assert record.purity.entropy < 1e-6
    # Negative control: the same state with its commutator left uncut is not positive.
    uncut = state.w.real + 0.5 * pauli_jordan(u, v)
    assert np.linalg.eigvalsh(uncut)[0] < -0.1


def test_ordered_pairs_are_marked_timelike():
    u, v, _ = dense_state()
    related = causal_matrix(u, v)
    share = (related + related.T)[np.triu_indices(u.size, k=1)].mean()
    bins = checked().bins
    # Half of all pairs of a diamond are related (Myrheim-Meyer, d = 2); in its middle likewise.
    assert share == pytest.approx(0.5, abs=0.05)
    assert bins.pairs[bins.timelike].sum() / bins.pairs.sum() == pytest.approx(0.5, abs=0.1)
