"""The whole chain against the measurement model written out by hand, and published count tables."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hwpol.errors import InputError
from hwpol.simulate.optics import Train, simulate_fluxes

ROUNDING = 1e-12  # relative to the intensity; products of ten matrices of order one

angle = st.floats(-180, 180)
small = st.floats(-0.03, 0.03)
part = st.floats(-0.6, 0.6)


def _by_hand(z_sky, v_sky, psi, analyser, train, chi, eta):
    """The measurement model: z to the instrument frame, through ip and A, then the plate's rows."""
    z = z_sky * np.exp(-2j * np.deg2rad(chi))
    v = v_sky
    if train.sense < 0:
        z, v = np.conj(z), -v
    a = train.efficiency * np.exp(2j * np.deg2rad(train.zero_angle))
    ip = train.ip + train.ip_tel * np.exp(2j * train.sense * np.deg2rad(eta - chi))
    dim = 1 + (np.conj(ip / a) * z).real
    observed = (ip + a * z) / dim
    v = v / dim
    psi, analyser, delta = np.deg2rad(psi), np.deg2rad(analyser), np.deg2rad(train.retardance)
    c, s = np.cos(2 * psi), np.sin(2 * psi)
    row_q = (c**2 + s**2 * np.cos(delta)) * np.cos(2 * analyser) + c * s * (1 - np.cos(delta)) * np.sin(2 * analyser)
    row_u = c * s * (1 - np.cos(delta)) * np.cos(2 * analyser) + (s**2 + c**2 * np.cos(delta)) * np.sin(2 * analyser)
    row_v = np.sin(delta) * (c * np.sin(2 * analyser) - s * np.cos(2 * analyser))
    return 0.5 * dim * (1 + row_q * observed.real + row_u * observed.imag + row_v * v)


@given(
    q=part, u=part, v=st.floats(-0.2, 0.2), psi=angle, alpha=angle, delta=st.floats(90, 270), chi=angle, eta=angle,
    ip=st.tuples(small, small), tel=st.tuples(small, small), efficiency=st.floats(0.5, 1.0),
    zero=st.floats(-90, 90), sense=st.sampled_from([1, -1]),
)  # fmt: skip
@settings(deadline=None, max_examples=200)
def test_chain_equals_measurement_model(q, u, v, psi, alpha, delta, chi, eta, ip, tel, efficiency, zero, sense):
    train = Train(
        analyser=(alpha,), throughput=(1.0,), retardance=delta, ip=complex(*ip), ip_tel=complex(*tel),
        efficiency=efficiency, zero_angle=zero, sense=sense,
    )  # fmt: skip
    flux = simulate_fluxes([1, q, u, v], train, [psi], chi=chi, eta=eta)[0, 0, 0]
    assert flux == pytest.approx(_by_hand(q + 1j * u, v, psi, alpha, train, chi, eta), abs=ROUNDING)


@given(psi=angle, alpha=angle, q=part, u=part)
@settings(deadline=None, max_examples=50)
def test_perfect_plate_gives_four_psi(psi, alpha, q, u):
    """a = cos(4 psi - 2 alpha), b = sin(4 psi - 2 alpha) for a retardance of 180 deg."""
    phase = np.deg2rad(4 * psi - 2 * alpha)
    flux = simulate_fluxes([1, q, u, 0], Train(analyser=(alpha,), throughput=(1.0,)), psi)[0, 0, 0]
    assert flux == pytest.approx(0.5 * (1 + q * np.cos(phase) + u * np.sin(phase)), abs=ROUNDING)


def test_counts_by_hand():
    """Exact counts, I = (100000, 90000, 120000, 80000), q = 0.03, u = -0.02, o beam 1.1 times the e beam.

    Derived by hand from o, e = (I/2) [1 +- (q cos 4 psi + u sin 4 psi)].
    """
    intensity = np.array([1e5, 9e4, 1.2e5, 8e4])
    train = Train(throughput=(1.1, 1.0))
    fluxes = simulate_fluxes([1, 0.03, -0.02, 0], train, [0, 22.5, 45, 67.5], exposure=intensity)[0]
    expected = [[56650, 48500], [48510, 45900], [64020, 61800], [44880, 39200]]
    np.testing.assert_allclose(fluxes, expected, rtol=ROUNDING)


def test_unpolarised_star_shows_ip_and_sky_angle_follows_sense():
    """theta_sky = chi + sense (theta_observed - zero_angle), without ip."""
    psi = [0.0, 22.5]
    star = simulate_fluxes([1, 0, 0, 0], Train(ip=0.006 - 0.002j, efficiency=0.9, zero_angle=5.0), psi)[0]
    ratio = (star[:, 0] - star[:, 1]) / star.sum(axis=1)
    np.testing.assert_allclose(ratio, [0.006, -0.002], atol=ROUNDING)
    for sense in (1, -1):
        z = 0.1 * np.exp(2j * np.deg2rad(70.0))
        train = Train(zero_angle=12.0, sense=sense)
        star = simulate_fluxes([1, z.real, z.imag, 0], train, psi, chi=33.0)[0]
        observed = (star[:, 0] - star[:, 1]) / star.sum(axis=1)
        theta = np.rad2deg(np.arctan2(observed[1], observed[0])) / 2
        assert (33.0 + sense * (theta - 12.0)) % 180 == pytest.approx(70.0, abs=1e-9)  # 1e-12 / (2 x 0.1) in degrees


def test_mirror_flips_circular_light():
    quarter = {"analyser": (45.0,), "throughput": (1.0,), "retardance": 90.0}
    right, flipped = (simulate_fluxes([1, 0, 0, 0.4], Train(sense=s, **quarter), 0.0)[0, 0, 0] for s in (1, -1))
    assert right == pytest.approx(0.7, abs=ROUNDING)
    assert flipped == pytest.approx(0.3, abs=ROUNDING)


def test_plate_diattenuation_is_a_two_psi_term():
    """Unpolarised light leaves a diattenuating plate with d along its axis: d cos(2 psi - 2 alpha)."""
    psi = np.arange(0, 180, 22.5)
    flux = simulate_fluxes([1, 0, 0, 0], Train(plate_diattenuation=0.004), psi)[0]
    np.testing.assert_allclose(
        (flux[:, 0] - flux[:, 1]) / flux.sum(axis=1), 0.004 * np.cos(np.deg2rad(2 * psi)), atol=ROUNDING
    )


def test_no_plate_leaves_the_analyser_alone():
    flux = simulate_fluxes([1, 0.2, 0.1, 0], Train(analyser=(0, 90, 45, 135), throughput=(1,) * 4), np.nan)[0, 0]
    np.testing.assert_allclose(flux, [0.6, 0.4, 0.55, 0.45], atol=ROUNDING)


def test_field_term_is_the_polynomial():
    train = Train(ip=0.001, ip_field={"x": 0.01j, "xy": 0.002 + 0j})
    x, y = np.array([[-1.0], [0.5]]), np.array([[0.3], [1.0]])
    flux = simulate_fluxes([[1, 0, 0, 0]] * 2, train, [0.0, 22.5], x=x, y=y)
    observed = (flux[..., 0] - flux[..., 1]) / flux.sum(axis=-1)
    np.testing.assert_allclose(observed[:, 0], (0.001 + 0.002 * x * y)[:, 0], atol=ROUNDING)
    np.testing.assert_allclose(observed[:, 1], 0.01 * x[:, 0], atol=ROUNDING)


def test_poisson_counts():
    """chi2 of 4000 counts against their expectation; false alarm 0.1 percent two-sided (3.29 sigma)."""
    psi = np.tile([0, 22.5, 45, 67.5], 500)
    train = Train()
    expected = simulate_fluxes([2e4, 600, 200, 0], train, psi)
    drawn = simulate_fluxes([2e4, 600, 200, 0], train, psi, rng=np.random.default_rng(5))
    chi2 = ((drawn - expected) ** 2 / expected).sum()
    assert abs(chi2 - expected.size) < 3.29 * np.sqrt(2 * expected.size)


@pytest.mark.parametrize(
    "bad", [{"efficiency": 1.2}, {"sense": 0}, {"throughput": (1.0,)}], ids=["efficiency", "sense", "throughput"]
)
def test_impossible_train_is_refused(bad):
    with pytest.raises(InputError, match=next(iter(bad))):
        Train(**bad)


def test_wrong_stokes_shape_is_refused():
    with pytest.raises(InputError, match="stokes of shape"):
        simulate_fluxes([1, 0, 0], Train(), 0.0)
