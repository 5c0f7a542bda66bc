"""The solve: exactness, covariance, refusal of what angles cannot tell, and the pair methods."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hwpol.demodulation import demodulate, fit_counts, half_turn_null, modulation_rows, photon_covariance, time_null
from hwpol.errors import InputError
from hwpol.flags import Flag
from hwpol.fluxes import Fluxes

#: The project's demand on noise-free data.
EXACT = 1e-9
SETS = {
    "4": [0, 22.5, 45, 67.5],
    "8": np.arange(8) * 22.5,
    "16": np.arange(16) * 22.5,
    "3 of 4": [0, 22.5, 45],
    "odd": [0, 15, 30, 60],
    "random": [3.1, 40.2, 77.7, 118.0, 151.3],
}


def counts(psi, q, u, *, gain=1.3, analyser=(0, 90), electrons=1e5, factors=None, v=0.0, retardance=180.0):
    psi = np.asarray(psi, dtype=float)
    rows = modulation_rows(psi, np.broadcast_to(analyser, (len(psi), len(analyser))), retardance)
    factors = np.ones(len(psi)) if factors is None else factors
    gains = np.concatenate([[1.0], np.full(len(analyser) - 1, gain)])
    return 0.5 * factors[:, None] * gains * electrons * (1 + rows @ [q, u, v])


def fluxes_of(flux, psi, analyser=(0, 90), variance=None, **more):
    return Fluxes.from_arrays(flux, flux if variance is None else variance, wave_plate=psi, analyser=analyser, **more)


@pytest.mark.parametrize("psi", SETS.values(), ids=SETS.keys())
@pytest.mark.parametrize(("q", "u"), [(0.2, 0.0), (0.03, -0.02), (-0.6, 0.75), (0.0, 0.999)])
def test_noise_free_is_exact(psi, q, u):
    factors = np.random.default_rng(1).uniform(0.4, 1.6, len(psi))
    stokes = demodulate(fluxes_of(counts(psi, q, u, factors=factors), psi))
    assert abs(stokes.q[0] - q) < EXACT
    assert abs(stokes.u[0] - u) < EXACT
    if any(abs((a - b + 90) % 180 - 90) == 45 for a in psi for b in psi) and len(psi) in {4, 8, 16} and psi[1] == 22.5:
        ratio = demodulate(fluxes_of(counts(psi, q, u, factors=factors), psi), method="double-ratio")
        assert abs(ratio.q[0] - q) < EXACT
        assert abs(ratio.u[0] - u) < EXACT


@settings(deadline=None, max_examples=60)
@given(
    p=st.floats(0, 0.99),
    theta=st.floats(0, 180),
    gain=st.floats(0.3, 3),
    seed=st.integers(0, 1000),
    number=st.integers(5, 16),
    alpha=st.floats(0, 180),
)
def test_any_angles_any_gain(p, theta, gain, seed, number, alpha):
    rng = np.random.default_rng(seed)
    psi = np.sort(rng.uniform(0, 90) + np.arange(number) * 180 / number + rng.uniform(-2, 2, number))
    q, u = p * np.cos(np.radians(2 * theta)), p * np.sin(np.radians(2 * theta))
    analyser = (alpha, alpha + 90)
    flux = counts(psi, q, u, gain=gain, analyser=analyser, factors=rng.uniform(0.3, 2, number))
    stokes = demodulate(fluxes_of(flux, psi, analyser))
    assert np.hypot(stokes.q[0] - q, stokes.u[0] - u) < EXACT


def test_scaling_and_order_change_nothing():
    psi = SETS["8"]
    mean = counts(psi, 0.1, 0.05)
    flux = np.random.default_rng(4).poisson(mean).astype(float)
    start = demodulate(fluxes_of(flux, psi))
    order = np.random.default_rng(5).permutation(8)
    turned = demodulate(fluxes_of(flux[order], psi[order]))
    assert abs(turned.q[0] - start.q[0]) < EXACT
    assert abs(turned.u[0] - start.u[0]) < EXACT
    scaled = demodulate(fluxes_of(mean * 7, psi, variance=mean * 49))
    assert abs(scaled.q[0] - 0.1) < EXACT
    assert abs(scaled.u[0] - 0.05) < EXACT


def test_masking_never_shrinks_an_error():
    psi = SETS["16"]
    flux = counts(psi, 0.1, 0.05)
    whole = demodulate(fluxes_of(flux, psi))
    for k in range(16):
        hidden = flux.copy()
        hidden[k, k % 2] = np.nan
        part = demodulate(fluxes_of(hidden, psi, variance=flux))
        assert part.q_err[0] >= whole.q_err[0] * (1 - EXACT)
        assert part.u_err[0] >= whole.u_err[0] * (1 - EXACT)


@pytest.mark.parametrize("retardance", [160.0, 175.0, 185.0])
def test_known_retardance_and_circular(retardance):
    psi = SETS["16"]
    flux = counts(psi, 0.1, -0.05, v=0.2, retardance=retardance)
    stokes = demodulate(fluxes_of(flux, psi, retardance=retardance), circular=True)
    assert abs(stokes.q[0] - 0.1) < EXACT
    assert abs(stokes.u[0] + 0.05) < EXACT
    assert abs(stokes.v[0] - 0.2) < EXACT
    # Eight or sixteen positions: v does not leak into q and u even where it is not solved for (methods: 2 psi terms).
    without = demodulate(fluxes_of(flux, psi, retardance=retardance))
    assert np.hypot(without.q[0] - 0.1, without.u[0] + 0.05) < 0.02


def test_perfect_plate_does_not_tell_circular():
    stokes = demodulate(fluxes_of(counts(SETS["8"], 0.1, 0.0), SETS["8"]), circular=True)
    assert np.isnan(stokes.v[0])
    assert abs(stokes.q[0] - 0.1) < EXACT


def test_quarter_wave_plate_reads_circular():
    psi, retardance = [45.0, 135.0] * 2 + [0, 22.5, 45, 67.5], [90.0] * 4 + [180.0] * 4
    flux = counts(psi, 0.1, 0.05, v=0.03, retardance=np.asarray(retardance))
    stokes = demodulate(fluxes_of(flux, psi, retardance=retardance), circular=True)
    assert abs(stokes.v[0] - 0.03) < EXACT


@pytest.mark.parametrize(
    "psi", [[0.0], [0.0, 45.0], [0.0, 45.0, 90.0, 0.3], [10.0, 10.0, 10.5], [0.0, 22.5], [0, 45.4, 89.8, 134.9]]
)
def test_angles_that_do_not_determine_give_no_number(psi):
    stokes = demodulate(fluxes_of(counts(psi, 0.1, 0.05), psi))
    assert np.isnan(stokes.q[0])
    assert np.isnan(stokes.u[0])
    assert stokes.flags[0] & Flag.UNDETERMINED


def test_two_positions_with_known_gain():
    psi = [0.0, 22.5]
    flux = counts(psi, 0.1, 0.05, gain=1.2)
    stokes = demodulate(fluxes_of(flux, psi, throughput=[1.0, 1.2]), gain="fixed")
    assert abs(stokes.q[0] - 0.1) < EXACT
    assert abs(stokes.u[0] - 0.05) < EXACT
    loose = demodulate(fluxes_of(flux, psi, throughput=[1.0, 1.2], throughput_err=[0, 0.012]), gain="fixed")
    # One percent of unknown gain is 0.5 percent in a single position's normalised difference.
    assert loose.q_err[0] == pytest.approx(np.hypot(stokes.q_err[0], 0.005), rel=0.05)


def test_single_beam_with_known_exposures():
    psi = SETS["8"]
    exposure = np.linspace(10, 24, 8)
    flux = counts(psi, 0.1, 0.05, analyser=(30,), factors=exposure)
    stokes = demodulate(fluxes_of(flux, psi, (30,), exposure=exposure))
    assert abs(stokes.q[0] - 0.1) < EXACT
    assert abs(stokes.u[0] - 0.05) < EXACT


def test_four_beams_modulated():
    psi = SETS["4"]
    flux = counts(psi, 0.1, 0.05, analyser=(0, 90, 45, 135), gain=0.8)
    stokes = demodulate(fluxes_of(flux, psi, (0, 90, 45, 135)))
    assert abs(stokes.q[0] - 0.1) < EXACT


def test_gain_per_cycle():
    psi = np.tile(SETS["4"], 2)
    flux = np.concatenate([counts(SETS["4"], 0.1, 0.05, gain=1.3), counts(SETS["4"], 0.1, 0.05, gain=0.7)])
    cycle = [1] * 4 + [2] * 4
    stokes = demodulate(fluxes_of(flux, psi, cycle=cycle), gain="cycle")
    assert abs(stokes.q[0] - 0.1) < EXACT
    each = demodulate(fluxes_of(flux, psi, cycle=cycle), gain="cycle", per="cycle")
    assert each.shape == (1, 2)
    assert np.allclose(each.q, 0.1, rtol=0, atol=EXACT)


def test_incomplete_cycle_uses_the_visits_gain():
    psi = np.tile(SETS["4"], 3)[:-2]
    flux = np.concatenate([counts(SETS["4"], 0.1, 0.05)] * 3)[:-2]
    each = demodulate(fluxes_of(flux, psi, cycle=[1] * 4 + [2] * 4 + [3] * 2), per="cycle")
    assert np.allclose(each.q, 0.1, rtol=0, atol=EXACT)
    assert np.allclose(each.u, 0.05, rtol=0, atol=EXACT)
    assert each.q_err[0, 2] > each.q_err[0, 0]


def test_nulls_are_zero_for_any_gain_and_transparency():
    psi = SETS["16"]
    flux = counts(psi, 0.3, -0.2, factors=np.random.default_rng(1).uniform(0.5, 1.5, 16))
    z, covariance = half_turn_null(fluxes_of(flux, psi))
    assert np.max(np.abs(z)) < EXACT
    stokes = demodulate(fluxes_of(flux, psi))
    # sigma(N) = sigma(P) up to the cost of a gain for each half.
    assert np.sqrt(covariance[0, 0, 0]) == pytest.approx(stokes.q_err[0], rel=0.25)
    z, _ = time_null(fluxes_of(np.tile(flux, (2, 1)), np.tile(psi, 2), cycle=np.repeat([1, 2], 16)))
    assert np.max(np.abs(z)) < EXACT
    assert np.isnan(half_turn_null(fluxes_of(counts(SETS["4"], 0.1, 0), SETS["4"]))[0]).all()


@pytest.mark.parametrize("psi", [SETS[k] for k in ("4", "3 of 4", "8", "16", "random")])
def test_errors_are_true_and_reach_the_photon_limit(psi):
    rng = np.random.default_rng(11)
    q, u, trials = 0.05, -0.03, 4000
    mean = counts(psi, q, u, gain=1.1, electrons=4e4, factors=rng.uniform(0.7, 1.3, len(psi)))
    flux = rng.poisson(mean, (trials, *mean.shape)).astype(float)
    fluxes = fluxes_of(flux, psi)
    solution = fit_counts(fluxes)
    stokes = solution.stokes
    pull = np.stack([(stokes.q - q) / stokes.q_err, (stokes.u - u) / stokes.u_err])
    # The standard deviation of a pull over N trials scatters by 1/sqrt(2 N) = 0.011: four of these.
    assert np.all(np.abs(pull.std(axis=1) - 1) < 4 / np.sqrt(2 * trials))
    assert np.all(np.abs(pull.mean(axis=1)) < 4 / np.sqrt(trials))
    bound = photon_covariance(fluxes, solution)
    # Variance within 2 percent of the bound.
    assert np.median(stokes.covariance[:, 0, 0] / bound[:, 0, 0]) == pytest.approx(1, abs=0.02)
    d = np.stack([stokes.q - q, stokes.u - u], axis=-1)
    distance = np.einsum("si,sij,sj->s", d, np.linalg.inv(stokes.covariance), d)
    assert np.mean(distance) == pytest.approx(2, abs=4 * 2 / np.sqrt(trials))


def test_low_counts_stay_unbiased():
    """Fifty electrons a beam and frame on a sky of 20: bias under 0.1 sigma, errors true."""
    rng = np.random.default_rng(3)
    mean = counts(SETS["4"], 0.3, 0.1, gain=1.0, electrons=100)
    noisy = rng.poisson(mean + 20, (20000, 4, 2)) - 20.0
    stokes = demodulate(fluxes_of(noisy, SETS["4"], variance=np.maximum(noisy + 20, 1)))
    for estimate, error, truth in ((stokes.q, stokes.q_err, 0.3), (stokes.u, stokes.u_err, 0.1)):
        spread = estimate.std()
        assert abs(estimate.mean() - truth) < 0.1 * spread
        assert np.sqrt(np.mean(((estimate - truth) / error) ** 2)) == pytest.approx(1, abs=0.03)
    assert np.mean(noisy < 0) > 0 or mean.min() > 20


@pytest.mark.parametrize(
    ("arguments", "match"),
    [
        ({"method": "triple"}, "least-squares"),
        ({"per": "night"}, "per ="),
        ({"gain": "free"}, "gain ="),
        ({"method": "double-ratio", "circular": True}, "circular"),
    ],
)
def test_options_are_checked(arguments, match):
    fluxes = fluxes_of(counts(SETS["4"], 0.1, 0), SETS["4"])
    with pytest.raises(InputError, match=match):
        demodulate(fluxes, **arguments)


def test_pair_methods_say_what_they_need():
    with pytest.raises(InputError, match="two beams"):
        demodulate(fluxes_of(counts(SETS["4"], 0, 0, analyser=(0,)), SETS["4"], (0,)), method="double-ratio")
    with pytest.raises(InputError, match="90 deg apart"):
        demodulate(fluxes_of(counts(SETS["4"], 0, 0, analyser=(0, 45)), SETS["4"], (0, 45)), method="double-ratio")
    with pytest.raises(InputError, match="45 deg apart"):
        demodulate(fluxes_of(counts([0, 10, 20], 0, 0), [0, 10, 20]), method="double-difference")


def test_many_sources_equal_one_by_one():
    rng = np.random.default_rng(8)
    psi = SETS["8"]
    flux = rng.poisson(np.stack([counts(psi, *rng.normal(0, 0.1, 2)) for _ in range(5)])).astype(float)
    together = demodulate(fluxes_of(flux, psi))
    for s in range(5):
        alone = demodulate(fluxes_of(flux[s], psi))
        assert abs(together.q[s] - alone.q[0]) < EXACT


@pytest.mark.parametrize(("electrons", "cycles"), [(40, 2), (100, 2), (100, 4), (300, 4)])
def test_faint_sources_on_a_bright_sky_are_solved_and_true(electrons, cycles):
    """Signal to noise of 1 to 8 a frame: a number for every one of 2000, true errors, no bias."""
    rng = np.random.default_rng(7)
    psi = np.tile(SETS["4"], cycles)
    mean = counts(psi, 0.1, -0.05, gain=0.9, electrons=electrons, factors=rng.uniform(0.9, 1.1, len(psi)))
    noisy = rng.poisson(mean + 500, (2000, *mean.shape)) - 500.0
    fluxes = fluxes_of(noisy, psi, variance=np.maximum(noisy + 500, 1), cycle=np.repeat(np.arange(cycles), 4))
    stokes = demodulate(fluxes)
    assert np.isfinite(stokes.q).all()
    for estimate, error, truth in ((stokes.q, stokes.q_err, 0.1), (stokes.u, stokes.u_err, -0.05)):
        pull = (estimate - truth) / error
        # At signal to noise of 1 the brightness itself is uncertain and the pulls have tails: their middle is judged.
        inner = np.sort(np.abs(pull))[int(0.6827 * len(pull))]
        assert inner == pytest.approx(1, abs=0.06)
        assert abs(np.median(pull)) < 0.1


def test_faint_solve_joins_the_bright_one():
    """At the limit of what counts as faint both roads agree within a tenth of the error."""
    rng = np.random.default_rng(9)
    psi = np.tile(SETS["4"], 4)
    mean = counts(psi, 0.1, -0.05, electrons=56.0)
    flux = rng.poisson(mean, (400, *mean.shape)).astype(float)
    variance = np.maximum(flux, 1)
    together = demodulate(fluxes_of(flux, psi, variance=variance))
    signal = np.median(flux.sum(axis=2) / np.sqrt(variance.sum(axis=2)), axis=1)
    assert (signal < 8).any()
    assert (signal >= 8).any()
    for part in (signal < 8, signal >= 8):
        assert np.mean(together.q[part]) == pytest.approx(0.1, abs=4 * 0.045 / np.sqrt(part.sum()))
