"""Band names and the Serkowski law as code."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hwpol.correction.catalogue.bands import band_name, fit_curve, k_of, serkowski, transfer
from hwpol.errors import InputError


@pytest.mark.parametrize(
    ("text", "band"),
    [
        ("V", "V"), ("v", "V"), ("R", "Rc"), ("Rc", "Rc"), ("Bess R 76", "Rc"), ("R_Bessell", "Rc"), ("r", "r"),
        ("SDSS_r", "r"), ("SDSS R", "r"), ("g'", "g"), ("Johnson R", "Rj"), ("I", "Ic"), ("V Johnson", "V"),
        ("I_c", "Ic"), ("clear", None), ("", None), ("Halpha", None), ("B V", None), ("R1", "Rc"), ("656nm", None),
    ],
)  # fmt: skip
def test_band_names(text, band):
    assert band_name(text) == band


@settings(deadline=None, max_examples=40)
@given(
    p_max=st.floats(0.01, 0.1),
    lambda_max=st.floats(0.46, 0.72),
    law=st.sampled_from(["whittet", "wilking", "constant"]),
)
def test_fit_recovers_an_exact_curve(p_max, lambda_max, law):
    waves = np.array([0.36, 0.44, 0.55, 0.64, 0.79])
    p = p_max * serkowski(waves, lambda_max, k_of(lambda_max, law))
    curve = fit_curve(waves, p, 1e-4 * p, law)
    # The prior (0.09 micron) pulls by (error / 0.09)^2 of the distance; with 1 percent of scatter the error is
    # below 0.025 micron, so that less than a tenth of the distance remains.
    assert abs(curve.lambda_max - lambda_max) < 0.1 * abs(lambda_max - 0.545) + 1e-6
    value, error = curve.at(0.55)
    assert abs(value - p[2]) < error


def test_one_band_takes_the_usual_maximum():
    curve = fit_curve([0.55], [0.05], [0.0005])
    assert curve.lambda_max == pytest.approx(0.545, abs=0.002)
    value, error = curve.at(0.44)
    # Between lambda_max 0.455 and 0.635 the law changes p(0.44)/p(0.55) from 1.02 to 0.87: 7 percent.
    assert 0.04 * value < error < 0.10 * value


def test_fit_needs_a_value():
    with pytest.raises(InputError, match="at least one tabulated value"):
        fit_curve([0.55], [np.nan], [0.001])


def test_error_grows_away_from_the_bands():
    curve = fit_curve([0.44, 0.55, 0.64], [0.05, 0.052, 0.051], [0.0003] * 3)
    relative = [error / p for p, error in (curve.at(w) for w in (0.55, 0.8, 1.25, 2.2))]
    assert np.all(np.diff(relative) > 0)


@settings(deadline=None, max_examples=40)
@given(st.floats(0.4, 0.9), st.floats(0.4, 0.9), st.floats(0.46, 0.75))
def test_transfer_there_and_back(start, end, lambda_max):
    there, _ = transfer(0.02, 0.001, start, end, lambda_max)
    back, _ = transfer(there, 0.001, end, start, lambda_max)
    assert back == pytest.approx(0.02, rel=1e-12)


def test_transfer_to_itself_adds_no_error():
    assert transfer(0.02, 0.001, 0.55, 0.55) == (0.02, 0.001)


def test_transfer_error_is_the_spread_over_lambda_max():
    """The linear error equals the spread over lambda_max 0.545 +- 0.01 scaled to 0.09 (curvature: 2 percent)."""
    low, high = (transfer(0.02, 0.0, 0.55, 0.44, 0.545 + d)[0] for d in (-0.01, 0.01))
    _, error = transfer(0.02, 0.0, 0.55, 0.44)
    k_part = 0.10 * (np.log(0.545 / 0.55) ** 2 - np.log(0.545 / 0.44) ** 2) * 0.02
    value = transfer(0.02, 0.0, 0.55, 0.44)[0]
    expected = np.sqrt(((high - low) / 0.02 * 0.09) ** 2 + k_part**2 + (0.01 * value) ** 2)
    assert error == pytest.approx(expected, rel=0.03)
