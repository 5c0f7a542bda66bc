"""The smallest radius on the plateau of q and u."""

import numpy as np
import pytest

from hwpol import Fluxes
from hwpol.night.radius import LADDER, SAFE, choose_radius

ANGLES = np.tile([0.0, 22.5, 45.0, 67.5], 3)


def curve(light, q=0.03, u=-0.01, bend=0.0, start=3.5):
    """Fluxes of a source at every radius of the ladder; beyond `start` fwhm q runs away by `bend` a fwhm.

    `light` electrons a frame at the largest radius; a Gaussian image.
    """
    listed = []
    for radius in LADDER:
        inside = light * (1 - np.exp(-4 * np.log(2) * radius**2))
        seen = q + bend * max(radius - start, 0.0)
        turn = np.radians(4 * ANGLES)
        wave = seen * np.cos(turn) + u * np.sin(turn)
        flux = inside / 2 * np.stack([1 + wave, 1 - wave], axis=-1)
        listed.append(Fluxes.from_arrays(flux, flux, wave_plate=ANGLES, analyser=[0.0, 90.0]))
    return listed


def test_flat_curve_takes_the_smallest_safe_radius():
    choice = choose_radius(curve(1e7), LADDER)
    assert LADDER[choice.index] == SAFE
    assert choice.plateau
    # A Gaussian's growth changes neither q nor u: what remains is rounding.
    np.testing.assert_allclose(choice.drift, 0.0, atol=1e-12)
    np.testing.assert_allclose(choice.q, 0.03, atol=1e-12)


def test_faint_source_may_go_further_in():
    choice = choose_radius(curve(300.0), LADDER)
    assert LADDER[choice.index] <= SAFE


def test_slope_at_the_safe_radius_moves_the_choice_outward():
    """q runs away below 2 fwhm only: the plateau begins there."""
    run = curve(1e9)
    spoiled = [
        one if radius >= 2.0 else other
        for one, other, radius in zip(run, curve(1e9, q=0.05), LADDER, strict=True)
    ]  # fmt: skip
    choice = choose_radius(spoiled, LADDER)
    assert LADDER[choice.index] == 2.0
    assert choice.plateau


def test_no_plateau_is_said_and_its_slope_becomes_an_error():
    choice = choose_radius(curve(1e10, bend=0.01, start=0.0), LADDER)
    assert not choice.plateau
    # A line of slope 0.01 a fwhm over radii from 1.75 to 2.75.
    assert choice.drift[0] == pytest.approx(0.01, rel=0.05)
    assert choice.drift[1] < 1e-4


def test_light_of_other_stars_bounds_the_radii():
    alien = np.where(LADDER > 2.0, 0.1, 0.0)
    choice = choose_radius(curve(1e8, bend=0.05, start=2.0), LADDER, alien)
    assert LADDER[choice.index] == SAFE
    assert choice.plateau
    np.testing.assert_allclose(choice.drift, 0.0, atol=1e-9)


def test_what_cannot_be_measured_is_no_choice():
    nothing = [Fluxes.from_arrays(np.full((12, 2), np.nan), np.full((12, 2), np.nan), wave_plate=ANGLES,
                                  analyser=[0.0, 90.0]) for _ in LADDER]  # fmt: skip
    choice = choose_radius(nothing, LADDER)
    assert np.all(np.isnan(choice.q))
    np.testing.assert_array_equal(choice.drift, 0.0)
