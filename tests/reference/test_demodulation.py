"""Demodulation and modulation against published formulas and numbers, with their sources."""

import numpy as np
import pytest

from hwpol.demodulation import demodulate, fit_counts, half_turn_null, modulation_rows, photon_covariance
from hwpol.fluxes import Fluxes
from hwpol.stokes import position_angle, turn

#: Printed digits of the tables below.
PRINTED = 1e-9

# Counts at psi = 0, 22.5, 45, 67.5 for q = 0.03, u = -0.02, gain ratio 1.1; ordinary and extraordinary beam (recomputed
# from the exact model, o,e = t I/2 [1 +- (q cos 4 psi + u sin 4 psi)]).
COUNTS = np.array([[56650, 48500], [48510, 45900], [64020, 61800], [44880, 39200]], dtype=float)
PSI = [0, 22.5, 45, 67.5]


def worked_example(method):
    return demodulate(Fluxes.from_arrays(COUNTS, COUNTS, wave_plate=PSI, analyser=[0, 90]), method=method)


def test_double_ratio_worked_example():
    # Ratio method: Tinbergen & Rutten, ISIS polarimetry manual (Isaac Newton Group); exact for any gain.
    stokes = worked_example("double-ratio")
    assert stokes.q[0] == pytest.approx(0.03, abs=1e-14)
    assert stokes.u[0] == pytest.approx(-0.02, abs=1e-14)
    assert stokes.p[0] == pytest.approx(0.0360555127546399, abs=1e-13)
    assert stokes.theta[0] == pytest.approx(163.154966237010, abs=1e-9)


def test_double_difference_shows_its_published_bias():
    # Difference method: Bagnulo et al. 2009, PASP 121, 993; Tinbergen 1996 (from memory). Residual gain error
    # q (1 - eps^2) / (1 - eps^2 q^2), eps = (g - 1)/(g + 1), derived; numbers recomputed.
    stokes = worked_example("double-difference")
    assert stokes.q[0] == pytest.approx(0.0299320338748991, abs=1e-13)
    assert stokes.u[0] == pytest.approx(-0.0199546666255479, abs=1e-13)


def test_least_squares_worked_example():
    stokes = worked_example("least-squares")
    assert stokes.q[0] == pytest.approx(0.03, abs=1e-12)
    assert stokes.u[0] == pytest.approx(-0.02, abs=1e-12)


def test_photon_error_of_the_ratio_method():
    # sigma_q = (1 - q^2)/4 sqrt(sum (sigma_f / f)^2) over the four beams (derived); one electron a count.
    stokes = worked_example("double-ratio")
    assert stokes.q_err[0] == pytest.approx(0.00209084436782, abs=1e-12)
    assert stokes.u_err[0] == pytest.approx(0.00237329548084, abs=1e-12)


@pytest.mark.parametrize("number", [4, 8, 12, 16])
def test_signal_to_noise_rule(number):
    # NOT ALFOSC signal-to-noise page, citing Patat & Romaniello 2006, PASP 118, 146:
    # S/N(fo + fe) = sqrt(2)/(sqrt(n) Ep);
    # for n = 4, Ep = 0.003 it prints "S/N = 167 for each dual-beam component", that is 1/(sqrt(n) Ep).
    if number == 4:
        assert round(1 / (np.sqrt(4) * 0.003)) == 167
    snr = np.sqrt(2) / (np.sqrt(number) * 0.003)
    flux = np.full((number, 2), snr**2 / 2)
    stokes = demodulate(Fluxes.from_arrays(flux, flux, wave_plate=np.arange(number) * 22.5, analyser=[0, 90]))
    assert stokes.q_err[0] == pytest.approx(0.003, rel=1e-6)
    assert stokes.p_err[0] == pytest.approx(0.003, rel=1e-6)


def test_forty_thousand_photons_give_half_a_percent():
    # ISIS polarimetry manual (Isaac Newton Group): an error of 0.005 in one Stokes parameter needs 4e4 photons
    # (the page's exponent was unreadable; 1/sqrt(4e4) = 0.005).
    flux = np.full((4, 2), 4e4 / 4)
    stokes = demodulate(Fluxes.from_arrays(flux, flux, wave_plate=PSI, analyser=[0, 90]))
    assert stokes.q_err[0] == pytest.approx(0.005, rel=1e-6)


def test_four_beams_in_one_shot():
    # q = (I0 - I90)/(I0 + I90), u = (I45 - I135)/(I45 + I135): four images for polarisers at 0, 90, 45, 135
    # (Oliva 1997, A&AS 123, 589; the formula from memory). A 3-4-5 case, recomputed.
    flux = np.array([[26000.0, 24000, 24250, 25750]])
    fluxes = Fluxes.from_arrays(flux, flux, wave_plate=None, analyser=[0, 90, 45, 135])
    stokes = demodulate(fluxes, gain="fixed")
    assert stokes.q[0] == pytest.approx(0.04, abs=1e-12)
    assert stokes.u[0] == pytest.approx(-0.03, abs=1e-12)
    assert stokes.theta[0] == pytest.approx(161.565051177, abs=PRINTED)
    # The page's errors treat q and u apart, each with its own pair's brightness: a bound the joint solve reaches.
    assert stokes.q_err[0] == pytest.approx(0.004468556814, rel=1e-5)
    assert stokes.u_err[0] == pytest.approx(0.004470123041, rel=1e-5)


@pytest.mark.parametrize(
    ("delta", "swing", "mean", "sine"),
    [(180, 1, 0, 0), (179, 0.99992385, 0.00007615, 0.01745241), (175, 0.99809735, 0.00190265, 0.08715574),
     (170, 0.99240388, 0.00759612, 0.17364818), (160, 0.96984631, 0.03015369, 0.34202014), (90, 0.5, 0.5, 1)],
)  # fmt: skip
def test_retardance_amplitudes(delta, swing, mean, sine):
    # Derived from the retarder matrix of Hecht, Optics, problem 8.82; eight printed digits of each.
    rows = modulation_rows([0.0, 45.0, 45.0], [[0.0], [0.0], [45.0]], delta)
    assert rows[0, 0, 0] == pytest.approx(mean + swing, abs=1.2e-8)
    assert rows[1, 0, 0] == pytest.approx(mean - swing, abs=1.2e-8)
    assert abs(rows[1, 0, 2]) == pytest.approx(sine, abs=6e-9)


def test_modulation_row_of_an_imperfect_plate():
    # Retarder 170 deg at 20 deg, analyser at 30 deg, from Hecht's matrix; numbers recomputed (ten digits).
    row = modulation_rows([20.0], [[30.0]], 170.0)[0, 0]
    assert np.allclose(row, [0.9363526613, 0.346000552, 0.0593911746], rtol=0, atol=6e-11)
    detected = 0.5 * (1 + row @ [0.03, -0.02, 0.001])
    assert detected == pytest.approx(0.5106149799874373, abs=1e-15)


def test_rows_equal_a_general_polarisation_optics_library():
    # py_pol (general-purpose optics): Analyser(alpha) . Retarder(delta, psi), twice the first row.
    # The oracle is a test requirement: without it this must fail, not pass by.
    from py_pol import mueller

    for psi, alpha, delta in ((12.0, 0.0, 180.0), (33.0, 71.0, 171.0), (140.0, 90.0, 90.0), (0.0, 45.0, 185.0)):
        plate, analyser = mueller.Mueller("plate"), mueller.Mueller("analyser")
        plate.retarder_linear(R=np.radians(delta), azimuth=np.radians(psi))
        analyser.diattenuator_perfect(azimuth=np.radians(alpha))
        matrix = (analyser * plate).parameters.matrix()
        expected = 2 * np.squeeze(matrix)[0]
        assert expected[0] == pytest.approx(1, abs=1e-12)
        assert np.allclose(modulation_rows([psi], [[alpha]], delta)[0, 0], expected[1:], rtol=0, atol=1e-12)


def test_half_wave_plate_is_a_polariser_at_twice_its_angle():
    # Equivalence (derived): plate at psi before an analyser at 0 = polariser at 2 psi.
    psi = np.array([0.0, 10.0, 33.0, 80.0])
    plate = modulation_rows(psi, np.zeros((4, 1)))
    polariser = modulation_rows(np.full(4, np.nan), 2 * psi[:, None])
    assert np.allclose(plate[..., :2], polariser[..., :2], rtol=0, atol=1e-14)


def test_polarisers_at_arbitrary_angles():
    # Weighted least squares with polarisers at 0, 30, 75, 110, 160 deg, Poisson weights (standard; recomputed).
    angles = np.array([0.0, 30, 75, 110, 160])
    y = np.array([525, 499.5096189432, 470.8493649054, 490.4907030673, 528.7929252233])
    fluxes = Fluxes.from_arrays(y[:, None], y[:, None], wave_plate=None, analyser=angles[:, None])
    stokes = demodulate(fluxes)
    assert stokes.q[0] == pytest.approx(0.05, abs=1e-12)
    assert stokes.u[0] == pytest.approx(-0.03, abs=1e-12)
    # Covariance of (I, Q, U) as recomputed there, carried to q = Q/I, u = U/I.
    full = np.array([[408.2957091838, -61.6485154088, -29.7693942267], [-61.6485154088, 643.8104877287, 1.0327266184],
                     [-29.7693942267, 1.0327266184, 1096.2342639465]])  # fmt: skip
    slopes = np.array([[-0.05, 1, 0], [0.03, 0, 1]]) / 1000
    assert np.allclose(stokes.covariance[0], slopes @ full @ slopes.T, rtol=1e-6, atol=0)


def test_three_polarisers():
    # Ideal 0/60/120 (HST ACS Data Handbook 5.3 form, from memory): r = (500, 520, 480) -> U = 46.188, angle 45.
    y = np.array([500.0, 520, 480])
    stokes = demodulate(Fluxes.from_arrays(y[:, None], y[:, None], wave_plate=None, analyser=[[0], [60], [120]]))
    assert stokes.p[0] == pytest.approx(0.0461880215352, abs=1e-12)
    assert stokes.theta[0] == pytest.approx(45, abs=1e-9)


@pytest.mark.parametrize(
    ("angle", "q", "u"),
    [(10, 0.03503118149, -0.00853324812), (30, 0.03232050808, 0.01598076211), (45, 0.02, 0.03), (90, -0.03, 0.02),
     (-25, 0.00396273943, -0.03583708549)],
)  # fmt: skip
def test_rotation_of_a_vector(angle, q, u):
    # q' + i u' = (q + i u) exp(2 i phi): IAU 1973 angles (di Serego Alighieri 2017, ASP 526, 309); numbers recomputed.
    turned = (0.03 - 0.02j) * turn(angle)
    assert turned.real == pytest.approx(q, abs=6e-12)
    assert turned.imag == pytest.approx(u, abs=6e-12)
    start = position_angle(0.03 - 0.02j)
    assert (position_angle(turned) - start - angle + 90) % 180 - 90 == pytest.approx(0, abs=1e-9)


def efficiencies(rows):
    """eps_i = (n sum_j D_ij^2)^(-1/2) with D the pseudo-inverse of O, the n x 3 modulation matrix (I, Q, U)."""
    matrix = np.concatenate([np.ones((len(rows), 1)), rows[:, :2]], axis=1)
    return 1 / np.sqrt(len(rows) * np.sum(np.linalg.pinv(matrix) ** 2, axis=1)), np.linalg.cond(matrix)


@pytest.mark.parametrize(
    ("psi", "analyser", "retardance", "expected", "condition"),
    [
        ([0, 22.5, 45, 67.5], [0], 180, (1, 0.7071067812, 0.7071067812), 1.4142135624),
        (np.arange(8) * 22.5, [0], 180, (1, 0.7071067812, 0.7071067812), 1.4142135624),
        ([0, 22.5], [0, 90], 180, (1, 0.7071067812, 0.7071067812), 1.4142135624),
        ([0, 22.5, 45], [0], 180, (0.8164965809, 0.8164965809, 0.4714045208), 2.4142135624),
        ([0, 10, 20, 30], [0], 180, (0.2920888410, 0.3806200852, 0.2492668547), 6.9822627875),
        ([0, 22.5, 45, 67.5], [0], 175, (0.9999963661, 0.7057614038, 0.7057614038), None),
        ([0, 22.5, 45, 67.5], [0], 170, (0.9999414174, 0.7017355108, 0.7017355108), None),
        ([0, 22.5, 45, 67.5], [0], 160, (0.9990347364, 0.6857849028, 0.6857849028), None),
    ],
)
def test_efficiencies_of_sets_of_positions(psi, analyser, retardance, expected, condition):
    # Definition of del Toro Iniesta & Collados 2000, Appl. Opt. 39, 1637 (from memory); numbers recomputed, ten digits.
    rows = modulation_rows(psi, np.broadcast_to(analyser, (len(psi), len(analyser))), retardance).reshape(-1, 3)
    found, number = efficiencies(rows)
    assert np.allclose(found, expected, rtol=0, atol=1e-10)
    if condition is not None:
        assert number == pytest.approx(condition, abs=1e-9)


@pytest.mark.parametrize(
    ("number", "q", "u"), [(16, 0.03, -0.02), (8, 0.03, -0.02), (4, 0.03187628504368, -0.01797342527067)]
)
def test_a_term_of_twice_the_plate_angle(number, q, u):
    # F = 0.004 + 0.003 cos(2 psi + 0.3 rad) + 0.03 cos 4 psi - 0.02 sin 4 psi: gone with 8 and 16 positions, not with 4
    # (derived; that 16 angles are Fourier-analysed: Patat & Taubenberger 2011, A&A 529, A57). The 4-position
    # numbers are those of the plain Fourier sums, which the pairs of the difference method are.
    psi = np.arange(number) * 22.5
    angle = np.radians(psi)
    f = 0.004 + 0.003 * np.cos(2 * angle + 0.3) + 0.03 * np.cos(4 * angle) - 0.02 * np.sin(4 * angle)
    flux = 1e6 * np.stack([1 + f, 1 - f], axis=1)
    # Equal weights of all F, as in the plain sums: var F is proportional to (o^2 + e^2) times the variance.
    variance = np.broadcast_to(1e18 / np.sum(flux**2, axis=1, keepdims=True), flux.shape)
    fluxes = Fluxes.from_arrays(flux, variance, wave_plate=psi, analyser=[0, 90])
    stokes = demodulate(fluxes, method="double-difference")
    assert stokes.q[0] == pytest.approx(q, abs=1e-12)
    assert stokes.u[0] == pytest.approx(u, abs=1e-12)
    if number == 8:
        # The null shows what was removed: the halves are those of four positions, q of the first off by A (cos 0.3 -
        # cos(0.3 + 90 deg)) / 2, of the second by as much the other way.
        z, _ = half_turn_null(fluxes)
        assert z[0, 0] == pytest.approx(0.03187628504368 - 0.03, abs=2e-5)
        assert z[0, 1] == pytest.approx(-0.01797342527067 + 0.02, abs=2e-5)


@pytest.mark.parametrize(
    ("q", "u", "var_q", "var_u", "sigma_p"),
    [
        (0.0, 0.0, 1.0, 1.0, 0.00707106781187),
        (0.03, -0.02, 0.9991, 0.9996, 0.00706842926736),
        (0.3, 0.2, 0.91, 0.96, 0.00680214898170),
        (0.6, 0.5, 0.64, 0.75, 0.00585270009147),
    ],
)
def test_photon_limit_of_four_positions(q, u, var_q, var_u, sigma_p):
    # Cramer-Rao bound for binomial counts, J = sum n/(1 - x^2) c c^T, gain known, 4 x 1e4 photons:
    # var(q) = (2/N)(1 - q^2) (derived; agrees with the ALFOSC formula for p = 0); numbers recomputed.
    rows = modulation_rows(PSI, np.broadcast_to([0, 90], (4, 2)))
    flux = 5e3 * (1 + rows[..., 0] * q + rows[..., 1] * u)
    fluxes = Fluxes.from_arrays(flux, flux, wave_plate=PSI, analyser=[0, 90])
    stokes = demodulate(fluxes, gain="fixed")
    assert stokes.covariance[0, 0, 0] * 2e4 == pytest.approx(var_q, abs=1e-10)
    assert stokes.covariance[0, 1, 1] * 2e4 == pytest.approx(var_u, abs=1e-10)
    if q or u:
        assert stokes.p_err[0] == pytest.approx(sigma_p, abs=1e-12)
    bound = photon_covariance(fluxes, fit_counts(fluxes, gain="fixed"), gain="fixed")
    assert np.allclose(bound, stokes.covariance, rtol=1e-9, atol=0)
