from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from photutils.aperture import ApertureStats, CircularAnnulus
from scipy.stats import chi2

from hwpol.errors import InputError
from hwpol.photometry.aperture import aperture_sums
from hwpol.photometry.sky import SKEW_SHIFT, Others, annulus_sky
from hwpol.pixels import PixelMask, Pixels


def test_unclipped_annulus_is_the_pixels_of_the_oracle() -> None:
    """With uniform noise nothing lies beyond the clip, so that level and scatter are those of all pixels."""
    rng = np.random.default_rng(1)
    data = rng.uniform(-10, 10, (100, 100)).astype(np.float32)
    pixels = Pixels(data, np.full_like(data, 33.0), np.zeros(data.shape, np.uint8))
    x, y = rng.uniform(30, 70, (2, 25))
    sky = annulus_sky(pixels, x, y, 8.0, 14.0)
    ring = CircularAnnulus(np.column_stack([x, y]), 8.0, 14.0)
    oracle = ApertureStats(data.astype(np.float64), ring, sum_method="center")
    assert sky.npix.tolist() == [round(a) for a in oracle.center_aper_area.value]
    # Read at the centre, the plane differs from the mean by slope x (centroid of the pixels), below a tenth of a pixel;
    # the skewness put back is at most SKEW_SHIFT.
    np.testing.assert_allclose(sky.level, oracle.mean, atol=0.1 * np.abs(sky.gradient).max() + SKEW_SHIFT)


def test_level_is_unbiased_and_its_error_true(noisy: Callable[..., Pixels]) -> None:
    rng = np.random.default_rng(3)
    count = 1600
    grid = 25.0 + 45.0 * np.arange(40)
    x, y = (a.ravel() for a in np.meshgrid(grid, grid))
    sky = annulus_sky(noisy(rng, np.full((1850, 1850), 100.0)), x, y, 12.0, 20.0)
    pull = (sky.level - 100.0) / sky.error
    # Two-sided bounds of 0.1 percent false alarm each.
    assert abs(pull.mean()) < 3.3 / np.sqrt(count)
    assert chi2.ppf(0.0005, count) < (pull**2).sum() < chi2.ppf(0.9995, count)
    assert np.median(sky.noise_ratio) == pytest.approx(1.0, abs=0.01)
    assert sky.ok.all()


@pytest.mark.parametrize("level", [1.0, 2.0, 5.0, 100.0])
def test_clipping_a_poisson_tail_does_not_bias_the_mean(noisy: Callable[..., Pixels], level: float) -> None:
    rng = np.random.default_rng(4)
    grid = 25.0 + 45.0 * np.arange(40)
    x, y = (a.ravel() for a in np.meshgrid(grid, grid))
    sky = annulus_sky(noisy(rng, np.full((1850, 1850), level), 3.0), x, y, 12.0, 20.0)
    noise = sky.error.mean() / np.sqrt(len(x))
    assert abs(sky.level.mean() - level) < 3.3 * noise + 0.002  # 0.002: second order of the skewness, level 1


def test_bias_where_the_sky_equals_the_star_on_a_gradient(star: Callable[..., np.ndarray]) -> None:
    """5 percent gradient across the annulus, sky in the aperture equal to the star's flux, one side masked."""
    rng = np.random.default_rng(5)
    radius, flux, count = 8.0, 2.0e6, 60
    level = flux / (np.pi * radius**2)
    xx = np.arange(-30, 31)[None, :]
    bias = []
    for i in range(count):
        fx, fy = rng.uniform(-0.5, 0.5, 2)
        expected = level * (1 + 0.05 / 50.0 * (xx - fx)) + flux * star(61, fx, fy, 4.0, "gauss")
        data = rng.poisson(expected).astype(np.float32)
        mask = np.zeros(data.shape, np.uint8)
        if i % 2:
            mask[:, 46:] = PixelMask.BAD
        pixels = Pixels(data, expected.astype(np.float32), mask)
        sky = annulus_sky(pixels, [30 + fx], [30 + fy], 16.0, 25.0)
        sums = aperture_sums(pixels, [30 + fx], [30 + fy], [radius])
        true = (expected - level * (1 + 0.05 / 50.0 * (xx - fx))).sum()
        bias.append((sums.flux[0, 0] - sums.area[0, 0] * sky.level[0]) / true - 1)
    error = np.std(bias) / np.sqrt(count)
    assert error < 1.5e-4
    assert abs(np.mean(bias)) < 5e-4


def test_stars_in_the_annulus_do_not_count(star: Callable[..., np.ndarray], noisy: Callable[..., Pixels]) -> None:
    rng = np.random.default_rng(6)
    expected = np.full((101, 101), 50.0)
    for x, y, flux in ((50, 50, 1e5), (65, 52, 3e5), (40, 62, 2e4)):
        expected += flux * star(101, x - 50, y - 50, 4.0, "gauss")
    pixels = noisy(rng, expected)
    others = Others(np.array([50.0, 65.0, 40.0]), np.array([50.0, 52.0, 62.0]), np.full(3, 8.0))
    masked = annulus_sky(pixels, [50.0], [50.0], 11.0, 20.0, others=others)
    clipped = annulus_sky(pixels, [50.0], [50.0], 11.0, 20.0)
    assert abs(masked.level[0] - 50.0) < 4 * masked.error[0]
    assert masked.npix[0] < clipped.npix[0] + 20
    alone = Others(np.array([50.0]), np.array([50.0]), np.array([15.0]))
    own = annulus_sky(pixels, [50.0], [50.0], 11.0, 20.0, others=alone)
    assert own.npix[0] == clipped.npix[0]


def test_blank_apertures_are_consistent_with_zero(noisy: Callable[..., Pixels]) -> None:
    rng = np.random.default_rng(7)
    grid = 20.0 + 34.0 * np.arange(32)
    x, y = (a.ravel() + rng.uniform(-0.5, 0.5, 1024) for a in np.meshgrid(grid, grid))
    pixels = noisy(rng, np.full((1100, 1100), 30.0))
    sky = annulus_sky(pixels, x, y, 9.0, 15.0)
    sums = aperture_sums(pixels, x, y, [6.0])
    flux = sums.flux[:, 0] - sums.area[:, 0] * sky.level
    variance = sums.variance[:, 0] + (sums.area[:, 0] * sky.error) ** 2
    assert (
        0.9 < (flux**2 / variance).mean() < 1.1
    )  # 1024 values: 2.3 sigma; the demand, not the false-alarm rate, rules
    assert abs((flux / np.sqrt(variance)).mean()) < 3.3 / 32


def test_too_little_sky_is_nan_and_a_steep_one_doubtful(noisy: Callable[..., Pixels]) -> None:
    rng = np.random.default_rng(8)
    pixels = noisy(rng, 100.0 + 5.0 * np.mgrid[:60, :60][1])
    sky = annulus_sky(pixels, [30.0, -200.0, np.nan], [30.0, 30.0, 30.0], 8.0, 14.0)
    assert np.isfinite(sky.level).tolist() == [True, False, False]
    assert not sky.ok.any()
    assert sky.gradient[0, 0] == pytest.approx(5.0, abs=0.5)


def test_impossible_annulus_is_refused(noisy: Callable[..., Pixels]) -> None:
    pixels = noisy(np.random.default_rng(9), np.full((30, 30), 10.0))
    with pytest.raises(InputError, match="annulus"):
        annulus_sky(pixels, [15.0], [15.0], 10.0, 8.0)
