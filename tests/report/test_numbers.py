"""Numbers as shown."""

from __future__ import annotations

import math

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hwpol.report.numbers import UNKNOWN, degrees, percent, plain, significant


@pytest.mark.parametrize(
    ("value", "error", "text"),
    [(0.012345, 0.00023, "1.234"), (0.012345, 0.0023, "1.23"), (0.0123, math.nan, "1.230"), (math.nan, 0.1, UNKNOWN),
     (-1e-9, 2e-4, "0.000"), (0.5, 3.0, "50")],
)  # fmt: skip
def test_percent(value: float, error: float, text: str) -> None:
    assert percent(value, error) == text


def test_signs() -> None:
    assert percent(0.01, 1e-3, sign=True) == "+1.00"
    assert percent(-1e-9, 1e-3, sign=True) == "+0.00"
    assert degrees(-0.001) == "0.0"


@pytest.mark.parametrize(
    ("value", "text"), [(713995.2, "714000"), (44.51, "44.5"), (0.0, "0.00"), (-0.01234, "-0.0123")]
)
def test_significant(value: float, text: str) -> None:
    assert significant(value) == text


@settings(deadline=None, max_examples=200)
@given(st.floats(-1, 1), st.floats(1e-6, 1))
def test_rounding_stays_below_a_tenth_of_the_error(value: float, error: float) -> None:
    # Two digits of the error: half a unit of the last is at most a twentieth of it; five decimals at most are shown.
    assert abs(float(percent(value, error)) / 100 - value) <= max(error / 20, 0.5e-7) * (1 + 1e-9)
    assert abs(float(degrees(100 * value, error)) - 100 * value) <= max(error / 20, 0.5e-3) * (1 + 1e-9)


@given(st.floats(allow_nan=True, allow_infinity=True))
def test_nothing_but_numbers_and_the_dash(value: float) -> None:
    for text in (percent(value), degrees(value), plain(value), significant(value)):
        assert text == UNKNOWN if not math.isfinite(value) else float(text) is not None
