"""Cosmic-ray hits in a single frame by the edges they have (van Dokkum 2001, PASP 113, 1420).

A hit has sharper edges than the point-spread function allows: its Laplacian on a twofold subsampled image stands
out of the noise, and also out of the fine structure that a star of the same height would show.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

MARGIN = 8
"""Pixels around a box that decide on the pixels in it (windows of 9 x 9 and one pixel of growth, rounded up)."""


def edge_significance(data: NDArray[np.float32]) -> NDArray[np.float32]:
    """Return L+, the positive Laplacian of the twofold subsampled image, averaged back to pixels (paper, eq. 5-8)."""
    padded = np.pad(data, 1, mode="edge")
    centre = data
    edges = np.zeros_like(data)
    # Each subpixel has two neighbours in its own pixel, and one across either axis.
    for across in (padded[:-2, 1:-1], padded[2:, 1:-1]):
        for along in (padded[1:-1, :-2], padded[1:-1, 2:]):
            edges += np.maximum(2.0 * centre - across - along, 0.0)
    return edges * np.float32(0.25)


def find_hits(
    data: NDArray[np.float32], variance: NDArray[np.float32], *, sigma: float = 5.0, contrast: float = 3.0
) -> NDArray[np.bool_]:
    """Find the pixels of cosmic-ray hits.

    Parameters
    ----------
    data, variance : ndarray, shape (ny, nx)
        Electrons (sky in) and electrons squared, finite.
    sigma : float
        Least significance of the edge over the noise, S' of the paper.
    contrast : float
        Least ratio of L+/2 (the height of a lone pixel) to the fine-structure image. Stars reach 0.5 at a fwhm of
        3 pixels, 1 at 2 and 2.4 at 1.5 (Gaussian, centred on a pixel).

    Returns
    -------
    ndarray of bool, shape (ny, nx)
        Hits, grown by the neighbours that stand out by half of `sigma`.

    Notes
    -----
    One round, nothing replaced. The noise is the median of `variance` over 5 x 5 pixels, taken at the pixel for its
    whole neighbourhood. Medians are formed at candidates only, which is exact and far quicker.
    """
    edges = edge_significance(data)
    least = ndimage.minimum_filter(variance, 5)
    hit = np.zeros(data.shape, bool)
    seeds = _confirmed(data, variance, edges, edges > 2.0 * sigma * np.sqrt(least), sigma, contrast)
    hit[seeds] = True
    near = ndimage.binary_dilation(hit, np.ones((3, 3), bool)) & ~hit
    hit[_confirmed(data, variance, edges, near, 0.5 * sigma, 0.0)] = True
    return hit


def _windows(image: NDArray[np.float32], y: NDArray[np.intp], x: NDArray[np.intp], half: int) -> NDArray[np.float32]:
    padded = np.pad(image, half, mode="reflect" if min(image.shape) > half else "edge")
    views = np.lib.stride_tricks.sliding_window_view(padded, (2 * half + 1, 2 * half + 1))
    return views[y, x]


def _confirmed(
    data: NDArray[np.float32],
    variance: NDArray[np.float32],
    edges: NDArray[np.float32],
    candidates: NDArray[np.bool_],
    sigma: float,
    contrast: float,
) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    y, x = np.nonzero(candidates)
    if y.size == 0:
        return y, x
    noise = np.sqrt(np.median(_windows(variance, y, x, 2), axis=(1, 2)))
    smooth = np.median(_windows(edges, y, x, 2), axis=(1, 2))
    height = 0.5 * (edges[y, x] - smooth)
    sharp = height > noise * sigma
    y, x, noise, height = y[sharp], x[sharp], noise[sharp], height[sharp]
    if contrast > 0.0 and y.size:
        small = np.lib.stride_tricks.sliding_window_view(_windows(data, y, x, 4), (3, 3), axis=(1, 2))
        medians = np.median(small, axis=(-2, -1))
        fine = medians[:, 3, 3] - np.median(medians, axis=(1, 2))
        stands_out = height > contrast * np.maximum(fine, 0.01 * noise)
        y, x = y[stands_out], x[stands_out]
    return y, x
