"""Gaussian-windowed centroids and widths of many stars at once.

The windowed centroid is the fixed point of  sum w(r - c) (r - c) I = 0  with a
Gaussian w of the star's own width; its scatter is about 1.1 to 1.2 times the
Cramer-Rao bound (measured). The window is separable, so each iteration is two
small matrix products a star.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from hwpol.pixels import PixelMask, Pixels

Floats = NDArray[np.float64]
Bools = NDArray[np.bool_]

FWHM_PER_SIGMA = float(np.sqrt(8 * np.log(2)))
UNUSABLE = int(PixelMask.BAD | PixelMask.COSMIC_RAY | PixelMask.OUTSIDE)

# Below this width the pixels, not the window, sample the star: a narrower window would see one pixel.
_NARROWEST_WINDOW = 2.2
# Scatter that the place within the pixel leaves at a width of 1.5 pixels; 0.003 at 2, nothing from 3 on (measured).
_SAMPLING = 0.009
_ITERATIONS = 25
_CONVERGED = 2e-4
_CHUNK_PIXELS = 4_000_000
_MOST_SKY = 1000
# Stars wider than this are measured on binned pixels: nothing is lost and the time no longer grows with the width.
_WELL_SAMPLED = 8.0


class Measured(NamedTuple):
    """Windowed measurements, each of shape (stars,): pixels, electrons; `err` is per axis."""

    x: Floats
    y: Floats
    err: Floats
    ok: Bools
    flux: Floats
    snr: Floats


@dataclass(frozen=True)
class _Stamps:
    """Square cut-outs: sky-free data, variance and bad pixels (star, m, m), with the corner pixels x0, y0 (star,)."""

    data: Floats
    variance: Floats
    bad: Bools
    x0: NDArray[np.int64]
    y0: NDArray[np.int64]


def _half(fwhm: float) -> int:
    """Half side of a stamp: window and a ring of sky around it."""
    return int(np.ceil(2.6 * fwhm)) + 2


def binned(pixels: Pixels, n: int) -> Pixels:
    """Sums of n x n pixels, masked ones standing at the mean of the others of their bin; corner at 0, 0."""
    ny, nx = (length // n * n for length in pixels.data.shape)
    shape = (ny // n, n, nx // n, n)
    good = ((pixels.mask & UNUSABLE) == 0) & np.isfinite(pixels.data) & np.isfinite(pixels.variance)
    count = good[:ny, :nx].reshape(shape).sum(axis=(1, 3))
    scale = n**2 / np.maximum(count, 1)
    data = np.where(good, pixels.data, 0.0)[:ny, :nx].reshape(shape).sum(axis=(1, 3)) * scale
    variance = np.where(good, pixels.variance, 0.0)[:ny, :nx].reshape(shape).sum(axis=(1, 3)) * scale**2
    mask = np.where(count < 0.7 * n**2, np.uint8(PixelMask.BAD), np.uint8(0))
    return Pixels(data.astype(np.float32), variance.astype(np.float32), mask)


def _to_bins(x: Floats, corner: int, n: int) -> Floats:
    return (x - corner + 0.5) / n - 0.5


def from_bins(x: Floats, corner: int, n: int) -> Floats:
    """Raw pixels of places counted in bins of n pixels from a box whose corner is `corner`."""
    return (x + 0.5) * n - 0.5 + corner


def _gather(pixels: Pixels, x: Floats, y: Floats, fwhm: float) -> _Stamps:
    half = _half(fwhm)
    side = np.arange(-half, half + 1)
    ny, nx = pixels.data.shape
    column = np.rint(x).astype(np.int64)[:, None] - pixels.x0 + side
    row = np.rint(y).astype(np.int64)[:, None] - pixels.y0 + side
    inside = ((row >= 0) & (row < ny))[:, :, None] & ((column >= 0) & (column < nx))[:, None, :]
    flat = np.clip(row, 0, ny - 1)[:, :, None] * nx + np.clip(column, 0, nx - 1)[:, None, :]
    data = pixels.data.ravel()[flat].astype(np.float64)
    variance = pixels.variance.ravel()[flat].astype(np.float64)
    bad = ~inside | ((pixels.mask.ravel()[flat] & UNUSABLE) != 0) | ~np.isfinite(data) | ~np.isfinite(variance)
    data[bad] = 0.0
    variance[bad] = 0.0
    data -= np.where(bad, 0.0, _sky_plane(data, bad, side))
    return _Stamps(data, variance, bad, column[:, 0] + pixels.x0, row[:, 0] + pixels.y0)


def _row_median(values: Floats, use: Bools) -> Floats:
    """Median of each row over the pixels in use; NaN where there is none."""
    count = use.sum(axis=1)
    ordered = np.sort(np.where(use, values, np.inf), axis=1)
    rows = np.arange(len(values))
    low, high = np.maximum(count - 1, 0) // 2, np.minimum(count // 2, values.shape[1] - 1)
    middle = 0.5 * (ordered[rows, low] + ordered[rows, high])
    return np.where(count > 0, middle, np.nan)


def _sky_plane(data: Floats, bad: Bools, side: NDArray[np.int64]) -> Floats:
    """Clipped sky level and slope of each stamp, from its outer pixels, over the whole stamp."""
    n = len(data)
    scale = side / side[-1]
    u, v = np.meshgrid(scale, scale)
    ring = np.flatnonzero(np.hypot(u, v).ravel() > 0.75)
    ring = ring[:: int(np.ceil(len(ring) / _MOST_SKY))]
    values, use = data.reshape(n, -1)[:, ring], ~bad.reshape(n, -1)[:, ring]
    level = _row_median(values, use)
    few = use.sum(axis=1) < 8
    if few.any():
        level[few] = _row_median(data[few].reshape(few.sum(), -1), ~bad[few].reshape(few.sum(), -1))
    level = np.nan_to_num(level)
    for _ in range(2):
        deviation = np.abs(values - level[:, None])
        use = use & (deviation <= 3.0 * 1.4826 * np.nan_to_num(_row_median(deviation, use))[:, None])
        level = np.where(few, level, np.nan_to_num(_row_median(values, use)))
    design = np.stack([np.ones(len(ring)), u.ravel()[ring], v.ravel()[ring]], axis=1)
    weights = use.astype(np.float64)
    normal = (weights @ (design[:, :, None] * design[:, None, :]).reshape(-1, 9)).reshape(n, 3, 3)
    # A slope is free only where sky was seen on all sides.
    firm = ~few & (np.linalg.eigvalsh(normal)[:, 0] > 0.1 * len(ring))
    plane = np.zeros((n, 3))
    plane[:, 0] = level
    if firm.any():
        right = ((values[firm] - level[firm, None]) * weights[firm]) @ design
        plane[firm] += np.linalg.solve(normal[firm], right[:, :, None])[:, :, 0]
    return plane[:, 0, None, None] + plane[:, 1, None, None] * u + plane[:, 2, None, None] * v


def _windows(stamps: _Stamps, x: Floats, y: Floats, sigma: Floats) -> tuple[Floats, Floats, Floats, Floats]:
    """Distances and window factors along x and y, each (star, m)."""
    grid = np.arange(stamps.data.shape[1])
    dx = stamps.x0[:, None] + grid - x[:, None]
    dy = stamps.y0[:, None] + grid - y[:, None]
    return dx, dy, np.exp(-0.5 * (dx / sigma[:, None]) ** 2), np.exp(-0.5 * (dy / sigma[:, None]) ** 2)


def _sum(stamps: Floats, fy: Floats, fx: Floats) -> Floats:
    return np.einsum("ny,ny->n", fy, np.matmul(stamps, fx[:, :, None])[:, :, 0])


def _filled(stamps: _Stamps, holed: NDArray[np.int64], x: Floats, y: Floats, sigma: Floats) -> None:
    """Put the Gaussian that fits the good pixels into the holes of the stamps `holed`."""
    part = _Stamps(stamps.data[holed], stamps.variance[holed], stamps.bad[holed], stamps.x0[holed], stamps.y0[holed])
    _, _, wx, wy = _windows(part, x[holed], y[holed], sigma[holed])
    good = ~part.bad
    star = wy[:, :, None] * wx[:, None, :]
    amplitude = np.sum(star * part.data * good, axis=(1, 2)) / np.maximum(np.sum(star**2 * good, axis=(1, 2)), 1e-9)
    stamps.data[holed] = np.where(good, part.data, np.maximum(amplitude, 0.0)[:, None, None] * star)


def measure(pixels: Pixels, x: ArrayLike, y: ArrayLike, fwhm: float, *, reach: float | None = None) -> Measured:
    """Windowed centroid, its error, flux and S/N of stars near given places.

    Parameters
    ----------
    pixels : Pixels
        Calibrated box; pixels masked as bad, hit or outside are replaced by the Gaussian that fits the others.
        Saturated pixels are used as they are.
    x, y : array_like, shape (stars,)
        Start values, raw pixels.
    fwhm : float
        Width of the stars, pixels.
    reach : float, optional
        Largest distance from the start value; default the larger of 1.5 pixels and `fwhm`.

    Returns
    -------
    Measured
        `err` from the propagated pixel variance and the sampling, per axis. `ok` needs convergence within `reach`,
        S/N above 3 and at least half of the window's weight on good pixels; where it is False x, y keep the last
        iterate.
        `flux` is that of the Gaussian of width `fwhm` that fits best, electrons.
    """
    xs = np.atleast_1d(np.asarray(x, dtype=np.float64))
    ys = np.atleast_1d(np.asarray(y, dtype=np.float64))
    usable = np.isfinite(xs) & np.isfinite(ys)
    n = len(xs)
    result = Measured(xs.copy(), ys.copy(), np.full(n, np.nan), np.zeros(n, bool), np.full(n, np.nan), np.zeros(n))
    if pixels.data.size == 0:
        return result
    far = reach if reach is not None else max(1.5, fwhm)
    n_bin = int(2 * fwhm // _WELL_SAMPLED)
    if n_bin > 1:
        places = _to_bins(xs, pixels.x0, n_bin), _to_bins(ys, pixels.y0, n_bin)
        found = measure(binned(pixels, n_bin), *places, fwhm / n_bin, reach=far / n_bin)
        return found._replace(
            x=from_bins(found.x, pixels.x0, n_bin), y=from_bins(found.y, pixels.y0, n_bin), err=found.err * n_bin
        )
    side = 2 * _half(fwhm) + 1
    index = np.flatnonzero(usable)
    step = max(1, _CHUNK_PIXELS // side**2)
    for start in range(0, len(index), step):
        chosen = index[start : start + step]
        for whole, part in zip(result, _measure(pixels, xs[chosen], ys[chosen], fwhm, far), strict=True):
            whole[chosen] = part
    return result


def _measure(pixels: Pixels, x: Floats, y: Floats, fwhm: float, reach: float) -> Measured:
    n = len(x)
    sigma = np.full(n, max(fwhm, _NARROWEST_WINDOW) / FWHM_PER_SIGMA)
    stamps = _gather(pixels, x, y, max(fwhm, _NARROWEST_WINDOW))
    cx, cy = x.copy(), y.copy()
    holed = np.flatnonzero(stamps.bad.any(axis=(1, 2)))
    moving = np.ones(n, bool)
    for _ in range(_ITERATIONS):
        if len(holed):
            _filled(stamps, holed, cx, cy, sigma)
        dx, dy, wx, wy = _windows(stamps, cx, cy, sigma)
        total, slope_x, slope_y = _response(stamps.data, dx, dy, wx, wy, sigma)
        with np.errstate(divide="ignore", invalid="ignore"):
            step_x = _sum(stamps.data, wy, wx * dx) / slope_x
            step_y = _sum(stamps.data, wy * dy, wx) / slope_y
        lost = ~(total > 0) | ~np.isfinite(step_x + step_y)
        limit = 0.5 * sigma
        step_x = np.where(lost | ~moving, 0.0, np.clip(step_x, -limit, limit))
        step_y = np.where(lost | ~moving, 0.0, np.clip(step_y, -limit, limit))
        cx += step_x
        cy += step_y
        away = np.hypot(cx - x, cy - y) > reach + 0.5
        moving &= ~lost & ~away & (np.hypot(step_x, step_y) > _CONVERGED)
        if not moving.any():
            break
    dx, dy, wx, wy = _windows(stamps, cx, cy, sigma)
    total, slope_x, slope_y = _response(stamps.data, dx, dy, wx, wy, sigma)
    with np.errstate(divide="ignore", invalid="ignore"):
        noise = np.sqrt(_sum(stamps.variance, wy**2, wx**2))
        err_x = np.sqrt(_sum(stamps.variance, wy**2, (wx * dx) ** 2)) / slope_x
        err_y = np.sqrt(_sum(stamps.variance, (wy * dy) ** 2, wx**2)) / slope_y
        err = np.sqrt(0.5 * (err_x**2 + err_y**2))
        snr = np.where(noise > 0, total / noise, 0.0)
        norm = _sum(np.ones_like(stamps.data), wy**2, wx**2)
        flux = total / norm * 2 * np.pi * sigma**2
        seen = _sum((~stamps.bad).astype(np.float64), wy, wx) / _sum(np.ones_like(stamps.data), wy, wx)
    # The holes carry no information: the error grows with the weight they took.
    err = np.hypot(err / np.maximum(seen, 0.05), _SAMPLING * (1.5 / max(fwhm, 1.0)) ** 4)
    ok = ~moving & (np.hypot(cx - x, cy - y) <= reach) & (snr > 3.0) & (seen >= 0.5) & np.isfinite(err) & (total > 0)
    return Measured(cx, cy, err, ok, flux, np.nan_to_num(snr))


def _response(
    data: Floats, dx: Floats, dy: Floats, wx: Floats, wy: Floats, sigma: Floats
) -> tuple[Floats, Floats, Floats]:
    """Windowed sum, and the (negative) derivative of the windowed moments with the centre: the Newton slope.

    For a star of the window's width the slope is half the sum.
    """
    total = _sum(data, wy, wx)
    square = sigma[:, None] ** 2
    slope_x = total - _sum(data, wy, wx * dx**2 / square)
    slope_y = total - _sum(data, wy * dy**2 / square, wx)
    return total, np.maximum(slope_x, 0.25 * total), np.maximum(slope_y, 0.25 * total)


def centroid(pixels: Pixels, x: ArrayLike, y: ArrayLike, fwhm: float) -> tuple[Floats, Floats, Floats, Bools]:
    """Gaussian-windowed centroids of stars near given places.

    Returns
    -------
    x, y : ndarray, shape (stars,)
        Raw pixels.
    err : ndarray, shape (stars,)
        Standard error per axis, pixels, from the pixel variance.
    ok : ndarray of bool, shape (stars,)
        See `measure`.
    """
    found = measure(pixels, x, y, fwhm)
    return found.x, found.y, found.err, found.ok


def fwhm_of(pixels: Pixels, x: ArrayLike, y: ArrayLike, fwhm: float) -> tuple[Floats, Floats]:
    """Width and ellipticity of stars at known places, by adaptively windowed second moments.

    The Gaussian window follows the star's own size; the window is then divided out of the moments, which is exact
    for a Gaussian star. The pixel is part of the width. `fwhm` is 2.3548 times the fourth root of the determinant
    of the second moments, `ellipticity` 1 - minor / major axis. On a Moffat profile it is the width of the Gaussian
    that matches best.

    Parameters
    ----------
    pixels : Pixels
        Calibrated box.
    x, y : array_like, shape (stars,)
        Centres, raw pixels.
    fwhm : float
        Start value, pixels; within a factor of about three of the truth.

    Returns
    -------
    fwhm, ellipticity : ndarray, shape (stars,)
        NaN where the moments do not converge.
    """
    major, minor = axes_of(pixels, x, y, fwhm)
    with np.errstate(invalid="ignore"):
        return np.sqrt(major * minor), 1.0 - minor / major


def axes_of(pixels: Pixels, x: ArrayLike, y: ArrayLike, fwhm: float) -> tuple[Floats, Floats]:
    """FWHM (pixels) along the major and the minor axis of each star; NaN where not measurable. See `fwhm_of`."""
    xs = np.atleast_1d(np.asarray(x, dtype=np.float64))
    ys = np.atleast_1d(np.asarray(y, dtype=np.float64))
    major, minor = np.full(len(xs), np.nan), np.full(len(xs), np.nan)
    if pixels.data.size == 0:
        return major, minor
    index = np.flatnonzero(np.isfinite(xs) & np.isfinite(ys))
    n_bin = int(2 * fwhm // _WELL_SAMPLED)
    if n_bin > 1:
        places = _to_bins(xs, pixels.x0, n_bin), _to_bins(ys, pixels.y0, n_bin)
        axes = axes_of(binned(pixels, n_bin), *places, fwhm / n_bin)
        # A bin widens the star as a pixel does, by n^2 / 12 instead of 1 / 12.
        wider = FWHM_PER_SIGMA**2 * (n_bin**2 - 1) / 12
        major, minor = (np.sqrt(np.maximum((a * n_bin) ** 2 - wider, 0.0)) for a in axes)
        return major, minor
    step = max(1, _CHUNK_PIXELS // (2 * _half(fwhm) + 1) ** 2)
    for start in range(0, len(index), step):
        chosen = index[start : start + step]
        major[chosen], minor[chosen] = _axes(pixels, xs[chosen], ys[chosen], fwhm)
    return major, minor


def _axes(pixels: Pixels, x: Floats, y: Floats, fwhm: float) -> tuple[Floats, Floats]:
    n = len(x)
    stamps = _gather(pixels, x, y, max(fwhm, _NARROWEST_WINDOW))
    sigma = np.full(n, fwhm / FWHM_PER_SIGMA)
    widest = 1.2 * fwhm
    holed = np.flatnonzero(stamps.bad.any(axis=(1, 2)))
    covariance = np.full((n, 2, 2), np.nan)
    valid = np.ones(n, bool)
    for _ in range(8):
        if len(holed):
            _filled(stamps, holed, x, y, sigma)
        dx, dy, wx, wy = _windows(stamps, x, y, sigma)
        with np.errstate(divide="ignore", invalid="ignore"):
            total = _sum(stamps.data, wy, wx)
            xx = _sum(stamps.data, wy, wx * dx**2) / total
            yy = _sum(stamps.data, wy * dy**2, wx) / total
            xy = _sum(stamps.data, wy * dy, wx * dx) / total
            determinant = xx * yy - xy**2
        valid = (total > 0) & (determinant > 0) & (xx > 0)
        safe = np.where(valid, determinant, 1.0)
        inverse = np.stack([yy / safe, -xy / safe, xx / safe], axis=-1)
        # The window multiplies the star: inverse covariances add, so it subtracts here. A star wider than the window
        # can leave nothing; a tenth of the window's term stands for "at least three times as wide".
        a = np.maximum(inverse[:, 0] - sigma**-2, 0.1 * sigma**-2)
        c = np.maximum(inverse[:, 2] - sigma**-2, 0.1 * sigma**-2)
        b = np.clip(inverse[:, 1], -0.95 * np.sqrt(a * c), 0.95 * np.sqrt(a * c))
        d = a * c - b**2
        covariance = np.stack([c / d, -b / d, -b / d, a / d], axis=-1).reshape(n, 2, 2)
        updated = np.clip(d**-0.25, 0.25, widest)
        change = np.abs(updated / sigma - 1.0)
        sigma = np.where(valid, updated, sigma)
        if not np.any(change[valid] > 1e-3):
            break
    values = np.linalg.eigvalsh(np.where(valid[:, None, None], covariance, np.eye(2)))
    major = np.where(valid, FWHM_PER_SIGMA * np.sqrt(values[:, 1]), np.nan)
    minor = np.where(valid, FWHM_PER_SIGMA * np.sqrt(values[:, 0]), np.nan)
    return major, minor
