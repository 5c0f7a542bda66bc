"""Signs, angles and rotations pinned by hand, and the arithmetic of Stokes."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hwpol.errors import InputError
from hwpol.stokes import (
    Stokes,
    angle_difference,
    carry,
    instrument_from_observed,
    instrument_from_sky,
    mean_angle,
    observed_from_instrument,
    observed_slopes,
    position_angle,
    real_slopes,
    sky_from_instrument,
    sky_slopes,
    telescope_to_instrument,
)

#: float64 rounding of a handful of operations on numbers of order one.
ROUNDING = 1e-12
angles = st.floats(-720, 720)
parts = st.floats(-0.7, 0.7)


def value(q, u, s=0.001):
    return Stokes(q=[q], u=[u], covariance=[[[s**2, 0], [0, s**2]]])


def test_position_angles_by_hand():
    # IAU 1973: Q > 0 north-south (0 deg), U > 0 north-east/south-west (45 deg).
    assert np.allclose(position_angle([1, 1j, -1, -1j]), [0, 45, 90, 135], rtol=0, atol=ROUNDING)
    assert np.isnan(position_angle(0))


def test_sky_frame_by_hand():
    # Light at 10 deg from the instrument's +Q axis, which lies at 30 deg on the sky.
    z = np.exp(2j * np.radians(10))
    assert position_angle(sky_from_instrument(z, 30, 1)) == pytest.approx(40, abs=1e-9)
    # Mirrored: instrument angles grow against sky angles.
    assert position_angle(sky_from_instrument(z, 30, -1)) == pytest.approx(20, abs=1e-9)


def test_zero_angle_by_hand():
    # theta_sky = chi + sense (theta_observed - zero_angle), efficiency 0.9.
    amplitude = 0.9 * np.exp(2j * np.radians(5))
    for sense in (1, -1):
        observed = 0.09 * np.exp(2j * np.radians(25))
        z = sky_from_instrument(instrument_from_observed(observed, 0, amplitude), 30, sense)
        assert position_angle(z) == pytest.approx(30 + sense * 20, abs=1e-9)
        assert abs(z) == pytest.approx(0.1, abs=ROUNDING)


def test_second_order_of_instrumental_polarisation():
    # 0.0003 for ip 0.025 and p 0.1, as the measurement model states.
    observed = observed_from_instrument(0.1, 0.025, 1.0)
    assert observed.real == pytest.approx((0.025 + 0.1) / (1 + 0.025 * 0.1), abs=ROUNDING)
    assert 0.125 - observed.real == pytest.approx(3e-4, abs=2e-5)


@settings(deadline=None, max_examples=60)
@given(q=parts, u=parts, chi=angles, eta=angles, sense=st.sampled_from([1, -1]))
def test_round_trips(q, u, chi, eta, sense):
    z = q + 1j * u
    assert abs(instrument_from_sky(sky_from_instrument(z, chi, sense), chi, sense) - z) < ROUNDING
    ip, amplitude = 0.03 - 0.02j, 0.9 * np.exp(1j)
    assert abs(instrument_from_observed(observed_from_instrument(z, ip, amplitude), ip, amplitude) - z) < ROUNDING
    # What the telescope polarises is fixed to the zenith: on the sky it lies at its own angle plus eta.
    turned = sky_from_instrument(telescope_to_instrument(ip, chi, eta, sense), chi, sense)
    fixed = sky_from_instrument(ip, eta, sense)
    assert abs(turned - fixed) < ROUNDING


@settings(deadline=None, max_examples=40)
@given(q=parts, u=parts)
def test_slopes_are_derivatives(q, u):
    z, ip, amplitude, step = q + 1j * u, 0.03 - 0.02j, 0.9 * np.exp(0.4j), 1e-6
    jacobian = real_slopes(*observed_slopes(z, ip, amplitude))
    for k, d in enumerate((step, 1j * step)):
        difference = observed_from_instrument(z + d, ip, amplitude) - observed_from_instrument(z - d, ip, amplitude)
        numeric = difference / (2 * step)
        # Central difference of a smooth function: error of order step squared, plus rounding / step.
        assert np.allclose(jacobian[:, k], [numeric.real, numeric.imag], rtol=0, atol=1e-9)
    for sense in (1, -1):
        mapped = real_slopes(*sky_slopes(25.0, sense)) @ [q, u]
        expected = sky_from_instrument(z, 25.0, sense)
        assert np.allclose(mapped, [expected.real, expected.imag], rtol=0, atol=ROUNDING)


@settings(deadline=None, max_examples=40)
@given(first=angles, second=angles)
def test_rotations_add(first, second):
    start = Stokes(q=[0.03], u=[-0.02], covariance=[[[4e-6, 1e-6], [1e-6, 9e-6]]])
    twice, once = start.rotated(first).rotated(second), start.rotated(first + second)
    assert np.allclose(twice.z, once.z, rtol=0, atol=ROUNDING)
    assert np.allclose(twice.covariance, once.covariance, rtol=0, atol=ROUNDING)
    assert np.allclose(once.p, start.p, rtol=0, atol=ROUNDING)
    assert np.allclose(angle_difference(once.theta, start.theta + first + second), 0, rtol=0, atol=1e-8)


def test_carry_keeps_v():
    covariance = np.diag([1.0, 4.0, 9.0])
    turned = carry(covariance, real_slopes(1j, 0))
    assert np.allclose(turned, np.diag([4.0, 1.0, 9.0]), rtol=0, atol=ROUNDING)


def test_mean_angle_wraps():
    mean, spread = mean_angle([359.0, 1.0, np.nan])
    assert np.mod(mean + 180, 360) - 180 == pytest.approx(0, abs=1e-9)
    assert spread == pytest.approx(2, abs=1e-9)
    assert np.isnan(mean_angle([np.nan])[0])


def test_inputs_are_untouched_and_indexing_selects():
    q, u = np.array([0.1, 0.2]), np.array([0.0, 0.1])
    covariance = np.tile(np.eye(2) * 1e-6, (2, 1, 1))
    stokes = Stokes(q=q, u=u, covariance=covariance, x=[1.0, 2.0], y=[3.0, 4.0])
    before = covariance.copy()
    stokes.rotated(10)
    assert np.array_equal(covariance, before)
    assert stokes[1].q == 0.2
    assert stokes[1].x == 2.0
    assert stokes[stokes.q > 0.15].shape == (1,)


def test_table_has_units():
    table = value(0.03, 0.04).to_table()
    assert str(table["theta"].unit) == "deg"
    assert table["p"][0] == pytest.approx(0.05, abs=ROUNDING)


def test_combine_in_q_and_u():
    rng = np.random.default_rng(2)
    parts_ = [value(*rng.normal([0.001, 0.0], 0.001)) for _ in range(16)]
    combined = Stokes.combine(parts_)
    assert combined.q[0] == pytest.approx(np.mean([s.q[0] for s in parts_]), abs=1e-3)
    assert combined.q_err[0] == pytest.approx(0.00025, rel=0.6)
    with pytest.raises(InputError, match="nothing to combine"):
        Stokes.combine([])
    with pytest.raises(InputError, match="expected the same"):
        Stokes.combine([value(0, 0), Stokes(q=[0], u=[0], covariance=np.eye(2), frame="instrument")])


@pytest.mark.parametrize(
    ("change", "match"),
    [
        ({"u": [1.0, 2.0]}, "expected the same"),
        ({"covariance": None}, "missing"),
        ({"covariance": np.eye(3)[:, :2]}, "covariance has shape"),
        ({"frame": "moon"}, "'sky' or 'instrument'"),
        ({"sense": 2}, "1 or -1"),
    ],
)
def test_bad_input_is_named(change, match):
    with pytest.raises(InputError, match=match):
        Stokes(**({"q": [0.0], "u": [0.0], "covariance": np.eye(2)} | change))


def test_quantities_are_taken():
    import astropy.units as units

    stokes = Stokes(q=[3.0] * units.percent, u=[0.0] * units.percent, covariance=np.eye(2) * 1e-6,
                    position_angle=np.pi * units.rad)  # fmt: skip
    assert stokes.q[0] == pytest.approx(0.03, abs=ROUNDING)
    assert stokes.position_angle == pytest.approx(180, abs=1e-9)
