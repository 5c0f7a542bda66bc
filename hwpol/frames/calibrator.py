"""`Calibrator`: raw frames to electrons with variance and mask, a whole array or just a stamp of it.

Order: raw adu, overscan, bias, linearity, dark, gain, flat. The arithmetic is float32: each step rounds a pixel by
6e-8 of its raw value at most, independently from pixel to pixel, so sums over an aperture keep 1e-6 and better.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, Protocol

import numpy as np
from astropy.table import Table
from numpy.typing import NDArray
from scipy import ndimage

from hwpol.errors import InputError
from hwpol.frames.doubts import gain_unknown, missing, pedestal_unknown
from hwpol.frames.flats import SIGNIFICANT, Lamp
from hwpol.frames.laplacian import MARGIN, find_hits
from hwpol.frames.masters import Dark, Master, Readout, gain_of, linearise, overscan_level, readout_of, saturation_of
from hwpol.frames.opening import RawBox, layout_of, read_box
from hwpol.frames.recipes import Recipes
from hwpol.instrument.description import Instrument, Section
from hwpol.pixels import Box, PixelMask, Pixels

FLAT_CHOICES = ("pooled", "per-angle", "off")
COSMIC_CHOICES = ("apertures", "frames", "off")
PLANS_KEPT = 2
BLOCK_ROWS = 32


class Frames(Protocol):
    """What is needed of a set of frames: table (file, kind, filter, exposure, psi, gain, status) and instrument."""

    @property
    def table(self) -> Table:
        """One row per input file."""

    @property
    def instrument(self) -> Instrument:
        """The description."""


@dataclass(frozen=True)
class _Plan:
    """All that is the same for frames of one kind. Arrays over the whole HDU, or None.

    `bias` and `dark` in adu, `dark` None where merged into `bias`; `flat_variance` relative; `masters` and `floor` in
    electrons squared: read noise with and without the masters' own variance; `masters` also divided by flat**2.
    """

    bias: NDArray[np.float32] | None
    dark: NDArray[np.float32] | None
    inverse_flat: NDArray[np.float32] | None
    flat_variance: NDArray[np.float32] | None
    masters: NDArray[np.float32] | None
    mask: NDArray[np.uint8]
    pedestal: bool
    floor: float
    gain: float


@dataclass(frozen=True)
class Calibrator:
    """Calibrated pixels from raw frames, with masters made from the bias, dark and flat frames of a set.

    Parameters
    ----------
    frames : FrameSet
        Its rows of status "used" serve; kinds bias, dark and flat make the masters.
    flat : {"pooled", "per-angle", "off"}
        One flat for all wave-plate angles; one for each angle; none.
    cosmic_rays : {"apertures", "frames", "off"}
        "frames" marks hits by their edges in every box handed out (`hwpol.frames.laplacian`).
    cache : Path, optional
        Folder that keeps masters by content; they are memory-mapped from it, shared between processes.

    Raises
    ------
    InputError
        Unknown choice; in `pixels`, a file that cannot be read.

    Notes
    -----
    Nothing is read at construction; masters are made when first needed, and kept for the process. Pickles small.
    """

    frames: Frames
    flat: str = field(default="pooled", kw_only=True)
    cosmic_rays: str = field(default="apertures", kw_only=True)
    cache: Path | None = field(default=None, kw_only=True)
    _memory: dict[str, Any] = field(default_factory=dict, init=False, repr=False, compare=False)

    def __post_init__(self) -> None:
        for name, value, allowed in (
            ("flat", self.flat, FLAT_CHOICES),
            ("cosmic_rays", self.cosmic_rays, COSMIC_CHOICES),
        ):
            if value not in allowed:
                raise InputError(f"detector.{name} = {value!r}: expected one of {', '.join(allowed)}")

    def __getstate__(self) -> dict[str, Any]:
        return {**self.__dict__, "_memory": {}}

    def __setstate__(self, state: dict[str, Any]) -> None:
        self.__dict__.update(state)

    @property
    def instrument(self) -> Instrument:
        """The description of the instrument."""
        return self.frames.instrument

    @property
    def warnings(self) -> tuple[str, ...]:
        """What is missing or doubtful and its consequence.

        What the table alone tells, and what was found while making masters in this process: complete after `prepare`.
        """
        return tuple(dict.fromkeys([*missing(self._recipes), *self._recipes.found]))

    @property
    def noise_doubtful(self) -> bool:
        """True where the noise model lacks a piece: pedestal, gain or read noise unknown."""
        return self._recipes.doubtful or gain_unknown(self._recipes) or pedestal_unknown(self._recipes)

    def prepare(self) -> None:
        """Make all masters that the science frames need (and store them, where there is a cache)."""
        done = set()
        for row in self._recipes.rows("science"):
            psi = row.psi if self.flat == "per-angle" else np.nan
            for beam in range(len(self.instrument.beams)):
                key = (beam, row.filter, row.exposure, row.gain, str(psi))
                if key not in done:
                    done.add(key)
                    self._plan(row.file, beam, row.filter, row.exposure, row.gain, psi)
        self._memory.pop("plans", None)
        if self.flat == "per-angle":
            for name in sorted({row.filter for row in self._recipes.rows("science")}):
                lamp = self.lamp(name)
                if lamp is not None and lamp.significance > SIGNIFICANT:
                    self._recipes.say(
                        f"filter {name}: the flats themselves show a polarised lamp, q = {100 * lamp.q:.2f} +- "
                        f"{100 * lamp.q_err:.2f}, u = {100 * lamp.u:.2f} +- {100 * lamp.u_err:.2f} percent (instrument "
                        'frame): use flat = "pooled"'
                    )

    def lamp(self, filter: str) -> Lamp | None:
        """Polarisation of the flat-field lamp in one filter, told by flats at several angles.

        None where the beams share one strip of one HDU (their light cannot be told apart) or there are no flats.
        """
        return self._recipes.lamp(filter)

    def pixels(
        self,
        file: str | Path,
        beam: int,
        box: Box | None = None,
        *,
        filter: str,
        exposure: float,
        gain: float | None = None,
        psi: float | None = None,
    ) -> Pixels:
        """Calibrated pixels of the HDU that feeds one beam.

        Parameters
        ----------
        file : path
            Raw frame.
        beam : int
            Number of the beam, from 0.
        box : Box, optional
            Raw-array bounds, clipped to the array; default the trim section, or the whole array without one.
        filter : str
            As in the header; chooses the flat.
        exposure : float
            Seconds; scales the dark.
        gain : float, optional
            electron/adu from the header; overrides the detector's, not the beam's own.
        psi : float, optional
            Wave-plate angle (deg), for flats per angle.

        Returns
        -------
        Pixels
            Electrons; variance  (max(electrons, 0) + read noise**2) / flat**2  plus the masters' variances. Pixels
            without a value are 0 and BAD. SATURATED: raw value at the saturation level or at the end of the integer
            scale. OUTSIDE: outside the trim section or the beam's section, or without light in the flats. Without
            any pedestal (no bias, overscan or dark of the same exposure) electrons include it, and the variance is
            that of the background's pixels plus max(electrons - median, 0).
        """
        own = self.instrument.beams[beam]
        trim = own.trim or self.instrument.detector.trim
        if box is None and trim is not None:
            box = Box(trim.x0, trim.y0, trim.x1, trim.y1)
        wanted = box
        if self.cosmic_rays == "frames" and box is not None:
            box = Box(max(box.x0 - MARGIN, 0), max(box.y0 - MARGIN, 0), box.x1 + MARGIN, box.y1 + MARGIN)
        plan = self._plan(file, beam, filter, exposure, gain, np.nan if psi is None else psi)
        raw = read_box(file, self.instrument.extension_of(beam), box)
        mask = plan.mask[_cut(raw.box)].copy()
        saturation = saturation_of(self.instrument, beam)
        limit = raw.layout.full_scale if saturation is None else min(saturation, raw.layout.full_scale)
        if np.isfinite(limit):
            mask |= (raw.data >= limit).view(np.uint8) * np.uint8(PixelMask.SATURATED)
        data, variance = self._calibrated(file, beam, raw, plan)
        lost = ~np.isfinite(data)
        if lost.any():
            mask[lost] |= np.uint8(PixelMask.BAD)
            data[lost], variance[lost] = 0.0, plan.floor
        for section in (trim, own.section):
            _close(mask, raw.box, section)
        if self.cosmic_rays == "frames" and data.size:
            # The edge of the light is as sharp as a hit.
            edge = ndimage.binary_dilation(mask & np.uint8(PixelMask.OUTSIDE), np.ones((3, 3)))
            hits = find_hits(data, variance) & ~edge
            mask[hits & (mask & np.uint8(PixelMask.SATURATED) == 0)] |= np.uint8(PixelMask.COSMIC_RAY)
        result = Pixels(data, variance, mask, raw.box.x0, raw.box.y0)
        return result if wanted is None else result.cut(wanted)

    def flat_noise(
        self, file: str | Path, beam: int, *, filter: str, exposure: float, gain: float | None = None,
        psi: float | None = None,
    ) -> float:  # fmt: skip
        """Relative variance of the flat's pixels (median over the array); 0 without a flat.

        It is no part of `Pixels.variance`: a pixel's flat is wrong by the same factor in every frame, which cancels
        between frames while the image stands still.
        """
        plan = self._plan(file, beam, filter, exposure, gain, np.nan if psi is None else psi)
        if plan.flat_variance is None:
            return 0.0
        value = float(np.nanmedian(plan.flat_variance))
        return value if np.isfinite(value) else 0.0

    @property
    def _recipes(self) -> Recipes:
        if "recipes" not in self._memory:
            self._memory["recipes"] = Recipes(self.frames.table, self.instrument, self.flat, self.cache)
        recipes: Recipes = self._memory["recipes"]
        return recipes

    def _plan(self, file: str | Path, beam: int, filter: str, exposure: float, gain: float | None, psi: float) -> _Plan:
        """The plan for one kind of frame; the last few are kept, one per HDU that takes turns."""
        recipes = self._recipes
        readout = readout_of(self.instrument, beam)
        layout = layout_of(file, readout.extension)
        pedestal = recipes.has_pedestal(readout, layout.form, exposure)
        bias = recipes.bias(readout, layout.form)
        dark = recipes.dark(readout, layout.form, exposure)
        flat = recipes.flat(readout, layout.form, filter, psi) if pedestal else None
        electrons = gain_of(self.instrument, beam, gain)
        noise = recipes.read_noise(beam, layout.form, file, exposure, electrons) if pedestal else np.nan
        masters = tuple(None if master is None else master.key for master in (bias, dark, flat))
        key = (readout, layout.form, masters, electrons, noise)
        plans: dict[Any, _Plan] = self._memory.setdefault("plans", {})
        plan = plans.get(key)
        if plan is None:
            if not pedestal:
                recipes.say(
                    "the zero level of some science frames is unknown: their flats are not applied and their noise is "
                    "taken from the background of each frame",
                    doubtful=True,
                )
            bad = recipes.bad_pixels(readout, layout.shape)
            plan = _make_plan(layout.shape, readout, (bias, dark, flat), bad, electrons, noise, pedestal)
            for old in list(plans)[: max(0, len(plans) + 1 - PLANS_KEPT)]:
                plans.pop(old, None)
            plans[key] = plan
        return plan

    def _calibrated(
        self, file: str | Path, beam: int, raw: RawBox, plan: _Plan
    ) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
        """Electrons and their variance; blocks of rows keep the intermediate arrays in the processor's cache.

        The raw array is used up: it becomes the electrons.
        """
        readout = readout_of(self.instrument, beam)
        overscan = overscan_level(file, readout)
        cut = _cut(raw.box)
        bias, dark, inverse, masters = (
            None if array is None else array[cut] for array in (plan.bias, plan.dark, plan.inverse_flat, plan.masters)
        )
        zero, floor = 0.0, plan.floor
        if not plan.pedestal:
            median, noise = self._recipes.background(file, beam)
            zero, floor = median * plan.gain, (noise * plan.gain) ** 2
        level = None if overscan is None else np.broadcast_to(overscan.over(raw.box), raw.data.shape)
        data, variance = raw.data, np.empty_like(raw.data)
        for y in range(0, len(data), BLOCK_ROWS):
            rows = slice(y, y + BLOCK_ROWS)
            block, noise_block = data[rows], variance[rows]
            if level is not None:
                block -= level[rows]
            if bias is not None:
                block -= bias[rows]
            if readout.linearity != (1.0,):
                block[...] = linearise(block, readout.linearity)
            if dark is not None:
                block -= dark[rows]
            if plan.gain != 1.0:
                block *= np.float32(plan.gain)
            if inverse is not None:
                # Photons / flat**2; the flat's own error is the same in every frame and told by `flat_noise`.
                block *= inverse[rows]
                np.maximum(block, np.float32(0.0), out=noise_block)
                noise_block *= inverse[rows]
            else:
                np.subtract(block, np.float32(zero), out=noise_block)
                np.maximum(noise_block, np.float32(0.0), out=noise_block)
            noise_block += np.float32(floor) if masters is None else masters[rows]
        return data, variance


def _make_plan(
    shape: tuple[int, int],
    readout: Readout,
    masters: tuple[Master | None, Dark | None, Master | None],
    bad: NDArray[np.bool_] | None,
    gain: float,
    read_noise: float,
    pedestal: bool,
) -> _Plan:
    bias, dark, flat = masters
    mask = np.zeros(shape, np.uint8)
    if bad is not None:
        mask[bad] |= np.uint8(PixelMask.BAD)
    for master in (bias, dark.master if dark is not None else None, flat):
        if master is not None:
            mask |= master.mask.astype(np.uint8)
    dark_mean = None if dark is None else np.asarray(dark.of((slice(None), slice(None))))
    floor = read_noise**2 if np.isfinite(read_noise) else 0.0
    constant = None
    if any(master is not None for master in masters):
        constant = np.full(shape, floor, np.float32)
        # A master of a single frame has that frame's noise.
        for master, factor in ((bias, 1.0), (dark.master, dark.factor) if dark is not None else (None, 0.0)):
            if master is not None:
                single = np.float32(floor / gain**2)
                variance = np.where(np.isnan(master.variance), single, master.variance)
                constant += variance * np.float32((factor * gain) ** 2)
        if dark_mean is not None and (bias is not None or readout.overscan is not None):
            # The dark electrons taken off were counted too.
            constant += np.maximum(dark_mean, 0.0) * np.float32(gain)
    inverse = None if flat is None else np.float32(1.0) / flat.mean
    if constant is not None and inverse is not None:
        constant *= inverse * inverse
    merged = bias is not None and dark is not None and readout.linearity == (1.0,)
    first = None if bias is None else np.asarray(bias.mean)
    second = dark_mean
    if merged and first is not None and second is not None:
        first, second = first + second, None
    if bias is None and readout.overscan is None:
        # A dark that holds the pedestal goes before the linearity correction.
        first, second = second, None
    return _Plan(
        first,
        second,
        inverse,
        None if flat is None else flat.variance / flat.mean**2,
        constant,
        mask,
        pedestal,
        floor,
        gain,
    )


def _cut(box: Box) -> tuple[slice, slice]:
    return slice(box.y0, box.y1), slice(box.x0, box.x1)


def _close(mask: NDArray[np.uint8], box: Box, section: Section | None) -> None:
    """Mark what lies outside a section."""
    if section is None:
        return
    rows, columns = np.arange(box.y0, box.y1), np.arange(box.x0, box.x1)
    mask[(rows < section.y0) | (rows >= section.y1)] |= np.uint8(PixelMask.OUTSIDE)
    mask[:, (columns < section.x0) | (columns >= section.x1)] |= np.uint8(PixelMask.OUTSIDE)
