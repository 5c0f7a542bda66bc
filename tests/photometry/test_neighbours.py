from __future__ import annotations

import numpy as np
import pytest

from hwpol.photometry.neighbours import Contamination, contamination, light_in_aperture, ratio_error

WIDTH = 4.0


def pair(distance: float, flux: float = 1.0) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """A star whose first beam receives a neighbour's second beam."""
    x = np.array([[0.0, 500.0], [900.0, distance]])
    return x, np.zeros((2, 2)), np.array([[1.0, 1.0], [flux, flux]])


def test_light_in_an_aperture_of_a_moffat_profile() -> None:
    """Centred circle in closed form: 1 - (1 + r^2 / a^2)^(1 - beta); far off: surface brightness times area."""
    a = WIDTH / (2 * np.sqrt(2 ** (1 / 3) - 1))
    near, far = light_in_aperture(np.array([0.0, 200.0]), np.array([WIDTH, WIDTH]), 6.0)
    assert near == pytest.approx(1 - (1 + 36 / a**2) ** -2, rel=1e-9)
    flat = 2 / (np.pi * a**2) * (1 + 200**2 / a**2) ** -3 * np.pi * 36
    assert far == pytest.approx(flat, rel=0.02)  # next term of the expansion: 12 (r / d)^2 / 2 = 0.5 percent


def test_only_the_beam_that_is_reached_is_contaminated() -> None:
    x, y, flux = pair(10.0)
    found = contamination(x, y, flux, WIDTH, 6.0)
    assert found.fraction[0, 0] > 0.03
    assert found.fraction[0, 1] == 0.0
    assert found.fraction[1, 1] == pytest.approx(found.fraction[0, 0])
    double = contamination(*pair(10.0, 2.0), WIDTH, 6.0)
    assert double.fraction[0, 0] == pytest.approx(2 * found.fraction[0, 0])
    assert not contamination(x, y, flux, WIDTH, 6.0, plane_of_beam=[0, 1]).fraction.any()


def test_slope_is_the_derivative() -> None:
    x, y, flux = pair(10.0)
    found = contamination(x, y, flux, WIDTH, 6.0)
    # The aperture's flux is what is held fixed: compare at scaled fluxes with the closed form of the share.
    share = [light_in_aperture(np.array([10.0, 0.0]), np.array([WIDTH * f] * 2), 6.0) for f in (0.99, 1.01)]
    slope = (share[1][0] / share[1][1] - share[0][0] / share[0][1]) / np.log(1.01 / 0.99)
    assert found.slope[0, 0] == pytest.approx(slope, rel=0.01)


def test_light_common_to_both_beams_cancels() -> None:
    x = np.array([[0.0, 500.0], [10.0, 510.0]])
    found = contamination(x, np.zeros((2, 2)), np.ones((2, 2)), WIDTH, 6.0)
    one_sided = contamination(*pair(10.0), WIDTH, 6.0)
    fwhm = np.array([4.0, 5.0])
    assert ratio_error(found, fwhm)[0] < 0.5 * ratio_error(one_sided, fwhm)[0]


def test_unknown_fluxes_and_places() -> None:
    x, y, flux = pair(10.0)
    flux[1] = np.nan
    found = contamination(x, y, flux, WIDTH, 6.0)
    assert found.fraction[0].tolist() == [0.0, 0.0]
    assert np.isnan(found.fraction[1]).all()
    x[1] = np.nan
    assert contamination(x, y, flux, WIDTH, 6.0).fraction[0].tolist() == [0.0, 0.0]


def test_ratio_error_grows_with_the_seeing() -> None:
    foreign = Contamination(np.array([[0.01, 0.0]]), np.array([[0.05, 0.0]]))
    calm, rough = ratio_error(foreign, np.full(4, 4.0)), ratio_error(foreign, np.array([3.0, 5.0, 3.0, 5.0]))
    assert rough > calm > 0
