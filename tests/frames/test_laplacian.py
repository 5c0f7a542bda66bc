"""Cosmic-ray hits found by their edges, stars left alone."""

from __future__ import annotations

import numpy as np
import pytest

from hwpol.frames.laplacian import edge_significance, find_hits

SKY, NOISE = 100.0, 5.0


def _field(fwhm: float, rng: np.random.Generator, shape: tuple[int, int] = (256, 256)) -> np.ndarray:
    """Sky and Gaussian stars of every brightness and sub-pixel phase, integrated over 5 x 5 points a pixel."""
    y, x = np.mgrid[: shape[0], : shape[1]]
    image = np.full(shape, SKY)
    sub = (np.arange(5) - 2) / 5
    for _ in range(40):
        cx, cy = rng.uniform(8, shape[1] - 8), rng.uniform(8, shape[0] - 8)
        peak = 10 ** rng.uniform(1.5, 4.8)
        width = 2 * (fwhm / 2.3548) ** 2
        gx = np.mean([np.exp(-((x[0] + s - cx) ** 2) / width) for s in sub], axis=0)
        gy = np.mean([np.exp(-((y[:, 0] + s - cy) ** 2) / width) for s in sub], axis=0)
        image += peak * gy[:, None] * gx
    return image


def _exposed(truth: np.ndarray, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    data = (rng.poisson(truth) + rng.normal(0, NOISE, truth.shape)).astype(np.float32)
    return data, (np.maximum(data, 0) + NOISE**2).astype(np.float32)


def test_laplacian_of_a_lone_pixel_and_of_a_plane() -> None:
    image = np.zeros((7, 7), np.float32)
    image[3, 3] = 8.0
    # Four subpixels of 2 h - 0 each, averaged: twice the height; neighbours are clipped at zero.
    edges = edge_significance(image)
    assert edges[3, 3] == 16.0
    assert np.count_nonzero(edges) == 1
    plane = np.add.outer(np.arange(7.0), 2 * np.arange(7.0)).astype(np.float32)
    # A slope has subpixels above and below it alike: positive ones remain, at most the larger step.
    assert edge_significance(plane)[2:-2, 2:-2].max() <= 3.0


@pytest.mark.parametrize("fwhm", [2.0, 3.0, 5.0])
def test_stars_are_no_hits(fwhm: float) -> None:
    rng = np.random.default_rng(int(fwhm * 10))
    data, variance = _exposed(_field(fwhm, rng), rng)
    hits = find_hits(data, variance)
    # 65536 pixels, among them 40 stars up to 6e4 electrons: noise peaks above 5 sigma of the edge, a few per million.
    assert hits.sum() <= 3


@pytest.mark.parametrize("fwhm", [2.5, 4.0])
def test_hits_are_found(fwhm: float) -> None:
    rng = np.random.default_rng(int(fwhm * 100))
    truth = _field(fwhm, rng)
    data, _ = _exposed(truth, rng)
    y, x = rng.integers(4, 252, (2, 150))
    sigma = np.sqrt(truth[y, x] + NOISE**2)
    faint = truth[y, x] < 1.1 * SKY
    data[y, x] += (12.0 * sigma).astype(np.float32)
    tracks = rng.integers(10, 240, (20, 2))
    for ty, tx in tracks:
        data[ty + np.arange(6), tx + np.arange(6) // 2] += 500.0
    hits = find_hits(data, (np.maximum(data, 0) + NOISE**2).astype(np.float32))
    # Where no star helps to hide it a hit of 12 sigma stands at 10 or more of the edge's noise.
    assert hits[y, x][faint].mean() >= 0.98
    found = np.mean([hits[ty + np.arange(6), tx + np.arange(6) // 2].mean() for ty, tx in tracks])
    assert found >= 0.9


def test_flat_images_and_small_ones() -> None:
    assert not find_hits(np.ones((3, 4), np.float32), np.ones((3, 4), np.float32)).any()
    assert not find_hits(np.zeros((40, 40), np.float32), np.zeros((40, 40), np.float32)).any()
