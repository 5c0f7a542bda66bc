"""Light on the detector: the disc integrated over pixels, places on the sky, photons conserved."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import dblquad

from hwpol.simulate import Scenario
from hwpol.simulate.images import Layout, add_star, lamplight, sky_to_pixels, starlight, stars_of
from hwpol.simulate.plan import plan

PIXEL = 2e-6  # of the star: the neglected fourth derivative at the border of the core
QUADRATURE = 1e-9  # absolute, of scipy's integrals


def _disc(x, y, fwhm, beta):
    a = fwhm / (2 * np.sqrt(2 ** (1 / beta) - 1))
    return (beta - 1) / (np.pi * a * a) * (1 + (x * x + y * y) / (a * a)) ** -beta


@pytest.mark.parametrize(("fwhm", "beta"), [(2.0, 2.5), (3.7, 3.0), (6.0, 4.5)])
def test_pixels_hold_the_integral_of_the_disc(fwhm, beta):
    image = np.zeros((81, 81))
    x, y = 40.31, 39.77
    add_star(image, x, y, 1.0, fwhm, beta)
    edge = int(2 * fwhm) + 2
    for dx, dy in [(0, 0), (1, 0), (-1, 2), (3, -1), (edge, 0), (edge, edge), (-20, 7)]:
        column, row = 40 + dx, 40 + dy
        expected = dblquad(
            lambda v, u: _disc(u - x, v - y, fwhm, beta), column - 0.5, column + 0.5, row - 0.5, row + 0.5,
            epsabs=QUADRATURE,
        )[0]  # fmt: skip
        assert image[row, column] == pytest.approx(expected, abs=PIXEL)


@given(x=st.floats(190, 210), y=st.floats(190, 210), fwhm=st.floats(2, 6), ellipticity=st.floats(0, 0.4),
       elongation=st.floats(0, 180))  # fmt: skip
@settings(deadline=None, max_examples=25)
def test_star_keeps_its_light(x, y, fwhm, ellipticity, elongation):
    """All but the tail beyond the stamp's inscribed ellipse, (1 + (R/a)^2)^(1 - beta), and the pixels' error."""
    image = np.zeros((401, 401))
    beta = 4.0
    add_star(image, x, y, 1.0, fwhm, beta, ellipticity, elongation)
    a = fwhm / (2 * np.sqrt(2 ** (1 / beta) - 1))
    reach = 12 * fwhm * np.sqrt(1 - ellipticity) - 0.5
    tail = (1 + (reach / a) ** 2) ** (1 - beta)
    assert 1 - tail - 1e-5 < image.sum() < 1 + 1e-5


def test_star_at_the_edge_gives_what_falls_on_the_array():
    whole, half = np.zeros((61, 61)), np.zeros((61, 31))
    add_star(whole, 30.0, 30.0, 100.0, 3.0, 3.0)
    add_star(half, 30.0, 30.0, 100.0, 3.0, 3.0)
    np.testing.assert_allclose(half, whole[:, :31], rtol=1e-13)
    far = np.zeros((10, 10))
    add_star(far, 500.0, 5.0, 100.0, 3.0, 3.0)
    assert not far.any()


def test_directions_on_the_detector(small):
    """At chi = 0 north is up; east is left, or right where mirrored; turning by chi = 90 puts east up."""
    small["instrument"]["detector"]["pixel_scale"] = 0.5
    arcsec = np.array([5.0]), np.array([0.0])
    for sense, expected in ((1, (-10, 0)), (-1, (10, 0))):
        small["instrument"]["orientation"] = {"sense": sense}
        scenario = Scenario.from_dict(small)
        np.testing.assert_allclose(np.ravel(sky_to_pixels(scenario, *arcsec, 0.0)), expected, atol=1e-12)
        np.testing.assert_allclose(np.ravel(sky_to_pixels(scenario, *arcsec[::-1], 0.0)), (0, 10), atol=1e-12)
        np.testing.assert_allclose(np.ravel(sky_to_pixels(scenario, *arcsec, 90.0)), (0, 10), atol=1e-12)


def _first_science(scenario):
    one = next(frame for frame in plan(scenario) if frame.kind == "science")
    return one, Layout.of(scenario), stars_of(scenario, scenario.target(one.target), one.chi)


def test_frame_holds_the_light_of_star_and_sky(small):
    small["atmosphere"] = {"beta": 4.5, "seeing": 2.5}
    small["target"][0]["companion"] = [{"rate": 5000.0, "east": 8.0, "north": 2.0, "p": 0.1, "theta": 10.0}]
    scenario = Scenario.from_dict(small)
    one, layout, stars = _first_science(scenario)
    images, electrons, x, y = starlight(scenario, layout, one, stars, 0.0)
    assert x[0, 0] == 39.5
    assert y[0, 1] - y[0, 0] == 64.0
    rows = scenario.train("V").rows(one.psi, one.chi, one.eta)
    for b, strip in enumerate((slice(0, 60), slice(64, 124))):
        sky = 0.5 * (1.0, 0.8)[b] * 2.0 * 10.0 * rows[b, 0] * 60 * 80
        # The strip's edge is 20 pixels = 8 fwhm from the companion: (1 + (2 x 20 / 2.5 x 0.406)^2)^-3.5 < 2e-5.
        assert images[0][strip].sum() - sky == pytest.approx(electrons[:, b].sum(), rel=1e-4)
    assert not images[0][60:64].any()
    q, u = 0.05 * np.cos(np.pi / 3), 0.05 * np.sin(np.pi / 3)
    z, a, ip = q + 1j * u, 0.98 * np.exp(2j * np.deg2rad(5.0)), 0.004 - 0.002j
    observed = (ip + a * z) / (1 + (np.conj(ip / a) * z).real)
    assert electrons[0, 0] == pytest.approx(1e5 * (1 + (np.conj(ip / a) * z).real) * (1 + observed.real), rel=1e-12)


def test_beams_follow_offset_scale_and_distortion(small):
    small["beam"] = [{}, {"shift": [1.0, -0.5], "scale": 0.01, "quadratic": 2.0}]
    small["target"][0]["xy"] = [59.5, 14.5]
    scenario = Scenario.from_dict(small)
    one, layout, stars = _first_science(scenario)
    _, _, x, y = starlight(scenario, layout, one, stars, 0.0)
    # From the middle (39.5, 29.5): 20 and -15 pixels, half and minus half of the way to the edge.
    np.testing.assert_allclose([x[0, 1], y[0, 1]], [59.5 + 1.0 + 0.2 + 0.5, 14.5 + 64 - 0.5 - 0.15 - 0.5], rtol=1e-12)


def test_overlapping_beams_double_the_sky(small):
    for beam in small["instrument"]["beam"]:
        beam.pop("section")
    small["beam"] = []
    small["filters"]["V"]["ip"] = [0.0, 0.0]
    small["target"][0]["rate"] = 0.0
    scenario = Scenario.from_dict(small)
    one, layout, stars = _first_science(scenario)
    images, *_ = starlight(scenario, layout, one, stars, 0.0)
    np.testing.assert_allclose(images[0], 2.0 * 10.0, rtol=1e-12)


def test_polarised_sky_splits_between_beams(small):
    small["sky"] = {"p": 0.2, "theta": 0.0}
    small["filters"]["V"] = {"sky": 2.0}
    small["beam"] = []
    small["target"][0]["rate"] = 0.0
    scenario = Scenario.from_dict(small)
    one, layout, stars = _first_science(scenario)
    images, *_ = starlight(scenario, layout, one, stars, 0.0)
    np.testing.assert_allclose([images[0][5, 5], images[0][100, 5]], [12.0, 8.0], rtol=1e-12)


def test_polarised_lamp_modulates_with_the_plate(small):
    small["filters"]["V"] = {}
    small["beam"] = []
    small["block"][0] = {
        "kind": "flat", "filters": ["V"], "angles": [0.0, 22.5], "level": 1e4, "p": 0.2, "theta": 45.0, "exposure": 1.0,
    }  # fmt: skip
    scenario = Scenario.from_dict(small)
    levels = [lamplight(scenario, Layout.of(scenario), one, scenario.blocks[0])[0] for one in plan(scenario)[:2]]
    np.testing.assert_allclose([levels[0][3, 3], levels[0][90, 3]], [1e4, 1e4], rtol=1e-12)
    np.testing.assert_allclose([levels[1][3, 3], levels[1][90, 3]], [1.2e4, 0.8e4], rtol=1e-12)


def test_moving_target_leaves_its_field(small):
    small["target"][0].update(motion=[3600.0, 0.0], companion=[{"rate": 100.0, "north": 5.0}])
    scenario = Scenario.from_dict(small)
    one, layout, stars = _first_science(scenario)
    x = [starlight(scenario, layout, one, stars, hours)[2][:, 0] for hours in (0.0, 0.001)]
    np.testing.assert_allclose(x[1] - x[0], [-3.6 / 0.5, 0.0], atol=1e-12)


def test_field_stars_keep_their_distance_and_turn_with_the_field(small):
    small["target"][0]["field"] = {"stars": 8, "brightest": 1e4, "faintest": 1e3, "separation": 8.0}
    scenario = Scenario.from_dict(small)
    one, layout, stars = _first_science(scenario)
    _, _, x, y = starlight(scenario, layout, one, stars, 0.0)
    apart = np.hypot(x[:, None, 0] - x[:, 0], y[:, None, 0] - y[:, 0])[np.triu_indices(9, 1)]
    assert apart.min() >= 8.0 - 1e-9
    rates = stars.rate["V"][1:]
    assert np.all(np.diff(rates) <= 0)
    assert rates.min() >= 1e3
    assert rates.max() <= 1e4


def test_nebula_is_tangential(small):
    small["target"][0].update(rate=0.0, nebula={"surface": 50.0, "p": 0.3})
    small["filters"]["V"] = {}
    small["beam"] = []
    scenario = Scenario.from_dict(small)
    one, layout, stars = _first_science(scenario)
    images, _, x, y = starlight(scenario, layout, one, stars, 0.0)
    # Due north of the centre the light swings east-west: q < 0, the extraordinary beam is the brighter one.
    column, row = 40, 44
    rho = np.hypot(column - x[0, 0], row - y[0, 0])
    o, e = images[0][row, column], images[0][row + 64, column]
    direction = np.arctan2(-(column - x[0, 0]), row - y[0, 0])
    p = 0.3 * rho**2 / (rho**2 + 4)
    assert (o - e) / (o + e) == pytest.approx(-p * np.cos(2 * direction), rel=1e-9)
    assert o + e == pytest.approx(10 * 50 * 10 / np.sqrt(rho**2 + 4) * np.exp(-((rho / 60) ** 2)), rel=1e-9)
