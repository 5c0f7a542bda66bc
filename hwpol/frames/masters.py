"""Master bias and dark frames, overscan levels, and where masters are kept.

All masters are in adu. A master's variance is that of its mean; it is the same in every frame reduced with it.
"""

from __future__ import annotations

import hashlib
import json
import os
import tempfile
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from functools import lru_cache
from pathlib import Path
from typing import Any

import numpy as np
from astropy.stats import sigma_clipped_stats
from numpy.typing import NDArray

from hwpol.frames.combine import combine_frames
from hwpol.frames.opening import FileMark, file_mark, layout_of, read_box
from hwpol.instrument.description import Instrument, Section
from hwpol.pixels import Box, PixelMask

RECIPE = 1
"""Raised when masters are made differently, so that stored ones are not taken for new ones."""
SAMPLE = 200_000
"""Pixels that suffice for a noise level: its relative error is 1 / sqrt(2 SAMPLE) = 0.2 percent."""
SMOOTHING_ROWS = 31
TRIMMED = 0.2


@dataclass(frozen=True)
class Readout:
    """How one HDU is read: what all its masters share. `saturation` in raw adu; `linearity` as in the description."""

    extension: int | str = 0
    overscan: Section | None = None
    linearity: tuple[float, ...] = (1.0,)
    saturation: float | None = None


def readout_of(instrument: Instrument, beam: int) -> Readout:
    """How the HDU of one beam is read."""
    own, detector = instrument.beams[beam], instrument.detector
    overscan = own.overscan or detector.overscan
    return Readout(instrument.extension_of(beam), overscan, detector.linearity, saturation_of(instrument, beam))


def saturation_of(instrument: Instrument, beam: int) -> float | None:
    """Saturation level (raw adu) of one beam."""
    own = instrument.beams[beam].saturation
    return instrument.detector.saturation if own is None else own


def read_noise_of(instrument: Instrument, beam: int) -> float | None:
    """Read noise (electrons) of one beam as described."""
    own = instrument.beams[beam].read_noise
    return instrument.detector.read_noise if own is None else own


def gain_of(instrument: Instrument, beam: int, header: float | None) -> float:
    """electron/adu: the beam's own, else the header's, else the detector's, else 1."""
    for value in (instrument.beams[beam].gain, header, instrument.detector.gain):
        if value is not None and np.isfinite(value):
            return float(value)
    return 1.0


def strip_of(instrument: Instrument, beam: int) -> Section | None:
    """The part of the array that one beam's light falls on, as described."""
    own = instrument.beams[beam]
    return own.section or own.trim or instrument.detector.trim


@dataclass(frozen=True)
class Master:
    """A combined calibration frame.

    Attributes
    ----------
    layers : ndarray, shape (3, ny, nx), float32
        Mean (finite everywhere), variance of the mean (NaN where one frame alone could not tell it), mask bits.
    key : str
        Digest of everything it was made from.
    facts : dict
        What was learnt on the way: "left_out" (sentences), "read_noise" (adu), "levels".
    """

    layers: NDArray[np.float32]
    key: str
    facts: dict[str, Any] = field(default_factory=dict)

    @property
    def mean(self) -> NDArray[np.float32]:
        """The combined values."""
        return self.layers[0]

    @property
    def variance(self) -> NDArray[np.float32]:
        """Variance of `mean`."""
        return self.layers[1]

    @property
    def mask(self) -> NDArray[np.float32]:
        """Bits of `PixelMask`, as numbers."""
        return self.layers[2]


@dataclass(frozen=True)
class Dark:
    """A dark for one exposure: `master` x `factor` is in adu (factor 1, or seconds where the master is a rate)."""

    master: Master
    factor: float = 1.0

    @property
    def key(self) -> str:
        """Digest of what it was made from."""
        return self.master.key if self.factor == 1.0 else f"{self.master.key}@{self.factor!r}"

    def of(self, cut: tuple[slice, slice]) -> NDArray[np.float32]:
        """adu in a cut of the array."""
        mean = self.master.mean[cut]
        return mean if self.factor == 1.0 else mean * np.float32(self.factor)


def digest(kind: str, files: Sequence[str | Path], *options: object) -> str:
    """Name of a master: files with size and time, options, recipe."""
    content = [RECIPE, kind, [file_mark(file) for file in files], [repr(option) for option in options]]
    return f"{kind}-{hashlib.blake2b(json.dumps(content).encode(), digest_size=12).hexdigest()}"


def stored(cache: Path | None, key: str, build: Callable[[], Master]) -> Master:
    """Return the master `key`: memory-mapped from `cache`, or built (and stored there, whole or not at all).

    A cache that cannot be written to is done without.
    """
    if cache is None:
        return build()
    pixels, facts = cache / f"{key}.npy", cache / f"{key}.json"
    if not facts.exists():
        master = build()
        try:
            cache.mkdir(parents=True, exist_ok=True)
            _write_whole(pixels, lambda handle: np.save(handle, master.layers))
            # The facts come last: where they stand, the pixels stand too.
            _write_whole(facts, lambda handle: handle.write(json.dumps(master.facts).encode()))
        except OSError:
            return master
    return Master(np.load(pixels, mmap_mode="r"), key, json.loads(facts.read_bytes()))


def _write_whole(path: Path, write: Callable[[Any], Any]) -> None:
    handle, name = tempfile.mkstemp(dir=path.parent, prefix=path.name)
    try:
        with os.fdopen(handle, "wb") as stream:
            write(stream)
        os.replace(name, path)
    except BaseException:
        os.unlink(name)
        raise


@dataclass(frozen=True)
class OverscanLevel:
    """Pedestal told by the overscan: `level` adu along y (`axis` 0) or x (1), scatter of its pixels in adu."""

    level: NDArray[np.float32]
    axis: int
    sigma: float

    def over(self, box: Box) -> NDArray[np.float32]:
        """Level over a box, ready to subtract."""
        if self.axis == 0:
            return self.level[box.y0 : box.y1, None]
        return self.level[None, box.x0 : box.x1]


def overscan_level(file: str | Path, readout: Readout) -> OverscanLevel | None:
    """Measure the pedestal of one frame from its overscan section; None without a section.

    A section higher than wide gives one level a row, else one a column: the mean of the middle 60 percent of the
    pixels there. Where neighbouring levels differ no more than the scatter of their pixels explains, they are
    smoothed with a running mean over 31, so that their noise does not enter as stripes.
    """
    return None if readout.overscan is None else _overscan(file_mark(file), readout.extension, readout.overscan)


@lru_cache(maxsize=256)
def _overscan(mark: FileMark, extension: int | str, section: Section) -> OverscanLevel | None:
    raw = read_box(mark[0], extension, Box(section.x0, section.y0, section.x1, section.y1))
    data, box = raw.data, raw.box
    if data.size == 0:
        return None
    along_y = data.shape[0] >= data.shape[1]
    if not along_y:
        data = data.T
    sigma = clipped_sigma(data - np.nanmedian(data, axis=1, keepdims=True))
    ordered = np.sort(data, axis=1)
    count = np.isfinite(ordered).sum(axis=1)
    cut = int(TRIMMED * data.shape[1])
    if count.min() == data.shape[1]:
        level = ordered[:, cut : data.shape[1] - cut].mean(axis=1)
    else:
        level = np.ma.median(np.ma.masked_invalid(data), axis=1).filled(np.nan)
    differences = np.diff(level)
    if differences.size and np.mean(differences**2) / 2 < 2.0 * sigma**2 / data.shape[1]:
        half = min(SMOOTHING_ROWS, len(level)) // 2
        padded = np.pad(level.astype(float), half, mode="reflect")
        level = np.convolve(padded, np.full(2 * half + 1, 1.0 / (2 * half + 1)), mode="valid")
    first, length = (box.y0, raw.layout.shape[0]) if along_y else (box.x0, raw.layout.shape[1])
    whole = np.pad(level.astype(np.float32), (first, length - first - len(level)), mode="edge")
    return OverscanLevel(whole, 0 if along_y else 1, sigma)


def clipped_sigma(values: NDArray[Any]) -> float:
    """Standard deviation of `values` after clipping at 4 sigma, from a regular sample of them; NaN of nothing."""
    flat = values.reshape(-1)
    flat = flat[:: max(1, flat.size // SAMPLE)]
    flat = flat[np.isfinite(flat)]
    return float(sigma_clipped_stats(flat.astype(float), sigma=4.0, maxiters=10)[2]) if flat.size > 1 else float("nan")


@dataclass(frozen=True)
class Reducer:
    """Raw pixels to linear adu without bias and dark; None: that step is left out."""

    readout: Readout
    bias: Master | None = None
    dark: Dark | None = None

    def __call__(
        self, file: str | Path, box: Box | None = None, *, mask_saturated: bool = False
    ) -> NDArray[np.float32]:
        """Return the box (clipped to the array), NaN where blank and, if asked for, where saturated."""
        raw = read_box(file, self.readout.extension, box)
        adu, cut = raw.data, (slice(raw.box.y0, raw.box.y1), slice(raw.box.x0, raw.box.x1))
        limit = min(raw.layout.full_scale, self.readout.saturation or np.inf)
        saturated = adu >= limit if mask_saturated else None
        overscan = overscan_level(file, self.readout)
        if overscan is not None:
            adu -= overscan.over(raw.box)
        if self.bias is not None:
            adu -= self.bias.mean[cut]
        adu = linearise(adu, self.readout.linearity)
        if self.dark is not None:
            adu -= self.dark.of(cut)
        if saturated is not None:
            adu[saturated] = np.nan
        return adu


def linearise(adu: NDArray[np.float32], coefficients: tuple[float, ...]) -> NDArray[np.float32]:
    """Return  adu (c0 + c1 adu + ...), adu after bias; one and the same array for c = (1,)."""
    if coefficients == (1.0,):
        return adu
    factor = np.full_like(adu, coefficients[-1])
    for coefficient in coefficients[-2::-1]:
        factor *= adu
        factor += np.float32(coefficient)
    return factor * adu


def combine_master(files: Sequence[str], reducer: Reducer, key: str) -> Master:
    """Clipped mean of frames reduced by `reducer`, with the read noise (adu) from differences of successive pairs."""
    shape = layout_of(files[0], reducer.readout.extension).shape
    nx = shape[1]
    result = combine_frames(lambda i, y0, y1: reducer(files[i], Box(0, y0, nx, y1)), len(files), shape)
    empty = np.isnan(result.mean)
    layers = np.stack([np.where(empty, 0, result.mean), result.variance, empty * np.float32(PixelMask.BAD)])
    noise = [
        clipped_sigma(reducer(first) - reducer(second)) / np.sqrt(2.0)
        for first, second in zip(files[:-1:2], files[1::2], strict=False)
    ]
    return Master(layers, key, {"read_noise": float(np.median(noise)) if noise else None})


def dark_rate(masters: Sequence[Master], exposures: Sequence[float], counts: Sequence[int], key: str) -> Master:
    """Dark in adu per second from masters of several exposures: weighted least squares through zero."""
    weights = [count * t for t, count in zip(exposures, counts, strict=True)]
    norm = sum(weight * t for weight, t in zip(weights, exposures, strict=True))
    layers = np.zeros_like(masters[0].layers)
    for weight, master in zip(weights, masters, strict=True):
        layers[0] += np.float32(weight / norm) * master.mean
        layers[1] += np.float32((weight / norm) ** 2) * master.variance
        layers[2] = np.maximum(layers[2], master.mask)
    return Master(layers, key)
