"""Frame shifts of fields without stars, by cross-correlation of each beam's section."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from hwpol.pixels import Pixels
from hwpol.registration.centroids import UNUSABLE

Floats = NDArray[np.float64]

# Normalised correlation of two shifted images; noise alone gives a few hundredths on a hundred pixels squared.
_LEAST_LIKENESS = 0.2


def prepared(pixels: Pixels) -> Floats:
    """Image without sky, holes at zero, clipped at hits."""
    from scipy.ndimage import median_filter

    bad = ((pixels.mask & UNUSABLE) != 0) | ~np.isfinite(pixels.data)
    data = np.where(bad, np.nan, pixels.data).astype(np.float64)
    level = float(np.nanmedian(data)) if not bad.all() else 0.0
    image = np.nan_to_num(data - level)
    # Hits and hot pixels do not move with the field: they would hold the peak at zero.
    smooth = median_filter(image, size=3)
    noise = 1.4826 * float(np.median(np.abs(image - smooth)))
    return np.where(np.abs(image - smooth) > 6 * noise + 0.5 * np.abs(smooth), smooth, image)


def _window(shape: tuple[int, int]) -> Floats:
    return np.outer(np.hanning(shape[0] + 2)[1:-1], np.hanning(shape[1] + 2)[1:-1])


def _overlap(reference: Floats, image: Floats, dx: int, dy: int) -> tuple[Floats, Floats]:
    """Parts of both images that show the same field when `image` is displaced by (dx, dy)."""
    ny, nx = reference.shape
    a = reference[max(0, -dy) : ny - max(0, dy), max(0, -dx) : nx - max(0, dx)]
    b = image[max(0, dy) : ny - max(0, -dy), max(0, dx) : nx - max(0, -dx)]
    return a, b


def image_shift(reference: Floats, image: Floats) -> tuple[Floats, float]:
    """Displacement (dx, dy) of `image` from `reference`, and the correlation of the two once it is undone.

    Sky removed beforehand; a Hann window hides what crosses the edges; un-normalised correlation refined to 0.01
    pixel, repeated on the common part until the window sits on the same field in both.
    """
    from skimage.registration import phase_cross_correlation

    dx = dy = 0
    total = np.zeros(2)
    for _ in range(4):
        a, b = _overlap(reference, image, dx, dy)
        if min(a.shape) < 8 or not a.any() or not b.any():
            return total, 0.0
        window = _window(a.shape)
        found = phase_cross_correlation((a - a.mean()) * window, (b - b.mean()) * window, upsample_factor=100,
                                        normalization=None)[0]  # fmt: skip
        total = np.array([dx - found[1], dy - found[0]])
        nearest = np.rint(total).astype(int)
        if abs(nearest[0] - dx) + abs(nearest[1] - dy) == 0:
            break
        dx, dy = int(nearest[0]), int(nearest[1])
    a, b = _overlap(reference, image, *(int(v) for v in np.rint(total)))
    if min(a.shape) < 8:
        return total, 0.0
    window = _window(a.shape)
    a, b = (a - a.mean()) * window, (b - b.mean()) * window
    norm = float(np.sqrt((a**2).sum() * (b**2).sum()))
    return total, float((a * b).sum()) / norm if norm > 0 else 0.0


def combined_shift(references: list[Floats], images: list[Floats]) -> tuple[Floats, float, bool]:
    """Mean shift over the beams weighted by likeness, its scatter between beams, and whether it can be trusted."""
    shifts, weights = [], []
    for reference, image in zip(references, images, strict=True):
        shift, likeness = image_shift(reference, image)
        if likeness > _LEAST_LIKENESS:
            shifts.append(shift)
            weights.append(likeness**2)
    if not shifts:
        return np.zeros(2), float("nan"), False
    mean = np.average(shifts, axis=0, weights=weights)
    spread = float(np.sqrt(np.mean((np.array(shifts) - mean) ** 2)))
    return mean, spread, spread < 2.0
