"""Detection: what is a star, what is not, on images of any kind."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from hwpol.flags import Flag
from hwpol.pixels import PixelMask, Pixels
from hwpol.registration.detection import Stars, detect


def found_and_false(stars: Stars, x: NDArray[np.float64], y: NDArray[np.float64], within: float) -> tuple[int, int]:
    """True stars that were found, and detections that are none."""
    here, there = np.column_stack([stars.x, stars.y]), np.column_stack([x, y])
    found = int((cKDTree(here).query(there)[0] < within).sum())
    return found, int((cKDTree(there).query(here)[0] > within).sum())


@pytest.mark.parametrize("profile", ["gaussian", "moffat"])
@pytest.mark.parametrize("fwhm", [1.5, 2.0, 4.0, 8.0])
def test_finds_the_stars_and_their_width(fields: SimpleNamespace, profile: str, fwhm: float) -> None:
    rng = np.random.default_rng(21)
    x, y = rng.uniform(15, 497, (2, 50))
    image = fields.star_image((512, 512), x, y, 10 ** rng.uniform(4.2, 6, 50), fwhm, profile=profile)
    stars = detect(fields.noisy(image, rng))
    found, false = found_and_false(stars, x, y, max(1.5, 0.5 * fwhm))
    # Chance pairs closer than a width or two merge: 50^2/2 pairs x pi (1.5 fwhm)^2 / 512^2, under 2 at 8 pixels.
    assert found >= 50 - 4
    assert false == 0
    # A matching Gaussian is up to 1.13 times wider than this Moffat; the pixel adds a tenth at 1.5 pixels.
    assert fwhm * 0.98 < stars.width < fwhm * 1.26
    assert np.all(np.diff(stars.flux) <= 0)


def test_donuts(fields: SimpleNamespace) -> None:
    rng = np.random.default_rng(22)
    x, y = np.array([80.0, 200.3, 330.7, 420.0, 120.0]), np.array([90.0, 300.0, 120.4, 400.0, 420.0])
    pixels = fields.noisy(fields.star_image((512, 512), x, y, np.full(5, 5e5), 30.0, profile="donut"), rng)
    stars = detect(pixels)
    assert found_and_false(stars, x, y, 1.0) == (5, 0)
    # The Gaussian that matches a ring of outer diameter 30 and obstruction 0.35.
    assert 22 < stars.width < 33


@pytest.mark.parametrize("shape", [(4, 4), (7, 5), (16, 16), (5, 300), (64, 64), (300, 300)])
def test_blank_images_are_empty(fields: SimpleNamespace, shape: tuple[int, int]) -> None:
    rng = np.random.default_rng(23)
    assert len(detect(fields.noisy(np.zeros(shape), rng))) == 0
    assert len(detect(fields.noisy(np.zeros(shape), rng), fwhm=4.0)) == 0


def test_degenerate_images_are_empty() -> None:
    zeros = np.zeros((60, 60), np.float32)
    mask = np.zeros((60, 60), np.uint8)
    for pixels in (
        Pixels(zeros, zeros, mask),
        Pixels(zeros + np.nan, zeros + 1, mask),
        Pixels(zeros + 5, zeros + 1, mask + np.uint8(PixelMask.OUTSIDE)),
        Pixels(zeros[:0], zeros[:0], mask[:0]),
    ):
        assert len(detect(pixels)) == 0


@pytest.mark.parametrize(("shape", "fwhm"), [((16, 16), 2.5), ((64, 64), 5.0), ((9, 200), 2.0), ((120, 120), 12.0)])
def test_one_bright_star_in_a_small_field(fields: SimpleNamespace, shape: tuple[int, int], fwhm: float) -> None:
    rng = np.random.default_rng(24)
    x, y = np.array([shape[1] / 2 + 0.2]), np.array([shape[0] / 2 - 0.3])
    stars = detect(fields.noisy(fields.star_image(shape, x, y, [3e5], fwhm), rng))
    assert len(stars) == 1
    assert np.hypot(stars.x[0] - x[0], stars.y[0] - y[0]) < 0.1
    assert stars.snr[0] > 100


def test_gradients_hot_pixels_hits_and_bad_columns(fields: SimpleNamespace) -> None:
    rng = np.random.default_rng(25)
    n = 120
    x, y = rng.uniform(15, 1009, (2, n))
    rows, columns = np.indices((1024, 1024))
    sky = 200 + 0.3 * columns + 150 * np.sin(rows / 300) ** 2
    pixels = fields.noisy(fields.star_image((1024, 1024), x, y, 10 ** rng.uniform(4, 6, n), 4.0), rng, sky=sky)
    data = pixels.data
    data[rng.integers(0, 1024, 300), rng.integers(0, 1024, 300)] += 10 ** rng.uniform(2.5, 4.7, 300)
    for _ in range(60):
        r, c, angle = rng.integers(20, 1000), rng.integers(20, 1000), rng.uniform(0, np.pi)
        for t in range(rng.integers(1, 10)):
            data[int(r + t * np.sin(angle)), int(c + t * np.cos(angle))] += 2000
    data[:, 700] += 300
    data[:, 900] = 0
    stars = detect(pixels)
    found, false = found_and_false(stars, x, y, 1.5)
    # A blemish within a width of a star hides it: 360 blemishes and two columns cover 2 percent of the field.
    assert found >= 0.93 * n
    assert false <= 3
    assert stars.width == pytest.approx(4.06, abs=0.15)


def test_hot_pixels_alone_are_no_stars(fields: SimpleNamespace) -> None:
    rng = np.random.default_rng(26)
    pixels = fields.noisy(np.zeros((256, 256)), rng)
    pixels.data[rng.integers(0, 256, 40), rng.integers(0, 256, 40)] += 5000
    assert len(detect(pixels)) == 0
    one = fields.noisy(fields.star_image((256, 256), [120.3], [99.2], [3e4], 4.5), rng)
    one.data[rng.integers(0, 256, 40), rng.integers(0, 256, 40)] += 5000
    stars = detect(one)
    assert len(stars) == 1
    assert abs(stars.x[0] - 120.3) < 0.15


@pytest.mark.parametrize("bleed", [False, True])
def test_saturated_stars_are_kept_and_flagged(fields: SimpleNamespace, bleed: bool) -> None:
    rng = np.random.default_rng(27)
    pixels = fields.noisy(fields.star_image((256, 256), [120.3, 50.0], [99.2, 50.0], [3e6, 2e4], 4.5), rng)
    full = pixels.data > 60000
    if bleed:
        full[60:160, 120] = True
    pixels.data[full] = 60000
    pixels.mask[full] = int(PixelMask.SATURATED)
    stars = detect(pixels)
    assert len(stars) == 2
    assert stars.flags[0] & Flag.SATURATED
    assert not stars.flags[1] & Flag.SATURATED
    # Half a pixel: what a plateau leaves of the centre.
    assert np.hypot(stars.x[0] - 120.3, stars.y[0] - 99.2) < 0.5
    assert stars.width == pytest.approx(4.55, abs=0.2)


def test_strips_and_corner(fields: SimpleNamespace) -> None:
    rng = np.random.default_rng(28)
    x = 30.0 + 90 * np.arange(10)
    y = rng.uniform(115, 185, 10)
    image = fields.star_image((400, 960), np.r_[x, x], np.r_[y, y + 120], np.full(20, 1e5), 4.0)
    pixels = fields.noisy(image, rng)
    outside = np.ones((400, 960), bool)
    outside[100:200] = outside[220:320] = False
    pixels.mask[outside] = int(PixelMask.OUTSIDE)
    pixels.data[outside] = -1e5
    stars = detect(Pixels(pixels.data, pixels.variance, pixels.mask, 1000, 50))
    assert found_and_false(stars, np.r_[x, x] + 1000, np.r_[y, y + 120] + 50, 1.0) == (20, 0)


def test_crowded_field_gives_true_places(fields: SimpleNamespace) -> None:
    rng = np.random.default_rng(29)
    n = 1500
    x, y = rng.uniform(5, 295, (2, n))
    stars = detect(fields.noisy(fields.star_image((300, 300), x, y, 10 ** rng.uniform(3, 5.5, n), 3.0), rng))
    _, false = found_and_false(stars, x, y, 1.5)
    assert len(stars) > 200
    # Blends of two lie between them.
    assert false < 0.02 * len(stars)


def test_blank_frames_seldom_show_a_star(fields: SimpleNamespace) -> None:
    rng = np.random.default_rng(30)
    total = sum(len(detect(fields.noisy(np.zeros((300, 300)), rng), fwhm=3.0)) for _ in range(10))
    # 10 x 300^2 / (4 pi sigma^2) independent places at 5 sigma (3e-7): 0.01 expected; Poisson sky adds a tail.
    assert total <= 1
