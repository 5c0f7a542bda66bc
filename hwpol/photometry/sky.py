"""The local sky: clipped annuli with a plane, for many sources at once."""

from __future__ import annotations

from dataclasses import dataclass
from math import erf, exp, pi, sqrt

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.spatial import cKDTree

from hwpol.errors import InputError
from hwpol.photometry.aperture import gather_offsets, nearest_pixel
from hwpol.pixels import Pixels

Floats = NDArray[np.float64]

CLIP = 3.5
"""Clipping limit in true standard deviations. At 3 the clip of a Poisson tail costs 0.04 electron, at 3.5 0.012."""

LEAST_PIXELS = 12
"""Fewer sky pixels than this give no sky."""

_PASSES = 12
_SAME_STAR = 0.5  # pixels: a known star nearer than this to a source is the source itself
_CHUNK_PIXELS = 1 << 15  # stamps are worked through in blocks of about this many pixels, to stay in the cache

_DENSITY = exp(-0.5 * CLIP**2) / sqrt(2.0 * pi)
_INSIDE = erf(CLIP / sqrt(2.0))
STD_KEPT = sqrt(1.0 - 2.0 * CLIP * _DENSITY / _INSIDE)
"""Standard deviation of a unit Gaussian clipped at +-CLIP."""
SKEW_SHIFT = CLIP**3 * _DENSITY / (3.0 * _INSIDE)
"""Shift of the clipped mean of Poisson noise, in units of level / variance: first Edgeworth term, derived."""


@dataclass(frozen=True)
class Others:
    """Known stars, in every beam: pixels within `radius` of them are no sky. Arrays of shape (T,), pixels."""

    x: Floats
    y: Floats
    radius: Floats


@dataclass(frozen=True)
class Sky:
    """The sky around S sources.

    Attributes
    ----------
    level, error : ndarray, shape (S,)
        Electrons per pixel at the source's centre, and its standard error (from the scatter of the annulus and the
        geometry of the pixels that were left); NaN where fewer than `LEAST_PIXELS` are left.
    std : ndarray, shape (S,)
        Scatter of the sky pixels about the plane, electrons, corrected for the clipping.
    npix : ndarray of int, shape (S,)
        Pixels kept.
    gradient : ndarray, shape (S, 2)
        Slope along x and y, electrons per pixel per pixel.
    noise_ratio : ndarray, shape (S,)
        std^2 over the mean variance of the same pixels: 1 where the noise model holds.
    ok : ndarray of bool, shape (S,)
        At least half of the annulus was used and the sky is not steep.
    """

    level: Floats
    error: Floats
    std: Floats
    npix: NDArray[np.intp]
    gradient: Floats
    noise_ratio: Floats
    ok: NDArray[np.bool_]


def annulus_sky(
    pixels: Pixels, x: ArrayLike, y: ArrayLike, r_in: float, r_out: float, *, others: Others | None = None
) -> Sky:
    """Measure the sky in annuli: the pixels whose centres lie at r_in <= distance < r_out from the source.

    Parameters
    ----------
    pixels : Pixels
        Calibrated pixels; masked ones are left out.
    x, y : array_like, shape (S,)
        Raw-array pixels.
    r_in, r_out : float
        Pixels.
    others : Others, optional
        Stars to keep out of the annuli. A source may be among them: it does not mask its own annulus.

    Returns
    -------
    Sky

    Raises
    ------
    InputError
        Unless 0 <= r_in < r_out.

    Notes
    -----
    A plane is fitted to the pixels within `CLIP` standard deviations of it, iterated until the set is stable, and read
    at the source: no gradient, incomplete annulus or one-sided mask biases it. The mean (not the median) keeps skewed
    noise unbiased; what the clip takes from the Poisson tail is put back (`SKEW_SHIFT`). The start is the median and
    the distance to the 16th percentile, which stars in the annulus reach least.
    """
    if not 0 <= r_in < r_out or not np.isfinite(r_out):
        raise InputError(f"annulus = ({r_in}, {r_out}): expected 0 <= inner < outer, pixels")
    xs, ys = (np.atleast_1d(np.asarray(a, dtype=np.float64)) for a in (x, y))
    reach = int(np.ceil(r_out + 0.5))
    dy, dx = np.mgrid[-reach : reach + 1, -reach : reach + 1]
    distance = np.hypot(dx, dy)
    ring = (distance > r_in - 0.75) & (distance < r_out + 0.75)  # the centre is within 0.71 of its pixel's
    dx, dy = dx[ring], dy[ring]
    step = max(1, _CHUNK_PIXELS // len(dx))
    blocks = [
        _sky_block(pixels, xs[i : i + step], ys[i : i + step], dx, dy, (r_in, r_out), others)
        for i in range(0, len(xs), step)
    ] or [_sky_block(pixels, xs, ys, dx, dy, (r_in, r_out), None)]
    return Sky(*(np.concatenate(column) for column in zip(*blocks, strict=True)))


def _sky_block(
    pixels: Pixels,
    x: Floats,
    y: Floats,
    dx: NDArray[np.intp],
    dy: NDArray[np.intp],
    limits: tuple[float, float],
    others: Others | None,
) -> tuple[NDArray, ...]:
    ix, iy = nearest_pixel(x), nearest_pixel(y)
    known = np.isfinite(x) & np.isfinite(y)
    fx, fy = (np.where(known, a - i, 0.0) for a, i in ((x, ix), (y, iy)))
    data, variance, mask = gather_offsets(pixels, ix, iy, dx, dy)
    distance2 = (dx - fx[:, None]) ** 2 + (dy - fy[:, None]) ** 2
    ring = (distance2 >= limits[0] ** 2) & (distance2 < limits[1] ** 2)
    nominal = ring.sum(axis=1)
    good = ring & (mask == 0) & known[:, None]
    if others is not None and len(others.x):
        _hide_others(good, x, y, ix, iy, dx, dy, limits[1], others)
    plane, inverse, std, keep = _clipped_plane(data, good, dx, dy)
    npix = keep.sum(axis=1)
    there = npix >= LEAST_PIXELS
    at = np.stack([np.ones_like(fx), fx, fy], axis=1)
    level = (plane * at).sum(axis=1)
    square = std**2
    with np.errstate(divide="ignore", invalid="ignore"):
        level = level + SKEW_SHIFT * np.where(square > 0, np.clip(level / square, 0.0, 1.0), 0.0)
        error = std * np.sqrt((at * (inverse @ at[:, :, None])[:, :, 0]).sum(axis=1))
        ratio = square / (np.where(keep, variance, 0.0).sum(axis=1) / npix)
        change = 2.0 * limits[1] * np.hypot(plane[:, 1], plane[:, 2])
        steep = (change > 0.2 * np.abs(level)) & (change > 5.0 * std * 4.0 / np.sqrt(npix)) & (change > std)
    ok = there & (npix >= 0.5 * nominal) & ~steep
    blank = np.where(there, 1.0, np.nan)
    return level * blank, error * blank, std * blank, npix, plane[:, 1:] * blank[:, None], ratio * blank, ok


def _clipped_plane(
    data: Floats, good: NDArray[np.bool_], dx: NDArray[np.intp], dy: NDArray[np.intp]
) -> tuple[Floats, Floats, Floats, NDArray[np.bool_]]:
    """Fit v = c0 + c1 dx + c2 dy to the good pixels of each row, clipped; c, (X^T X)^-1, scatter, pixels kept."""
    count, width = data.shape
    n = good.sum(axis=1)
    ranked = np.sort(np.where(good, data, np.inf).astype(np.float32), axis=1)
    row = np.arange(count)
    middle = ranked[row, np.minimum(n // 2, width - 1)].astype(np.float64)
    low = ranked[row, np.minimum((0.1587 * n).astype(np.intp), width - 1)].astype(np.float64)
    middle, low = np.where(n > 0, middle, 0.0), np.where(n > 0, low, 0.0)
    basis = np.stack([np.ones(width), dx, dy, dx * dx, dx * dy, dy * dy], axis=1).astype(np.float64)
    plane = np.stack([middle, np.zeros(count), np.zeros(count)], axis=1)
    inverse = np.zeros((count, 3, 3))
    std = middle - low
    # A start wider than the clip keeps a slope, which the first plane then takes out.
    keep = good & (np.abs(data - middle[:, None]) <= CLIP * std[:, None])
    active = np.flatnonzero(n >= LEAST_PIXELS)
    for _ in range(_PASSES):
        if not len(active):
            break
        kept, values = keep[active], data[active]
        # One product a row, always of the same shape: a row's result does not depend on its company.
        weight = kept.astype(np.float64)
        sums = (weight[:, None, :] @ basis)[:, 0]
        offset = middle[active]
        moments = ((weight * (values - offset[:, None]))[:, None, :] @ basis[:, :3])[:, 0]
        enough = sums[:, 0] >= LEAST_PIXELS
        normal = sums[:, [[0, 1, 2], [1, 3, 4], [2, 4, 5]]]
        normal[~enough] = np.eye(3)
        diagonal = normal[:, 0, 0] * normal[:, 1, 1] * normal[:, 2, 2]
        singular = np.linalg.det(normal) <= 1e-9 * diagonal
        normal[singular] = np.eye(3)
        inv = np.linalg.inv(normal)
        fit = (inv @ moments[:, :, None])[:, :, 0]
        fit[:, 0] += offset
        residual = values - (fit[:, :1] + fit[:, 1:2] * dx + fit[:, 2:3] * dy)
        scatter = np.sqrt((weight * residual**2).sum(axis=1) / np.maximum(sums[:, 0] - 3.0, 1.0)) / STD_KEPT
        new = good[active] & (np.abs(residual) <= CLIP * scatter[:, None])
        usable = enough & ~singular
        plane[active[usable]], inverse[active[usable]], std[active[usable]] = fit[usable], inv[usable], scatter[usable]
        changed = usable & (new != kept).any(axis=1) & (scatter > 0)
        keep[active[~usable]] = False
        keep[active[changed]] = new[changed]
        active = active[changed]
    return plane, inverse, std, keep


def _hide_others(
    good: NDArray[np.bool_],
    x: Floats,
    y: Floats,
    ix: NDArray[np.intp],
    iy: NDArray[np.intp],
    dx: NDArray[np.intp],
    dy: NDArray[np.intp],
    r_out: float,
    others: Others,
) -> None:
    """Clear the pixels of `good` that lie within a known star, in place."""
    finite = np.isfinite(others.x) & np.isfinite(others.y) & (others.radius > 0)
    if not finite.any():
        return
    ox, oy, radius = others.x[finite], others.y[finite], others.radius[finite]
    here = np.flatnonzero(np.isfinite(x) & np.isfinite(y))
    near = cKDTree(np.column_stack([ox, oy])).query_ball_point(
        np.column_stack([x[here], y[here]]), r_out + float(radius.max())
    )
    source = np.repeat(here, [len(found) for found in near])
    other = np.fromiter((index for found in near for index in found), dtype=np.intp, count=len(source))
    apart = np.hypot(ox[other] - x[source], oy[other] - y[source])
    touching = (apart > _SAME_STAR) & (apart < r_out + radius[other])
    for s, o in zip(source[touching], other[touching], strict=True):
        hidden = (dx + (ix[s] - ox[o])) ** 2 + (dy + (iy[s] - oy[o])) ** 2 < radius[o] ** 2
        good[s] &= ~hidden
