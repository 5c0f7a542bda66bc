"""Finding the stars of one image, whatever its size, its stars' width and its blemishes."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from hwpol.flags import Flag
from hwpol.pixels import PixelMask, Pixels
from hwpol.registration.background import background, bad_lines
from hwpol.registration.centroids import FWHM_PER_SIGMA, UNUSABLE, Bools, Floats, axes_of, binned, measure

# A source whose minor axis is below this share of the field's width is not a star (hot pixel, hit, bad column).
_SHARP = 0.6
# No optics and pixel give less; what is narrower is one pixel.
_ONE_PIXEL = 1.25
# Share of one pixel in its 3 x 3: 0.41 for a star of 1.3 pixels centred on it, 1 for a hot pixel.
_LONE = 0.55
# Worth of a claim of twice the scale beside an equal one; the next is taken where one yields no star at all.
_COARSER = (1.0, 0.9, 0.8)
_MOST_MEASURED = 3000


@dataclass(frozen=True)
class Stars:
    """Stars of one image, brightest first; every array has shape (stars,).

    Attributes
    ----------
    x, y : ndarray
        Raw pixels, 0-based.
    flux : ndarray
        Electrons in the Gaussian of the field's width that fits best.
    peak : ndarray
        Brightest pixel above the sky, electrons.
    fwhm, ellipticity : ndarray
        Pixels; 1 - minor / major axis. NaN where not measured.
    snr : ndarray
        Of the windowed flux.
    flags : ndarray of int
        Bits of `Flag`: SATURATED, EDGE, BAD_PIXELS, NEIGHBOUR.
    """

    x: Floats
    y: Floats
    flux: Floats
    peak: Floats
    fwhm: Floats
    ellipticity: Floats
    snr: Floats
    flags: NDArray[np.int64]

    def __len__(self) -> int:
        return len(self.x)

    def select(self, index: NDArray[np.int64] | NDArray[np.bool_]) -> Stars:
        """Return the stars that an index array or mask names."""
        return Stars(*(getattr(self, f.name)[index] for f in fields(self)))

    @property
    def width(self) -> float:
        """Median FWHM (pixels) of the stars that are neither saturated nor at an edge; NaN without any."""
        clean = (self.flags & int(Flag.SATURATED | Flag.EDGE)) == 0
        values = self.fwhm[clean if clean.any() else np.ones(len(self), bool)]
        values = values[np.isfinite(values)][:200]
        return float(np.median(values)) if len(values) else float("nan")


def no_stars() -> Stars:
    """An empty list."""
    empty = np.zeros(0)
    return Stars(empty, empty, empty, empty, empty, empty, empty, np.zeros(0, np.int64))


def detect(pixels: Pixels, *, fwhm: float | None = None, threshold: float = 5.0) -> Stars:
    """Find the stars of a calibrated image.

    Sky: a clipped median mesh. Detection: peaks of the image smoothed with the stars' own Gaussian, in units of
    the noise that the variance predicts there, scaled to the noise seen. Sources much sharper than the stars
    (hot pixels, cosmic-ray hits, bad columns) are left out. Saturated stars are kept and flagged.

    Parameters
    ----------
    pixels : Pixels
        Calibrated box; masked pixels take no part (saturated ones do).
    fwhm : float, optional
        Width of the stars, pixels; estimated from the image when not given.
    threshold : float
        Least S/N.

    Returns
    -------
    Stars
        Brightest first, raw coordinates; empty where nothing is found.
    """
    bad = ((pixels.mask & UNUSABLE) != 0) | ~np.isfinite(pixels.data) | ~np.isfinite(pixels.variance)
    if min(pixels.data.shape) < 3 or bad.all():
        return no_stars()
    data = np.where(bad, 0.0, pixels.data - background(pixels.data, bad)).astype(np.float32)
    bad |= bad_lines(data, bad)
    flat = Pixels(
        np.where(bad, np.float32(0), data),
        np.where(bad, np.float32(0), np.maximum(pixels.variance, np.float32(0))),
        pixels.mask | np.where(bad, np.uint8(PixelMask.BAD), np.uint8(0)),
    )
    stars = no_stars()
    for width in [fwhm] if fwhm is not None else _field_widths(flat):
        stars = _find(flat, bad, width, threshold)
        if len(stars):
            break
    shift = np.array([pixels.x0, pixels.y0], dtype=np.float64)
    return Stars(stars.x + shift[0], stars.y + shift[1], *(getattr(stars, f.name) for f in fields(stars)[2:]))


def _significance(flat: Pixels, bad: Bools, fwhm: float) -> Floats:
    """S/N of a star of this width centred on each pixel."""
    from scipy.ndimage import gaussian_filter

    sigma = fwhm / FWHM_PER_SIGMA
    signal = gaussian_filter(flat.data, sigma, mode="constant", truncate=3.0)
    noise = gaussian_filter(flat.variance, sigma / np.sqrt(2), mode="constant", truncate=3.0) / (4 * np.pi * sigma**2)
    ratio = np.where(noise > 0, signal / np.sqrt(np.maximum(noise, 1e-30)), 0.0)
    ratio[bad] = 0.0
    seen = ratio[~bad]
    seen = seen[:: max(1, len(seen) // 50_000)]
    middle = np.median(seen)
    scatter = 1.4826 * np.median(np.abs(seen - middle))
    return (ratio - max(middle, 0.0)) / np.clip(scatter, 0.7, 3.0)


def _peaks(ratio: Floats, fwhm: float, threshold: float) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Rows and columns of the local maxima above the threshold, highest first."""
    from scipy.ndimage import maximum_filter

    size = 2 * max(1, round(0.6 * fwhm)) + 1
    rows, columns = np.nonzero((ratio > threshold) & (ratio == maximum_filter(ratio, size=size, mode="constant")))
    order = np.argsort(-ratio[rows, columns], kind="stable")
    return rows[order], columns[order]


def _field_widths(flat: Pixels) -> Iterator[float]:
    """Widths of the stars (pixels), likeliest first: each source's best scale of 2.2, 4.4, ... refined by its moments.

    A photon-limited star is as significant on any scale that holds it: a coarse one may win its claim by chance and
    then lead to no star, where the finer one is its own.
    """
    found: list[tuple[float, float, float, float]] = []
    level, n = flat, 1
    while min(level.data.shape) >= 5 and n <= 16:
        blind = (level.mask & UNUSABLE) != 0
        ratio = _significance(level, blind, 2.2)
        rows, columns = _peaks(ratio, 2.2, 6.0)
        rows, columns = rows[:400], columns[:400]
        found += [
            (float(ratio[r, c]), (c + 0.5) * n - 0.5, (r + 0.5) * n - 0.5, 2.2 * n)
            for r, c in zip(rows, columns, strict=True)
        ]
        n *= 2
        level = binned(flat, n)
    for coarser in _COARSER if found else ():
        width = _claimed_width(flat, found, coarser)
        if width is not None:
            yield width


def _claimed_width(flat: Pixels, found: list[tuple[float, float, float, float]], coarser: float) -> float | None:
    from scipy.spatial import cKDTree

    table = np.array(sorted(found, key=lambda claim: claim[0] * coarser ** np.log2(claim[3] / 2.2), reverse=True))
    tree = cKDTree(table[:, 1:3])
    free, taken = np.ones(len(table), bool), np.zeros(len(table), bool)
    for i in range(len(table)):
        around = tree.query_ball_point(table[i, 1:3], 1.5 * table[i, 3] + 2)
        # A coarse peak may sit a bin beside the small source that made it.
        if free[i] and not taken[around].any():
            taken[i] = True
            free[around] = False
    chosen = np.flatnonzero(taken)
    table = table[chosen]
    widths, snr, full = [], [], []
    saturated = _near_saturation(flat)
    for scale in np.unique(table[:, 3]):
        part = table[table[:, 3] == scale][:80]
        place = measure(flat, part[:, 1], part[:, 2], scale)
        major, minor = axes_of(flat, place.x, place.y, 1.3 * scale)
        keep = place.ok & (minor > 0.7 * _ONE_PIXEL) & (minor > 0.5 * major)
        rows, columns = (
            np.clip(np.rint(v).astype(int), 0, m - 1) for v, m in zip((place.y, place.x), flat.data.shape, strict=True)
        )
        keep &= _concentration(flat, rows, columns) < _LONE
        widths.append(np.sqrt(major * minor)[keep])
        snr.append(np.minimum(place.snr[keep], 300.0))
        full.append(saturated[rows, columns][keep])
    width, weight, spilt = np.concatenate(widths), np.concatenate(snr), np.concatenate(full)
    if not spilt.all():
        width, weight = width[~spilt], weight[~spilt]
    if not len(width):
        return None
    order = np.argsort(width)
    middle = width[order][np.searchsorted(np.cumsum(weight[order]), 0.5 * weight.sum())]
    near = np.abs(np.log(width / middle)) < 0.35
    return float(np.clip(np.median(width[near]), 1.3, 0.5 * max(flat.data.shape)))


def _near_saturation(flat: Pixels) -> Bools:
    from scipy.ndimage import binary_dilation

    full = (flat.mask & int(PixelMask.SATURATED)) != 0
    return np.asarray(binary_dilation(full, iterations=2)) if full.any() else full


def _find(flat: Pixels, bad: Bools, fwhm: float, threshold: float) -> Stars:
    ratio = _significance(flat, bad, fwhm)
    rows, columns = _peaks(ratio, fwhm, threshold)
    full = _near_saturation(flat)
    if full.any():
        rows, columns = _one_per_plateau(full, rows, columns)
    if not len(rows):
        return no_stars()
    place = measure(flat, columns, rows, fwhm, reach=max(1.5, 0.8 * fwhm))
    x = np.where(place.ok, place.x, columns)
    y = np.where(place.ok, place.y, rows)
    saturated = full[rows, columns]
    keep = (place.snr > threshold) & (place.flux > 0) & (place.ok | saturated | (place.snr > 2 * threshold))
    keep &= saturated | ~_is_sharp(flat, bad, rows, columns, place.flux, fwhm)
    index = np.flatnonzero(keep)
    index = index[np.argsort(-place.flux[index], kind="stable")]
    x, y, rows, columns, saturated = x[index], y[index], rows[index], columns[index], saturated[index]
    flux, snr = place.flux[index], place.snr[index]
    major, minor = np.full(len(x), np.nan), np.full(len(x), np.nan)
    major[:_MOST_MEASURED], minor[:_MOST_MEASURED] = axes_of(flat, x[:_MOST_MEASURED], y[:_MOST_MEASURED], 1.3 * fwhm)
    # Noise of a width is about 1 / snr of it; three of those keep faint stars in.
    narrow = minor < np.maximum(_SHARP - 3.0 / np.maximum(snr, 1.0), 0.0) * fwhm
    narrow |= (major < _ONE_PIXEL * 0.8) & (snr > 20)
    # Bad columns and long tracks: no convergence, or thin.
    narrow |= (snr > 15) & ~np.isfinite(minor)
    narrow |= (snr > 8) & (minor < 0.45 * major) & (minor < 0.85 * fwhm)
    if fwhm < 2.0:
        # Moments of an undersampled star follow its place within the pixel: only what is long as well is no star.
        narrow &= ~(major < 2.0 * fwhm)
    alone = _distinct(x, y, 0.5 * fwhm) & ~(narrow & ~saturated)
    flags = _flags(flat, bad, x, y, fwhm, saturated)
    peak = flat.data[rows, columns].astype(np.float64)
    ellipticity = 1.0 - minor / major
    stars = Stars(x, y, flux, peak, np.sqrt(major * minor), ellipticity, snr, flags)
    return stars.select(alone)


def _one_per_plateau(
    full: Bools, rows: NDArray[np.int64], columns: NDArray[np.int64]
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """One peak for each saturated patch, where the patch is widest: a bleeding star is one star."""
    from scipy.ndimage import distance_transform_edt, label, maximum_position

    patches, count = label(full)
    free = patches[rows, columns] == 0
    widest = np.array(maximum_position(distance_transform_edt(full), patches, np.arange(1, count + 1)), dtype=np.int64)
    return np.concatenate([widest[:, 0], rows[free]]), np.concatenate([widest[:, 1], columns[free]])


def _is_sharp(
    flat: Pixels, bad: Bools, rows: NDArray[np.int64], columns: NDArray[np.int64], flux: Floats, fwhm: float
) -> Bools:
    """Whether the brightest pixel stands above its eight neighbours more than half-way to a lone pixel.

    In units of the amplitude of the Gaussian that fits: 1 - <neighbours of a Gaussian> for a star, pi sigma^2 for
    a lone pixel; the geometric mean divides them.
    """
    sigma = fwhm / FWHM_PER_SIGMA
    ny, nx = flat.data.shape
    # The lone pixel lies within a pixel or two of the smoothed peak.
    reach = np.arange(-2, 3) if fwhm >= 2.5 else np.arange(-1, 2)
    near_r = np.clip(rows[:, None, None] + reach[:, None], 0, ny - 1)
    near_c = np.clip(columns[:, None, None] + reach, 0, nx - 1)
    best = flat.data[near_r, near_c].reshape(len(rows), -1).argmax(axis=1)
    r = np.clip(rows + reach[best // len(reach)], 0, ny - 1)
    c = np.clip(columns + reach[best % len(reach)], 0, nx - 1)
    offsets = [(i, j) for i in (-1, 0, 1) for j in (-1, 0, 1) if i or j]
    around_r = np.stack([np.clip(r + i, 0, ny - 1) for i, _ in offsets])
    around_c = np.stack([np.clip(c + j, 0, nx - 1) for _, j in offsets])
    good = ~bad[around_r, around_c]
    count = np.maximum(good.sum(axis=0), 1)
    top = flat.data[r, c].astype(np.float64)
    mean = (flat.data[around_r, around_c] * good).sum(axis=0) / count
    amplitude = flux / (2 * np.pi * sigma**2)
    lone_pixel = _concentration(flat, r, c) > _LONE
    with np.errstate(divide="ignore", invalid="ignore"):
        sharpness = (top - mean) / amplitude
        noise = np.sqrt(flat.variance[r, c].astype(np.float64)) / amplitude
    star = 1.0 - 0.5 * (np.exp(-0.5 / sigma**2) + np.exp(-1.0 / sigma**2))
    lone = np.pi * sigma**2
    # Below about 1.5 pixels the two meet and the pixel decides nothing.
    limit = np.sqrt(star * lone) if lone > 1.15 * star else np.inf
    sharp = lone_pixel | (sharpness - limit > 2.0 * np.minimum(noise, sharpness / 3.0))
    return (good.sum(axis=0) >= 3) & sharp


def _concentration(flat: Pixels, rows: NDArray[np.int64], columns: NDArray[np.int64]) -> Floats:
    """Share of the brightest pixel in the sum of the 3 x 3 about a place, less two sigma of its noise."""
    ny, nx = flat.data.shape
    near = np.arange(-1, 2)
    r = np.clip(rows[:, None, None] + near[:, None], 0, ny - 1)
    c = np.clip(columns[:, None, None] + near, 0, nx - 1)
    box = flat.data[r, c].reshape(len(rows), -1).astype(np.float64)
    noise = np.sqrt(flat.variance[r, c].reshape(len(rows), -1).max(axis=1, initial=0.0).astype(np.float64))
    total = np.maximum(box.sum(axis=1), 1e-6)
    top = box.max(axis=1, initial=0.0)
    return np.where(top > 5.0 * noise, (top - 2.0 * noise) / total, 0.0)


def _distinct(x: Floats, y: Floats, separation: float) -> Bools:
    """False for a source closer than `separation` to one that comes before it."""
    from scipy.spatial import cKDTree

    alone = np.ones(len(x), bool)
    for _, j in sorted(cKDTree(np.column_stack([x, y])).query_pairs(separation)) if len(x) > 1 else ():
        alone[j] = False
    return alone


def _flags(flat: Pixels, bad: Bools, x: Floats, y: Floats, fwhm: float, saturated: Bools) -> NDArray[np.int64]:
    from scipy.spatial import cKDTree

    ny, nx = flat.data.shape
    flags = np.where(saturated, int(Flag.SATURATED), 0).astype(np.int64)
    flags[(np.minimum(x, nx - 1 - x) < fwhm) | (np.minimum(y, ny - 1 - y) < fwhm)] |= int(Flag.EDGE)
    half = int(np.ceil(fwhm))
    offset = np.arange(-half, half + 1)
    rows = np.clip(np.rint(y).astype(int)[:, None, None] + offset[:, None], 0, ny - 1)
    columns = np.clip(np.rint(x).astype(int)[:, None, None] + offset, 0, nx - 1)
    if bad.any():
        outside = (flat.mask[rows, columns] & int(PixelMask.OUTSIDE)) != 0
        flags[outside.any(axis=(1, 2))] |= int(Flag.EDGE)
        flags[(bad[rows, columns] & ~outside).any(axis=(1, 2))] |= int(Flag.BAD_PIXELS)
    if len(x) > 1:
        for pair in cKDTree(np.column_stack([x, y])).query_pairs(2.5 * fwhm):
            flags[list(pair)] |= int(Flag.NEIGHBOUR)
    return flags
