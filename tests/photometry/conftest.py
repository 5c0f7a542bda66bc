"""Images for the tests of photometry: stars on a noisy sky, made by brute force."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from hwpol.pixels import Pixels


def star(size: int, x: float, y: float, fwhm: float, kind: str = "moffat", ellipticity: float = 0.0) -> np.ndarray:
    """Unit-flux image, averaged over 5 x 5 points a pixel; x, y from the middle pixel of a size x size stamp."""
    s = (np.arange(size * 5) - (size * 5) // 2) / 5
    r2 = ((s[None, :] - x) * (1 + ellipticity)) ** 2 + ((s[:, None] - y) * (1 - ellipticity)) ** 2
    if kind == "moffat":
        a2 = fwhm**2 / (4 * (2 ** (1 / 3) - 1))
        light = (1 + r2 / a2) ** -3 * 2 / (np.pi * a2)
    else:
        s2 = (fwhm / 2.3548) ** 2
        core = np.exp(-r2 / 2 / s2) / (2 * np.pi * s2)
        light = core if kind == "gauss" else 0.8 * core + 0.2 * np.exp(-r2 / 12 / s2) / (12 * np.pi * s2)
    return light.reshape(size, 5, size, 5).mean(axis=(1, 3))


def noisy(
    rng: np.random.Generator, electrons: np.ndarray, read_noise: float = 5.0, mask: np.ndarray | None = None
) -> Pixels:
    """Counts of an expectation, with the true variance."""
    data = rng.poisson(electrons) + rng.normal(0.0, read_noise, electrons.shape)
    flags = np.zeros(electrons.shape, np.uint8) if mask is None else mask
    return Pixels(data.astype(np.float32), (electrons + read_noise**2).astype(np.float32), flags)


@pytest.fixture(name="star")
def _star() -> Callable[..., np.ndarray]:
    return star


@pytest.fixture(name="noisy")
def _noisy() -> Callable[..., Pixels]:
    return noisy
