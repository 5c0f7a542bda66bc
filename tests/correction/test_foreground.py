"""Foreground: given or from field stars, between bands, subtracted as a vector."""

from __future__ import annotations

import numpy as np
import pytest

from hwpol.correction import Calibration
from hwpol.correction.foreground import Foreground, excess_note
from hwpol.errors import InputError
from hwpol.flags import Flag
from hwpol.stokes import Stokes


def sky(q, u, err, **labels):
    return Stokes(q=q, u=u, covariance=np.eye(2) * err**2, filter="V", **labels)


def test_subtraction_is_a_vector_with_its_error():
    target = sky(0.05, 0.0, 3e-4)
    left = Foreground.of_value(0.0, 0.05, 4e-4, 4e-4).subtract(target)
    assert (float(left.q), float(left.u)) == (0.05, -0.05)
    assert float(left.p) == pytest.approx(0.05 * np.sqrt(2))
    assert float(left.q_err) == pytest.approx(5e-4, rel=1e-12)
    assert left.flags == Flag.FOREGROUND_DOMINATES
    small = Foreground.of_value(0.0, 0.001, 4e-4, 4e-4).subtract(target)
    assert small.flags == 0


def test_field_of_20_stars():
    """Twenty stars of 0.2 percent give 0.045 percent with true errors (100 fields; 5 sigma limits)."""
    pulls, errors = [], []
    for seed in range(100):
        rng = np.random.default_rng(seed)
        q, u = 0.012 + 0.002 * rng.normal(size=20), -0.005 + 0.002 * rng.normal(size=20)
        found = Foreground.of_field([sky(q, u, 5e-4)])
        errors.append(np.sqrt(found.covariance[0, 0]))
        pulls += [(found.q - 0.012) / errors[-1], (found.u + 0.005) / np.sqrt(found.covariance[1, 1])]
    assert np.median(errors) == pytest.approx(0.00045, rel=0.1)
    assert abs(np.sqrt(np.mean(np.square(pulls))) - 1) < 5 / np.sqrt(2 * len(pulls))


def test_a_polarised_star_in_the_field_is_left_out():
    rng = np.random.default_rng(3)
    q, u = 0.01 + 0.001 * rng.normal(size=15), 0.001 * rng.normal(size=15)
    q[4] = 0.08
    found = Foreground.of_field([sky(q, u, 5e-4)])
    assert found.stars == 14
    assert abs(found.q - 0.01) < 0.0015


def test_stars_that_agree_have_no_scatter_of_their_own():
    found = Foreground.of_field([sky(0.01, 0.0, 1e-3), sky(0.0101, 0.0001, 1e-3)])
    assert found.scatter == 0.0
    assert found.covariance[0, 0] == pytest.approx(1e-6 / 2, rel=1e-12)


def test_field_mean_keeps_the_calibration_error(bench):
    b = bench()
    calibration = Calibration.fit([b.zero("z", cat_err=5e-4), b.pol("p", 0.05, 20)])
    stars = calibration.apply(b.observe(np.full(400, 0.01), 30.0, err=1e-4))
    found = Foreground.of_field([stars], calibration)
    alone = calibration.shared_covariance([stars[:1]])[0, :, 0]
    np.testing.assert_allclose(found.shared, alone, rtol=1e-9)
    # 400 stars of 1e-4 average to 5e-6; the zero star's 5e-4 stays.
    assert np.sqrt(found.covariance[0, 0]) < 6e-6
    assert np.sqrt(found.total_covariance[0, 0]) > 3e-4
    target = calibration.apply(b.observe(0.03, 80.0))
    apart = found.subtract(target).calibration_covariance
    np.testing.assert_allclose(apart, target.calibration_covariance + found.shared, rtol=1e-12)
    # An error of ip moves target and field alike and drops out of the difference; that of A stays.
    together = found.subtract(target, calibration).calibration_covariance
    assert np.trace(together) < np.trace(apart) / 3
    gain_only = calibration.model("V").covariance[-2:, -2:]
    assert np.trace(together) > 0.5 * 0.02**2 * np.trace(gain_only) / 0.985**2


def test_difference_to_a_field_star_of_the_same_light_has_no_calibration_error(bench):
    b = bench()
    calibration = Calibration.fit([b.zero("z", cat_err=5e-4), b.pol("p", 0.05, 20)])
    stars = calibration.apply(b.observe(np.full(3, 0.02), 30.0))
    left = Foreground.of_field([stars], calibration).subtract(stars, calibration)
    # What is left of 2e-7 is rounding.
    assert np.abs(left.calibration_covariance).max() < 1e-18


def test_transfer_between_bands():
    given = Foreground.of_value(0.02, 0.01, 1e-4, 1e-4, wavelength=0.55)
    blue = given.at(0.44)
    assert blue.q / blue.u == pytest.approx(2.0)
    assert blue.p < given.p
    along = np.array([2.0, 1.0]) / np.sqrt(5)
    across = np.array([-1.0, 2.0]) / np.sqrt(5)
    # The law's error is along z alone.
    assert along @ blue.covariance @ along > 10 * (across @ blue.covariance @ across)
    assert given.at(0.55).q == pytest.approx(0.02, rel=1e-12)
    with pytest.raises(InputError, match="its wavelength is not known"):
        Foreground.of_value(0.02, 0.01, 1e-4, 1e-4).at(0.44)


def test_note_on_too_much_polarisation():
    assert excess_note(0.026, 0.3) == ""
    assert "exceeds 9 percent x E(B-V) = 2.70 percent" in excess_note(0.028, 0.3)
    assert excess_note(0.5, None) == ""
    assert Foreground.of_value(0.03, 0.0, 1e-4, 1e-4, reddening=0.3).note


@pytest.mark.parametrize(
    ("values", "said"),
    [
        ((2.0, 0.0, 0.1, 0.1), "expected fractions, not percent"),
        ((0.02, 0.0, -0.1, 0.1), "q_err = -0.1"),
        ((np.nan, 0.0, 0.1, 0.1), "q = nan"),
    ],
)
def test_wrong_values(values, said):
    with pytest.raises(InputError, match=said):
        Foreground.of_value(*values)


def test_wrong_fields():
    with pytest.raises(InputError, match="1 usable stars, expected at least 2"):
        Foreground.of_field([sky(0.01, 0.0, 1e-3)])
    raw = Stokes(q=[0.0, 0.0], u=[0.0, 0.0], covariance=np.eye(2), frame="instrument")
    with pytest.raises(InputError, match="calibrate them first"):
        Foreground.of_field([raw])
    with pytest.raises(InputError, match="calibrate them first"):
        Foreground.of_value(0.0, 0.0, 0.1, 0.1).subtract(raw)
