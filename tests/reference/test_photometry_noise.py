"""Published noise formulas against the variance the package gives, and constants of clipping."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import truncnorm

from hwpol.photometry.aperture import aperture_sums
from hwpol.photometry.sky import CLIP, SKEW_SHIFT, STD_KEPT
from hwpol.pixels import Pixels


def total_noise(star: float, pixels: float, sky_pixels: float, per_pixel: float) -> float:
    """Error of a sky-subtracted sum, from `aperture_sums` and the annulus term of the package.

    A flat image whose pixels share the star's electrons; a square-root area makes the circle hold `pixels` whole-weight
    pixels only on average, so that the sum of w^2 is replaced by the area (the published formulas count whole pixels).
    """
    radius = np.sqrt(pixels / np.pi)
    size = 2 * int(radius + 3) + 1
    variance = np.full((size, size), star / pixels + per_pixel, np.float32)
    box = Pixels(np.zeros_like(variance), variance, np.zeros(variance.shape, np.uint8))
    sums = aperture_sums(box, [size // 2], [size // 2], [radius])
    unit = Pixels(np.zeros_like(variance), np.ones_like(variance), np.zeros(variance.shape, np.uint8))
    w2 = aperture_sums(unit, [size // 2], [size // 2], [radius]).variance[0, 0]
    assert sums.area[0, 0] == pytest.approx(pixels)
    annulus = sums.area[0, 0] ** 2 * per_pixel / sky_pixels
    return float(np.sqrt(sums.variance[0, 0] * pixels / w2 + annulus))


SINGLE = 1e-6
"""Variances are held in single precision."""


@pytest.mark.parametrize(
    ("sky_pixels", "extra", "expected"),
    [(200.0, 0.0, 87.9173964528), (200.0, (2 * 0.289) ** 2, 87.8465358485), (np.inf, 0.0, 89.9842541332)],
)
def test_signal_to_noise_of_the_ccd_equation(sky_pixels: float, extra: float, expected: float) -> None:
    """Merline & Howell 1995, Exp. Astron. 6, 163 (from memory): 1e4 e, 50 px, sky 20, dark 2, read noise 5."""
    noise = total_noise(1e4, 50.0, sky_pixels, 20.0 + 2.0 + 25.0 + extra)
    assert 1e4 / noise == pytest.approx(expected, rel=SINGLE)


def test_error_in_two_photon_sums() -> None:
    """Starlink PHOTOM (SUN/45): variance Po + Ps (ao / as)^2 = 31666.6667 for Po 30000, Ps 60000, ao 50, as 300."""
    sky = 60000.0 / 300.0
    assert total_noise(30000.0 - 50 * sky, 50.0, 300.0, sky) == pytest.approx(177.9513042005, rel=SINGLE)


def test_error_from_the_scatter_of_the_sky() -> None:
    """IRAF phot help: sqrt(flux / epadu + area stdev^2 + area^2 stdev^2 / nsky), adu; epadu 2.5, stdev 8, nsky 500."""
    gain, area = 2.5, 25 * np.pi
    noise = total_noise(1e4 * gain, area, 500.0, (8.0 * gain) ** 2) / gain
    assert noise == pytest.approx(99.0763170381, rel=SINGLE)


def test_clipping_constants() -> None:
    """Standard deviation of a unit Gaussian clipped at +-k: 0.9865783926 at 3, 0.9545974863 at 2.5 (derived)."""
    for k, std in ((3.0, 0.9865783926), (2.5, 0.9545974863), (4.0, 0.9994645018)):
        assert truncnorm(-k, k).std() == pytest.approx(std, abs=1e-10)
    assert truncnorm(-CLIP, CLIP).std() == pytest.approx(STD_KEPT, abs=1e-10)


def test_shift_of_a_clipped_poisson_mean() -> None:
    """First Edgeworth term against the sum over the Poisson distribution at level 900, limits between integers."""
    level = 900.0
    counts = np.arange(500, 1400)
    log_factorial = np.concatenate([[0.0], np.cumsum(np.log(np.arange(1, 1400)))])
    chance = np.exp(counts * np.log(level) - level - log_factorial[counts])
    kept = np.abs(counts - level) < CLIP * np.sqrt(level)
    mean = (chance[kept] * counts[kept]).sum() / chance[kept].sum()
    assert level - mean == pytest.approx(
        SKEW_SHIFT, rel=0.1
    )  # a count is 1/30 sigma: 5 percent of the density each side
