"""Cosmic-ray hits in apertures, found by comparing the frames and beams of a visit."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial

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
_FEW = 6  # images a frame up to which the median over them is not trusted
_PERSUADED = 30.0  # drop in the sum of min(z^2, 9) for which one image's word replaces the median: four pixels or so
_FITTED = 64  # brightest sources whose own shapes are fitted; the others take what these share
_LOOK = 4.5  # sigma of a pixel's noise from which its source is looked at closely
_FIRST = 12  # brightest sources that choose the profile
_OWN = 0.1  # fraction of the image up to which what the profile leaves is the star's own
_SWELL = 0.5  # change of a neighbour's light in a pixel by half a pixel of dither and a quarter of the seeing
_PLACE = 5  # pixels across the place in which charge is added up: holds five of a track of six
_CHUNK_PIXELS = 1 << 17


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
    Each image is predicted from what a hit cannot change alone: a radial profile shared by all, an elliptical shape
    and a position that are split into a part of the source and beam (median over the frames) and a part of the frame
    (median over sources and beams), its own robust amplitude, and the median over the frames of what the profile
    leaves. The scatter of the frames about that, relative to the image, is allowed for as an error of the prediction.
    What stands above it and above the same place in the frame's other beams is charge of a hit. A hit may be reported
    in both beams of a frame.
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
    shape, profile = _shapes(values, noise, good, at, fwhm)
    step = max(1, _CHUNK_PIXELS // (frames * beams * size * size))
    look = np.zeros(count, np.bool_)
    for i in range(0, count, step):
        rows = slice(i, i + step)
        look[rows] = _stands_out(values[rows], noise[rows], good[rows], shape[rows], profile)
    suspects = np.flatnonzero(look)
    for i in range(0, len(suspects), step):
        part = suspects[i : i + step]
        out[:, part] = _judge(values[part], noise[part], good[part], at[part], shape[part], profile, sizes)
    return out & placed


def _shapes(
    data: NDArray[np.float32], variance: NDArray[np.float32], good: NDArray[np.bool_], at: Floats, fwhm: Floats | None
) -> tuple[Floats, profiles.Profile]:
    """Predict x, y, a, b, c of every image from what sources, beams and frames share, (S, K, B, 5), and the profile."""
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
    strength = np.median(np.where(bright, ratio, 0.0), axis=(1, 2))
    bright &= np.isin(np.arange(lead[0]), np.argsort(-strength, kind="stable")[:_FITTED])[:, None, None]
    if not bright.any():
        return result, profiles.plain(beta, typical)
    where = np.argwhere(bright)
    first = np.argsort(-strength, kind="stable")[:_FIRST]
    trial = tuple(where[np.isin(where[:, 0], first)].T)
    start = np.zeros((*lead, 5))
    start[..., :2] = at
    costs = []
    for index in profiles.BETAS:
        start[..., 2] = start[..., 4] = gauss / index
        candidate = profiles.plain(index, typical)
        costs.append(np.median(profiles.fit(data[trial], variance[trial], good[trial], start[trial], candidate)[1]))
    profile = profiles.plain(profiles.BETAS[int(np.argmin(costs))], typical)
    start[..., 2] = start[..., 4] = gauss / profile.beta
    weight = np.minimum(np.where(bright, ratio, 0.0), 300.0)  # beyond that the shape, not the noise, limits a fit
    step = max(1, _CHUNK_PIXELS // (2 * pixels))
    for _ in range(2):
        fitted = np.full((*lead, 5), np.nan)
        for i in range(0, len(where), step):
            rows = tuple(where[i : i + step].T)
            found, cost = profiles.fit(data[rows], variance[rows], good[rows], start[rows], profile)
            found[~np.isfinite(cost)] = np.nan
            fitted[rows] = found
        start = _common(fitted, weight, at, partial(_worth, data, variance, good, bright, profile))
        profile = profiles.refine(
            profiles.plain(profile.beta, typical), data[trial], variance[trial], good[trial], start[trial]
        )
    return start, profile


def _worth(
    data: NDArray[np.float32],
    variance: NDArray[np.float32],
    good: NDArray[np.bool_],
    bright: NDArray[np.bool_],
    profile: profiles.Profile,
    k: int,
    shape: Floats,
) -> float:
    """Return how badly shapes (S, B, 5) describe the bright images of frame k."""
    use = bright[:, k]
    pixels, noise, fine = data[:, k][use], variance[:, k][use], good[:, k][use]
    image = profile.images(profiles.grid(round(np.sqrt(data.shape[-1]))), shape[use])
    return float(profiles.misfit(pixels, noise, fine, image, profiles.amplitude(pixels, noise, fine, image)).sum())


def _common(fitted: Floats, weight: Floats, at: Floats, worth: Callable[[int, Floats], float]) -> Floats:
    """Predict shapes from the parts that sources, beams and frames share.

    With few images a frame, the median over them does not hold against a hit in one: then each image's own word and
    their mean are tried on all images of the frame, and the best is taken.
    """
    own = _to_free(fitted, at)
    split = [profiles.shared(own[..., i], weight) for i in range(5)]
    static = np.stack([part[0] for part in split], axis=-1)
    frame = np.stack([part[1] for part in split], axis=-1)
    static[~np.isfinite(own[..., 0]).any(axis=(1, 2)), :, :2] = 0.0
    for k in range(fitted.shape[1]):
        words = (own[:, k] - static)[np.isfinite(own[:, k, :, 0])]
        if 2 <= len(words) <= _FEW:
            words = np.concatenate([frame[k : k + 1], words])
            tried = [worth(k, _from_free(static + word, at[:, k])) for word in words]
            if min(tried) < tried[0] - _PERSUADED:
                frame[k] = words[int(np.argmin(tried))]
    return _from_free(static[:, None] + frame[:, None], at)


def _to_free(shape: Floats, at: Floats) -> Floats:
    """Shapes as numbers of which differences are shared: shift, log a, skew, log c."""
    x, y, a, b, c = np.moveaxis(shape, -1, 0)
    return np.stack([x - at[..., 0], y - at[..., 1], np.log(a), b / np.sqrt(a * c), np.log(c)], axis=-1)


def _from_free(free: Floats, at: Floats) -> Floats:
    x, y, a, b, c = np.moveaxis(free, -1, 0)
    a, c = np.exp(a), np.exp(c)
    return np.stack([x + at[..., 0], y + at[..., 1], a, b * np.sqrt(a * c), c], axis=-1)


def _stands_out(
    data: NDArray[np.float32],
    variance: NDArray[np.float32],
    good: NDArray[np.bool_],
    shape: Floats,
    profile: profiles.Profile,
) -> NDArray[np.bool_]:
    """Tell which sources have a pixel so far above a low guess of the image that a closer look is due, (S,)."""
    size = round(np.sqrt(data.shape[-1]))
    many = (-1, data.shape[-1])
    image = profile.images(profiles.grid(size), shape.reshape(-1, 5))
    low = np.maximum(profiles.core_amplitude(data.reshape(many), image, good.reshape(many), 0.3), 0.0)
    above = data - (low[:, None].astype(np.float32) * image).reshape(data.shape)
    found: NDArray[np.bool_] = np.any(good & (above > np.float32(_LOOK) * np.sqrt(variance)), axis=(1, 2, 3))
    return found


def _judge(
    data: NDArray[np.float32],
    variance: NDArray[np.float32],
    good: NDArray[np.bool_],
    at: Floats,
    shape: Floats,
    profile: profiles.Profile,
    radii: Floats,
) -> NDArray[np.bool_]:
    count, frames, beams, pixels = data.shape
    size = round(np.sqrt(pixels))
    many = (count * frames * beams, pixels)
    height, image = profiles.settle(
        data.reshape(many), variance.reshape(many), good.reshape(many), profile, shape.reshape(-1, 5)
    )
    level = np.maximum(height, 0.0).reshape(count, frames, beams, 1)
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
    common = np.nanmedian(ranked, axis=axis, keepdims=True) if frames > 1 else np.zeros((count, 1, 1, pixels))
    n = np.maximum(known.sum(axis=axis, keepdims=True), 1)
    residual = np.where(known, residual - level * common, 0.0)
    error2 = variance * (1.0 + 1.57 / n)
    core = known & (image > 0.2 * image.max(axis=-1, keepdims=True)) & (level > 0)
    spread2 = np.where(core, (residual**2 / 0.4549 - error2) / np.maximum(model, 1e-6) ** 2, np.nan)
    spread2[~core.any(axis=(1, 2, 3))] = 0.0
    tolerance2 = np.maximum(np.nanmedian(spread2, axis=(1, 2, 3)), 0.0)[:, None, None, None]
    # Light beside the star (a neighbour, perhaps of another beam) moves and swells with the frames.
    noise_of_common = np.sqrt(np.where(known, variance, 0.0).sum(axis=axis, keepdims=True)) / n
    beside = np.abs(level * common) - _OWN * model
    beside = np.where((beside > 0) & (np.abs(level * common) > 3.0 * noise_of_common), np.abs(level * common), 0.0)
    around = maximum_filter(beside.reshape(*data.shape[:3], size, size), (1, 1, 1, 3, 3), mode="constant")
    error = np.sqrt(error2 + tolerance2 * model**2 + (_SWELL * around.reshape(data.shape)) ** 2)
    excess = _above_partners(residual, error, level, size)
    z = excess / error
    charge = np.where(z > _PIXEL, excess, 0.0)
    out = np.empty((len(radii), count, frames, beams), np.bool_)
    square = (count, frames, beams, size, size)
    for r in range(len(radii)):
        inside = np.empty(square)
        for k in range(frames):
            centre = at[:, k].reshape(-1, 2)
            inside[:, k] = circle_overlap(centre[:, 0], centre[:, 1], radii[r, k], size // 2).reshape(
                inside[:, k].shape
            )
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
