"""Statistics of linear polarisation against tables, to their printed digits.

Where each table stands: `published`, numbers printed in a public page; `recomputed`, exact evaluations of a published
formula by another route (mpmath and scipy quadrature); `from memory`, a formula recalled from its paper and confirmed
by Monte Carlo.
"""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from hwpol.statistics import (
    debias,
    interval,
    null_p_value,
    p_and_error,
    theta_error,
    theta_interval,
    upper_limit,
)
from hwpol.statistics.angles import density, half_width, spread
from hwpol.statistics.debias import THRESHOLDS, exact, modified_asymptotic
from hwpol.statistics.intervals import onset
from hwpol.statistics.moments import geometry
from hwpol.statistics.posterior import Posterior

UNIT = np.eye(2)


def circle(*values: float) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Signal, stretch and tilt of equal errors."""
    p = np.array(values)
    return p, np.zeros_like(p), np.zeros_like(p)


# Rice distribution, recomputed: p0, mean, mode, median of the measured p (mode 1 at p0 = 0: the threshold).
RICE = [
    (0.5, 1.3304473406, 1.0664629773, 1.2515801861),
    (1.0, 1.5485724606, 1.3091491448, 1.4754790918),
    (1.5, 1.8749357494, 1.7394475547, 1.8254715254),
    (2.0, 2.2723834281, 2.2084779579, 2.2458022571),
    (3.0, 3.1725772879, 3.1538105147, 3.1652457880),
    (4.0, 4.1271935425, 4.1194110841, 4.1243776563),
    (5.0, 5.1010696395, 5.0970925892, 5.0996760376),
    (10.0, 10.0501269367, 10.0496280655, 10.0499586252),
]


@pytest.mark.parametrize(("column", "method"), [(1, "mean"), (2, "mode"), (3, "median")])
def test_estimators_invert_the_moments_of_rice(column: int, method: str) -> None:
    table = np.array(RICE)
    # The moments carry 10 decimals and rise with p0 at no less than 0.15; the interpolation adds 1e-8.
    tolerance = 1e-10 / 0.15 + 1e-8
    np.testing.assert_allclose(debias(table[:, column], 0.0, UNIT, method), table[:, 0], rtol=0, atol=tolerance)


def test_thresholds_of_the_estimators() -> None:
    """Published as 1.00, 1.18, 1.25, 1.41 (Simmons & Stewart 1985, from memory); the digits are recomputed."""
    assert THRESHOLDS["mode"] == 1.0
    assert THRESHOLDS["median"] == pytest.approx(1.1774100225, abs=5e-11)
    assert THRESHOLDS["mean"] == pytest.approx(1.2533141373, abs=5e-11)
    assert THRESHOLDS["maximum-likelihood"] == pytest.approx(1.4142135624, abs=5e-11)


# Recomputed; the formula of the last column (Plaszczynski et al. 2014) is from memory.
ORDER = ("mode", "asymptotic", "median", "mean", "maximum-likelihood", "modified-asymptotic")
DEBIASED = [
    (0.5, 0, 0, 0, 0, 0, 0.27880078),
    (1.0, 0, 0, 0, 0, 0, 0.68393972),
    (1.1, 0.60495967, 0.45825757, 0, 0, 0, 0.78099876),
    (1.2, 0.82666705, 0.66332496, 0.27664420, 0, 0, 0.88205323),
    (1.3, 0.98699089, 0.83066239, 0.64174739, 0.38780909, 0, 0.98635366),
    (1.5, 1.23835691, 1.11803399, 1.04083260, 0.90956941, 0.68069466, 1.20179974),
    (2.0, 1.77742394, 1.73205081, 1.71429628, 1.66511312, 1.66292405, 1.75457891),
    (2.5, 2.31086371, 2.29128785, 2.28409423, 2.26358986, 2.26717434, 2.30038609),
    (3.0, 2.83894435, 2.82842712, 2.82467092, 2.81496839, 2.81643837, 2.83335390),
    (4.0, 3.87716015, 3.87298335, 3.87153652, 3.86829264, 3.86851241, 3.87500001),
    (5.0, 4.90106472, 4.89897949, 4.89826724, 4.89674891, 4.89680444, 4.90000000),
    (6.0, 5.91727076, 5.91607978, 5.91567604, 5.91483409, 5.91485401, 5.91666667),
]


@pytest.mark.parametrize("method", ORDER)
def test_debiased_values(method: str) -> None:
    table = np.array(DEBIASED)
    expected = table[:, 1 + ORDER.index(method)]
    # Half a unit of the last printed digit, and 5e-9 of interpolation.
    np.testing.assert_allclose(debias(table[:, 0], 0.0, UNIT, method), expected, rtol=0, atol=1.01e-8)
    if method not in ("asymptotic", "modified-asymptotic"):
        np.testing.assert_allclose(exact(table[:, 0], method), expected, rtol=0, atol=5.1e-9)


@pytest.mark.parametrize(
    ("p0", "naive", "clipped", "modified"),
    [
        (0.0, 1.253314, 0.760173, 0.988458),
        (0.5, 0.830447, 0.353731, 0.567227),
        (1.0, 0.548572, 0.117799, 0.291804),
        (2.0, 0.272383, -0.023565, 0.050759),
        (3.0, 0.172577, -0.016055, 0.002204),
        (5.0, 0.101070, -0.002450, -0.001126),
    ],
)
def test_mean_bias(p0: float, naive: float, clipped: float, modified: float) -> None:
    """Recomputed by quadrature over Rice's distribution."""
    # Substituting p = 1 + s^2 above the threshold takes away the root's corner there.
    s, w = np.polynomial.legendre.leggauss(400)
    top = np.sqrt(p0 + 9.0)
    s, w = 0.5 * top * (s + 1), 0.5 * top * w
    above, weight = 1 + s**2, 2 * s * w
    x, v = np.polynomial.legendre.leggauss(100)
    below, light = 0.5 * (x + 1), 0.5 * v
    p, mass = np.concatenate([below, above]), np.concatenate([light, weight])
    mass = mass * stats.rice.pdf(p, p0)
    found = [(mass * estimate).sum() - p0 for estimate in (p, debias(p, 0, UNIT, "asymptotic"), debias(p, 0, UNIT))]
    np.testing.assert_allclose(found, [naive, clipped, modified], rtol=0, atol=6e-7)


@pytest.mark.parametrize(
    ("confidence", "k"),
    [(0.6827, 1.5151947600), (0.90, 2.1459660263), (0.95, 2.4477468307), (0.99, 3.0348542588), (0.9973, 3.4393323497)],
)
def test_null_thresholds(confidence: float, k: float) -> None:
    """Recomputed: P(p > k | p0 = 0) = exp(-k^2 / 2)."""
    for angle in (0.0, 0.7, 2.1):
        assert null_p_value(k * np.cos(angle), k * np.sin(angle), UNIT) == pytest.approx(1 - confidence, abs=1e-10)


# Recomputed; the posterior is that of Vaillancourt (2006, formula derived). p, then low and high at three levels.
SHORTEST = [
    (0.0, 0, 1.0000, 0, 1.9600, 0, 2.5758),
    (0.5, 0, 1.0644, 0, 2.0806, 0, 2.7282),
    (1.0, 0, 1.2772, 0, 2.4144, 0, 3.1062),
    (1.5, 0, 1.6629, 0, 2.8820, 0, 3.5900),
    (2.0, 0.5089, 2.5867, 0, 3.4091, 0, 4.1159),
    (2.5, 1.1636, 3.3127, 0.0136, 3.9645, 0, 4.6518),
    (3.0, 1.7525, 3.8580, 0.6609, 4.8224, 0, 5.1822),
    (3.5, 2.3082, 4.3745, 1.2752, 5.3608, 0.5586, 5.9720),
    (4.0, 2.8431, 4.8870, 1.8416, 5.8641, 1.1744, 6.4945),
    (5.0, 3.8832, 5.9073, 2.9046, 6.8758, 2.2713, 7.4971),
    (6.0, 4.9061, 6.9218, 3.9352, 7.8874, 3.3102, 8.5066),
]


@pytest.mark.parametrize(("column", "level"), [(1, 0.6827), (3, 0.95), (5, 0.99)])
def test_shortest_bayesian_intervals(column: int, level: float) -> None:
    table = np.array(SHORTEST)
    low, high = interval(table[:, 0], 0.0, UNIT, level)
    # Half a unit of the last digit; the printed 1.0000 stands for the level erf(1/sqrt 2), 2.4e-5 away.
    np.testing.assert_allclose(low, table[:, column], rtol=0, atol=7.5e-5)
    np.testing.assert_allclose(high, table[:, column + 1], rtol=0, atol=7.5e-5)


@pytest.mark.parametrize(("level", "p"), [(0.6827, 1.71066), (0.95, 2.48941), (0.99, 3.06169), (0.9973, 3.46082)])
def test_where_the_lower_end_leaves_zero(level: float, p: float) -> None:
    """Recomputed, to five decimals; the levels are printed to four, which moves the onset by up to 2e-4 at the last."""
    zero = np.zeros(1)
    assert onset("bayes", level, zero, zero)[0] == pytest.approx(p, abs=1e-4)


def test_half_normal_limit_at_no_signal() -> None:
    """Exact: at p = 0 the posterior is half a normal distribution."""
    assert upper_limit(0.0, 0.0, UNIT, 0.95) == pytest.approx(1.959964, abs=1e-6)
    assert upper_limit(0.0, 0.0, UNIT, 0.99) == pytest.approx(2.575829, abs=1e-6)


def test_upper_quantiles_flat_in_the_plane() -> None:
    """Recomputed: the posterior flat in (q, u) is Rice's distribution with parameter p (Quinn 2012, derived)."""
    found = Posterior(*circle(0.5, 1, 2, 3, 5), plane=True).quantile(0.95)
    np.testing.assert_allclose(found, [2.591660651, 2.939762553, 3.826252944, 4.777225027, 6.731138692], atol=1e-6)


# Recomputed (Naghizadeh-Khouei & Clarke 1993, from memory, confirmed by Monte Carlo): P0, std, half-widths.
ANGLES = [
    (0.0, 51.961524, 61.44300, 85.50000, 89.10000),
    (0.5, 41.816466, 44.11501, 81.00261, 88.18540),
    (1.0, 32.015359, 28.99240, 70.01607, 85.70509),
    (1.5, 23.666995, 19.98231, 50.52249, 78.15630),
    (2.0, 17.378513, 14.87298, 34.44955, 58.92785),
    (2.5, 13.118204, 11.77165, 25.53798, 39.45932),
    (3.0, 10.399918, 9.73359, 20.36923, 29.30760),
    (4.0, 7.439177, 7.23889, 14.66977, 20.04227),
    (5.0, 5.858093, 5.76861, 11.53928, 15.50427),
    (6.0, 4.846101, 4.79714, 9.53311, 12.71173),
    (10.0, 2.879476, 2.86965, 5.65147, 7.46334),
]


def test_angle_errors() -> None:
    table = np.array(ANGLES)
    signal = circle(*table[:, 0])
    np.testing.assert_allclose(spread(*signal), table[:, 1], rtol=0, atol=6e-7)
    for column, level in ((2, 0.6827), (3, 0.95), (4, 0.99)):
        np.testing.assert_allclose(half_width(*signal, level), table[:, column], rtol=0, atol=6e-6)


def test_angle_error_is_that_of_the_debiased_signal() -> None:
    table = np.array(ANGLES)[1:]
    # The measured p whose de-biased value is the table's P0.
    fine = np.linspace(0.2, 11.0, 200_001)
    p = np.interp(table[:, 0], modified_asymptotic(fine, 1.0), fine)
    np.testing.assert_allclose(theta_error(p, 0.0, UNIT), table[:, 1], rtol=1e-6)
    low, high = theta_interval(p[5:], 0.0, UNIT, 0.6827)
    np.testing.assert_allclose(0.5 * (high - low), table[5:, 2], rtol=1e-6)
    assert theta_error(0.0, 0.0, UNIT) == pytest.approx(180 / np.sqrt(12), rel=1e-12)


def test_angle_density() -> None:
    """Recomputed: G per radian of theta at the true angle."""
    zero = np.zeros(2)
    found = 2 * density(zero, np.array([0.0, 2.0]), zero, zero)
    np.testing.assert_allclose(found, [1 / np.pi, 1.6025437221], rtol=0, atol=5e-11)


def test_general_covariance() -> None:
    """Recomputed for q = .03, u = -.02, s_q = .004, s_u = .006, r = .4 (Montier et al. 2015, formulas from memory)."""
    q, u, r = 0.03, -0.02, 0.4
    covariance = np.array([[0.004**2, r * 0.004 * 0.006], [r * 0.004 * 0.006, 0.006**2]])
    assert p_and_error(q, u, covariance)[1] == pytest.approx(0.0036458617215, abs=5e-14)
    assert debias(q, u, covariance) == pytest.approx(0.035518733641677, abs=5e-16)
    g = geometry([q], [u], covariance)
    # Linear propagation gives 4.943 deg; Monte Carlo with 2e6 draws about (q, u) gave 4.882, good to 4.882/sqrt(4e6).
    assert spread(g.p / g.unit, g.stretch, g.tilt)[0] == pytest.approx(4.882, abs=0.0005 + 3 * 0.0024)


def test_published_recipe() -> None:
    """Recomputed (recipe as published by Lamy & Hutsemekers 2000): p = 1 percent, errors .20 and .15 in quadrature."""
    variance = (0.20**2 + 0.15**2) * UNIT
    assert debias(1.0, 0.0, variance, "mode") == pytest.approx(0.9692900369, abs=2e-9)
    assert debias(1.0, 0.0, variance, "asymptotic") == pytest.approx(0.9682458366, abs=5e-11)
    # The published constant, 28.65 deg, is 90/pi to its printed digits.
    constant = theta_error(1e4, 0.0, UNIT) * 1e4
    assert constant == pytest.approx(28.65, abs=0.005)
    assert 28.65 * 0.25 / debias(1.0, 0.0, variance, "mode") == pytest.approx(7.389429, abs=6e-7)
