"""Forced photometry of all sources in all frames and beams: pixels to flux, variance, sky and flags."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from hwpol.errors import InputError
from hwpol.flags import Flag
from hwpol.instrument.description import Section
from hwpol.photometry.aperture import ApertureSums, aperture_sums, box_around, gather, nearest_pixel, window
from hwpol.photometry.growth import shapes
from hwpol.photometry.hits import find_hits
from hwpol.photometry.sky import Others, Sky, annulus_sky
from hwpol.pixels import Box, Pixels

Floats = NDArray[np.float64]
Images = Callable[[int, int, Box | None], Pixels]

FEW = 40
"""Up to this many sources, boxes around them are asked for instead of whole images."""

NOISE_RANGE = (0.7, 1.4)
"""Median (scatter / model)^2 of the sky pixels of a beam and frame beyond which the noise model is doubted: a read
noise or gain off by about 20 percent."""


_MEASURABLE = 15.0  # signal-to-noise ratio from which a width is good to about 10 percent


@dataclass(frozen=True)
class Stars:
    """Known stars of the field in every frame and beam, to be kept out of the sky annuli.

    Attributes
    ----------
    x, y : ndarray, shape (T, K, B)
        Raw-array pixels.
    radius : ndarray, shape (T,)
        Pixels within which the star's light matters.
    """

    x: Floats
    y: Floats
    radius: Floats


@dataclass(frozen=True)
class Measurement:
    """Forced photometry; R radii, S sources, K frames, B beams.

    Attributes
    ----------
    radii : ndarray, shape (R, K)
        Aperture radii, pixels.
    flux : ndarray, shape (R, S, K, B)
        Electrons, sky removed. NaN in all beams of a frame where one of them was saturated, hit, off its section,
        spoiled by bad pixels or without sky.
    variance : ndarray, shape (R, S, K, B)
        Electrons squared: sum w^2 var + area^2 x (error of the sky)^2; NaN with the flux.
    sky, sky_err, sky_std : ndarray, shape (S, K, B)
        Electrons per pixel: level at the source, its error, scatter.
    noise_ratio : ndarray, shape (S, K, B)
        (Scatter of the sky pixels)^2 over the variance the noise model gives them.
    area : ndarray, shape (R, S, K, B)
        Pixels.
    flags : ndarray of int, shape (R, S, K, B)
        Bits of `Flag`. SATURATED, COSMIC_RAY, EDGE, and BAD_PIXELS where they spoil the sum, stand in all beams of the
        frame they cost.
    fwhm, ellipticity : ndarray, shape (S, K, B)
        Shape of the image (see `growth.shapes`); NaN where it could not be measured.
    """

    radii: Floats
    flux: Floats
    variance: Floats
    sky: Floats
    sky_err: Floats
    sky_std: Floats
    noise_ratio: Floats
    area: Floats
    flags: NDArray[np.int64]
    fwhm: Floats
    ellipticity: Floats


def measure(
    images: Images,
    x: ArrayLike,
    y: ArrayLike,
    *,
    radii: ArrayLike,
    annulus: ArrayLike,
    hdu_of_beam: Sequence[int] | None = None,
    sections: Sequence[Section | None] | None = None,
    stars: Stars | None = None,
    hits: bool = True,
    stamps: bool | None = None,
) -> Measurement:
    """Measure every source in every frame and beam with the same apertures.

    Parameters
    ----------
    images : callable
        ``images(k, b, box)`` returns the `Pixels` of beam b in frame k: the whole array for box None, else at least
        the part of the box that lies on the detector.
    x, y : array_like, shape (S, K, B)
        Positions, raw-array pixels of the beam's own array; NaN where the source does not fall.
    radii : array_like, shape (R,) or (R, K)
        Pixels; one radius serves all beams of a frame.
    annulus : array_like, shape (2,) or (2, K)
        Inner and outer radius of the sky, pixels.
    hdu_of_beam : sequence of int, optional
        Number of the array each beam lies on; default: all on the same.
    sections : sequence of Section or None, optional
        Strip of each beam: pixels beyond it are off the edge.
    stars : Stars, optional
        What to keep out of the annuli; default: the sources themselves, to the largest radius.
    hits : bool
        Look for cosmic-ray hits by comparing frames and beams.
    stamps : bool, optional
        Ask for boxes instead of whole images; default: up to `FEW` sources. The numbers are the same, bit for bit.

    Returns
    -------
    Measurement

    Raises
    ------
    InputError
        Shapes that do not fit together; radii or annulus out of range.
    """
    xs, ys = np.asarray(x, dtype=np.float64), np.asarray(y, dtype=np.float64)
    if xs.ndim != 3 or xs.shape != ys.shape:
        raise InputError(f"positions: x has shape {xs.shape}, y {ys.shape}; expected (source, frame, beam) twice")
    _, frames, beams = xs.shape
    sizes = _per_frame(radii, frames, "aperture radii")
    ring = _per_frame(annulus, frames, "annulus")
    if len(ring) != 2:
        raise InputError(f"annulus: {len(ring)} values found; expected the inner and the outer radius")
    hdu = list(hdu_of_beam) if hdu_of_beam is not None else [0] * beams
    strips: list[Section | None] = list(sections) if sections is not None else [None] * beams
    if len(hdu) != beams or len(strips) != beams:
        raise InputError(f"beams: positions have {beams}, hdu_of_beam {len(hdu)}, sections {len(strips)}")
    if stars is None:
        stars = Stars(xs, ys, np.full(len(xs), float(sizes.max())))
    few = stamps if stamps is not None else len(xs) <= FEW
    unlit = np.full((len(sizes), *xs.shape), np.nan)
    work = _Work(images, xs, ys, sizes, ring, hdu, strips, stars, few, unlit)
    result, cut = work.run()
    return work.judge(result, cut, hits)


def _per_frame(values: ArrayLike, frames: int, name: str) -> Floats:
    array = np.asarray(values, dtype=np.float64)
    if array.ndim == 1:
        array = np.repeat(array[:, None], frames, axis=1)
    if array.ndim != 2 or array.shape[1] != frames or not np.all(np.isfinite(array) & (array >= 0)):
        raise InputError(f"{name}: expected non-negative pixels, one list for all or one for each of {frames} frames")
    return array


@dataclass(frozen=True)
class _Cut:
    """Stamps of the apertures, kept for the comparison of frames: (S, K, B, n, n)."""

    data: NDArray[np.float32]
    variance: NDArray[np.float32]
    mask: NDArray[np.uint8]


@dataclass(frozen=True)
class _Work:
    images: Images
    x: Floats
    y: Floats
    radii: Floats
    ring: Floats
    hdu: list[int]
    strips: list[Section | None]
    stars: Stars
    stamps: bool
    unlit: Floats

    def run(self) -> tuple[Measurement, _Cut]:
        """Sum everything, frame by frame; what spoils a frame is noted but not yet acted on."""
        shape, count = self.x.shape, len(self.radii)
        each, planes = (count, *shape), [np.full(shape, np.nan) for _ in range(6)]
        result = Measurement(
            radii=self.radii,
            flux=np.full(each, np.nan),
            variance=np.full(each, np.nan),
            sky=planes[0],
            sky_err=planes[1],
            sky_std=planes[2],
            noise_ratio=planes[3],
            area=np.full(each, np.nan),
            flags=np.zeros(each, np.int64),
            fwhm=planes[4],
            ellipticity=planes[5],
        )
        half = window(float(self.radii.max()))
        size = (*shape, 2 * half + 1, 2 * half + 1)
        cut = _Cut(np.empty(size, np.float32), np.empty(size, np.float32), np.empty(size, np.uint8))
        for k in range(shape[1]):
            known: dict[int, Pixels] = {}
            for b in range(shape[2]):
                others = self._others(k, self.hdu[b])
                if self.stamps:
                    for s in range(shape[0]):
                        self._one(result, cut, k, b, slice(s, s + 1), self._box(k, b, s), others, half)
                else:
                    if self.hdu[b] not in known:
                        known[self.hdu[b]] = self.images(k, b, None)
                    self._one(result, cut, k, b, slice(None), known[self.hdu[b]], others, half)
        return result, cut

    def _others(self, k: int, hdu: int) -> Others:
        beams = [b for b, own in enumerate(self.hdu) if own == hdu]
        x, y = (place[:, k, beams].T.ravel() for place in (self.stars.x, self.stars.y))
        return Others(x, y, np.tile(self.stars.radius, len(beams)))

    def _box(self, k: int, b: int, s: int) -> Pixels:
        x, y = self.x[s, k, b], self.y[s, k, b]
        empty = Pixels(np.empty((0, 0), np.float32), np.empty((0, 0), np.float32), np.empty((0, 0), np.uint8))
        if not (np.isfinite(x) and np.isfinite(y)):
            return empty
        box = box_around(x, y, window(max(float(self.radii[:, k].max()) + 1.0, float(self.ring[1, k]))))
        box = Box(max(box.x0, 0), max(box.y0, 0), box.x1, box.y1)
        if box.x1 <= box.x0 or box.y1 <= box.y0:
            return empty
        return self.images(k, b, box)

    def _one(
        self, result: Measurement, cut: _Cut, k: int, b: int, part: slice, pixels: Pixels, others: Others, half: int
    ) -> None:
        strip = self.strips[b]
        if strip is not None:
            pixels = pixels.cut(Box(strip.x0, strip.y0, strip.x1, strip.y1))
        pixels = replace(
            pixels,
            data=np.ascontiguousarray(pixels.data),
            variance=np.ascontiguousarray(pixels.variance),
            mask=np.ascontiguousarray(pixels.mask),
        )  # once here, not at every gather
        x, y = self.x[part, k, b], self.y[part, k, b]
        sums = aperture_sums(pixels, x, y, self.radii[:, k])
        sky = annulus_sky(pixels, x, y, self.ring[0, k], self.ring[1, k], others=others)
        at = (slice(None), part, k, b)
        result.flux[at] = (sums.flux - sums.area * sky.level[:, None]).T
        result.variance[at] = (sums.variance + (sums.area * sky.error[:, None]) ** 2).T
        # Light of the sky in place of the pixels' own counts; the star's own follows in `expected`.
        self.unlit[at] = (sums.squares * sky.level[:, None] - sums.photons).T
        result.area[at] = sums.area.T
        result.flags[at] = _cause(sums, sky).T
        for name, value in (("sky", sky.level), ("sky_err", sky.error), ("sky_std", sky.std)):
            getattr(result, name)[part, k, b] = value
        result.noise_ratio[part, k, b] = sky.noise_ratio
        ix, iy = nearest_pixel(x), nearest_pixel(y)
        data, variance, mask = gather(pixels, ix, iy, half)
        data -= sky.level[:, None, None]
        smallest = int(np.argmin(self.radii[:, k]))
        with np.errstate(invalid="ignore"):
            faint = result.flux[smallest, part, k, b] < _MEASURABLE * np.sqrt(result.variance[smallest, part, k, b])
        unfit = ~sums.usable[:, smallest] | np.isnan(sky.level) | faint
        clean = np.where(unfit[:, None, None], np.nan, np.where(mask == 0, data, 0.0))
        shape = shapes(clean, x - ix, y - iy, start=max(1.5, float(self.radii[smallest, k])))
        result.fwhm[part, k, b], result.ellipticity[part, k, b] = shape.fwhm, shape.ellipticity
        cut.data[part, k, b], cut.variance[part, k, b], cut.mask[part, k, b] = data, variance, mask

    def judge(self, result: Measurement, cut: _Cut, hits: bool) -> Measurement:
        """Compare frames for hits, then take out every frame that is spoiled in one of its beams."""
        flags = result.flags
        if hits:
            ix, iy = nearest_pixel(self.x), nearest_pixel(self.y)
            struck = find_hits(cut.data, cut.variance, cut.mask, self.x - ix, self.y - iy, self.radii, result.fwhm)
            flags |= np.where(struck, int(Flag.COSMIC_RAY), 0)
        with np.errstate(all="ignore"):
            ratio = _quiet_median(result.noise_ratio)
        doubtful = (ratio < NOISE_RANGE[0]) | (ratio > NOISE_RANGE[1])
        flags |= np.where(doubtful, int(Flag.NOISE_DOUBTFUL), 0)
        spoiled = flags & int(Flag.SATURATED | Flag.COSMIC_RAY | Flag.EDGE)
        sum_lost = (flags & _SPOILED_BY_BAD) != 0
        spoiled |= np.where(sum_lost, int(Flag.BAD_PIXELS), 0)
        flags = flags & ~_SPOILED_BY_BAD | np.bitwise_or.reduce(spoiled, axis=-1, keepdims=True)
        lost = (spoiled != 0) | ~np.isfinite(result.flux)
        blank = np.where(lost.any(axis=-1, keepdims=True), np.nan, 1.0)
        flux, variance = result.flux * blank, result.variance * blank
        return replace(result, flux=flux, variance=expected_variance(flux, variance, self.unlit), flags=flags)


def expected_variance(flux: Floats, variance: Floats, unlit: Floats) -> Floats:
    """Variance with the light expected in place of the light counted.

    A pixel's own counts overrate its variance where there is little light, for they are taken as 0 where noise makes
    them negative, and they tie a flux to its own weight. The sky of the annulus and the star's flux stand for them:
    the flux itself where it is significant, else its mean over the frames of that beam.

    Parameters
    ----------
    flux, variance : ndarray, shape (R, S, K, B)
        Electrons; electrons squared, with the pixels' own counts.
    unlit : ndarray, shape (R, S, K, B)
        What is to be added for a star without light: sum w^2 (sky - max(d, 0)).

    Returns
    -------
    ndarray, shape (R, S, K, B)
    """
    known = np.isfinite(flux)
    count = np.maximum(known.sum(axis=2, keepdims=True), 1)
    mean = np.maximum(np.where(known, flux, 0.0).sum(axis=2, keepdims=True) / count, 0.0)
    with np.errstate(invalid="ignore"):
        light = np.where(flux > _OWN_FLUX * np.sqrt(variance), flux, mean)
        faint = flux < _ALL_LIGHT * np.sqrt(variance)
        # Half the counted variance is far beyond what any expectation may take away.
        return np.where(faint, np.maximum(variance + unlit + light, 0.5 * variance), variance)


_OWN_FLUX = 5.0  # sigma from which a flux stands for its own expectation
_ALL_LIGHT = 100.0  # sigma from which counts below zero no longer matter: well under a percent of the variance

_SPOILED_BY_BAD = 1 << 62  # bookkeeping within this module: bad pixels that could not be bridged


def _cause(sums: ApertureSums, sky: Sky) -> NDArray[np.int64]:
    bad = sums.bad > 0
    flags = np.zeros(sums.flux.shape, np.int64)
    for kind, flag in enumerate((Flag.BAD_PIXELS, Flag.SATURATED, Flag.COSMIC_RAY, Flag.EDGE)):
        flags |= np.where(bad[..., kind], int(flag), 0)
    flags |= np.where(np.isnan(sums.flux), int(Flag.EDGE), 0)  # no position: the source falls off this beam
    flags |= np.where(~sums.usable & ~bad[..., 1:].any(axis=-1) & bad[..., 0], _SPOILED_BY_BAD, 0)
    flags |= np.where(sky.ok, 0, int(Flag.SKY_DOUBTFUL))[:, None]
    return flags


def _quiet_median(ratio: Floats) -> Floats:
    """Median over the sources for each frame and beam, (K, B); 1 where nothing is known."""
    out = np.ones(ratio.shape[1:])
    known = np.isfinite(ratio)
    for k, b in np.argwhere(known.any(axis=0)):
        out[k, b] = np.median(ratio[known[:, k, b], k, b])
    return out
