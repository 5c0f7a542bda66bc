"""Sums over circular apertures with exact pixel overlap, for many sources and radii at once."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from hwpol.errors import InputError
from hwpol.pixels import Box, PixelMask, Pixels

Floats = NDArray[np.float64]

KINDS = (PixelMask.BAD, PixelMask.SATURATED, PixelMask.COSMIC_RAY, PixelMask.OUTSIDE)

MOST_REPAIRED = 3
"""Bad pixels of one aperture that may be bridged from their neighbours; more make the aperture unusable."""

_TOUCHED = 1e-9  # smallest overlap that counts as touching a pixel: far above the rounding of the overlap, ~1e-13
_CHUNK_PIXELS = 1 << 15  # stamps are worked through in blocks of about this many pixels, to stay in the cache


@dataclass(frozen=True)
class ApertureSums:
    """Sums over apertures; S sources, R radii. The sky is still in.

    Attributes
    ----------
    flux : ndarray, shape (S, R)
        Electrons: sum of w d, w the exact overlap of circle and pixel. Masked pixels count nothing, except BAD ones
        that could be bridged from their good neighbours.
    variance : ndarray, shape (S, R)
        Electrons squared: sum of w^2 var.
    area : ndarray, shape (S, R)
        Pixels: sum of w over the pixels that count.
    bad : ndarray of int, shape (S, R, 4)
        Pixels touched by the aperture that are masked as BAD, SATURATED, COSMIC_RAY, OUTSIDE (in this order; `KINDS`).
        Pixels beyond the box are OUTSIDE.
    usable : ndarray of bool, shape (S, R)
        No pixel SATURATED, COSMIC_RAY or OUTSIDE, and at most `MOST_REPAIRED` BAD ones, all
        bridged and none in the core.
    photons, squares : ndarray, shape (S, R)
        Sum of w^2 max(d, 0), what the pixels' own counts gave the variance, and sum of w^2.
    """

    flux: Floats
    variance: Floats
    area: Floats
    bad: NDArray[np.intp]
    usable: NDArray[np.bool_]
    photons: Floats
    squares: Floats


def nearest_pixel(x: Floats) -> NDArray[np.intp]:
    """Return the integer pixel a position falls in; 0 for positions that are not finite."""
    return np.rint(np.where(np.isfinite(x), np.clip(x, -1e9, 1e9), 0.0)).astype(np.intp)


def box_around(x: float, y: float, half: int) -> Box:
    """Return the box of 2 half + 1 pixels a side around the pixel that holds (x, y)."""
    ix, iy = int(nearest_pixel(np.asarray(x))), int(nearest_pixel(np.asarray(y)))
    return Box(ix - half, iy - half, ix + half + 1, iy + half + 1)


def window(radius: float) -> int:
    """Return the half-size in pixels of the stamp that holds a circle of `radius` at any sub-pixel position."""
    return int(np.ceil(radius + 0.5))


def circle_overlap(fx: Floats, fy: Floats, radius: float, half: int) -> Floats:
    r"""Return the area of each pixel of a stamp inside a circle, exactly.

    Parameters
    ----------
    fx, fy : ndarray, shape (S,)
        Centre of the circle from the centre of the middle pixel, pixels.
    radius : float
        Pixels, > 0.
    half : int
        The stamp has 2 half + 1 pixels a side.

    Returns
    -------
    ndarray, shape (S, 2 half + 1, 2 half + 1)
        0 to 1, to rounding (about 2e-16 radius^2).

    Notes
    -----
    The overlap is the second difference over the pixel corners of  K(x, y) = \int_0^x clip(y, -h(t), h(t)) dt  with
    h(t) = sqrt(r^2 - t^2), which is known in closed form: transcendental functions are needed on the pixel edges alone.
    """
    edges = np.arange(2 * half + 2) - (half + 0.5)
    ex = np.clip(edges - np.asarray(fx)[:, None], -radius, radius)
    ey = np.clip(edges - np.asarray(fy)[:, None], -radius, radius)
    ax, ay = np.abs(ex), np.abs(ey)
    crossing = np.sqrt((radius - ay) * (radius + ay))
    beyond = ay * crossing - _under_circle(crossing, ay, radius)
    corner = np.where(
        ax[:, None, :] <= crossing[:, :, None],
        ay[:, :, None] * ax[:, None, :],
        beyond[:, :, None] + _under_circle(ax, np.sqrt((radius - ax) * (radius + ax)), radius)[:, None, :],
    )
    corner *= np.sign(ex)[:, None, :]
    corner *= np.sign(ey)[:, :, None]
    strips = corner[:, 1:, :] - corner[:, :-1, :]
    return strips[:, :, 1:] - strips[:, :, :-1]


def _under_circle(x: Floats, h: Floats, radius: float) -> Floats:
    """Integral of h = sqrt(r^2 - t^2) from 0 to x, with h(x) given: its arc is then exact at both ends."""
    return 0.5 * (x * h + radius**2 * np.arctan2(x, h))


def gather(
    pixels: Pixels, ix: NDArray[np.intp], iy: NDArray[np.intp], half: int
) -> tuple[Floats, Floats, NDArray[np.uint8]]:
    """Cut stamps around the pixels (ix, iy); what lies beyond the box is OUTSIDE.

    Returns
    -------
    data, variance : ndarray of float64, shape (S, 2 half + 1, 2 half + 1)
        Electrons; 0 in masked pixels.
    mask : ndarray of uint8, same shape
        Pixels whose value or variance is not finite are BAD.
    """
    offsets = np.arange(-half, half + 1)
    return gather_offsets(pixels, ix, iy, offsets[None, :], offsets[:, None])


def gather_offsets(
    pixels: Pixels, ix: NDArray[np.intp], iy: NDArray[np.intp], dx: NDArray[np.intp], dy: NDArray[np.intp]
) -> tuple[Floats, Floats, NDArray[np.uint8]]:
    """Like `gather` for any pattern of offsets: dx, dy of shapes that broadcast to D; results have shape (S, *D)."""
    pattern = np.broadcast_shapes(np.shape(dx), np.shape(dy))
    ny, nx = pixels.data.shape
    if ny == 0 or nx == 0:
        full = (len(ix), *pattern)
        return np.zeros(full), np.zeros(full), np.full(full, PixelMask.OUTSIDE, np.uint8)
    column, row = ix - pixels.x0, iy - pixels.y0
    whole = (
        (column + dx.min() >= 0) & (column + dx.max() < nx) & (row + dy.min() >= 0) & (row + dy.max() < ny)
    )  # no offset of these leaves the box: their bounds need no look
    base = np.where(whole, row * nx + column, 0).astype(np.int32 if ny * nx < 2**31 else np.intp)
    index = base.reshape((-1,) + (1,) * len(pattern)) + (dy * nx + dx).astype(base.dtype)
    outside = np.flatnonzero(~whole)
    if len(outside):
        shape = (-1,) + (1,) * len(pattern)
        columns, rows = column[outside].reshape(shape) + dx, row[outside].reshape(shape) + dy
        beyond = (columns < 0) | (columns >= nx) | (rows < 0) | (rows >= ny)
        index[outside] = np.where(beyond, 0, rows * nx + columns)
    data, variance, mask = (
        np.ascontiguousarray(plane).reshape(-1)[index] for plane in (pixels.data, pixels.variance, pixels.mask)
    )
    mask[~np.isfinite(data + variance)] |= np.uint8(PixelMask.BAD)
    if len(outside):
        mask[outside] = np.where(beyond, np.uint8(PixelMask.OUTSIDE), mask[outside])
    data, variance = data.astype(np.float64), variance.astype(np.float64)
    masked = mask != 0
    if masked.any():
        data[masked] = 0.0
        variance[masked] = 0.0
    return data, variance, mask


def aperture_sums(
    pixels: Pixels, x: ArrayLike, y: ArrayLike, radii: ArrayLike, *, core: float | None = None
) -> ApertureSums:
    """Sum electrons in circular apertures.

    Parameters
    ----------
    pixels : Pixels
        Calibrated pixels.
    x, y : array_like, shape (S,)
        Centres, raw-array pixels (0-based, centre of the first pixel 0, 0).
    radii : array_like, shape (R,)
        Pixels, > 0; the same for all sources.
    core : float, optional
        Bad pixels nearer to the centre than this are not bridged (pixels); default half the smallest radius.

    Returns
    -------
    ApertureSums
        Positions that are not finite yield NaN sums and are not usable.

    Raises
    ------
    InputError
        Radii that are not positive numbers; x and y of different shapes.

    Notes
    -----
    A bridged pixel has the mean of its good neighbours in the 3 x 3 block; its variance is their mean variance plus the
    square of their scatter, which bounds what a curved profile does to the mean.
    """
    xs, ys, rs = (np.atleast_1d(np.asarray(a, dtype=np.float64)) for a in (x, y, radii))
    if xs.shape != ys.shape or xs.ndim != 1:
        raise InputError(f"positions: x has shape {xs.shape}, y {ys.shape}; expected two lists of equal length")
    if rs.ndim != 1 or not np.all(np.isfinite(rs) & (rs > 0)):
        raise InputError(f"aperture radii = {rs.tolist()}: expected pixels > 0")
    count, shape = len(xs), (len(xs), len(rs))
    out = ApertureSums(
        flux=np.empty(shape),
        variance=np.empty(shape),
        area=np.empty(shape),
        bad=np.zeros((*shape, 4), np.intp),
        usable=np.empty(shape, np.bool_),
        photons=np.empty(shape),
        squares=np.empty(shape),
    )
    inner = 0.5 * float(rs.min()) if core is None else core
    half = window(float(rs.max())) + 1  # one pixel more: neighbours of a bad pixel at the rim
    step = max(1, _CHUNK_PIXELS // (2 * half + 1) ** 2)
    for start in range(0, count, step):
        part = slice(start, start + step)
        _sum_block(pixels, xs[part], ys[part], rs, inner, half, part, out)
    lost = ~(np.isfinite(xs) & np.isfinite(ys))
    out.flux[lost] = out.variance[lost] = out.area[lost] = np.nan
    out.usable[lost] = False
    return out


def _sum_block(
    pixels: Pixels, x: Floats, y: Floats, radii: Floats, core: float, half: int, part: slice, out: ApertureSums
) -> None:
    ix, iy = nearest_pixel(x), nearest_pixel(y)
    fx, fy = (np.where(np.isfinite(a), a - i, 0.0) for a, i in ((x, ix), (y, iy)))
    data, variance, mask = gather(pixels, ix, iy, half)
    flawed = np.flatnonzero(mask.any(axis=(1, 2)))
    weight_of_pixel = np.ones(data.shape)
    hopeless = np.zeros(data.shape, np.bool_)
    if len(flawed):
        _bridge(data, variance, mask, flawed)
        still = (mask[flawed] & ~np.uint8(PixelMask.BAD)) != 0
        unbridged = (mask[flawed] != 0) & (variance[flawed] == 0)
        weight_of_pixel[flawed] = ~(still | unbridged)
        offsets = np.arange(-half, half + 1)
        distance2 = (offsets - fx[flawed, None])[:, None, :] ** 2 + (offsets - fy[flawed, None])[:, :, None] ** 2
        hopeless[flawed] = still | unbridged | ((mask[flawed] != 0) & (distance2 < core**2))
    for r, radius in enumerate(radii):
        own = window(float(radius))
        cut = slice(half - own, half + own + 1)
        overlap = circle_overlap(fx, fy, float(radius), own)
        clean = overlap if not len(flawed) else overlap * weight_of_pixel[:, cut, cut]
        flat = clean.reshape(len(x), -1)
        out.flux[part, r] = (flat * data[:, cut, cut].reshape(len(x), -1)).sum(axis=1)
        square = flat**2
        out.variance[part, r] = (square * variance[:, cut, cut].reshape(len(x), -1)).sum(axis=1)
        out.photons[part, r] = (square * np.maximum(data[:, cut, cut], 0.0).reshape(len(x), -1)).sum(axis=1)
        out.squares[part, r] = square.sum(axis=1)
        out.area[part, r] = flat.sum(axis=1)
        out.usable[part, r] = True
        if len(flawed):
            touched = overlap[flawed] > _TOUCHED
            masks = mask[flawed, cut, cut]
            rows = flawed + part.start
            for kind, bit in enumerate(KINDS):
                out.bad[rows, r, kind] = (touched & ((masks & bit) != 0)).sum(axis=(1, 2))
            out.usable[rows, r] = ~(touched & hopeless[flawed, cut, cut]).any(axis=(1, 2)) & (
                out.bad[rows, r, 0] <= MOST_REPAIRED
            )


def _bridge(data: Floats, variance: Floats, mask: NDArray[np.uint8], flawed: NDArray[np.intp]) -> None:
    """Fill pixels that are BAD and nothing else from at least three good neighbours, in place."""
    size = data.shape[1]
    for s, row, column in np.argwhere(mask[flawed] == PixelMask.BAD):
        source = flawed[s]
        near = (
            source,
            slice(max(row - 1, 0), min(row + 2, size)),
            slice(max(column - 1, 0), min(column + 2, size)),
        )
        good = mask[near] == 0
        if good.sum() >= 3:
            values = data[near][good]
            data[source, row, column] = values.mean()
            variance[source, row, column] = variance[near][good].mean() + values.var()
