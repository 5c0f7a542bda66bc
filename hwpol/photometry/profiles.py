"""Elliptical Moffat images for many stamps at once: evaluation, robust fits, and what frames and beams share."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Singles = NDArray[np.float32]

BETAS = (2.0, 2.5, 3.0, 4.0, 6.0, 30.0)
"""Moffat indices tried; the last is a Gaussian in all but name."""

FIT_TOLERANCE = 0.03
"""Fraction of the model allowed as its error while it is fitted: keeps the core of bright stars from ruling."""

_CUT = 4.0  # weighted residual beyond which a pixel has no say in a fit
_NODE = np.float32(0.5 / np.sqrt(3.0))  # Gauss-Legendre over the pixel, two points an axis
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


def moffat(points: Grid, shape: Singles, beta: float, derivatives: bool = False) -> tuple[Singles, list[Singles]]:
    """Return pixel-averaged (1 + u)^-beta, u = a X^2 + 2 b X Y + c Y^2, for stamps of N images.

    Parameters
    ----------
    points : Grid
        P pixels.
    shape : ndarray, shape (N, 5)
        x, y (pixels from the middle pixel), a, b, c (per square pixel).
    beta : float
        Moffat index.
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
    for sx in (-_NODE, _NODE):
        for sy in (-_NODE, _NODE):
            x, y = points.x + sx - x0, points.y + sy - y0
            ax, cy, by = a * x, c * y, b * y
            base = np.maximum(1.0 + x * (ax + 2 * by) + cy * y, np.float32(1e-3))
            value = 0.25 * base ** np.float32(-beta)
            image += value
            if derivatives:
                common = np.float32(-beta) * value / base
                slopes[0] -= common * 2 * (ax + by)
                slopes[1] -= common * 2 * (b * x + cy)
                slopes[2] += common * x * x
                slopes[3] += common * 2 * x * y
                slopes[4] += common * y * y
    return image, slopes


def fit(
    data: Singles, variance: Singles, good: NDArray[np.bool_], start: Floats, beta: float
) -> tuple[Floats, Floats, Floats]:
    """Fit amplitude and shape of N images robustly (Gauss-Newton, pixels beyond 4 sigma left out).

    Parameters
    ----------
    data, variance : ndarray, shape (N, P)
        Sky-subtracted electrons.
    good : ndarray of bool, shape (N, P)
    start : ndarray, shape (N, 5)
        First guess of x, y, a, b, c.
    beta : float

    Returns
    -------
    shape : ndarray, shape (N, 5)
    amplitude : ndarray, shape (N,)
    cost : ndarray, shape (N,)
        Mean of min(z^2, 9) over the pixels; infinite where the fit failed.
    """
    points = grid(round(np.sqrt(data.shape[1])))
    shape = start.copy()
    image, _ = moffat(points, shape, beta)
    amplitude = core_amplitude(data, image, good)
    weight = np.where(good, 1.0 / np.maximum(variance, 1e-6), 0.0).astype(np.float32)
    for step in range(_STEPS):
        image, slopes = moffat(points, shape, beta, derivatives=True)
        scale = amplitude[:, None].astype(np.float32)
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
        amplitude = amplitude + np.clip(change[:, 0], -0.5 * np.abs(amplitude), np.abs(amplitude))
        shape[:, :2] += np.clip(change[:, 1:3], -0.3, 0.3)
        trace = 0.5 * (shape[:, 2] + shape[:, 4])
        shape[:, 2:] += np.clip(change[:, 3:], -0.3 * trace[:, None], 0.5 * trace[:, None])
        shape[:, 2], shape[:, 4] = (np.maximum(shape[:, i], 0.05 * trace) for i in (2, 4))
        limit = 0.8 * np.sqrt(shape[:, 2] * shape[:, 4])
        shape[:, 3] = np.clip(shape[:, 3], -limit, limit)
    image, _ = moffat(points, shape, beta)
    model = amplitude[:, None] * image
    z2 = np.where(good, (data - model) ** 2 / (np.maximum(variance, 1e-6) + (FIT_TOLERANCE * model) ** 2), 0.0)
    cost = np.minimum(z2, 9.0).sum(axis=1) / np.maximum(good.sum(axis=1), 1)
    failed = ~np.isfinite(shape).all(axis=1) | ~(amplitude > 0) | (np.abs(shape[:, :2] - start[:, :2]).max(axis=1) > 2.0)
    cost[failed] = np.inf
    return shape, amplitude, cost


def core_amplitude(data: Singles, image: Singles, good: NDArray[np.bool_]) -> Floats:
    """Return the median of data / image over the bright pixels of the image, (N,)."""
    peak = image.max(axis=1, keepdims=True)
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = np.where(good & (image > 0.25 * peak), data / image, np.nan)
    none = ~np.isfinite(ratio).any(axis=1)
    ratio[none] = 0.0
    return np.nanmedian(ratio, axis=1).astype(np.float64)


def amplitude(data: Singles, variance: Singles, good: NDArray[np.bool_], image: Singles) -> Floats:
    """Fit the amplitude of known images robustly, (N,)."""
    value = core_amplitude(data, image, good)
    for _ in range(5):
        model = value[:, None] * image
        allowed = np.maximum(variance, 1e-6) + (FIT_TOLERANCE * model) ** 2
        use = good & ((data - model) ** 2 < _CUT**2 * allowed)
        weight = np.where(use, 1.0 / allowed, 0.0)
        norm = (weight * image**2).sum(axis=1)
        value = np.where(norm > 0, (weight * image * data).sum(axis=1) / np.maximum(norm, 1e-30), value)
    return value


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
