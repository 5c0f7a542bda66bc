"""Foreign light in apertures, against stars made by brute force."""

from collections.abc import Callable

import numpy as np
import pytest

from hwpol.photometry.aperture import aperture_sums
from hwpol.photometry.measure import measure
from hwpol.photometry.scene import REMAINS, Known, foreign_light
from hwpol.pixels import Box, Pixels

SIZE = 81
SEEING = np.array([4.0, 4.6, 5.4, 6.0])


def scene(star: Callable[..., np.ndarray], rng: np.random.Generator, ratio: float, away: float, stretch: float = 0.05):
    """A star and its neighbour in four frames of worsening seeing, with the neighbour's true images."""
    stars, aliens = [], []
    for k, fwhm in enumerate(SEEING):
        stars.append(3e5 * star(SIZE, 0.3 * k, -0.2 * k, fwhm, "moffat", stretch * (-1) ** k))
        aliens.append(3e5 * ratio * star(SIZE, 0.3 * k + away, -0.2 * k, fwhm, "moffat", stretch * (-1) ** k))
    expected = [a + b + 50.0 for a, b in zip(stars, aliens, strict=True)]
    data = [rng.poisson(e) + rng.normal(0.0, 5.0, e.shape) for e in expected]
    frames = [
        Pixels(d.astype(np.float32), (np.maximum(d, 0) + 25.0).astype(np.float32), np.zeros(d.shape, np.uint8))
        for d in data
    ]

    def images(k: int, b: int, box: Box | None) -> Pixels:
        return frames[k] if box is None else frames[k].cut(box)

    k = np.arange(4)
    x, y = (SIZE // 2 + s * k[None, :, None] for s in (0.3, -0.2))
    known = Known(np.concatenate([x, x + away]), np.concatenate([y, y]), np.array([1.0, ratio]))
    radii = np.array([1.25, 1.75])[:, None] * SEEING
    true = np.array(
        [
            aperture_sums(Pixels(a.astype(np.float32), a.astype(np.float32), np.zeros(a.shape, np.uint8)),
                          x[0, i], y[0, i], radii[:, i]).flux[0]
            for i, a in enumerate(aliens)
        ]
    ).T  # fmt: skip
    return images, x, y, radii, known, true


@pytest.mark.parametrize(("ratio", "away"), [(0.2, 10.0), (1.0, 10.0), (0.05, 9.0)])
def test_light_of_a_neighbour(star: Callable[..., np.ndarray], ratio: float, away: float) -> None:
    """2.5 fwhm (of the best seeing) away, in seeing worse by up to half, images elongated in turn along and across:
    what is found is true within `REMAINS`, or four of its own errors."""
    images, x, y, radii, known, true = scene(star, np.random.default_rng(5), ratio, away)
    found = foreign_light(
        images, x, y, radii, known, SEEING[:, None] * 1.13, hdu_of_beam=[0], sections=[None]
    )  # fmt: skip
    wrong = np.abs(found.light[:, 0, :, 0] - true)
    assert np.all(wrong < REMAINS * true + 4 * np.sqrt(found.variance[:, 0, :, 0]))
    assert np.sqrt(np.mean((wrong / true) ** 2)) < REMAINS


def test_a_hit_beside_the_star_is_not_taken_for_light(star: Callable[..., np.ndarray]) -> None:
    """Charge of 20,000 electrons on four pixels near the neighbour changes its light by less than a tenth."""
    rng = np.random.default_rng(6)
    images, x, y, radii, known, true = scene(star, rng, 0.2, 10.0)
    options = {"hdu_of_beam": [0], "sections": [None]}
    images(1, 0, None).data[SIZE // 2 + 2 : SIZE // 2 + 4, SIZE // 2 + 8 : SIZE // 2 + 10] += 5e3
    found = foreign_light(images, x, y, radii, known, SEEING[:, None] * 1.13, **options)
    assert abs(found.light[1, 0, 1, 0] / true[1, 1] - 1) < REMAINS


def test_lonely_stars_pay_nothing(star: Callable[..., np.ndarray]) -> None:
    """Without neighbours within reach no image is opened."""

    def closed(k: int, b: int, box: Box | None) -> Pixels:
        raise AssertionError("an image was opened")

    x = np.full((1, 2, 1), 40.0)
    known = Known(np.concatenate([x, x + 60.0]), np.concatenate([x, x]), np.ones(2))
    found = foreign_light(
        closed, x, x, np.full((1, 2), 5.0), known, np.full((2, 1), 4.0), hdu_of_beam=[0], sections=[None]
    )
    assert not found.light.any()


@pytest.mark.parametrize(
    ("read_noise", "sky", "flux"), [(5.0, 0.0, 0.0), (5.0, 0.3, 100.0), (3.0, 2.0, 300.0), (2.0, 0.0, 1000.0)]
)
def test_errors_of_faint_apertures(star: Callable[..., np.ndarray], read_noise: float, sky: float, flux: float) -> None:
    """Variances from noisy counts, as the detector stage gives them: the rms of the pulls is 1 within 3 percent.

    The means of frames stand for the truth: 15 of 16 degrees of freedom are left. 4608 pulls have an rms good to 1.1
    percent; the seed is fixed.
    """
    rng = np.random.default_rng(11)
    expected = np.full((480, 480), sky)
    places = np.arange(20, 480, 40)
    for row in places:
        for column in places:
            expected[row - 19 : row + 20, column - 19 : column + 20] += flux * star(39, 0.0, 0.0, 4.0)

    def images(k: int, b: int, box: Box | None) -> Pixels:
        data = rng.poisson(expected) + rng.normal(0.0, read_noise, expected.shape)
        variance = np.maximum(data, 0.0) + read_noise**2
        return Pixels(data.astype(np.float32), variance.astype(np.float32), np.zeros(data.shape, np.uint8))

    x, y = (np.broadcast_to(a.ravel()[:, None, None], (len(places) ** 2, 16, 2)) for a in np.meshgrid(places, places))
    found = measure(
        images, x, y, radii=[5.0], annulus=[10.0, 16.0], hdu_of_beam=[0, 1], stars=None, hits=False, stamps=False
    )
    rest = found.flux - found.flux.mean(axis=2, keepdims=True)
    rms = np.sqrt(np.mean(rest**2 / found.variance) * 16 / 15)
    assert rms == pytest.approx(1.0, abs=0.03)
