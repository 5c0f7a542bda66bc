"""Light of artificial stars: discs, brightness, and electrons that demodulate to what was meant."""

from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from hwpol import demodulate
from hwpol.errors import InputError
from hwpol.fluxes import Fluxes
from hwpol.inject.light import (
    DEGREES,
    FAINTEST,
    REACH,
    STEPS,
    FrameLight,
    StarProfile,
    expected_electrons,
    ladder,
    measured_profile,
    truths,
)
from hwpol.instrument.description import Section
from hwpol.photometry.growth import shapes

WIDE = Section(0, 121, 0, 101)


class Optics:
    """A calibration of one filter: instrumental polarisation and A, the same everywhere."""

    ip, amplitude = 0.01 - 0.004j, 0.95 * np.exp(0.2j)

    def terms(self, filter, x, y, chi, eta, sense, mjd=None):
        return np.full((np.size(x), np.size(chi)), self.ip), np.full((1, 1), self.amplitude)

    def with_error(self, stokes):
        return stokes


def visit(chi=0.0, sense=1, beams=2, flux=None, frames=8):
    """Fluxes of a target: eight frames of two cycles, 100 s each."""
    flux = np.full((1, frames, beams), 5e4) if flux is None else flux
    return Fluxes.from_arrays(
        flux, np.abs(flux) + 100.0, wave_plate=np.arange(frames) % 4 * 22.5, analyser=[0.0, 90.0][:beams],
        cycle=np.arange(frames) // 4 + 1, position_angle=chi, sense=sense, exposure=np.full(frames, 100.0),
    )  # fmt: skip


@settings(deadline=None, max_examples=15)
@given(
    fwhm=st.floats(1.8, 4.0), beta=st.sampled_from([2.5, 3.0, 4.0, 30.0]), dx=st.floats(-0.5, 0.5),
    dy=st.floats(-0.5, 0.5),
)  # fmt: skip
def test_all_the_light_of_a_disc_is_drawn_at_its_place(fwhm, beta, dx, dy):
    image = np.zeros((101, 121))
    StarProfile(beta, np.full((1, 1), fwhm)).draw(image, 60 + dx, 50 + dy, 1000.0, 0, 0, WIDE)
    # What lies beyond REACH: (1 + 4 (2^(1/beta) - 1) REACH^2)^(1 - beta), and the rule of five points in a pixel: 1e-4.
    beyond = (1 + 4 * (2 ** (1 / beta) - 1) * REACH**2) ** (1 - beta)
    assert image.sum() == pytest.approx(1000.0, rel=beyond + 1e-4)
    y, x = np.mgrid[:101, :121]
    core = np.hypot(x - 60 - dx, y - 50 - dy) < 3 * fwhm
    # The edge of the circle cuts pixels: a tenth of a pixel at most where 5 percent of the light lies.
    for axis, place in ((x, 60 + dx), (y, 50 + dy)):
        assert np.sum(image[core] * axis[core]) / image[core].sum() == pytest.approx(place, abs=0.02)
    assert image.max() <= 1000.0 * StarProfile(beta, np.full((1, 1), fwhm)).peak(0, 0)


def test_no_light_falls_outside_the_strip():
    image = np.zeros((101, 121))
    StarProfile(3.0, np.full((1, 1), 3.0)).draw(image, 60.0, 50.0, 1.0, 0, 0, Section(0, 121, 40, 55))
    assert image[40:55].sum() > 0.8
    assert image[:40].sum() == image[55:].sum() == 0.0


@pytest.mark.parametrize("beta", [2.5, 4.0])
def test_profile_has_the_width_and_the_wings_that_were_measured(beta):
    radii = 3.0 * np.arange(1.0, 3.51, 0.25)
    true = 2.6
    growth = 1 - (1 + 4 * (2 ** (1 / beta) - 1) * (radii / true) ** 2) ** (1 - beta)
    image = np.zeros((101, 121))
    StarProfile(beta, np.full((1, 1), true)).draw(image, 60.0, 50.0, 1.0, 0, 0, WIDE)
    seen = float(shapes(image[30:71, 40:81][None], np.zeros(1), np.zeros(1)).fwhm[0])
    placement = SimpleNamespace(fwhm=np.array([[seen, np.nan], [1.1 * seen, seen]]))
    profile = measured_profile(placement, radii, growth / growth[-1], 4.0)
    assert profile.beta == beta
    # The pixel (variance 1/12) widens both: of widths that scale by 1.1 the measured ones scale by less.
    scale = true / 2.355
    pixel = abs(np.sqrt(1.1**2 * scale**2 + 1 / 12) / np.sqrt(scale**2 + 1 / 12) / 1.1 - 1)
    np.testing.assert_allclose(profile.fwhm, [[true, true], [1.1 * true, true]], rtol=pixel)
    assert profile.fraction(2 * true) == pytest.approx(1 - (1 + 16 * (2 ** (1 / beta) - 1)) ** (1 - beta), rel=0.02)


def test_profile_without_any_measured_width():
    profile = measured_profile(SimpleNamespace(fwhm=np.full((2, 2), np.nan)), np.ones(3), np.full(3, np.nan), 4.0)
    assert np.all(profile.fwhm > 3.0)
    assert np.all(profile.fwhm < 4.0)


@pytest.mark.parametrize("noise", [0.0, 1e4, 1e7])
def test_ladder_leads_from_the_target_to_the_faintest(noise):
    fluxes = visit(flux=np.full((1, 8, 2), 1e6))
    rungs = ladder(fluxes, noise, 0.8, np.inf)
    assert len(rungs) == STEPS
    assert np.all(np.diff(rungs) < 0)
    assert rungs[0] * 0.8 * 800.0 == pytest.approx(16e6)
    electrons = rungs[-1] * 0.8 * 800.0
    assert np.sqrt(2 * (electrons + noise)) / electrons == pytest.approx(FAINTEST)


def test_ladder_stays_below_saturation_and_above_a_faint_target():
    assert ladder(visit(flux=np.full((1, 8, 2), 1e6)), 0.0, 0.8, 500.0)[0] == 500.0
    rungs = ladder(visit(flux=np.full((1, 8, 2), 10.0)), 1e4, 0.8, np.inf)
    assert rungs[0] == pytest.approx(4 * rungs[-1])


def test_ladder_of_a_target_that_was_never_measured():
    with pytest.raises(InputError, match="no frame"):
        ladder(visit(flux=np.full((1, 8, 2), np.nan)), 1.0, 0.8, np.inf)


def test_electrons_by_hand():
    # delta = 180: f = F t / 2 (1 + a q + b u), a = cos(4 psi - 2 alpha), b = sin(4 psi - 2 alpha), equal gains.
    electrons = expected_electrons(
        FrameLight(np.full((8, 2), 50.0)), np.array([10.0]), np.array([0.1 + 0.04j]), np.zeros(1), np.zeros(1),
        visit(), None,
    )  # fmt: skip
    first = 500.0 * (1 + np.array([0.1, 0.04, -0.1, -0.04]))
    np.testing.assert_allclose(electrons[0, :4, 0], first)
    np.testing.assert_allclose(electrons[0, :4, 1], 1000.0 - first)


@settings(deadline=None, max_examples=20)
@given(
    p=st.floats(0.0, 0.3), theta=st.floats(0.0, 180.0), chi=st.floats(0.0, 360.0), sense=st.sampled_from([1, -1]),
    gain=st.floats(0.5, 1.5),
)  # fmt: skip
def test_electrons_demodulate_to_the_truth(p, theta, chi, sense, gain):
    z = np.array([p * np.exp(2j * np.radians(theta))])
    turning = chi + np.linspace(0.0, 30.0, 8)
    fluxes, optics = visit(turning, sense), Optics()
    light = FrameLight(100.0 * np.linspace(0.6, 1.4, 8)[:, None] * np.array([1.0, gain]))
    electrons = expected_electrons(light, np.array([1e4]), z, np.zeros(1), np.zeros(1), fluxes, optics)
    found = demodulate(visit(turning, sense, flux=electrons), calibration=optics)
    np.testing.assert_allclose([found.q[0], found.u[0]], [z[0].real, z[0].imag], atol=1e-9)


def test_light_follows_the_target_through_clouds():
    clouds, gain = np.array([1.0, 0.5, 1.0, 1.5, 1.0, 1.0, 0.8, 1.2]), np.array([1.0, 0.7])
    rate = FrameLight(np.full((8, 2), 1.0) * clouds[:, None] * gain)
    target = expected_electrons(
        rate, np.array([1e5]), np.array([0.05 + 0.02j]), np.zeros(1), np.zeros(1), visit(), None
    )
    target[0, 2] = np.nan
    light = FrameLight.of(visit(flux=target), None)
    expected = 100.0 * np.where(np.arange(8) == 2, 1.0, clouds)[:, None] * gain / gain.sum()
    np.testing.assert_allclose(light.electrons, expected / np.mean(expected.sum(axis=1)) * 100.0, rtol=1e-9)


def test_brightest_keeps_below_the_room_of_every_pixel():
    profile, light = StarProfile(3.0, np.array([[2.0, 3.0]])), FrameLight(np.array([[50.0, 40.0]]))
    highest = light.highest(profile, np.array([[1e4, 1e4]]))
    peaks = highest * light.electrons * np.array([[profile.peak(0, 0), profile.peak(0, 1)]]) * (1 + max(DEGREES))
    assert peaks.max() == pytest.approx(1e4)


def test_every_brightness_meets_every_degree():
    step, z = truths(STEPS * len(DEGREES), 0, np.random.default_rng(0))
    assert len({(s, round(abs(v), 6)) for s, v in zip(step, z, strict=True)}) == STEPS * len(DEGREES)
