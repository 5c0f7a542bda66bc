"""Measuring the stars of one frame after another: a guess, its check, full detection where the guess fails."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from hwpol.flags import Flag
from hwpol.pixels import Box, Pixels
from hwpol.registration.beams import BeamMap, BeamMatch, beam_offsets, fit_beam_map, shift_map
from hwpol.registration.centroids import Measured, binned, from_bins, fwhm_of, measure
from hwpol.registration.detection import Stars, detect
from hwpol.registration.matching import Motion, fit_motion, search, vote

Floats = NDArray[np.float64]
Images = Callable[..., Pixels]

_TRACERS = 120
# Share of the best beam's agreeing images that every beam must reach.
_EACH_BEAM = 0.3
_CHECKED = 40


@dataclass(frozen=True)
class Layout:
    """Which beams share an array, and each beam's part of it."""

    hdu_of_beam: tuple[int, ...]
    sections: tuple[Box | None, ...]

    def load(self, images: Images, k: int) -> list[Pixels]:
        """Arrays of frame k, one a beam; beams of one HDU share theirs."""
        arrays: dict[int, Pixels] = {}
        for b, hdu in enumerate(self.hdu_of_beam):
            if hdu not in arrays:
                arrays[hdu] = images(k, b)
        return [arrays[hdu] for hdu in self.hdu_of_beam]

    def detect(self, pixels: list[Pixels], fwhm: float | None, *, coarse: bool = False) -> list[Stars]:
        """Stars of each beam's section; beams that share array and section share the list object.

        `coarse` works on binned pixels: places good to a tenth of the width, in a fraction of the time.
        """
        found: dict[int, Stars] = {}
        lists: dict[tuple[int, Box | None], Stars] = {}
        result = []
        for b, hdu in enumerate(self.hdu_of_beam):
            if hdu not in found:
                found[hdu] = _coarsely(pixels[b], fwhm) if coarse and fwhm else detect(pixels[b], fwhm=fwhm)
            key = (hdu, self.sections[b])
            if key not in lists:
                inside = self.inside(b, pixels[b], found[hdu].x, found[hdu].y, 0.0)
                lists[key] = found[hdu] if inside.all() else found[hdu].select(inside)
            result.append(lists[key])
        return result

    def inside(self, b: int, pixels: Pixels, x: Floats, y: Floats, margin: float) -> NDArray[np.bool_]:
        """Whether places lie in the beam's section of the array, `margin` pixels from its edge."""
        box = self.sections[b] or pixels.box
        return np.asarray(
            (x > box.x0 - 0.5 + margin) & (x < box.x1 - 0.5 - margin)
            & (y > box.y0 - 0.5 + margin) & (y < box.y1 - 0.5 - margin)
        )  # fmt: skip


def _coarsely(pixels: Pixels, fwhm: float) -> Stars:
    """Stars of an image binned to two pixels a width."""
    n = int(np.clip(fwhm // 2, 1, 8))
    if n == 1:
        return detect(pixels, fwhm=fwhm)
    stars = detect(binned(pixels, n), fwhm=fwhm / n)
    return replace(stars, x=from_bins(stars.x, pixels.x0, n), y=from_bins(stars.y, pixels.y0, n), fwhm=stars.fwhm * n)


@dataclass(frozen=True)
class Reference:
    """Stars of the reference frame that guide the others."""

    frame: int
    stars: Stars
    lists: tuple[Stars, ...]
    match: BeamMatch
    maps: tuple[BeamMap, ...]
    fwhm: float
    paired: bool


def find_reference(
    images: Images, frames: Sequence[int], layout: Layout, nominal: Floats, fwhm: float | None
) -> Reference | None:
    """First frame that shows stars, preferably with partners in every beam; None where no frame does."""
    spare: Reference | None = None
    for k in frames:
        pixels = layout.load(images, k)
        lists = layout.detect(pixels, fwhm)
        if not len(lists[0]):
            continue
        match = beam_offsets(lists, nominal)
        paired = len(match.first) > 0
        stars = lists[0].select(match.first) if paired else lists[0]
        maps = [shift_map((0.0, 0.0), len(stars))]
        for b in range(1, len(nominal)):
            partners = lists[b].select(match.partner[:, b])
            maps.append(
                fit_beam_map(np.column_stack([stars.x, stars.y]), np.column_stack([partners.x, partners.y]))
                if paired
                else shift_map(match.offsets[b])
            )
        width = lists[0].width if np.isfinite(lists[0].width) else (fwhm or 4.0)
        reference = Reference(k, stars, tuple(lists), match, tuple(maps), width, paired)
        if paired:
            return reference
        spare = spare or reference
    return spare


@dataclass
class FrameMeasures:
    """Centroids of one frame: (B, N, 2), errors (B, N), width and ellipticity (B,), motion, success."""

    places: Floats
    errors: Floats
    fwhm: Floats
    ellipticity: Floats
    motion: Motion
    ok: bool = False


@dataclass
class Follower:
    """Follows the reference stars through the frames of a visit, one call of `frame` after another."""

    reference: Reference
    layout: Layout
    pivot: tuple[float, float]
    left_out: int = -1
    width: float = field(init=False)

    def __post_init__(self) -> None:
        self.width = self.reference.fwhm
        stars = self.reference.stars
        usable = (stars.flags & int(Flag.SATURATED)) == 0
        alone = usable & ((stars.flags & int(Flag.NEIGHBOUR)) == 0)
        usable = alone if alone.sum() >= 5 else usable
        if self.left_out >= 0:
            usable[self.left_out] = False
        if not usable.any():
            usable[:] = True
        self.order = np.flatnonzero(usable)[np.argsort(-stars.snr[usable], kind="stable")]

    def frame(self, pixels: list[Pixels], guesses: list[Motion]) -> FrameMeasures:
        """Measure one frame; `guesses` are motions to try before a full detection."""
        for motion in self._candidates(pixels, guesses):
            accepted = self._checked(pixels, motion)
            if accepted is not None:
                return self._measured(pixels, accepted)
        beams, n = len(pixels), len(self.reference.stars)
        return FrameMeasures(np.full((beams, n, 2), np.nan), np.full((beams, n), np.nan), np.full(beams, np.nan),
                             np.full(beams, np.nan), guesses[0])  # fmt: skip

    def _candidates(self, pixels: list[Pixels], guesses: list[Motion]) -> Iterator[Motion]:
        yield from guesses
        for width in (self.width, None):
            lists = self.layout.detect(pixels, width, coarse=True)
            for old, new in zip(self.reference.lists, lists, strict=True):
                if not len(old) or not len(new):
                    continue
                here, there = np.column_stack([old.x, old.y]), np.column_stack([new.x, new.y])
                reach = max(2.0, 0.5 * self.width)
                motion, _ = search(here, there, self.pivot, tolerance=reach, rotation=guesses[0].rotation)
                if motion is not None:
                    yield motion
                # One or two stars do not vote: try the brightest on each of the brightest seen.
                if len(self.reference.stars) <= 3:
                    star = self.reference.stars.select(self.order[:1])
                    if old is self.reference.lists[0]:
                        yield from (
                            Motion((float(x - star.x[0]), float(y - star.y[0])), 0.0, self.pivot) for x, y in there[:8]
                        )

    def _predicted(self, b: int, motion: Motion, index: NDArray[np.int64]) -> tuple[Floats, Floats]:
        stars = self.reference.stars
        return self.reference.maps[b].apply(*motion.apply(stars.x[index], stars.y[index]))

    def _seen(self, pixels: list[Pixels], motion: Motion, most: int) -> NDArray[np.int64]:
        """The brightest tracers whose places lie in every beam."""
        inside = np.ones(len(self.order), bool)
        for b, array in enumerate(pixels):
            inside &= self.layout.inside(b, array, *self._predicted(b, motion, self.order), self.width)
        return self.order[inside][:most]

    def _checked(self, pixels: list[Pixels], motion: Motion) -> Motion | None:
        """The motion refined on the brightest tracers, or None where too few of them lie where it says."""
        index = self._seen(pixels, motion, _CHECKED)
        if not len(index):
            return None
        stars = self.reference.stars
        start = np.column_stack(motion.apply(stars.x[index], stars.y[index]))
        first, second, weight, ratio = [], [], [], []
        for b, array in enumerate(pixels):
            px, py = self._predicted(b, motion, index)
            found = measure(array, px, py, self.width)
            good = found.ok & (found.snr > 5)
            first.append(start[good])
            second.append(start[good] + np.column_stack([found.x - px, found.y - py])[good])
            weight.append(1.0 / (found.err[good] ** 2 + 0.02**2))
            ratio.append(np.log(np.maximum(found.flux, 1e-9) / stars.flux[index])[good])
        a, c, w = np.concatenate(first), np.concatenate(second), np.concatenate(weight)
        tried = len(index) * len(pixels)
        if not len(a):
            return None
        # Clouds dim all stars alike; a star found at another's place is brighter or fainter at random.
        fading = np.concatenate(ratio)
        common = np.abs(fading - np.median(fading)) < np.log(3.0)
        common &= (fading > np.log(0.01)) & (fading < np.log(8.0))
        beam = np.repeat(np.arange(len(pixels)), [len(part) for part in first])
        a, c, w, beam = a[common], c[common], w[common], beam[common]
        if len(a) < min(2, tried):
            return None
        tolerance = max(0.7, 0.2 * self.width)
        turns = len(index) >= 4
        if not turns:
            best, _, _ = vote(np.zeros((1, 2)), c - a, tolerance=tolerance)
            near = np.hypot(*(c - a - best).T) <= tolerance
            a, c, w, beam = a[near], c[near], w[near], beam[near]
        if not len(a):
            return None
        refined, residual = fit_motion(a, c, w, self.pivot, rotate=turns)
        fits = np.hypot(*residual.T) < np.maximum(0.5 * tolerance, 4.0 / np.sqrt(w))
        agree = int(fits.sum())
        # Where beams overlap, one beam's images can lie where another's should: every beam must bear the motion out.
        each = np.bincount(beam[fits], minlength=len(pixels))
        if each.min() < _EACH_BEAM * each.max():
            return None
        # Reference stars may be blemishes; chance puts under one in a hundred images where the others say.
        needed = max(min(2, tried), min(int(np.ceil(0.3 * tried)), 6), int(0.12 * tried))
        return _compose(refined, motion) if agree >= needed else None

    def _measured(self, pixels: list[Pixels], motion: Motion) -> FrameMeasures:
        index = self._seen(pixels, motion, _TRACERS)
        beams, n = len(pixels), len(self.reference.stars)
        result = FrameMeasures(np.full((beams, n, 2), np.nan), np.full((beams, n), np.nan),
                               np.full(beams, np.nan), np.full(beams, np.nan), motion, True)  # fmt: skip
        width = self.width
        for b, array in enumerate(pixels):
            px, py = self._predicted(b, motion, index)
            found = measure(array, px, py, width)
            size, ellipticity = self._width(array, found, width)
            if np.isfinite(size) and abs(np.log(size / width)) > 0.2:
                width = size
                found = measure(array, px, py, width)
                size, ellipticity = self._width(array, found, width)
            result.places[b, index[found.ok]] = np.column_stack([found.x, found.y])[found.ok]
            result.errors[b, index[found.ok]] = found.err[found.ok]
            result.fwhm[b], result.ellipticity[b] = size, ellipticity
        if np.isfinite(result.fwhm).any():
            self.width = float(np.nanmedian(result.fwhm))
        result.ok = bool(np.isfinite(result.errors).any())
        return result

    def _width(self, array: Pixels, found: Measured, width: float) -> tuple[float, float]:
        """Median width and ellipticity of the brightest stars of a beam."""
        bright = np.flatnonzero(found.ok)
        bright = bright[np.argsort(-found.snr[bright], kind="stable")][:25]
        firm = bright[found.snr[bright] > 20]
        bright = firm if len(firm) else bright
        size, ellipticity = fwhm_of(array, found.x[bright], found.y[bright], width)
        seen = np.isfinite(size)
        if not seen.any():
            return float("nan"), float("nan")
        return float(np.median(size[seen])), float(np.median(ellipticity[seen]))


def _compose(second: Motion, first: Motion) -> Motion:
    """The motion that does `first`, then `second` (same pivot)."""
    p = first.pivot
    x, y = second.apply(np.array([p[0] + first.shift[0]]), np.array([p[1] + first.shift[1]]))
    return Motion((float(x[0] - p[0]), float(y[0] - p[1])), first.rotation + second.rotation, p)
