"""Elliptical Moffat images for many stamps at once: evaluation, robust fits, and what frames and beams share."""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Singles = NDArray[np.float32]

BETAS = (2.0, 2.5, 3.0, 4.0, 6.0, 30.0)
"""Moffat indices tried; the last is a Gaussian in all but name."""

FIT_TOLERANCE = 0.03
"""Fraction of the model allowed as its error while it is fitted: keeps the core of bright stars from ruling."""

PLACING = 0.03
"""Pixels by which an image may lie off its place in its own way: rms of the registration of one frame and beam."""

PLACE_TOLERANCE = 0.01
"""As `FIT_TOLERANCE`, once the profile is known."""

_CUT = 4.0  # weighted residual beyond which a pixel has no say in a fit
_SHARP = 3.5  # fwhm in pixels below which three Gauss-Legendre points an axis average over the pixel, else two
_STEPS = 9


@dataclass(frozen=True)
class Grid:
    """Pixel offsets of flattened stamps of n x n pixels."""

    x: Singles
    y: Singles


def grid(size: int) -> Grid:
    """Return the offsets of a stamp's pixels from its middle pixel, flattened."""
    offset = (np.arange(size) - size // 2).astype(np.float32)
    return Grid(np.tile(offset, size), np.repeat(offset, size))


def moffat(
    points: Grid, shape: Floats, beta: float, nodes: int = 2, derivatives: bool = False
) -> tuple[Singles, list[Singles]]:
    """Return pixel-averaged (1 + u)^-beta, u = a X^2 + 2 b X Y + c Y^2, for stamps of N images.

    Parameters
    ----------
    points : Grid
        P pixels.
    shape : ndarray, shape (N, 5)
        x, y (pixels from the middle pixel), a, b, c (per square pixel).
    beta : float
        Moffat index.
    nodes : int
        Gauss-Legendre points along each axis of a pixel.
    derivatives : bool
        Also the derivatives by the five parameters.

    Returns
    -------
    image : ndarray, shape (N, P)
    slopes : list of ndarray, shape (N, P)
        Empty unless asked for.
    """
    x0, y0, a, b, c = (column[:, None] for column in shape.astype(np.float32).T)
    image = np.zeros((len(shape), len(points.x)), np.float32)
    slopes = [np.zeros_like(image) for _ in range(5)] if derivatives else []
    places, shares = (array.astype(np.float32) / 2 for array in np.polynomial.legendre.leggauss(nodes))
    for sx, wx in zip(places, shares, strict=True):
        for sy, wy in zip(places, shares, strict=True):
            x, y = points.x + sx - x0, points.y + sy - y0
            ax, cy, by = a * x, c * y, b * y
            base = np.maximum(1.0 + x * (ax + 2 * by) + cy * y, np.float32(1e-3))
            value = wx * wy * base ** np.float32(-beta)
            image += value
            if derivatives:
                common = np.float32(-beta) * value / base
                slopes[0] -= common * 2 * (ax + by)
                slopes[1] -= common * 2 * (b * x + cy)
                slopes[2] += common * x * x
                slopes[3] += common * 2 * x * y
                slopes[4] += common * y * y
    return image, slopes


@dataclass(frozen=True)
class Profile:
    """A Moffat profile with a factor that depends on the distance in units of the half-width: any radial profile."""

    beta: float
    distance: Floats
    factor: Floats
    nodes: int = 2

    def images(self, points: Grid, shape: Floats) -> Singles:
        """Return pixel-averaged images of unit height before the factor, (N, P)."""
        image, _ = moffat(points, shape, self.beta, self.nodes)
        if len(self.factor) == 1:
            return image
        return image * np.interp(_distance(points, shape, self.beta), self.distance, self.factor).astype(np.float32)

    def slopes(self, points: Grid, shape: Floats) -> tuple[Singles, list[Singles]]:
        """Return the images and their derivatives by the five parameters (those of the factor neglected)."""
        image, slopes = moffat(points, shape, self.beta, self.nodes, derivatives=True)
        if len(self.factor) > 1:
            factor = np.interp(_distance(points, shape, self.beta), self.distance, self.factor).astype(np.float32)
            image *= factor
            for slope in slopes:
                slope *= factor
        return image, slopes


def plain(beta: float, fwhm: float) -> Profile:
    """Return the Moffat profile itself, averaged over pixels as images of this fwhm need."""
    return Profile(beta, np.zeros(1), np.ones(1), 3 if fwhm < _SHARP else 2)


def fit(
    data: Singles, variance: Singles, good: NDArray[np.bool_], start: Floats, profile: Profile
) -> tuple[Floats, Floats]:
    """Fit amplitude and shape of N images robustly (Gauss-Newton, pixels beyond 4 sigma left out).

    Parameters
    ----------
    data, variance : ndarray, shape (N, P)
        Sky-subtracted electrons.
    good : ndarray of bool, shape (N, P)
    start : ndarray, shape (N, 5)
        First guess of x, y, a, b, c.
    profile : Profile

    Returns
    -------
    shape : ndarray, shape (N, 5)
    cost : ndarray, shape (N,)
        Mean of min(z^2, 9) over the pixels; infinite where the fit failed.
    """
    points = grid(round(np.sqrt(data.shape[1])))
    shape = start.copy()
    height = core_amplitude(data, profile.images(points, shape), good)
    weight = np.where(good, 1.0 / np.maximum(variance, 1e-6), 0.0).astype(np.float32)
    for step in range(_STEPS):
        image, slopes = profile.slopes(points, shape)
        scale = height[:, None].astype(np.float32)
        model = scale * image
        residual = data - model
        own = 1.0 / (1.0 / np.maximum(weight, 1e-12) + (np.float32(FIT_TOLERANCE) * model) ** 2)
        own = np.where(weight > 0, own, 0.0)
        if step > 1:
            own = np.where(residual**2 * own > _CUT**2, 0.0, own)
        basis = np.stack([image, *(scale * slope for slope in slopes)], axis=1).astype(np.float64)
        weighted = basis * own[:, None, :]
        normal = weighted @ basis.transpose(0, 2, 1)
        right = (weighted @ residual[:, :, None].astype(np.float64))[:, :, 0]
        diagonal = np.einsum("nii->ni", normal)
        diagonal *= 1.0 + 1e-6
        diagonal += 1e-30
        unit = np.sqrt(diagonal)
        scaled = normal / (unit[:, :, None] * unit[:, None, :])
        change = np.linalg.solve(scaled + 1e-9 * np.eye(6), (right / unit)[:, :, None])[:, :, 0] / unit
        height = height + np.clip(change[:, 0], -0.5 * np.abs(height), np.abs(height))
        shape[:, :2] += np.clip(change[:, 1:3], -0.3, 0.3)
        trace = 0.5 * (shape[:, 2] + shape[:, 4])
        shape[:, 2:] += np.clip(change[:, 3:], -0.3 * trace[:, None], 0.5 * trace[:, None])
        shape[:, 2], shape[:, 4] = (np.maximum(shape[:, i], 0.05 * trace) for i in (2, 4))
        limit = 0.8 * np.sqrt(shape[:, 2] * shape[:, 4])
        shape[:, 3] = np.clip(shape[:, 3], -limit, limit)
    cost = misfit(data, variance, good, profile.images(points, shape), height) / np.maximum(good.sum(axis=1), 1)
    failed = ~np.isfinite(shape).all(axis=1) | ~(height > 0) | (np.abs(shape[:, :2] - start[:, :2]).max(axis=1) > 2.0)
    cost[failed] = np.inf
    return shape, cost


def misfit(data: Singles, variance: Singles, good: NDArray[np.bool_], image: Singles, height: Floats) -> Floats:
    """Return the sum over the pixels of min(z^2, 9), (N,)."""
    model = height[:, None] * image
    z2 = (data - model) ** 2 / (np.maximum(variance, 1e-6) + (FIT_TOLERANCE * model) ** 2)
    return np.where(good, np.minimum(z2, 9.0), 0.0).sum(axis=1)


def core_amplitude(data: Singles, image: Singles, good: NDArray[np.bool_], quantile: float = 0.5) -> Floats:
    """Return a quantile of data / image over the bright pixels of the image, (N,)."""
    core = good & (image > 0.25 * image.max(axis=1, keepdims=True))
    ratio = np.sort(np.where(core, data / np.maximum(image, 1e-30), np.inf), axis=1)
    n = core.sum(axis=1)
    value = ratio[np.arange(len(ratio)), np.maximum((quantile * n).astype(np.intp) - (quantile * n % 1 == 0), 0)]
    return np.where(n > 0, value, 0.0).astype(np.float64)


def amplitude(data: Singles, variance: Singles, good: NDArray[np.bool_], image: Singles) -> Floats:
    """Fit the amplitude of known images robustly, (N,): the best of a high and a low start, for hits are high."""
    best, least = np.zeros(len(data)), np.full(len(data), np.inf)
    for quantile in (0.5, 0.1):
        value = core_amplitude(data, image, good, quantile)
        for _ in range(5):
            model = value[:, None] * image
            allowed = np.maximum(variance, 1e-6) + (FIT_TOLERANCE * model) ** 2
            weight = np.where(good & ((data - model) ** 2 < _CUT**2 * allowed), 1.0 / allowed, 0.0)
            norm = (weight * image**2).sum(axis=1)
            value = np.where(norm > 0, (weight * image * data).sum(axis=1) / np.maximum(norm, 1e-30), value)
        cost = misfit(data, variance, good, image, value)
        best, least = np.where(cost < least, value, best), np.minimum(cost, least)
    return best


def refine(
    profile: Profile, data: Singles, variance: Singles, good: NDArray[np.bool_], shape: Floats, passes: int = 3
) -> Profile:
    """Find the factor that turns a plain profile into the radial profile all N images share.

    The factor in a range of distances is the median of data / model over the pixels of all images there.
    """
    points = grid(round(np.sqrt(data.shape[1])))
    rho = _distance(points, shape, profile.beta)
    chosen = np.flatnonzero(good)
    order = chosen[np.argsort(rho.ravel()[chosen], kind="stable")]
    bounds = [0]
    while bounds[-1] < len(order):
        bounds.append(bounds[-1] + max(12, len(shape), int(0.15 * bounds[-1])))
    bounds[-1] = len(order)
    parts = [order[low:high] for low, high in pairwise(bounds) if high > low]
    if len(parts) < 3:
        return profile
    distance = np.array([np.median(rho.ravel()[part]) for part in parts])
    for _ in range(passes):
        image = profile.images(points, shape)
        model = (amplitude(data, variance, good, image)[:, None] * image).ravel()
        ratio = data.ravel() / np.maximum(model, 1e-6)
        step = np.array([np.median(ratio[part]) for part in parts])
        noise2 = variance.ravel() / np.maximum(model, 1e-6) ** 2
        error = np.array([np.sqrt(np.median(noise2[part]) / len(part)) for part in parts])
        step = np.where(3.0 * error < 0.5, np.clip(step, 0.5, 2.0), 1.0)  # the noise rules the wings: leave them
        profile = replace(
            profile, distance=distance, factor=step * np.interp(distance, profile.distance, profile.factor)
        )
    return profile


def _distance(points: Grid, shape: Floats, beta: float) -> Floats:
    """Distance of pixels from the centre in units of the half-width at half maximum along that direction, (N, P)."""
    x0, y0, a, b, c = (column[:, None] for column in shape.T)
    x, y = points.x - x0, points.y - y0
    return np.sqrt(np.maximum(a * x * x + 2 * b * x * y + c * y * y, 0.0) / (2.0 ** (1.0 / beta) - 1.0))


def settle(
    data: Singles, variance: Singles, good: NDArray[np.bool_], profile: Profile, shape: Floats
) -> tuple[Floats, Singles]:
    """Fit the height of known images, each free to lie off its predicted place by about `PLACING`, robustly.

    Returns
    -------
    height : ndarray, shape (N,)
    image : ndarray, shape (N, P)
        At the place found; the model is height x image.
    """
    image, slopes = profile.slopes(grid(round(np.sqrt(data.shape[1]))), shape)
    height = amplitude(data, variance, good, image)
    basis = np.stack([image, slopes[0], slopes[1]], axis=1).astype(np.float64)
    shift = np.zeros((len(data), 2))
    for _ in range(4):
        moved = image + shift[:, :1] * slopes[0] + shift[:, 1:] * slopes[1]
        model = height[:, None] * moved
        allowed = np.maximum(variance, 1e-6) + (PLACE_TOLERANCE * model) ** 2
        weight = np.where(good & ((data - model) ** 2 < _CUT**2 * allowed), 1.0 / allowed, 0.0)
        weighted = basis * weight[:, None, :]
        normal = weighted @ basis.transpose(0, 2, 1)
        right = (weighted @ data[:, :, None].astype(np.float64))[:, :, 0]
        prior = 1.0 / np.maximum(PLACING * np.abs(height), 1e-3) ** 2
        normal[:, 1, 1] += prior
        normal[:, 2, 2] += prior
        normal[:, 0, 0] += 1e-30
        unit = np.sqrt(np.einsum("nii->ni", normal))
        scaled = normal / (unit[:, :, None] * unit[:, None, :]) + 1e-9 * np.eye(3)
        found = np.linalg.solve(scaled, (right / unit)[:, :, None])[:, :, 0] / unit
        sound = found[:, 0] > 0
        height = np.where(sound, found[:, 0], height)
        limit = 5.0 * PLACING
        shift = np.where(
            sound[:, None], np.clip(found[:, 1:] / np.where(sound, found[:, 0], 1.0)[:, None], -limit, limit), 0.0
        )
    moved = image + shift[:, :1].astype(np.float32) * slopes[0] + shift[:, 1:].astype(np.float32) * slopes[1]
    return height, np.maximum(moved, 0.0)


def shared(value: Floats, weight: Floats, passes: int = 3) -> tuple[Floats, Floats]:
    """Split values into what stays with a source and beam and what a frame shares (median polish).

    Parameters
    ----------
    value : ndarray, shape (S, K, B)
        NaN where unknown.
    weight : ndarray, shape (S, K, B)

    Returns
    -------
    static : ndarray, shape (S, B)
        Where a source has no value: the median of the other sources (0 without any).
    frame : ndarray, shape (K,)
    """
    count, frames, beams = value.shape
    static, frame = np.zeros((count, beams)), np.zeros(frames)
    for _ in range(passes):
        rest = value - frame[:, None]
        for b in range(beams):
            known = np.isfinite(rest[:, :, b]).any(axis=1)
            if known.any():
                static[known, b] = np.nanmedian(rest[known][:, :, b], axis=1)
                static[~known, b] = np.median(static[known, b])
        rest = value - static[:, None, :]
        for k in range(frames):
            known = np.isfinite(rest[:, k])
            if known.any():
                frame[k] = weighted_median(rest[:, k][known], weight[:, k][known])
    return static, frame


def weighted_median(value: Floats, weight: Floats) -> float:
    """Return the weighted median; the mean of the two middle values where the weight is split evenly."""
    order = np.argsort(value)
    value, total = value[order], np.cumsum(weight[order])
    half = 0.5 * total[-1]
    low = int(np.searchsorted(total, half * (1 - 1e-9)))
    high = min(int(np.searchsorted(total, half * (1 + 1e-9))), len(value) - 1)
    return float(0.5 * (value[low] + value[high]))
