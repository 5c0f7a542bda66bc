"""The fit: exact recovery, what is determined and what not, shared catalogue errors, field, drift, mounts."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hwpol.correction import Calibration, Standard
from hwpol.errors import InputError
from hwpol.flags import Flag

# Without noise the iteration ends at rounding: steps below 1e-13 of parameters of order 1.
EXACT = 1e-11

NOT_ANGLE = Flag.ANGLE_UNCALIBRATED | Flag.EFFICIENCY_ASSUMED


@settings(deadline=None, max_examples=15)
@given(
    ip=st.complex_numbers(max_magnitude=0.04), efficiency=st.floats(0.7, 1.0), zero_angle=st.floats(-80, 80),
    sense=st.sampled_from([1, -1]), chi=st.floats(0, 360),
)  # fmt: skip
def test_recovers_any_instrument_exactly(bench, ip, efficiency, zero_angle, sense, chi):
    b = bench(ip=ip, efficiency=efficiency, zero_angle=zero_angle, sense=sense)
    model = Calibration.fit(
        [b.zero("z", chi=chi), b.pol("a", 0.08, 10, chi=chi), b.pol("b", 0.05, 100, chi=chi)]
    ).filters["V"]
    assert abs(complex(model.value("ip_q"), model.value("ip_u")) - ip) < EXACT
    assert abs(model.amplitude - b.gain) < EXACT / 0.05
    assert model.chi2 < 1e-6
    assert model.dof == 2


def test_second_order_term_matters_and_is_kept(bench):
    b = bench(ip=0.025, zero_angle=0.0, efficiency=1.0)
    seen = b.observe(0.1, 0.0, chi=0.0)
    assert float(seen.q) == pytest.approx(0.125 / 1.0025, abs=1e-15)
    calibration = Calibration.fit([b.zero("z", chi=0.0), b.pol("a", 0.1, 0, chi=0.0), b.pol("b", 0.06, 50, chi=0.0)])
    assert float(calibration.apply(seen).q) == pytest.approx(0.1, abs=EXACT)


def test_only_zero_stars(bench):
    b = bench()
    model = Calibration.fit([b.zero("a"), b.zero("b")]).filters["V"]
    assert model.held == ("a_re", "a_im")
    assert model.flags == NOT_ANGLE
    assert (model.efficiency, model.zero_angle) == (1.0, 0.0)
    assert np.isnan([model.efficiency_err, model.zero_angle_err]).all()
    assert model.error("ip_q") > 1e-4


def test_one_polarised_star_leaves_ip_open(bench):
    b = bench(ip=0.0)
    model = Calibration.fit([b.pol("a", 0.05, 30)]).filters["V"]
    assert model.held == ("ip_q", "ip_u")
    assert model.flags == Flag.IP_UNCALIBRATED
    assert (model.value("ip_q"), np.isnan(model.error("ip_q"))) == (0.0, True)
    assert model.zero_angle == pytest.approx(3.7, abs=1e-9)


def test_one_polarised_star_rotated_determines_all(bench):
    b = bench()
    model = Calibration.fit([b.pol("a", 0.05, 30, chi=c) for c in (0.0, 45.0, 80.0)]).filters["V"]
    assert (model.held, model.flags) == ((), 0)
    assert abs(complex(model.value("ip_q"), model.value("ip_u")) - b.ip) < 1e-10


def test_two_polarised_stars(bench):
    b = bench()
    apart = Calibration.fit([b.pol("a", 0.05, 30), b.pol("b", 0.06, 120)]).filters["V"]
    alike = Calibration.fit([b.pol("a", 0.050, 30), b.pol("b", 0.052, 31)]).filters["V"]
    assert apart.held == ()
    assert alike.held == ("ip_q", "ip_u")
    assert alike.flags == Flag.IP_UNCALIBRATED


@pytest.mark.parametrize("given_", [0.985, {"V": 0.985}])
def test_fixed_efficiency(bench, given_):
    b = bench()
    model = Calibration.fit([b.zero("z"), b.pol("a", 0.05, 30), b.pol("b", 0.03, 80)], efficiency=given_).filters["V"]
    assert model.efficiency == pytest.approx(0.985, rel=1e-12)
    assert model.zero_angle == pytest.approx(3.7, abs=1e-8)
    assert model.flags == Flag.EFFICIENCY_ASSUMED
    assert np.isnan(model.efficiency_err)
    assert 0.05 < model.zero_angle_err < 0.2
    # |A| is fixed, so the covariance of A has no part along A.
    part = model.covariance[-2:, -2:]
    along = np.array([model.amplitude.real, model.amplitude.imag])
    assert along @ part @ along < 1e-12 * np.trace(part)


def test_fixed_efficiency_in_another_filter_only(bench):
    b = bench()
    model = Calibration.fit([b.zero("z"), b.pol("a", 0.05, 30)], efficiency={"R": 0.9}).filters["V"]
    assert model.flags == 0


def test_visits_of_one_star_share_its_catalogue_error(bench):
    b = bench()
    many = Calibration.fit([b.zero("z", cat_err=3e-4) for _ in range(25)]).filters["V"]
    apart = Calibration.fit([b.zero(f"z{k}", cat_err=3e-4) for k in range(25)]).filters["V"]
    # The denominator changes the slope with the star's value by |ip|^2 = 5e-5.
    assert many.error("ip_q") == pytest.approx(np.hypot(3e-4, 1e-4 / 5), rel=1e-4)
    assert apart.error("ip_q") == pytest.approx(np.hypot(3e-4, 1e-4) / 5, rel=1e-4)


def test_catalogue_errors_are_turned_to_where_they_belong():
    standard = Standard(None, 0.05, 22.5, 0.001, 1.0, "x")
    across = 2 * 0.05 * np.radians(1.0)
    # At theta 22.5 z lies along (1, 1) / sqrt(2).
    expected = np.array([[0.001**2 + across**2, 0.001**2 - across**2]] * 2) / 2
    expected[1] = expected[1][::-1]
    np.testing.assert_allclose(standard.z_covariance, expected, rtol=1e-12)
    zero = Standard(None, 0.0004, np.nan, 0.0003, np.nan, "z")
    np.testing.assert_allclose(zero.z_covariance, np.eye(2) * 0.0005**2 / 2, rtol=1e-12)
    assert zero.z == 0


def test_one_zero_star_at_two_parallactic_angles_separates_telescope_from_instrument(bench):
    b = bench(tel=0.02 + 0.01j)
    stars = [b.zero("z", chi=0.0, eta=e) for e in (-45.0, 45.0)]
    model = Calibration.fit(stars, frame="both").filters["V"]
    assert abs(complex(model.value("tel_q"), model.value("tel_u")) - b.tel) < EXACT
    assert abs(complex(model.value("ip_q"), model.value("ip_u")) - b.ip) < EXACT


def test_both_parts_from_one_angle_are_not_told_apart(bench):
    b = bench(tel=0.02)
    model = Calibration.fit([b.zero("z", chi=0.0, eta=10.0)], frame="both").filters["V"]
    assert set(model.held) == {"tel_q", "tel_u", "a_re", "a_im"}
    assert model.flags & Flag.IP_UNCALIBRATED


def test_telescope_frame_needs_parallactic_angles(bench):
    with pytest.raises(InputError, match=r"standard z, filter 'V': frame = \"telescope\" needs its parallactic angle"):
        Calibration.fit([bench().zero("z")], frame="telescope")


def test_drift_only_when_the_data_demand_it(bench):
    b = bench(rng=np.random.default_rng(3))
    times = 61000 + np.linspace(0, 0.4, 12)
    moving = [b.zero(f"z{k % 3}", ip=b.ip + 0.02 * (t - 61000.2), mjd=t) for k, t in enumerate(times)]
    steady = [b.zero(f"z{k % 3}", mjd=t) for k, t in enumerate(times)]
    drifting = Calibration.fit(moving).filters["V"]
    assert drifting.names[-4:-2] == ("ip_q_t", "ip_u_t")
    assert abs(drifting.value("ip_q_t") - 0.02) < 5 * drifting.error("ip_q_t")
    assert drifting.epoch == pytest.approx(61000.2)
    # Not carried beyond the standards' times.
    late, end = (drifting.ip(drifting.setting((), 20.0, None, 1, mjd=t)) for t in (61000.9, 61000.4))
    assert complex(late) == complex(end)
    assert "ip_q_t" not in Calibration.fit(steady).filters["V"].names


def test_drift_is_rarely_seen_where_there_is_none(bench):
    """False-alarm rate 0.001 a fit: two or more in 60 fits have a chance of 0.2 percent."""
    found = 0
    for seed in range(60):
        b = bench(rng=np.random.default_rng(seed))
        stars = [b.zero(f"z{k % 3}", mjd=61000 + 0.05 * k) for k in range(8)]
        found += "ip_q_t" in Calibration.fit(stars).filters["V"].names
    assert found <= 1


def test_filters_are_fitted_apart(bench):
    b, red = bench(), bench(ip=0.002, zero_angle=-10.0)
    standards = [b.zero("z"), b.pol("a", 0.05, 10), red.zero("z", filter="R"), red.pol("a", 0.05, 10, filter="R")]
    calibration = Calibration.fit(standards)
    assert list(calibration.filters) == ["V", "R"]
    assert calibration.filters["R"].zero_angle == pytest.approx(-10.0, abs=1e-8)


def test_order_of_standards_does_not_matter(bench):
    b = bench(rng=np.random.default_rng(5))
    standards = [b.zero(f"z{k}") for k in range(4)] + [b.pol(f"p{k}", 0.05, 40 * k) for k in range(4)]
    first = Calibration.fit(standards).filters["V"]
    second = Calibration.fit(standards[::-1]).filters["V"]
    np.testing.assert_allclose(first.values, second.values, rtol=0, atol=1e-12)
    np.testing.assert_allclose(first.covariance, second.covariance, rtol=1e-9, atol=1e-18)


def test_more_standards_never_enlarge_the_error(bench):
    b = bench()
    few = [b.zero("z0"), b.pol("p0", 0.05, 20)]
    more = [*few, b.zero("z1"), b.pol("p1", 0.03, 70)]
    one, two = (Calibration.fit(s).filters["V"] for s in (few, more))
    assert np.all(np.diag(two.covariance) < np.diag(one.covariance))


def field(x, y):
    """Return a 1.4 percent quadratic pattern at the corners, and the constant part."""
    sx, sy = np.asarray(x) / 1023.5 - 1, np.asarray(y) / 1023.5 - 1
    return 0.004 - 0.002j + 0.007 * (sx**2 - sy**2 + 2j * sx * sy)


@pytest.mark.parametrize("seed", [0, 1])
def test_field_pattern_by_cross_validation(bench, seed):
    """1.4 percent from 300 stars of 0.2 percent to 0.05 percent rms; held-out rms at most 1.1 of the fit's."""
    rng = np.random.default_rng(seed)
    x, y = rng.uniform(0, 2047, (2, 300))
    b = bench(efficiency=1.0, zero_angle=0.0, rng=rng)
    seen = b.observe(np.zeros(300), 0.0, err=0.002, ip=field(x, y), x=x, y=y)
    limits = [[0, 2047], [0, 2047]]
    calibration = Calibration.fit([Standard(seen, 0.0, np.nan, 1e-5, np.nan, "field")], field_order="best",
                                  field_range=limits)  # fmt: skip
    model = calibration.filters["V"]
    assert [n for n in model.names if n.startswith("ip_q_")] == ["ip_q_x", "ip_q_y", "ip_q_xx", "ip_q_xy", "ip_q_yy"]
    grid = np.linspace(0, 2047, 21)
    gx, gy = (v.ravel() for v in np.meshgrid(grid, grid))
    ip, _ = calibration.terms("V", gx, gy, np.array([0.0]), None, 1)
    error = ip[:, 0] - field(gx, gy)
    assert np.sqrt(np.mean(np.abs(error) ** 2) / 2) < 0.0005
    names = [row["name"] for row in calibration.standards_table()]
    assert (len(names), names[0], names[-1]) == (300, "field 1", "field 300")


def test_one_zero_star_moved_over_the_field(bench):
    b = bench(efficiency=1.0, zero_angle=0.0, rng=np.random.default_rng(6))
    grid = np.linspace(50, 1997, 6)
    places = [(x, y) for x in grid for y in grid]
    stars = [b.zero("z", true=4e-4, cat_err=3e-4, ip=complex(field(x, y)), x=x, y=y) for x, y in places]
    model = Calibration.fit(stars, field_order="best", field_range=[[0, 2047], [0, 2047]]).filters["V"]
    assert [n for n in model.names if n.startswith("ip_u_")] == ["ip_u_x", "ip_u_y", "ip_u_xx", "ip_u_xy", "ip_u_yy"]
    # The pattern does not depend on the star's own polarisation; the constant part does, and its error says so.
    assert abs(model.value("ip_u_xy") - 0.014) < 5 * model.error("ip_u_xy")
    assert model.error("ip_u_xy") < 5e-5
    assert model.error("ip_q") > 2.9e-4


def test_best_order_without_positions_is_none(bench):
    b = bench(rng=np.random.default_rng(7))
    model = Calibration.fit([b.zero(f"z{k}") for k in range(12)], field_order="best").filters["V"]
    assert model.names == ("ip_q", "ip_u", "a_re", "a_im")


def test_cross_validation_does_not_overfit(bench):
    from hwpol.correction.fitting.least_squares import Data
    from hwpol.correction.fitting.selection import cross_validate
    from hwpol.correction.model import setting

    rng = np.random.default_rng(2)
    x, y = rng.uniform(0, 2047, (2, 300))
    z = field(x, y) + 0.002 * (rng.normal(size=300) + 1j * rng.normal(size=300))
    where = setting((300,), 0.0, None, 1, x, y, None, [[0, 2047], [0, 2047]], np.nan)
    ones = np.broadcast_to(np.eye(2), (300, 2, 2))
    data = Data(z, ones * 0.002**2, np.arange(300), where, np.zeros(300, complex), ones * 1e-12)
    result = cross_validate(data, "instrument", "held", 1.0)
    place = result.orders.index(result.chosen)
    assert result.chosen == 2
    assert result.held_out[place] < 1.1 * result.fitted[place]
    assert result.fitted[0] > 2 * result.fitted[place]
    plain = Data(0.004 + z - field(x, y), data.covariance, data.star, where, data.sky, data.sky_covariance)
    assert cross_validate(plain, "instrument", "held", 1.0).chosen == 0


def test_field_order_needs_positions(bench):
    with pytest.raises(InputError, match="field_order = 1: the standards' x and y are not known"):
        Calibration.fit([bench().zero("z")], field_order=1)


def test_field_order_falls_to_what_the_stars_determine(bench):
    b = bench()
    stars = [b.zero(f"z{k}", x=100.0 * k, y=50.0 * k * k) for k in range(3)]
    model = Calibration.fit(stars, field_order=3).filters["V"]
    assert [n for n in model.names if n.endswith("_xx")] == []


def test_alt_az_night_with_large_telescope_polarisation(bench):
    """Ip of 2.5 percent over a wide range of parallactic angles leaves less than 0.1 percent."""
    rng = np.random.default_rng(8)
    b = bench(ip=0.001 + 0.002j, tel=0.02 - 0.015j, rng=rng)
    angles = np.linspace(-80, 75, 10)
    zeros = [b.zero(f"z{k}", true=3e-4 * complex(*rng.normal(size=2)), chi=15.0, eta=e) for k, e in enumerate(angles)]
    polarised = [b.pol(f"p{k}", 0.06, 50.0 * k, chi=15.0, eta=e) for k, e in enumerate((-40.0, 0.0, 50.0))]
    calibration = Calibration.fit([*zeros, *polarised], frame="both")
    eta = np.linspace(-90, 90, 37)
    quiet = bench(ip=b.ip, tel=b.tel)
    left = [abs(complex(calibration.apply(quiet.observe(0.0, 0.0, chi=15.0, eta=e)).z)) for e in eta]
    assert max(left) < 0.001
    # The telescope's polarisation in the instrument frame alone leaves its full swing.
    wrong = Calibration.fit([*zeros, *polarised])
    assert max(abs(complex(wrong.apply(quiet.observe(0.0, 0.0, chi=15.0, eta=e)).z)) for e in eta) > 0.02


def test_telescope_frame_alone_with_rotating_field(bench):
    b = bench(ip=0.0, tel=0.015 + 0.008j, sense=-1)
    turns = ((0.0, -50.0), (30.0, 10.0), (60.0, 70.0))
    standards = [b.zero("z", chi=c, eta=e) for c, e in turns] + [b.pol("p", 0.05, 20.0, chi=77.0, eta=33.0)]
    model = Calibration.fit(standards, frame="telescope").filters["V"]
    assert model.names == ("tel_q", "tel_u", "a_re", "a_im")
    assert abs(complex(model.value("tel_q"), model.value("tel_u")) - b.tel) < EXACT
    assert abs(model.amplitude - b.gain) < EXACT / 0.05


def test_fluxes_are_solved_again_with_the_calibration(bench):
    """A solver that knows of rotation within the visit: the sky it gives depends on the calibration it is handed."""
    b = bench(ip=0.01 + 0.005j)
    chis = np.array([0.0, 6.0, 12.0, 18.0])

    class Turning:
        def __init__(self, p, theta):
            self.frames = [b.observe(p, theta, chi=c) for c in chis]

    def solver(measured, calibration):
        if calibration is None:
            first = measured.frames[0]
            mean = np.mean([f.z for f in measured.frames])
            return type(first)(q=mean.real, u=mean.imag, covariance=first.covariance, frame="instrument",
                               position_angle=chis.mean(), filter="V")  # fmt: skip
        skies = [calibration.apply(f) for f in measured.frames]
        mean = np.mean([s.z for s in skies])
        return type(skies[0])(q=mean.real, u=mean.imag, covariance=skies[0].covariance, frame="sky",
                              position_angle=chis.mean(), filter="V")  # fmt: skip

    standards = [
        Standard(Turning(0.0, 0.0), 0.0, np.nan, 1e-4, np.nan, "z"),
        Standard(Turning(0.08, 30.0), 0.08, 30.0, 1e-4, 0.1, "p"),
        Standard(Turning(0.05, 110.0), 0.05, 110.0, 1e-4, 0.1, "r"),
    ]
    model = Calibration.fit(standards, solver=solver).filters["V"]
    # Four rounds, each leaving a few percent of the error before it: rotation by 6 deg rms loses 2 percent of p.
    assert abs(complex(model.value("ip_q"), model.value("ip_u")) - b.ip) < 1e-7
    assert abs(model.amplitude - b.gain) < 1e-6
    with pytest.raises(InputError, match="measured is Turning, expected Stokes"):
        Calibration.fit(standards)


@pytest.mark.parametrize(
    ("change", "said"),
    [
        ({"p": 5.0}, "expected a fraction of 0 to 1"),
        ({"p_err": np.nan}, "p_err = nan, expected a fraction >= 0"),
        ({"theta_err": -1.0}, "theta_err = -1, expected deg >= 0"),
    ],
)
def test_standards_without_errors_are_refused(change, said):
    values = {"measured": None, "p": 0.05, "theta": 30.0, "p_err": 0.001, "theta_err": 0.2, "name": "HD 1"} | change
    with pytest.raises(InputError, match=f"standard HD 1: .*{said}"):
        Standard(**values)


def test_wrong_requests_are_refused(bench):
    b = bench()
    with pytest.raises(InputError, match="no standards"):
        Calibration.fit([])
    with pytest.raises(InputError, match="given both as zero-polarised and as polarised"):
        Calibration.fit([b.zero("x"), b.pol("x", 0.05, 10)])
    with pytest.raises(InputError, match="efficiency = 'high'"):
        Calibration.fit([b.zero("x")], efficiency="high")
    with pytest.raises(InputError, match="field_order = 'low'"):
        Calibration.fit([b.zero("x")], field_order="low")
    sky = Calibration.fit([b.zero("x"), b.pol("p", 0.05, 10)]).apply(b.observe(0.0, 0.0))
    with pytest.raises(InputError, match="are on the sky"):
        Calibration.fit([Standard(sky, 0.0, np.nan, 1e-4, np.nan, "y")])
    with pytest.raises(InputError, match="cannot be mixed"):
        Calibration.fit([b.zero("x"), bench(sense=-1).zero("y")])
