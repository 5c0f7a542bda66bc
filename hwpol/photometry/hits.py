"""Cosmic-ray hits in apertures, found by comparing the frames and beams of a visit."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.ndimage import maximum_filter, uniform_filter

from hwpol.photometry import profiles
from hwpol.photometry.aperture import circle_overlap
from hwpol.photometry.growth import SIGMA_TO_FWHM

Floats = NDArray[np.float64]

CHARGE = 5.0
"""A hit is charge above this many sigma of the aperture's noise in one place ..."""
PEAK = 5.0
"""... made of pixels the brightest of which stands this many sigma above the model."""

_PIXEL = 3.0  # sigma from which a pixel counts towards the charge of a hit
_BRIGHT = 30.0  # signal-to-noise ratio of an image from which its own shape is fitted
_FIRST = 12  # brightest sources that choose the profile
_PLACE = 5  # pixels across the place in which charge is added up: holds five of a track of six
_CHUNK_PIXELS = 1 << 19


def find_hits(
    data: NDArray[np.float32],
    variance: NDArray[np.float32],
    mask: NDArray[np.uint8],
    dx: Floats,
    dy: Floats,
    radii: ArrayLike,
    fwhm: Floats | None = None,
) -> NDArray[np.bool_]:
    """Find apertures that were hit.

    Parameters
    ----------
    data, variance : ndarray, shape (S, K, B, n, n)
        Sky-subtracted stamps around the source, electrons; n odd.
    mask : ndarray, same shape
        Non-zero pixels are not looked at.
    dx, dy : ndarray, shape (S, K, B)
        Position of the source from the middle pixel; NaN where it does not fall.
    radii : array_like, shape (R,) or (R, K)
        Aperture radii, pixels.
    fwhm : ndarray, shape (S, K, B), optional
        Widths as a first guess, pixels.

    Returns
    -------
    ndarray of bool, shape (R, S, K, B)
        The aperture holds charge that neither the other frames nor the other beams show.

    Notes
    -----
    Each image is predicted from what a hit cannot change alone: an elliptical Moffat profile whose position and width are
    split into a part of the source and beam (median over the frames) and a part of the frame (median over sources
    and beams), its own robust amplitude, and the median over the frames of what the profile leaves. The scatter of the
    frames about that, relative to the image, is allowed for as an error of the prediction. What stands above it and
    above the same place in the frame's other beams is charge of a hit. A hit may be reported in both beams of a frame.
    """
    count, frames, beams, size, _ = data.shape
    sizes = np.asarray(radii, dtype=np.float64)
    sizes = np.repeat(sizes[:, None], frames, axis=1) if sizes.ndim == 1 else sizes
    out = np.zeros((len(sizes), count, frames, beams), np.bool_)
    if count == 0 or frames * beams < 2:
        return out
    placed = np.isfinite(dx) & np.isfinite(dy)
    good = (mask == 0) & placed[..., None, None]
    flat = (count, frames, beams, size * size)
    values = np.where(good, data, 0.0).astype(np.float32).reshape(flat)
    noise = np.where(good, variance, 1.0).astype(np.float32).reshape(flat)
    good = good.reshape(flat)
    at = np.stack([np.where(placed, dx, 0.0), np.where(placed, dy, 0.0)], axis=-1)
    shape, beta = _shapes(values, noise, good, at, fwhm)
    step = max(1, _CHUNK_PIXELS // (frames * beams * size * size))
    for i in range(0, count, step):
        part = slice(i, i + step)
        out[:, part] = _judge(values[part], noise[part], good[part], at[part], shape[part], beta, sizes)
    return out & placed


def _shapes(
    data: NDArray[np.float32], variance: NDArray[np.float32], good: NDArray[np.bool_], at: Floats, fwhm: Floats | None
) -> tuple[Floats, float]:
    """Predict x, y, a, b, c of every image from what sources, beams and frames share; (S, K, B, 5) and the index."""
    lead, pixels = data.shape[:3], data.shape[3]
    width = np.full(lead, np.nan) if fwhm is None else np.asarray(fwhm, dtype=np.float64)
    typical = float(np.median(width[np.isfinite(width)])) if np.isfinite(width).any() else 3.0
    width = np.where(np.isfinite(width), np.clip(width, 0.5 * typical, 2.0 * typical), typical)
    points = profiles.grid(round(np.sqrt(pixels)))
    gauss = 0.5 * (SIGMA_TO_FWHM / width) ** 2  # a of exp(-a r^2)
    ratio = np.empty(lead)
    for s in range(lead[0]):  # matched filter: a first signal-to-noise ratio
        r2 = (points.x - at[s, ..., :1]) ** 2 + (points.y - at[s, ..., 1:]) ** 2
        filt = np.exp(-gauss[s][..., None] * r2) * good[s]
        ratio[s] = (filt * data[s]).sum(-1) / np.sqrt(np.maximum((filt**2 * variance[s]).sum(-1), 1e-12))
    bright = ratio > _BRIGHT
    result = np.concatenate([at, np.zeros((*lead, 3))], axis=-1)
    result[..., 2] = result[..., 4] = gauss / 3.0
    beta = 3.0
    if not bright.any():
        return result, beta
    fitted = np.full((*lead, 5), np.nan)
    where = np.argwhere(bright)
    first = np.argsort(-np.median(np.where(bright, ratio, 0.0), axis=(1, 2)))[:_FIRST]
    trial = where[np.isin(where[:, 0], first)]
    costs = []
    for index in profiles.BETAS:
        _, cost = _fit(data, variance, good, at, gauss, trial, index)
        costs.append(np.median(cost))
    beta = profiles.BETAS[int(np.argmin(costs))]
    step = max(1, _CHUNK_PIXELS // (8 * pixels))
    for i in range(0, len(where), step):
        rows = where[i : i + step]
        found, cost = _fit(data, variance, good, at, gauss, rows, beta)
        found[~np.isfinite(cost)] = np.nan
        fitted[tuple(rows.T)] = found
    weight = np.minimum(np.where(bright, ratio, 0.0), 300.0)  # beyond that the shape, not the noise, limits a fit
    for parameter in range(5):
        value = fitted[..., parameter]
        if parameter < 2:
            value = value - at[..., parameter]
        elif parameter != 3:
            value = np.log(value)
        else:
            value = value / np.sqrt(fitted[..., 2] * fitted[..., 4])
        static, frame = profiles.shared(value, weight)
        if parameter < 2:
            static[~bright.any(axis=1)] = 0.0
        result[..., parameter] = static[:, None, :] + frame[:, None]
    result[..., :2] += at
    result[..., 2], result[..., 4] = np.exp(result[..., 2]), np.exp(result[..., 4])
    result[..., 3] *= np.sqrt(result[..., 2] * result[..., 4])
    return result, beta


def _fit(
    data: NDArray[np.float32],
    variance: NDArray[np.float32],
    good: NDArray[np.bool_],
    at: Floats,
    gauss: Floats,
    rows: NDArray[np.intp],
    beta: float,
) -> tuple[Floats, Floats]:
    index = tuple(rows.T)
    start = np.zeros((len(rows), 5))
    start[:, :2] = at[index]
    start[:, 2] = start[:, 4] = gauss[index] / beta
    shape, _, cost = profiles.fit(data[index], variance[index], good[index], start, beta)
    return shape, cost


def _judge(
    data: NDArray[np.float32],
    variance: NDArray[np.float32],
    good: NDArray[np.bool_],
    at: Floats,
    shape: Floats,
    beta: float,
    radii: Floats,
) -> NDArray[np.bool_]:
    count, frames, beams, pixels = data.shape
    size = round(np.sqrt(pixels))
    many = (count * frames * beams, pixels)
    image, _ = profiles.moffat(profiles.grid(size), shape.reshape(-1, 5), beta)
    level = profiles.amplitude(data.reshape(many), variance.reshape(many), good.reshape(many), image)
    level = np.maximum(level, 0.0).reshape(count, frames, beams, 1)
    image = image.reshape(data.shape)
    model = level * image
    residual = np.where(good, data - model, np.nan)
    # What the profile leaves in every frame is the star's (or its surroundings'), not a hit's.
    relative = residual / np.maximum(level, 1e-6)
    known = np.isfinite(relative)
    if frames >= 3:
        axis: tuple[int, ...] = (1,)
    else:
        axis = (1, 2)
    ranked = np.where(known.any(axis=axis, keepdims=True), relative, 0.0)
    common = np.nanmedian(ranked, axis=axis, keepdims=True)
    n = np.maximum(known.sum(axis=axis, keepdims=True), 1)
    residual = np.where(known, residual - level * common, 0.0)
    error2 = variance * (1.0 + 1.57 / n)
    core = known & (image > 0.2 * image.max(axis=-1, keepdims=True)) & (level > 0)
    spread2 = np.where(core, (residual**2 / 0.4549 - error2) / np.maximum(model, 1e-6) ** 2, np.nan)
    spread2[~core.any(axis=(1, 2, 3))] = 0.0
    tolerance2 = np.maximum(np.nanmedian(spread2, axis=(1, 2, 3)), 0.0)[:, None, None, None]
    error = np.sqrt(error2 + tolerance2 * model**2)
    excess = _above_partners(residual, error, level, size)
    z = excess / error
    charge = np.where(z > _PIXEL, excess, 0.0)
    out = np.empty((len(radii), count, frames, beams), np.bool_)
    square = (count, frames, beams, size, size)
    for r in range(len(radii)):
        inside = np.empty(square)
        for k in range(frames):
            centre = at[:, k].reshape(-1, 2)
            inside[:, k] = circle_overlap(centre[:, 0], centre[:, 1], radii[r, k], size // 2).reshape(inside[:, k].shape)
        near = (1, 1, 1, _PLACE, _PLACE)
        found = uniform_filter(inside * charge.reshape(square), near, mode="constant").max(axis=(-2, -1)) * _PLACE**2
        flat = inside.reshape(data.shape)
        noise = np.sqrt((flat**2 * np.where(good, variance, 0.0)).sum(axis=-1))
        peak = np.where(flat > 0.01, z, 0.0).max(axis=-1)
        out[r] = (found > CHARGE * noise) & (peak > PEAK)
    return out


def _above_partners(residual: Floats, error: Floats, level: Floats, size: int) -> Floats:
    """Take from each residual what the same place (a pixel about) shows significantly in the frame's other beams."""
    beams = residual.shape[2]
    if beams == 1:
        return residual
    square = (*residual.shape[:3], size, size)
    relative = np.where(residual > 2.0 * error, residual / np.maximum(level, 1e-6), 0.0)
    wide = maximum_filter(relative.reshape(square), (1, 1, 1, 3, 3), mode="constant").reshape(residual.shape)
    result = residual.copy()
    for b in range(beams):
        others = [c for c in range(beams) if c != b]
        result[:, :, b] -= level[:, :, b] * wide[:, :, others].max(axis=2)
    return result
