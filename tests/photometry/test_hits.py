from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from hwpol.photometry.growth import shapes
from hwpol.photometry.hits import find_hits

SKY, READ_NOISE = 100.0, 5.0


def visit(
    star: Callable[..., np.ndarray],
    rng: np.random.Generator,
    *,
    flux: float,
    fwhm: float,
    kind: str = "moffat",
    frames: int = 8,
    rate: float = 0.05,
    neighbour: tuple[float, float, int] = (0.0, 0.0, 2),
) -> tuple[tuple, np.ndarray]:
    """One star in two beams: seeing over a range of 5 to 3, dithers, fluxes that scatter, shapes that differ by beam.

    `rate` of the apertures are hit by 10 to 30 sigma of the aperture's noise in tracks of 1 to 6 pixels, of which three
    in ten lie on the core. `neighbour`: relative flux, distance in fwhm, number of beams it reaches.
    """
    radius = 1.5 * fwhm
    half = int(np.ceil(radius + 0.5))
    size = 2 * half + 1
    shape = (1, frames, 2, size, size)
    data, variance = np.empty(shape, np.float32), np.empty(shape, np.float32)
    place = rng.uniform(-0.5, 0.5, (frames, 2, 2))
    struck = np.zeros((1, frames, 2), bool)
    yy, xx = np.mgrid[-half : half + 1, -half : half + 1]
    for k in range(frames):
        seeing, stretch = fwhm * rng.uniform(0.75, 1.25), rng.uniform(-0.04, 0.04)
        for b in range(2):
            x, y = place[k, b]
            light = star(size, x, y, seeing * (1 + 0.05 * b), kind, stretch)
            share, away, reached = neighbour
            if b < reached and share:
                light = light + share * star(size, x + away * fwhm, y, seeing * (1 + 0.05 * b), kind, stretch)
            expected = flux * rng.uniform(0.85, 1.15) * light + SKY
            counts = rng.poisson(expected) + rng.normal(0, READ_NOISE, expected.shape)
            if rng.random() < rate:
                struck[0, k, b] = True
                inside = np.hypot(xx - x, yy - y) < radius
                charge = np.sqrt((expected + READ_NOISE**2)[inside].sum()) * rng.uniform(10, 30)
                track = _track(rng, x, y, radius, fwhm)
                for (px, py), part in zip(track, rng.dirichlet(np.full(len(track), 5.0)), strict=True):
                    counts[py + half, px + half] += rng.poisson(charge * part)
            data[0, k, b] = counts - SKY
            variance[0, k, b] = np.maximum(counts, 0) + READ_NOISE**2
    place = place + rng.normal(0, 0.02, place.shape)  # what the registration does not know
    dx, dy = place[None, ..., 0], place[None, ..., 1]
    width = shapes(data, dx, dy).fwhm
    return (data, variance, np.zeros(shape, np.uint8), dx, dy, [radius], width), struck


def _track(rng: np.random.Generator, x: float, y: float, radius: float, fwhm: float) -> list[tuple[int, int]]:
    while True:
        length, angle, turn = rng.integers(1, 7), rng.uniform(0, np.pi), rng.uniform(0, 2 * np.pi)
        r = (radius if rng.random() < 0.7 else 0.5 * fwhm) * np.sqrt(rng.random())
        along = np.arange(length) - (length - 1) / 2
        px = np.rint(x + r * np.cos(turn) + along * np.cos(angle)).astype(int)
        py = np.rint(y + r * np.sin(turn) + along * np.sin(angle)).astype(int)
        if (np.hypot(px - x, py - y) < radius - 0.7).all():
            return list(dict.fromkeys(zip(px.tolist(), py.tolist(), strict=True)))


def rates(star: Callable[..., np.ndarray], seed: int, visits: int, **options: object) -> tuple[int, int, int, int]:
    """Pairs hit and found, pairs hit, clean pairs dropped, clean pairs."""
    rng = np.random.default_rng(seed)
    result = np.zeros(4, int)
    for _ in range(visits):
        arguments, struck = visit(star, rng, **options)  # type: ignore[arg-type]
        found, true = find_hits(*arguments)[0].any(axis=-1), struck.any(axis=-1)
        result += [(found & true).sum(), true.sum(), (found & ~true).sum(), (~true).sum()]
    return tuple(result.tolist())  # type: ignore[return-value]


@pytest.mark.parametrize(("flux", "fwhm"), [(1e3, 4.0), (3e4, 3.0), (1e6, 4.0)])
def test_hits_are_found_and_nothing_else(star: Callable[..., np.ndarray], flux: float, fwhm: float) -> None:
    found, hit, dropped, clean = rates(star, 1, 12, flux=flux, fwhm=fwhm, rate=0.1)
    assert hit >= 10
    assert found >= hit - 1
    assert dropped <= 0.002 * 2 * clean + 1


@pytest.mark.slow
@pytest.mark.parametrize("kind", ["moffat", "gauss", "double"])
@pytest.mark.parametrize(("flux", "fwhm"), [(1e3, 2.7), (3e4, 2.7), (1e6, 2.7), (3e4, 4.0), (1e6, 4.0), (1e6, 8.0)])
def test_rates_over_seeing_and_brightness(star: Callable[..., np.ndarray], kind: str, flux: float, fwhm: float) -> None:
    """Bounds are the demand (99 of 100, 2 in 1000 apertures) plus 2.3 sigma of the counting of this sample."""
    found, hit, dropped, clean = rates(star, 2, 24, flux=flux, fwhm=fwhm, kind=kind)
    assert hit - found <= 0.01 * hit + 2.3 * np.sqrt(0.01 * hit) + 1
    assert dropped <= 0.002 * 2 * clean + 2.3 * np.sqrt(0.002 * 2 * clean)


@pytest.mark.parametrize("neighbour", [(1.0, 2.5, 2), (1.0, 2.5, 1), (0.2, 1.2, 1), (0.05, 1.0, 2)])
def test_a_neighbour_whose_light_follows_the_seeing_is_no_hit(
    star: Callable[..., np.ndarray], neighbour: tuple[float, float, int]
) -> None:
    _, _, dropped, clean = rates(star, 3, 5, flux=1e5, fwhm=4.0, rate=0.0, neighbour=neighbour)
    assert dropped <= 0.02 * clean


def test_masked_pixels_and_unknown_places_are_not_looked_at(star: Callable[..., np.ndarray]) -> None:
    arguments, _ = visit(star, np.random.default_rng(4), flux=3e4, fwhm=3.0, frames=4, rate=0.0)
    data, variance, mask, dx, dy, radii, width = arguments
    data[0, 1, 0, 7, 8] = 1e6
    assert find_hits(*arguments)[0, 0, 1].any()
    mask[0, 1, 0, 7, 8] = 1
    assert not find_hits(*arguments).any()
    dx[0, 2, 1] = np.nan
    data[0, 2, 1, 6, 6] = 1e6
    assert not find_hits(data, variance, mask, dx, dy, radii, width)[0, 0, 2, 1]


def test_a_single_image_cannot_be_compared() -> None:
    one = np.ones((2, 1, 1, 9, 9), np.float32)
    assert not find_hits(one, one, np.zeros(one.shape, np.uint8), np.zeros((2, 1, 1)), np.zeros((2, 1, 1)), [3.0]).any()
