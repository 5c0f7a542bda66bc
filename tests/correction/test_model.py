"""The linear model: terms, slopes, and its agreement with the formula."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hwpol.correction.model import FilterModel, field_powers, term_names
from hwpol.errors import InputError
from hwpol.stokes import instrument_from_observed, instrument_from_sky, sky_from_instrument

NAMES = term_names("both", 2, drift=True)


def model(seed=0, names=NAMES):
    rng = np.random.default_rng(seed)
    values = rng.normal(size=len(names)) * 0.01
    values[-2:] = 0.97, 0.12
    root = rng.normal(size=(len(names), len(names))) * 1e-4
    return FilterModel(names, values, root @ root.T, np.array([[0.0, 2047.0], [0.0, 1023.0]]), epoch=61000.0)


def test_names():
    assert term_names("instrument") == ("ip_q", "ip_u", "a_re", "a_im")
    assert field_powers(2) == ["x", "y", "xx", "xy", "yy"]
    assert term_names("telescope", 1) == ("ip_q_x", "ip_u_x", "ip_q_y", "ip_u_y", "tel_q", "tel_u", "a_re", "a_im")
    with pytest.raises(InputError, match="frame = 'sky'"):
        term_names("sky")


def test_ip_by_hand():
    m = model()
    value = dict(zip(m.names, m.values, strict=True))
    x, y, chi, eta, mjd = 1800.0, 100.0, 33.0, -71.0, 61000.2
    sx, sy, t = x / 1023.5 - 1, y / 511.5 - 1, 0.2
    expected = 0j
    for part, unit in (("q", 1), ("u", 1j)):
        factors = {"": 1, "_x": sx, "_y": sy, "_xx": sx * sx, "_xy": sx * sy, "_yy": sy * sy, "_t": t}
        expected += unit * sum(value[f"ip_{part}{power}"] * f for power, f in factors.items())
        expected += unit * value[f"tel_{part}"] * np.exp(2j * np.radians(-(eta - chi)))
    where = m.setting((1,), chi, eta, -1, [x], [y], [mjd])
    # A time is known to 7e-12 d at MJD 61000; times a drift of 0.01 a day.
    assert abs(m.ip(where)[0] - expected) < 1e-12


def test_missing_parallactic_angle_is_refused():
    m = model()
    with pytest.raises(InputError, match="needs the parallactic angle"):
        m.ip(m.setting((2,), [0.0, 1.0], None, 1))


def test_field_is_scaled_by_source_and_centre_is_the_default():
    m = model(names=term_names("instrument", 1))
    where = m.setting((2, 3), [0.0, 1.0, 2.0], None, 1, x=[0.0, 2047.0])
    assert where.x[:, 0].tolist() == [-1.0, 1.0]
    assert np.all(where.y == 0.0)


@settings(deadline=None, max_examples=25)
@given(
    p=st.floats(0, 0.3), theta=st.floats(0, 180), chi=st.floats(0, 360), eta=st.floats(-180, 180),
    sense=st.sampled_from([1, -1]), seed=st.integers(0, 100),
)  # fmt: skip
def test_slopes_are_those_of_the_formula(p, theta, chi, eta, sense, seed):
    m = model(seed)
    where = m.setting((), chi, eta, sense, 300.0, 800.0, 61000.1)
    sky = p * np.exp(2j * np.radians(theta))
    seen = m.observed(sky, where)
    jacobian = m.sky_jacobian(instrument_from_sky(sky, chi, sense), where)
    step = 1e-6
    for k in range(len(m.names)):
        ends = []
        for sign in (1, -1):
            values = m.values.copy()
            values[k] += sign * step
            other = replace(m, values=values)
            z = instrument_from_observed(seen, other.ip(where), other.amplitude)
            ends.append(complex(sky_from_instrument(z, chi, sense)))
        slope = (ends[0] - ends[1]) / (2 * step)
        # Central differences: third derivatives of order 1 times step^2, and rounding 1e-16 / step.
        assert abs(slope - complex(*jacobian[:, k])) < 1e-9


def test_headline_numbers():
    m = model(names=term_names("instrument"))
    a = complex(*m.values[-2:])
    assert m.efficiency == pytest.approx(abs(a), rel=1e-15)
    assert m.zero_angle == pytest.approx(np.degrees(np.angle(a)) / 2, rel=1e-15)
    rng = np.random.default_rng(1)
    draws = rng.multivariate_normal(m.values, m.covariance, size=40000)
    gains = draws[:, -2] + 1j * draws[:, -1]
    # 40000 draws give a standard deviation to 0.35 percent; 2 percent is five of those and some curvature.
    assert m.efficiency_err == pytest.approx(np.std(np.abs(gains)), rel=0.02)
    assert m.zero_angle_err == pytest.approx(np.std(np.degrees(np.angle(gains)) / 2), rel=0.02)


def test_zero_angle_range():
    m = model(names=term_names("instrument"))
    values = m.values.copy()
    values[-2:] = -0.9, 0.0
    assert replace(m, values=values).zero_angle == 90.0
    values[-2:] = -0.9, -0.0
    assert replace(m, values=values).zero_angle == 90.0


def test_held_parameters_have_no_error():
    m = replace(model(names=term_names("instrument")), held=("ip_q", "ip_u", "a_re", "a_im"))
    for error in (m.error("ip_q"), m.efficiency_err, m.zero_angle_err):
        assert np.isnan(error)
