"""What lies under the stars: the sky, and bad columns and rows that no mask names.

Such lines would pass as rows of stars, with partners in every beam.
"""

from __future__ import annotations

import warnings
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

Bools = NDArray[np.bool_]
Floats = NDArray[np.float64]

# Rows that one judgement of a column rests on: the median of 64 is good to 0.16 of the pixel noise.
_BLOCK = 64
# In units of the pixel noise; a line below that adds less than a star at the detection limit.
_EXCESS = 1.0
# Share of its pixels that differ in the same sense: 0.79 at an excess of one sigma, 0.5 without.
_ALONG = 0.75


def background(data: NDArray[np.float32], bad: Bools) -> Floats:
    """Clipped median mesh of the sky, interpolated to every pixel.

    The mesh is taken on averaged pixels: the sky needs no resolution and the time falls with their number.
    """
    from scipy import ndimage

    n = int(np.clip(min(data.shape) // 128, 1, 8))
    ny, nx = (length // n * n for length in data.shape)
    good = ~bad[:ny, :nx].reshape(ny // n, n, nx // n, n)
    count = good.sum(axis=(1, 3))
    small = np.where(bad, 0.0, data)[:ny, :nx].reshape(ny // n, n, nx // n, n).sum(axis=(1, 3)) / np.maximum(count, 1)
    mesh = _mesh(small, count == 0)
    if n == 1:
        return mesh
    rows = (np.arange(data.shape[0]) + 0.5) / n - 0.5
    columns = (np.arange(data.shape[1]) + 0.5) / n - 0.5
    wide = ndimage.map_coordinates(
        mesh, np.meshgrid(np.arange(mesh.shape[0]), columns, indexing="ij"), order=1, mode="nearest"
    )
    low = np.clip(np.floor(rows).astype(int), 0, max(mesh.shape[0] - 2, 0))
    share = np.clip(rows - low, 0.0, 1.0)[:, None]
    return wide[low] * (1 - share) + wide[np.minimum(low + 1, mesh.shape[0] - 1)] * share


def _mesh(small: Floats, hidden: Bools) -> Floats:
    from astropy.stats import SigmaClip
    from photutils.background import Background2D, MedianBackground

    box = max(24, 12 * min(small.shape) // 128)
    seen = small[~hidden]
    middle = float(np.median(seen))
    spread = 1.4826 * float(np.median(np.abs(seen - middle)))
    level = float(np.median(seen[np.abs(seen - middle) <= 3 * spread]))
    if min(small.shape) < 3 * box:
        return _plane(small, hidden, level)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            found = Background2D(
                small,
                box_size=box,
                mask=hidden,
                filter_size=3,
                exclude_percentile=80.0,
                sigma_clip=SigmaClip(sigma=3.0, maxiters=5),
                bkg_estimator=MedianBackground(),
            )
            return np.asarray(found.background, dtype=np.float64)
    except ValueError:
        # Every box of the mesh is masked for the most part: too little sky for a mesh.
        return _plane(small, hidden, level)


def _plane(small: Floats, hidden: Bools, level: float) -> Floats:
    """Clipped plane; a constant where the image is tiny."""
    y, x = np.indices(small.shape)
    u, v = x / small.shape[1] - 0.5, y / small.shape[0] - 0.5
    design = np.stack([np.ones(small.shape), u, v], axis=-1)
    if min(small.shape) < 16:
        return np.full(small.shape, level)
    model = np.full(small.shape, level)
    for _ in range(6):
        residual = small - model
        scatter = 1.4826 * np.median(np.abs(residual[~hidden]))
        use = ~hidden & (np.abs(residual) <= 2.5 * scatter)
        if use.sum() < 0.2 * (~hidden).sum() or use.sum() < 30:
            return np.full(small.shape, level)
        model = design @ np.linalg.lstsq(design[use], small[use], rcond=None)[0]
    return np.asarray(model)


def bad_lines(flat: NDArray[np.float32], bad: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Pixels of columns and rows, or long parts of them, that stand out from their neighbours.

    Parameters
    ----------
    flat : ndarray, shape (ny, nx)
        Image without sky; zero where `bad`.
    bad : ndarray of bool, shape (ny, nx)
        Pixels known to be bad.

    Returns
    -------
    ndarray of bool, shape (ny, nx)
    """
    seen = flat[~bad]
    seen = seen[:: max(1, len(seen) // 50_000)]
    noise = 1.4826 * float(np.median(np.abs(seen))) if len(seen) else 0.0
    found = np.zeros(flat.shape, bool)
    if noise <= 0:
        return found
    _mark(flat, found, noise)
    _mark(flat.T, found.T, noise)
    return found


def _mark(flat: NDArray[np.float32], found: NDArray[np.bool_], noise: float) -> None:
    """Mark the bad columns of `flat` in `found` (a view), block of rows by block of rows."""
    from scipy.ndimage import median_filter

    ny, nx = flat.shape
    if ny < _BLOCK or nx < 16:
        return
    step = max(1, ny // 1024)
    edges = np.linspace(0, ny, max(1, ny // (_BLOCK * step)) + 1).astype(int)
    for start, stop in pairwise(edges):
        block = flat[start:stop:step]
        level = np.median(block, axis=0)
        # Light that a star or nebula spreads over more columns stays; the filter follows it.
        excess = level - median_filter(level, size=9, mode="nearest")
        columns = np.flatnonzero(np.abs(excess) > _EXCESS * noise)
        # A bad column differs all along; in a crowd of stars some pixels do.
        beside = 0.5 * (block[:, np.abs(columns - 3)] + block[:, nx - 1 - np.abs(nx - 4 - columns)])
        along = np.mean((block[:, columns] - beside) * excess[columns] > 0, axis=0)
        found[start:stop, columns[along > _ALONG]] = True
