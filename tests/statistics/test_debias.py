"""De-biasing: the fast road against root finding, scaling, and the bias that is left."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hwpol.statistics import METHODS, debias
from hwpol.statistics.debias import THRESHOLDS, exact

SOLVED = ("mode", "mean", "median", "maximum-likelihood")


@pytest.mark.parametrize("method", SOLVED)
def test_table_follows_root_finding(method: str) -> None:
    # Cubic interpolation on 400 nodes, worst beside the threshold; at 60 sigma sqrt(p^2 - 1) takes over, 1e-6 away.
    for p, tolerance in ((np.linspace(0.01, 12, 2000), 2e-8), (np.geomspace(12, 59, 200), 1e-6)):
        np.testing.assert_allclose(debias(p, 0, np.eye(2), method), exact(p, method), rtol=0, atol=tolerance)


@pytest.mark.parametrize("method", METHODS)
def test_order_and_limits(method: str) -> None:
    p = np.linspace(0, 100, 20_001)
    found = debias(p, 0, np.eye(2), method)
    assert np.all(np.diff(found) >= -1e-12)
    assert np.all((found >= 0) & (found <= p))
    assert np.all(found[p <= THRESHOLDS.get(method, 0.0)] == 0)
    # All agree with p - 1/2p to the next order, under 1/p^3.
    far = p > 20
    np.testing.assert_allclose(found[far], p[far] - 0.5 / p[far], rtol=0, atol=20.0**-3)


@settings(deadline=None, max_examples=40)
@given(scale=st.floats(1e-6, 1e3), p=st.floats(0.0, 30.0), method=st.sampled_from(METHODS))
def test_scaling(scale: float, p: float, method: str) -> None:
    one = debias(p, 0.0, np.eye(2), method)
    # sqrt(p - K) turns rounding of p at the threshold into its root.
    np.testing.assert_allclose(
        debias(scale * p, 0.0, scale**2 * np.eye(2), method), scale * one, rtol=0, atol=1e-7 * scale
    )


def test_tiny_signal_and_tiny_error() -> None:
    assert debias(1e-200, 0, np.eye(2)) == pytest.approx(0.5e-200)
    assert debias(1.0, 0, 1e-60 * np.eye(2)) == 1.0


@pytest.mark.parametrize("p0", [2.0, 2.5, 3.0, 4.0, 5.0])
def test_bias_of_the_default_equal_errors(p0: float) -> None:
    z = np.random.default_rng(7).normal(size=(2, 200_000))
    bias = debias(p0 + z[0], z[1], np.eye(2)).mean() - p0
    # 0.06 sigma wanted; the mean of 2e5 is good to 0.0022.
    assert abs(bias) < 0.06


@pytest.mark.parametrize("covariance", [np.diag([1.6, 0.4]), np.array([[1.0, 0.6], [0.6, 1.0]]), np.diag([1.8, 0.2])])
@pytest.mark.parametrize("p0", [2.0, 3.0, 5.0])
def test_bias_of_the_default_unequal_errors(covariance: np.ndarray, p0: float) -> None:
    """Signal in units of the mean error, whatever the angle to the ellipse; axial ratios 2 and 3."""
    rng = np.random.default_rng(8)
    for phase in np.radians([0, 30, 60, 90, 135]):
        z = rng.multivariate_normal([p0 * np.cos(phase), p0 * np.sin(phase)], covariance, 100_000)
        bias = debias(z[:, 0], z[:, 1], covariance).mean() - p0
        assert abs(bias) < 0.12, np.degrees(phase)


def test_averaging_then_debiasing() -> None:
    """16 cycles of signal-to-noise 1 averaged in q and u leave a bias under 0.02 of a cycle's error."""
    z = np.random.default_rng(9).normal(size=(2, 100_000, 16)).mean(axis=2)
    bias = debias(1 + z[0], z[1], np.eye(2) / 16).mean() - 1
    assert abs(bias) < 0.02
