"""Geometry of (q, u): error of p, ellipse, test against zero, and what becomes of bad input."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from hwpol.errors import InputError
from hwpol.statistics import (
    METHODS,
    debias,
    ellipse,
    interval,
    null_p_value,
    p_and_error,
    theta_error,
    theta_interval,
    upper_limit,
)

angles = st.floats(0.0, 2 * np.pi)
ratios = st.floats(1.0, 20.0)
ROUNDING = 1e-9  # rotations and eigenvalues of matrices with axial ratios up to 20 lose a factor 400 of 1e-16, squared


def covariance_of(major: float, minor: float, angle: float) -> np.ndarray:
    turn = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
    return turn @ np.diag([major**2, minor**2]) @ turn.T


@settings(deadline=None, max_examples=50)
@given(ratio=ratios, angle=angles, phase=angles, turn=angles)
def test_rotating_all_changes_nothing(ratio: float, angle: float, phase: float, turn: float) -> None:
    first = 3 * np.cos(phase), 3 * np.sin(phase), covariance_of(ratio, 1.0, angle)
    second = 3 * np.cos(phase + turn), 3 * np.sin(phase + turn), covariance_of(ratio, 1.0, angle + turn)
    np.testing.assert_allclose(p_and_error(*first), p_and_error(*second), rtol=ROUNDING)
    np.testing.assert_allclose(debias(*first), debias(*second), rtol=ROUNDING, atol=ROUNDING)
    np.testing.assert_allclose(null_p_value(*first), null_p_value(*second), rtol=1e-7)


@settings(deadline=None, max_examples=50)
@given(ratio=st.floats(1.01, 20.0), angle=angles)
def test_ellipse_recovers_its_axes(ratio: float, angle: float) -> None:
    major, minor, direction = ellipse(0.0, 0.0, covariance_of(ratio, 1.0, angle))
    np.testing.assert_allclose([major, minor], [ratio, 1.0], rtol=1e-7)
    assert 0 <= direction < 180
    assert abs(np.sin(np.radians(direction) - angle)) < 1e-7


def test_error_of_p_is_the_error_along_it() -> None:
    covariance = np.diag([4.0, 9.0])
    assert p_and_error(100.0, 0.0, covariance) == (100.0, 2.0)
    assert p_and_error(0.0, -100.0, covariance) == (100.0, 3.0)
    assert p_and_error(0.0, 0.0, covariance)[1] == pytest.approx(np.sqrt(6.5))


def test_null_p_values_are_uniform() -> None:
    """False alarm 1 in 1000: Kolmogorov-Smirnov at a fixed seed."""
    covariance = covariance_of(3.0, 1.0, 0.6)
    z = np.random.default_rng(41).multivariate_normal([0, 0], covariance, 20_000)
    assert stats.kstest(null_p_value(z[:, 0], z[:, 1], covariance), "uniform").pvalue > 0.001


BAD = [
    (np.nan, 0.0, np.eye(2)),
    (0.1, np.inf, np.eye(2)),
    (0.1, 0.0, np.zeros((2, 2))),
    (0.1, 0.0, np.diag([1.0, -1.0])),
    (0.1, 0.0, np.ones((2, 2))),
    (0.1, 0.0, np.full((2, 2), np.nan)),
]


@pytest.mark.parametrize("bad", BAD)
def test_unusable_input_gives_nan(bad: tuple[float, float, np.ndarray]) -> None:
    q, u, covariance = np.array([bad[0], 1.0]), np.array([bad[1], 2.0]), np.stack([bad[2], np.eye(2)])
    results = [*p_and_error(q, u, covariance), *ellipse(q, u, covariance), null_p_value(q, u, covariance)]
    results += [debias(q, u, covariance, method) for method in METHODS]
    results += [*interval(q, u, covariance), upper_limit(q, u, covariance), theta_error(q, u, covariance)]
    results += [*theta_interval(q, u, covariance)]
    for result in results:
        assert np.isnan(result[0])
        assert np.isfinite(result[1])


def test_shapes_broadcast() -> None:
    q, u = np.ones((4, 1)), np.ones((1, 3))
    assert debias(q, u, np.eye(2)).shape == (4, 3)
    assert interval(q, u, np.broadcast_to(np.eye(2), (4, 3, 2, 2)))[0].shape == (4, 3)
    assert interval([], [], np.eye(2))[1].shape == (0,)
    assert np.shape(theta_error(1.0, 2.0, np.eye(2))) == ()


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: debias(1, 1, np.eye(3)), r"covariance has shape \(3, 3\): expected"),
        (lambda: debias([1, 2], [1, 2, 3], np.eye(2)), "do not match"),
        (lambda: debias(1, 1, np.eye(2), "magic"), 'method = "magic": expected one of modified-asymptotic'),
        (lambda: interval(1, 1, np.eye(2), 68.27), "level = 68.27: expected a probability"),
        (lambda: interval(1, 1, np.eye(2), kind="exact"), 'kind = "exact": expected one of bayes'),
        (lambda: theta_interval(1, 1, np.eye(2), 1.0), "level = 1.0"),
    ],
)
def test_refusals_say_what_is_expected(call: object, words: str) -> None:
    with pytest.raises(InputError, match=words):
        call()  # type: ignore[operator]


@pytest.mark.parametrize("ratio", [1.0, 2.0, 100.0])
@pytest.mark.parametrize("scale", [1e-10, 1.0])
def test_extremes_stay_finite_and_ordered(ratio: float, scale: float) -> None:
    p = scale * np.array([0.0, 1e-3, 1.0, 30.0, 61.0, 1e8])
    covariance = np.diag([ratio**2, 1.0]) * scale**2
    for q, u in ((p, 0 * p), (0 * p, p), (0.6 * p, 0.8 * p)):
        for kind in ("bayes-qu", "frequentist"):
            low, high = interval(q, u, covariance, kind=kind)
            assert np.all((low >= 0) & (low < high) & np.isfinite(high))
        error = theta_error(q, u, covariance)
        assert np.all((error > 0) & (error < 180 / np.sqrt(12) + 1e-9))
        for method in METHODS:
            assert np.all(debias(q, u, covariance, method) >= 0)
