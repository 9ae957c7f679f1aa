"""Numbers for people: the digits that their errors allow, and no more."""

from __future__ import annotations

import math
import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from lozenge_engine import notation


@pytest.mark.parametrize(
    ("value", "error", "text"),
    [
        (2.2149, 0.04, "2.21(4)"),
        (2.2149, 0.036, "2.21(4)"),
        (2.2149, 0.0132, "2.215(13)"),
        (2.2149, 0.0194, "2.215(19)"),
        (2.2149, 0.0196, "2.21(2)"),
        (0.587, 0.0131, "0.587(13)"),
        (61.04, 0.96, "61.0(10)"),
        (12.34, 1.4, "12.3(14)"),
        (1234.0, 56.0, "1230(60)"),
        (-0.013, 0.006, "-0.013(6)"),
        (-0.001, 0.04, "0.00(4)"),
        (2.2149, math.nan, "2.215"),
        (2.2149, 0.0, "2.215"),
        (2.2149, 1e-17, "2.215"),
        (-1e-9, math.nan, "0.000"),
        (math.nan, 0.1, notation.NO_NUMBER),
        (math.inf, 0.1, notation.NO_NUMBER),
    ],
)
def test_a_number_has_the_digits_that_its_error_allows(
    value: float, error: float, text: str
) -> None:
    assert notation.with_error(value, error) == text


@given(value=st.floats(-1e4, 1e4), error=st.floats(1e-6, 1e3))
def test_what_is_written_is_the_number_and_its_error_within_their_rounding(
    value: float, error: float
) -> None:
    found = re.fullmatch(r"(-?\d+(?:\.(\d+))?)\((\d+)\)", notation.with_error(value, error))
    assert found is not None
    unit = 10.0 ** -len(found[2] or "")
    assert float(found[3]) * unit == pytest.approx(error, rel=0.3)
    assert abs(float(found[1]) - value) <= 0.51 * error


@pytest.mark.parametrize(
    ("value", "scatter", "text"),
    [(2.2149, 0.12, "2.21"), (0.5737, 0.038, "0.574"), (65.04, 2.7, "65.0"), (652.0, 270, "650")],
)
def test_a_single_sample_has_the_decimals_of_its_scatter(
    value: float, scatter: float, text: str
) -> None:
    assert notation.with_scatter(value, scatter) == text
    assert notation.with_scatter(value) == f"{value:.3f}"
    assert notation.with_scatter(math.nan, scatter) == notation.NO_NUMBER


@pytest.mark.parametrize(
    ("number", "text"),
    [(0.2, "0.20"), (0.0381, "0.038"), (2.71, "2.7"), (27.1, "27"), (271.0, "270")],
)
def test_a_scatter_keeps_two_digits(number: float, text: str) -> None:
    assert notation.two_digits(number) == text


@pytest.mark.parametrize("number", [math.nan, 0.0, -1.0, math.inf])
def test_what_is_no_scatter_is_not_written(number: float) -> None:
    assert notation.two_digits(number) == notation.NO_NUMBER
    with pytest.raises(ValueError, match="finite and > 0"):
        notation.decimals_for(number)


def test_thousands_stand_apart_by_a_thin_space_that_does_not_break() -> None:
    assert notation.thousands(999) == "999"
    assert notation.thousands(4000) == "4\u202f000"
    assert notation.thousands(1234567, space=" ") == "1 234 567"


@pytest.mark.parametrize(
    ("seconds", "text"),
    [
        (0.0, "0.00 s"),
        (0.083, "0.08 s"),
        (0.0949, "0.09 s"),
        (0.42, "0.4 s"),
        (2.94, "2.9 s"),
        (8.3, "8 s"),
        (9.6, "10 s"),
        (99.4, "99 s"),
        (100.0, "1 min 40 s"),
        (139.0, "2 min 20 s"),
        (3598.0, "1 h 00 min"),
        (3900.0, "1 h 05 min"),
        (7199.0, "2 h 00 min"),
        (math.nan, notation.NO_NUMBER),
    ],
)
def test_a_time_is_written_as_a_person_says_it(seconds: float, text: str) -> None:
    assert notation.duration(seconds) == text
