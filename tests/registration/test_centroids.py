"""Centroids and widths: accuracy, error bars, masks, sky slopes."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import chi2

from hwpol.pixels import Box, PixelMask, Pixels
from hwpol.registration.centroids import centroid, fwhm_of, measure


def grid(rng: np.random.Generator, count: int, pitch: int) -> tuple[np.ndarray, np.ndarray, tuple[int, int]]:
    """Isolated places at random sub-pixel phase."""
    side = int(np.ceil(np.sqrt(count)))
    y, x = np.divmod(np.arange(count), side)
    place = [(v + 0.5) * pitch + rng.uniform(-0.5, 0.5, count) for v in (x, y)]
    return place[0], place[1], (side * pitch, side * pitch)


@pytest.mark.parametrize(("fwhm", "flux"), [(3.0, 2e4), (4.0, 1e4), (4.0, 1e5), (10.0, 1e5)])
def test_errors_are_those_seen(fields: SimpleNamespace, fwhm: float, flux: float) -> None:
    rng = np.random.default_rng(11)
    x, y, shape = grid(rng, 150, int(7 * fwhm) + 6)
    pixels = fields.noisy(fields.star_image(shape, x, y, np.full(150, flux), fwhm), rng)
    fx, fy, err, ok = centroid(pixels, x + rng.uniform(-0.7, 0.7, 150), y + rng.uniform(-0.7, 0.7, 150), fwhm)
    assert ok.all()
    pull = np.concatenate([(fx - x) / err, (fy - y) / err])
    # Two-sided 0.1 percent chi-square bound; the width of the window is known, 2 percent more for sampling.
    low, high = chi2.ppf([0.0005, 0.9995], 300) / 300
    assert low * 0.96 < np.mean(pull**2) < high * 1.04


def test_scatter_near_the_bound(fields: SimpleNamespace) -> None:
    rng = np.random.default_rng(12)
    x, y, shape = grid(rng, 200, 34)
    pixels = fields.noisy(fields.star_image(shape, x, y, np.full(200, 1e6), 4.0), rng, sky=1.0, read=1.0)
    fx, fy, _, ok = centroid(pixels, x, y, 4.0)
    assert ok.all()
    # Photons alone bound the error by sigma / sqrt(N). With w = g the windowed centroid's variance is
    # 4 <w^2 x^2> / <w>^2 = 4 (s^2 / 9) / (1 / 4) = (16 / 9) s^2, 1.33 of the bound in error; 400 values scatter by
    # 3.5 percent, the pixel widens the star by 3 percent.
    bound = 4.0 / 2.3548 / 1e3
    assert np.std(np.concatenate([fx - x, fy - y])) < 1.33 * 1.14 * bound


@pytest.mark.parametrize("profile", ["gaussian", "moffat"])
def test_undersampled_stars_keep_to_a_hundredth(fields: SimpleNamespace, profile: str) -> None:
    rng = np.random.default_rng(13)
    x, y, shape = grid(rng, 100, 24)
    pixels = fields.noisy(fields.star_image(shape, x, y, np.full(100, 1e6), 1.5, profile=profile), rng)
    fx, fy, _, ok = centroid(pixels, np.rint(x), np.rint(y), 1.5)
    assert ok.all()
    # The pixel phase leaves 0.008 to 0.010 (measured); photons a tenth of that.
    assert np.std(np.concatenate([fx - x, fy - y])) < 0.013


def test_holes_do_not_pull_the_centre(fields: SimpleNamespace) -> None:
    rng = np.random.default_rng(14)
    x, y, shape = grid(rng, 60, 30)
    pixels = fields.noisy(fields.star_image(shape, x, y, np.full(60, 1e5), 4.0), rng)
    for i in range(60):
        column = round(x[i]) + (-1, 1)[i % 2]
        pixels.data[:, column] = 0 if i % 3 else 60_000
        pixels.mask[:, column] |= int(PixelMask.BAD)
    fx, fy, err, ok = centroid(pixels, x, y, 4.0)
    assert ok.all()
    # A column through the core, 1 pixel from the centre, taken as zero would shift x by 0.3 pixel.
    assert np.std((fx - x) / err) < 1.8
    assert np.abs(fx - x).max() < 0.08
    assert np.abs(fy - y).max() < 0.05


def test_star_hidden_by_half_is_refused(fields: SimpleNamespace) -> None:
    rng = np.random.default_rng(15)
    pixels = fields.noisy(fields.star_image((60, 60), [30.0], [30.0], [1e5], 4.0), rng)
    pixels.mask[:, :31] |= int(PixelMask.OUTSIDE)
    assert not centroid(pixels, [30.0], [30.0], 4.0)[3][0]


def test_sky_slope_does_not_pull_the_centre(fields: SimpleNamespace) -> None:
    rng = np.random.default_rng(16)
    x, y, shape = grid(rng, 49, 40)
    slope = 100.0 + 3.0 * np.indices(shape)[1]
    pixels = fields.noisy(fields.star_image(shape, x, y, np.full(49, 2e4), 5.0), rng, sky=slope)
    fx, _, err, ok = centroid(pixels, x, y, 5.0)
    assert ok.all()
    # Without the slope taken out the bias is 2 g pi sigma^4 / F(window), about 0.04 pixel.
    assert abs(np.mean(fx - x)) < 3.3 * np.median(err) / 7


def test_empty_sky_and_places_off_the_image_are_not_ok(fields: SimpleNamespace) -> None:
    pixels = fields.noisy(np.zeros((80, 80)), np.random.default_rng(17))
    found = centroid(pixels, [40.0, -30.0, 500.0, np.nan], [40.0, 10.0, 10.0, 5.0], 4.0)
    assert not found[3].any()
    empty = pixels.cut(Box(200, 200, 210, 210))
    assert not centroid(empty, [205.0], [205.0], 4.0)[3].any()
    assert np.isnan(fwhm_of(empty, [205.0], [205.0], 4.0)[0]).all()


@settings(deadline=None, max_examples=15)
@given(dx=st.integers(-300, 300), dy=st.integers(-300, 300), fwhm=st.sampled_from([3.0, 4.0, 9.0, 20.0]))
def test_corner_of_the_box_moves_the_places_alone(dx: int, dy: int, fwhm: float) -> None:
    y, x = np.indices((140, 140))
    star = 5e3 * np.exp(-4 * np.log(2) * ((x - 70.1) ** 2 + (y - 69.9) ** 2) / fwhm**2)
    pixels = Pixels((star + 50).astype(np.float32), (star + 75).astype(np.float32), np.zeros((140, 140), np.uint8))
    moved = Pixels(pixels.data, pixels.variance, pixels.mask, dx, dy)
    here, there = measure(pixels, [70.3], [69.6], fwhm), measure(moved, [70.3 + dx], [69.6 + dy], fwhm)
    # Rounding of doubles near 300, amplified by the fixed point's tolerance of 2e-4.
    assert abs(there.x[0] - dx - here.x[0]) < 4e-4
    assert abs(there.y[0] - dy - here.y[0]) < 4e-4
    assert there.ok[0]


@pytest.mark.parametrize("fwhm", [2.5, 4.0, 9.0, 20.0])
def test_width_and_ellipticity(fields: SimpleNamespace, fwhm: float) -> None:
    rng = np.random.default_rng(18)
    x, y, shape = grid(rng, 25, int(8 * fwhm) + 8)
    round_, long = (
        fields.noisy(fields.star_image(shape, x, y, np.full(25, 1e6), fwhm, axis_ratio=ratio), rng)
        for ratio in (1.0, 0.8)
    )
    # The pixel adds 1/12 to sigma^2; below three pixels the star is no Gaussian any more: 0.7 percent left.
    pixel = 8 * np.log(2) / 12
    for start in (0.7, 1.4):
        width, ellipticity = fwhm_of(round_, x, y, start * fwhm)
        assert np.median(width) == pytest.approx(np.sqrt(fwhm**2 + pixel), rel=0.007)
        assert np.median(ellipticity) < 0.03
        width, ellipticity = fwhm_of(long, x, y, start * fwhm)
        # 1 - 0.8, less what the round pixel takes off.
        assert np.median(ellipticity) == pytest.approx(0.2, abs=0.035)


def test_inputs_stay_as_they_were(fields: SimpleNamespace) -> None:
    pixels = fields.noisy(fields.star_image((60, 60), [30.0], [30.0], [1e5], 4.0), np.random.default_rng(19))
    pixels.mask[28, 28] = int(PixelMask.BAD)
    before = pixels.data.copy(), pixels.variance.copy(), pixels.mask.copy()
    x = np.array([30.4])
    centroid(pixels, x, x, 4.0)
    fwhm_of(pixels, x, x, 4.0)
    assert x[0] == 30.4
    assert all(np.array_equal(a, b) for a, b in zip(before, (pixels.data, pixels.variance, pixels.mask), strict=True))
