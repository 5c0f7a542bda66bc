"""Errors and intervals of the polarisation angle."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hwpol.statistics import null_p_value, theta_error, theta_interval, unwrap_theta
from hwpol.statistics.angles import UNIFORM, _evaluate, density, half_width, spread
from hwpol.statistics.moments import geometry
from hwpol.statistics.tables import FEW, LONGEST, not_tabulated

#: Interpolation between nodes: 0.3 percent at the longest ellipses tabulated, and as much again in reserve.
TABLE_STEP = 0.005

SHAPES = [np.eye(2), np.diag([1.6, 0.4]), np.array([[1.0, 0.6], [0.6, 1.0]])]


@pytest.mark.parametrize("covariance", SHAPES)
@pytest.mark.parametrize("p0", [0.5, 1.0, 2.0, 4.0])
def test_exact_distribution_against_draws(covariance: np.ndarray, p0: float) -> None:
    rng = np.random.default_rng(51)
    for phase in (0.0, 0.9):
        truth = p0 * np.array([np.cos(phase), np.sin(phase)])
        z = rng.multivariate_normal(truth, covariance, 100_000) @ [1, 1j]
        error = 0.5 * np.degrees(np.angle(z * np.exp(-1j * phase)))
        g = geometry(truth[:1], truth[1:], covariance)
        shape = g.p / g.unit, g.stretch, g.tilt
        # 5 percent wanted; 1e5 draws give the root mean square to 0.4 percent.
        assert spread(*shape)[0] == pytest.approx(np.sqrt((error**2).mean()), rel=0.02)
        inside = (np.abs(error) < half_width(*shape, 0.6827)[0]).mean()
        assert inside == pytest.approx(0.6827, abs=4 * np.sqrt(0.6827 * 0.3173 / error.size))


@pytest.mark.parametrize("covariance", SHAPES)
@pytest.mark.parametrize("p0", [3.0, 5.0, 10.0])
def test_errors_quoted_match_the_scatter(covariance: np.ndarray, p0: float) -> None:
    """The error as a user gets it, from each noisy measurement, against the scatter of the angles."""
    z = np.random.default_rng(52).multivariate_normal([p0, 0.0], covariance, 100_000)
    quoted = theta_error(z[:, 0], z[:, 1], covariance)
    scatter = np.sqrt(np.mean((0.5 * np.degrees(np.arctan2(z[:, 1], z[:, 0]))) ** 2))
    assert np.median(quoted) == pytest.approx(scatter, rel=0.05)


def test_density_is_normalised() -> None:
    x, w = np.polynomial.legendre.leggauss(300)
    for p0, stretch, tilt in ((0.0, 0.0, 0.0), (2.0, 0.5, 0.3), (5.0, 1.0, 1.5), (1.0, 2.0, 0.7)):
        mass = np.pi * (w * density(np.pi * x, np.array(p0), np.array(stretch), np.array(tilt))).sum()
        assert mass == pytest.approx(1.0, abs=1e-9)


@pytest.mark.parametrize("level", [None, 0.6827])
def test_tables_follow_the_quadrature(level: float | None) -> None:
    rng = np.random.default_rng(53)
    # More elongated ellipses than are computed exactly, so that the table answers.
    count = 2 * FEW + 2
    ratio, turn, p = np.exp(rng.uniform(0.0, LONGEST, count)), rng.uniform(0, np.pi, count), rng.uniform(0, 12, count)
    ratio[::2] = 1.0
    c, s = np.cos(turn), np.sin(turn)
    rows = [np.stack([ratio**2 * c * c + s * s, (ratio**2 - 1) * c * s], -1)]
    rows += [np.stack([(ratio**2 - 1) * c * s, ratio**2 * s * s + c * c], -1)]
    g = geometry(p * np.sqrt((1 + ratio**2) / 2), 0.0, np.stack(rows, axis=-2))
    shape = g.p / g.unit, g.stretch, g.tilt
    direct = spread(*shape) if level is None else half_width(*shape, level)
    table = _evaluate(g, g.p, level)
    np.testing.assert_allclose(table[::2], direct[::2], rtol=1e-7)
    assert not not_tabulated(g.stretch)[1::2].any()
    np.testing.assert_allclose(table, direct, rtol=TABLE_STEP)


def test_limits_of_the_error() -> None:
    assert theta_error(0.0, 0.0, np.diag([1.0, 4.0])) == pytest.approx(UNIFORM)
    assert theta_error(0.9, 0.0, np.eye(2), "asymptotic") == pytest.approx(UNIFORM)
    # High signal: the error across, halved, over p.
    assert theta_error(1e6, 0.0, np.diag([1.0, 4.0])) == pytest.approx(np.degrees(2.0 / 2e6), rel=1e-6)
    p = np.linspace(0, 30, 3001)
    assert np.all(np.diff(theta_error(p, 0.0, np.eye(2))) < 0)
    # The smallest ellipse the direct road takes on, 30:1 and beyond.
    assert theta_error(1.0, 0.0, np.diag([1.0, 1e-6])) > 0


def test_interval_covers_and_says_when_nothing_is_known() -> None:
    rng = np.random.default_rng(54)
    for level in (0.6827, 0.9545):
        for p0 in (0.5, 1.0, 2.0, 3.0, 6.0):
            z = rng.normal(size=(2, 50_000))
            q, u = p0 + z[0], z[1]
            low, high = theta_interval(q, u, np.eye(2), level)
            full = null_p_value(q, u, np.eye(2)) >= 1 - level
            np.testing.assert_allclose((high - low)[full], 180.0, rtol=1e-12)
            assert np.all((high - low)[~full] < 180.0)
            inside = (low <= 0) | (high >= 180)
            # Angles that could be anywhere are said to be so, which covers more at low signal, never less.
            assert level - 0.005 < inside.mean()
            if p0 == 6.0:
                assert inside.mean() < level + 0.015


@settings(deadline=None, max_examples=30)
@given(turn=st.floats(0.0, 179.9), p=st.floats(2.0, 20.0))
def test_interval_turns_with_theta(turn: float, p: float) -> None:
    phase = 2 * np.radians(turn)
    low, high = theta_interval(p * np.cos(phase), p * np.sin(phase), np.eye(2))
    centre = 0.5 * (low + high)
    assert 0 <= centre < 180
    assert abs((centre - turn + 90) % 180 - 90) < 1e-9
    still = theta_interval(p, 0.0, np.eye(2))
    assert high - low == pytest.approx(still[1] - still[0], rel=1e-9)


def test_unwrapping() -> None:
    track = np.linspace(100, 700, 40)
    np.testing.assert_allclose(unwrap_theta(np.mod(track, 180)), track, rtol=0, atol=1e-9)
    gap = np.mod(track, 180)
    gap[3] = np.nan
    out = unwrap_theta(np.stack([gap, gap[::-1]]))
    assert np.isnan(out[0, 3])
    np.testing.assert_allclose(np.delete(out[0], 3), np.delete(track, 3), rtol=0, atol=1e-9)
    assert gap[5] == np.mod(track, 180)[5]
