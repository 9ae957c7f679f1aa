"""What is said of an entropy: refused, undetermined, out of range, or nothing."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from lozenge_engine.config import Config, PointSource, Rule, Setup
from lozenge_engine.geometry import Region
from lozenge_engine.kernels import gaussian
from lozenge_engine.pipeline import compute
from lozenge_engine.readout import Measured, read

FloatArray = NDArray[np.float64]


def spectrum_of(values: FloatArray, s: FloatArray) -> gaussian.Spectrum:
    """Uncoupled modes with eigenvalues `values` of the commutator and symplectic values `s`.

    Each is a two-mode squeezed pair of which one half is seen.
    """
    c, h = np.sqrt(s + 0.5), np.sqrt(np.maximum(s - 0.5, 0.0))
    factor = np.zeros((2 * values.size, 4 * values.size))
    for k, size in enumerate(np.sqrt(values)):
        factor[2 * k, 4 * k : 4 * k + 4] = size * np.array([c[k], 0, h[k], 0])
        factor[2 * k + 1, 4 * k : 4 * k + 4] = size * np.array([0, c[k], 0, -h[k]])
    return gaussian.restricted_spectrum(factor)


def reading(
    spectrum: gaussian.Spectrum,
    kept: NDArray[np.bool_],
    *,
    uncut: bool = False,
    elements: int = 4,
    rank: int | None = 100,
) -> Measured:
    g = gaussian.projected(spectrum, kept)
    return read(spectrum, kept, g, order=1.0, uncut=uncut, elements=elements, rank=rank)


VALUES = np.array([4.0, 2.0, 1.0])
S = np.array([2.0, 1.0, 0.5])
ALL = np.ones(3, dtype=bool)


def test_an_ordinary_entropy_carries_no_mark() -> None:
    found = reading(spectrum_of(VALUES, S), ALL)
    assert (found.status, found.note) == ("ok", "")
    np.testing.assert_allclose(found.symplectic, S, rtol=1e-10)


@pytest.mark.parametrize(("elements", "status"), [(99, "ok"), (100, "refused"), (500, "refused")])
def test_an_uncut_region_that_sees_every_mode_is_refused(elements: int, status: str) -> None:
    found = reading(spectrum_of(VALUES, S), ALL, uncut=True, elements=elements)
    assert found.status == status


def test_a_refused_entropy_is_no_number_and_gives_the_reason() -> None:
    found = reading(spectrum_of(VALUES, S), ALL, uncut=True, elements=100)
    assert np.isnan(found.entropy)
    assert "S = 0 by rank alone" in found.note
    assert found.symplectic.size == found.contributions.size == 0


@pytest.mark.parametrize("change", [{"uncut": False}, {"rank": None}])
def test_a_cut_in_either_stage_is_not_refused_by_rank(change: dict[str, object]) -> None:
    asked = {"uncut": True, "rank": 100, **change}
    found = reading(spectrum_of(VALUES, S), ALL, elements=500, **asked)  # type: ignore[arg-type]
    assert found.status == "ok"


@pytest.mark.parametrize("small", [1e-7, 1e-9])
def test_an_uncut_entropy_that_hangs_on_the_kernel_tolerance_is_undetermined(
    small: float,
) -> None:
    spectrum = spectrum_of(np.array([4.0, 2.0, 4.0 * small]), np.array([2.0, 1.0, 1.5]))
    found = reading(spectrum, spectrum.pairs.values > 1e-10 * 4.0, uncut=True)
    assert found.status == "undetermined"
    assert "kernel tolerance" in found.note


def test_a_pure_mode_near_the_kernel_does_not_matter() -> None:
    spectrum = spectrum_of(np.array([4.0, 2.0, 4e-7]), np.array([2.0, 1.0, 0.5]))
    found = reading(spectrum, spectrum.pairs.values > 1e-10 * 4.0, uncut=True)
    assert found.status == "ok"


def test_a_cut_entropy_does_not_hang_on_the_kernel_tolerance() -> None:
    spectrum = spectrum_of(np.array([4.0, 2.0, 4e-7]), np.array([2.0, 1.0, 1.5]))
    assert reading(spectrum, np.array([True, True, False])).status == "ok"


def test_columns_in_the_kernel_are_undetermined_and_not_an_exception() -> None:
    spectrum = spectrum_of(VALUES, S)
    g = gaussian.projected(spectrum, ALL)
    g = np.hstack([g, g[:, :2]])
    found = read(spectrum, ALL, g, order=1.0, uncut=False, elements=4, rank=None)
    assert found.status == "undetermined"
    assert np.isnan(found.entropy)


def test_a_symplectic_value_below_one_half_is_reported(monkeypatch: pytest.MonkeyPatch) -> None:
    original = gaussian.symplectic

    def low(g: FloatArray) -> gaussian.Symplectic:
        found = original(g)
        return found._replace(values=found.values - 1e-6, lowest=found.lowest - 1e-6)

    monkeypatch.setattr(gaussian, "symplectic", low)
    found = reading(spectrum_of(VALUES, S), ALL)
    assert found.status == "out_of_range"
    assert "below 1/2" in found.note


def test_rounding_that_could_hide_a_millionth_is_not_called_ok(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """A tolerance of a tenth would let a value of 0.4 pass as pure: never clip silently."""
    original = gaussian.symplectic

    def coarse(g: FloatArray) -> gaussian.Symplectic:
        found = original(g)
        return found._replace(values=found.values - 0.05, lowest=found.lowest - 0.05, tolerance=0.1)

    monkeypatch.setattr(gaussian, "symplectic", coarse)
    assert reading(spectrum_of(VALUES, S), ALL).status != "ok"


def test_first_stage_only_is_refused_when_the_region_has_more_elements_than_modes() -> None:
    setup = Setup(points=PointSource(density=600.0), region_count=1, truncation_mode="patch_only")
    assert compute(setup.config()).regions[0].status != "refused"
    larger = setup.with_(half_width=0.6)
    assert compute(larger.config()).regions[0].status == "refused"


@pytest.mark.parametrize("half_width", [0.5, 0.3])
def test_what_follows_from_a_refused_entropy_is_no_number(half_width: float) -> None:
    regions = (Region(x0=-0.5, half_width=0.5), Region(x0=0.55, half_width=0.4))
    config = Config(
        points=PointSource(density=1500.0), regions=regions, region_rule=Rule(kind="none")
    )
    result = compute(config)
    assert {r.status for r in result.regions} == {"refused"}
    assert np.isnan([result.pairs[0].support, result.pairs[0].direct_sum]).all()
    assert np.isnan(list(result.total_correlation.values())).all()


def test_the_direct_sum_of_undetermined_regions_is_undetermined(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    """Without a second cut the tolerance decides for the regions and so for their sum."""
    from lozenge_engine import readout

    # Every tolerance but the one in use drops modes that carry entropy.
    monkeypatch.setattr(readout, "TOLERANCES", (0.3, 0.1))
    setup = Setup(
        points=PointSource(density=600.0, seed=5),
        half_width=0.15,
        separation=0.1,
        truncation_mode="patch_only",
    )
    result = compute(setup.config())
    assert {r.status for r in result.regions} == {"undetermined"}
    assert result.unions["support"].status == "undetermined"
    assert result.unions["direct_sum"].status == "undetermined"
