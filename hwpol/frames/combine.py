"""Clipped mean of a stack of frames, exact, in blocks that fit the processor's cache.

Every pixel is sorted over the frames; what sigma clipping about the median keeps is then a run of the sorted
values, found by counting. The sort is a network of minima and maxima over whole blocks (Batcher, 1968, AFIPS Conf.
Proc. 32, 307; Knuth, The Art of Computer Programming 3, algorithm 5.2.2M).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.stats import chi2

BLOCK_PIXELS = 16384
TILE_ROWS = 16
TILE_COLUMNS = 256
KEPT_FRACTION = 0.9
STACK_BYTES = 256 << 20
FEW_FRAMES = 12
"""Below this many frames one outlier hides in the standard deviation of its own pixel: in n equal values it lies
n / sqrt(n - 1) standard deviations from the median, 3.5 for n = 11. The noise is then pooled over neighbours."""


@dataclass(frozen=True)
class Combined:
    """A combined stack.

    Attributes
    ----------
    mean : ndarray, shape (ny, nx), float32
        Mean of the values kept; NaN where there was none.
    variance : ndarray, shape (ny, nx), float32
        Variance of that mean; NaN where fewer than two frames tell it.
    count : ndarray, shape (ny, nx), int16
        Values kept.
    """

    mean: NDArray[np.float32]
    variance: NDArray[np.float32]
    count: NDArray[np.int16]


@lru_cache(maxsize=64)
def comparators(n: int) -> tuple[tuple[int, int], ...]:
    """Return the pairs (i, j), i < j, whose ordering in turn sorts `n` values."""
    pairs = []
    p = 1
    while p < n:
        k = p
        while k >= 1:
            for j in range(k % p, n - k, 2 * k):
                for i in range(j, j + min(k, n - j - k)):
                    if i // (2 * p) == (i + k) // (2 * p):
                        pairs.append((i, i + k))
            k //= 2
        p *= 2
    return tuple(pairs)


def clipped_mean(
    stack: NDArray[np.float32], *, sigma: float = 4.0, max_iterations: int = 10, pooled: bool | None = None
) -> Combined:
    """Sigma-clipped mean over the first axis.

    Parameters
    ----------
    stack : ndarray, shape (n, ny, nx)
        Frames on one scale; values that are not finite are missing.
    sigma : float
        Values further than this many standard deviations from the median are clipped.
    max_iterations : int
        At most so many rounds of clipping.
    pooled : bool, optional
        False: the standard deviation of each pixel's own kept values (n in the denominator), iterated: exactly
        `astropy.stats.SigmaClip`. True: one round with the standard deviation pooled over the pixels of a tile,
        which finds outliers among few frames. Default: pooled below `FEW_FRAMES` frames.

    Returns
    -------
    Combined
        Variance of the mean: pooled variance / count, or the sample variance of the values kept / count.
    """
    n, ny, nx = stack.shape
    if pooled is None:
        pooled = n < FEW_FRAMES
    mean = np.empty((ny, nx), np.float32)
    variance = np.empty((ny, nx), np.float32)
    count = np.empty((ny, nx), np.int16)
    rows = min(TILE_ROWS, max(1, BLOCK_PIXELS // nx))
    for y in range(0, ny, rows):
        block = np.array(stack[:, y : y + rows], np.float32)
        shape = block.shape[1:]
        results = _block(block.reshape(n, -1), shape, sigma, max_iterations, pooled)
        part = slice(y, y + rows)
        mean[part], variance[part], count[part] = (result.reshape(shape) for result in results)
    return Combined(mean, variance, count)


def combine_frames(load: Callable[[int, int, int], NDArray[np.float32]], n: int, shape: tuple[int, int]) -> Combined:
    """Clipped mean of `n` frames read in blocks of rows: ``load(i, y0, y1)`` returns rows y0 <= y < y1 of frame i."""
    ny, nx = shape
    rows = max(1, STACK_BYTES // (4 * nx * n))
    stack = np.empty((n, min(rows, ny), nx), np.float32)
    parts = []
    for y0 in range(0, ny, rows):
        y1 = min(y0 + rows, ny)
        for i in range(n):
            stack[i, : y1 - y0] = load(i, y0, y1)
        parts.append(clipped_mean(stack[:, : y1 - y0]))
    return Combined(
        np.concatenate([part.mean for part in parts]),
        np.concatenate([part.variance for part in parts]),
        np.concatenate([part.count for part in parts]),
    )


def _sort(values: NDArray[np.float32]) -> None:
    spare = np.empty_like(values[0])
    for i, j in comparators(len(values)):
        np.minimum(values[i], values[j], out=spare)
        np.maximum(values[i], values[j], out=values[j])
        values[i] = spare


def _median(values: NDArray[np.float32], low: NDArray[np.intp], high: NDArray[np.intp]) -> NDArray[np.float32]:
    """Median of the sorted run low <= i < high of each column."""
    last = len(values) - 1
    lower = np.take_along_axis(values, np.clip((low + high - 1) // 2, 0, last)[None], axis=0)[0]
    upper = np.take_along_axis(values, np.clip((low + high) // 2, 0, last)[None], axis=0)[0]
    return np.float32(0.5) * (lower + upper)


def _moments(
    values: NDArray[np.float32], low: NDArray[np.intp], high: NDArray[np.intp]
) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    """Mean and mean square deviation of the run low <= i < high of each column (high > low)."""
    index = np.arange(len(values))[:, None]
    outside = (index < low) | (index >= high)
    kept = values.copy()
    kept[outside] = 0.0
    number = (high - low).astype(np.float32)
    mean = kept.sum(axis=0) / number
    kept -= mean
    kept[outside] = 0.0
    return mean, np.einsum("ij,ij->j", kept, kept) / number


def _block(
    values: NDArray[np.float32], shape: tuple[int, ...], sigma: float, max_iterations: int, pooled: bool
) -> tuple[NDArray[np.float32], NDArray[np.float32], NDArray[np.intp]]:
    n, m = values.shape
    missing = ~np.isfinite(values)
    if missing.any():
        values[missing] = np.inf
    _sort(values)
    low = np.zeros(m, np.intp)
    high = n - missing.sum(axis=0)
    empty = high == 0
    values[0, empty] = 0.0
    high = np.where(empty, 1, high)
    # Deviations from the median are small, so float32 sums of them lose nothing that matters.
    centre = _median(values, low, high)
    values -= centre
    noise = _tile_variance(values, low, high, shape) if pooled else None
    if noise is not None:
        # The median of n normal values has variance pi / (2 n), which matters among few.
        reach = np.sqrt(noise * (1.0 + 0.5 * np.pi / (high - low))).astype(np.float32) * np.float32(sigma)
        low, high = _run(values, low, high, -reach, reach)
    else:
        active = np.arange(m)
        part = values
        for _ in range(max_iterations):
            own_low, own_high = low[active], high[active]
            _, square = _moments(part, own_low, own_high)
            middle = _median(part, own_low, own_high)
            reach = np.float32(sigma) * np.sqrt(square)
            low[active], high[active] = _run(part, own_low, own_high, middle - reach, middle + reach)
            changed = (low[active] != own_low) | (high[active] != own_high)
            if not changed.any():
                break
            active, part = active[changed], part[:, changed]
    number = high - low
    mean, square = _moments(values, low, high)
    mean += centre
    with np.errstate(divide="ignore", invalid="ignore"):
        variance = (square / (number - 1) if noise is None else noise / number).astype(np.float32)
    variance[number + n * empty < 2 if noise is None else np.isnan(variance)] = np.nan
    mean[empty] = variance[empty] = np.nan
    return mean, variance, np.where(empty, 0, number)


def _run(
    values: NDArray[np.float32],
    low: NDArray[np.intp],
    high: NDArray[np.intp],
    bottom: NDArray[np.float32],
    top: NDArray[np.float32],
) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Shrink the run to the values within bottom <= v <= top."""
    return np.maximum(low, (values < bottom).sum(axis=0)), np.minimum(high, (values <= top).sum(axis=0))


@lru_cache(maxsize=64)
def _cut_correction(k: int) -> float:
    return float(chi2.cdf(chi2.ppf(KEPT_FRACTION, k), k + 2)) / KEPT_FRACTION


def _tile_variance(
    values: NDArray[np.float32], low: NDArray[np.intp], high: NDArray[np.intp], shape: tuple[int, ...]
) -> NDArray[np.float32] | None:
    """Variance of one frame's pixel, pooled over tiles; None where fewer than two frames tell it.

    Of the sample variances of a tile the lowest `KEPT_FRACTION` are averaged, so that hits and hot pixels do not
    enter, and the average is corrected for the cut: for k degrees of freedom the part of the mean of a chi-square
    variable that lies below its quantile x is F(x; k + 2). A tile without scatter (constant frames) clips nothing.
    """
    n = len(values)
    if n < 2:
        return None
    number = high - low
    _, square = _moments(values, low, high)
    sample = np.where(number > 1, square * number / np.maximum(number - 1, 1), np.nan).reshape(shape)
    correction = _cut_correction(n - 1)
    out = np.empty(shape, np.float32)
    for x in range(0, shape[1], TILE_COLUMNS):
        tile = sample[:, x : x + TILE_COLUMNS]
        known = np.sort(tile[np.isfinite(tile)])
        kept = known[: max(1, round(KEPT_FRACTION * known.size))]
        pooled = float(kept.mean()) / correction if known.size else np.nan
        out[:, x : x + TILE_COLUMNS] = pooled if pooled > 0.0 or not known.size else float(known[-1])
    out[~(out >= 0.0)] = np.inf
    return out.reshape(-1)
