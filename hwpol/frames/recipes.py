"""Which calibration frames serve which science frame, the masters made of them, and what is missing.

Everything here follows from the table of frames and the instrument; masters are kept for the process, and on disk
where a cache folder is given.
"""

from __future__ import annotations

from collections.abc import Callable, Hashable
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from astropy.table import Table
from numpy.typing import NDArray

from hwpol.errors import InputError
from hwpol.frames.flats import FlatFrame, Lamp, combine_flats, lamp_polarisation, usable_flats
from hwpol.frames.masters import (
    SAMPLE,
    Dark,
    Master,
    Readout,
    Reducer,
    clipped_sigma,
    combine_master,
    dark_rate,
    digest,
    gain_of,
    overscan_level,
    read_noise_of,
    readout_of,
    stored,
    strip_of,
)
from hwpol.frames.opening import Form, Layout, file_mark, layout_of, read_box
from hwpol.instrument.description import Instrument, Section
from hwpol.pixels import Box

SAMPLE_FRAMES = 5
SAME_EXPOSURE = 1e-3
"""Relative difference below which exposures are the same: shutters repeat to about a millisecond (common practice)."""


@dataclass(frozen=True)
class Row:
    """What calibration needs of one frame; `gain` None and `psi` NaN where unknown."""

    file: str
    filter: str
    exposure: float
    psi: float
    gain: float | None


class Recipes:
    """Masters and detector constants for the frames of one table.

    Attributes
    ----------
    found : list of str
        Sentences on what turned up while masters were made.
    doubtful : bool
        Whether any of them concerns the noise.
    """

    def __init__(self, table: Table, instrument: Instrument, flat: str, cache: Path | None) -> None:
        self.instrument = instrument
        self.flat_choice = flat
        self.cache = cache
        self.found: list[str] = []
        self.doubtful = False
        self._kept: dict[Hashable, Any] = {}
        self._rows: dict[str, list[Row]] = {}
        for entry in table[np.asarray(table["status"]) == "used"]:
            gain = _number(entry["gain"])
            row = Row(
                str(entry["file"]),
                str(entry["filter"]),
                _number(entry["exposure"]),
                _number(entry["psi"]),
                gain if np.isfinite(gain) else None,
            )
            self._rows.setdefault(str(entry["kind"]), []).append(row)

    def rows(self, kind: str) -> list[Row]:
        """Usable frames of one kind."""
        return self._rows.get(kind, [])

    def say(self, sentence: str, *, doubtful: bool = False) -> None:
        """Note a sentence once; `doubtful`: the noise model suffers."""
        self.doubtful |= doubtful
        if sentence not in self.found:
            self.found.append(sentence)

    def _strips(self, readout: Readout, shape: tuple[int, int]) -> list[Section]:
        strips = []
        for beam in range(len(self.instrument.beams)):
            if readout_of(self.instrument, beam) == readout:
                strip = _clipped(strip_of(self.instrument, beam), shape)
                if strip not in strips:
                    strips.append(strip)
        return strips

    # --- masters

    def bias(self, readout: Readout, form: Form) -> Master | None:
        """Master bias for arrays of one form."""
        return self._keep(("bias", readout, form), lambda: self._make_bias(readout, form))

    def dark(self, readout: Readout, form: Form, exposure: float) -> Dark | None:
        """Dark of one exposure.

        Frames of the same exposure are preferred; else all darks are scaled. Without bias and overscan only the same
        exposure serves: such a dark holds the pedestal too.
        """
        return self._keep(("dark", readout, form, exposure), lambda: self._make_dark(readout, form, exposure))

    def flat(self, readout: Readout, form: Form, filter: str, psi: float = np.nan) -> Master | None:
        """Master flat of one filter (and, for flats per angle, one wave-plate angle)."""
        flats = self._fitting("flat", readout, form, filter)
        if self.flat_choice == "off" or not flats:
            return None
        if self.flat_choice == "per-angle":
            plate = self.instrument.wave_plate
            tolerance = plate.tolerance if plate is not None else 1.0
            chosen = [row for row in flats if abs((row.psi - psi + 180.0) % 360.0 - 180.0) <= tolerance]
            if not chosen:
                self.say(
                    f"filter {filter}: no flat at wave-plate angle {psi:g} deg: the flats of all angles serve there, "
                    "so that flat differences between angles stay in the data"
                )
            flats = chosen or flats
        files = tuple(row.file for row in flats)
        return self._keep(("flat", readout, form, files), lambda: self._make_flat(readout, form, flats))

    def dark_exposure(self, exposure: float) -> bool:
        """Whether there are darks of one exposure (told from the table)."""
        return any(_same(row.exposure, exposure) for row in self.rows("dark"))

    def has_pedestal(self, readout: Readout, form: Form, exposure: float) -> bool:
        """Whether something tells the level of no light."""
        ny, nx = form[0]
        overscan = readout.overscan
        return (
            (overscan is not None and overscan.x0 < nx and overscan.y0 < ny)
            or self.bias(readout, form) is not None
            or self.dark(readout, form, exposure) is not None
        )

    def bad_pixels(self, readout: Readout, shape: tuple[int, int]) -> NDArray[np.bool_] | None:
        """Non-zero pixels of the bad-pixel image; its HDU of the same name or number, else its first."""
        path = self.instrument.detector.bad_pixels
        if path is None:
            return None
        for extension in (readout.extension, 0, 1):
            try:
                mask = read_box(path, extension).data
            except InputError as error:
                reason = str(error)
                continue
            if mask.shape == shape:
                return mask != 0.0
            reason = f"its size {mask.shape[1]}x{mask.shape[0]} is not that of the frames, {shape[1]}x{shape[0]}"
        self.say(f"bad-pixel image {path} not used, so that bad pixels are not masked: {reason}")
        return None

    def _keep(self, key: Hashable, make: Callable[[], Any]) -> Any:
        if key not in self._kept:
            self._kept[key] = make()
        return self._kept[key]

    def _fitting(self, kind: str, readout: Readout, form: Form, filter: str | None = None) -> list[Row]:
        """Frames of one kind whose HDU has the form asked for; the others are named in `found`."""
        key = ("fitting", kind, readout.extension, form, filter)
        return self._keep(key, lambda: self._sort_out(kind, readout, form, filter))

    def _sort_out(self, kind: str, readout: Readout, form: Form, filter: str | None) -> list[Row]:
        fitting: list[Row] = []
        others: list[Row] = []
        for row in self.rows(kind):
            if filter is not None and row.filter != filter:
                continue
            try:
                same = layout_of(row.file, readout.extension).form == form
            except InputError as error:
                self.say(f"{kind} frame not used: {error}")
                continue
            (fitting if same else others).append(row)
        if others:
            names = ", ".join(Path(row.file).name for row in others[:5]) + (", ..." if len(others) > 5 else "")
            self.say(
                f"{len(others)} {kind} frames have another size, binning or window than the science frames and were "
                f"not used: {names}"
            )
        return fitting

    def _make_bias(self, readout: Readout, form: Form) -> Master | None:
        files = [row.file for row in self._fitting("bias", readout, form)]
        if not files:
            return None
        key = digest("bias", files, readout)
        return stored(self.cache, key, lambda: combine_master(files, _plain(readout), key))

    def _make_dark(self, readout: Readout, form: Form, exposure: float) -> Dark | None:
        rows = [row for row in self._fitting("dark", readout, form) if row.exposure > 0.0]
        bias = self.bias(readout, form)
        if not rows:
            return None
        same = [row for row in rows if _same(row.exposure, exposure)]
        if same:
            return Dark(self._dark_of(readout, bias, same))
        if bias is None and readout.overscan is None:
            self.say(
                f"darks of another exposure than {exposure:g} s cannot be scaled without bias frames and were not used"
            )
            return None
        if not np.isfinite(exposure):
            self.say("a frame without a known exposure: its dark current was not removed")
            return None
        rate = self._keep(("dark rate", readout, form), lambda: self._make_rate(readout, bias, rows))
        return Dark(rate, exposure)

    def _make_rate(self, readout: Readout, bias: Master | None, rows: list[Row]) -> Master:
        """adu per second from darks of all exposures."""
        groups: list[list[Row]] = []
        for row in sorted(rows, key=lambda row: row.exposure):
            if groups and _same(groups[-1][0].exposure, row.exposure):
                groups[-1].append(row)
            else:
                groups.append([row])
        masters = [self._dark_of(readout, bias, group) for group in groups]
        return dark_rate(
            masters,
            [group[0].exposure for group in groups],
            [len(group) for group in groups],
            "+".join(master.key for master in masters),
        )

    def _dark_of(self, readout: Readout, bias: Master | None, rows: list[Row]) -> Master:
        files = [row.file for row in rows]
        key = digest("dark", files, readout, bias.key if bias else "")
        return stored(self.cache, key, lambda: combine_master(files, _plain(readout, bias), key))

    def _flat_image(self, readout: Readout, form: Form) -> Callable[[FlatFrame, Box | None], NDArray[np.float32]]:
        def image(flat: FlatFrame, box: Box | None) -> NDArray[np.float32]:
            reducer = Reducer(readout, self.bias(readout, form), self.dark(readout, form, flat.exposure))
            return reducer(flat.file, box, mask_saturated=True)

        return image

    def _flat_frames(self, readout: Readout, form: Form, rows: list[Row]) -> list[FlatFrame]:
        beam = next(b for b in range(len(self.instrument.beams)) if readout_of(self.instrument, b) == readout)
        with_pedestal = [row for row in rows if self.has_pedestal(readout, form, row.exposure)]
        return [
            FlatFrame(row.file, row.exposure, row.psi, gain_of(self.instrument, beam, row.gain))
            for row in with_pedestal
        ]

    def _make_flat(self, readout: Readout, form: Form, rows: list[Row]) -> Master | None:
        flats = self._flat_frames(readout, form, rows)
        if not flats:
            self.say(
                f"filter {rows[0].filter}: flats without bias, overscan or darks of their exposure were not used: "
                "their zero level is unknown"
            )
            return None
        shape = layout_of(flats[0].file, readout.extension).shape
        strips = self._strips(readout, shape)
        image = self._flat_image(readout, form)
        darks = [self.dark(readout, form, t) for t in sorted({flat.exposure for flat in flats})]
        bias = self.bias(readout, form)
        parts = [master.key if master else "" for master in (bias, *darks)]
        key = digest("flat", [flat.file for flat in flats], flats, readout, strips, parts)

        def build() -> Master:
            kept, levels, left_out = usable_flats(flats, image, strips)
            if not kept:
                return Master(np.zeros((3, 0, 0), np.float32), key, {"left_out": left_out})
            made = combine_flats(kept, image, strips, levels, shape, key)
            return Master(made.layers, key, {"left_out": left_out})

        master = stored(self.cache, key, build)
        for sentence in master.facts["left_out"]:
            self.say(sentence)
        if master.layers.size == 0:
            self.say(f"filter {rows[0].filter}: no flat is usable: pixel-to-pixel response stays in the data")
            return None
        return master

    # --- noise, lamp

    def read_noise(self, beam: int, form: Form, file: str | Path, exposure: float, gain: float) -> float:
        """Read noise (electrons): described, else from pairs of bias frames, the overscan, pairs of darks, the sky.

        Overscan and sky are looked at in the first few science frames of the same form (in `file`, if there are none).
        """
        known = read_noise_of(self.instrument, beam)
        if known is not None:
            return known
        readout = readout_of(self.instrument, beam)
        bias, dark = self.bias(readout, form), self.dark(readout, form, exposure)
        parts = ([] if bias is None else [Dark(bias)]) + ([] if dark is None else [dark])
        key = ("read noise", readout, form, tuple(part.key for part in parts))
        noise = self._keep(key, lambda: self._measure_noise(beam, readout, form, str(file), parts, gain))
        return float(noise) * gain

    def _measure_noise(
        self, beam: int, readout: Readout, form: Form, file: str, parts: list[Dark], gain: float
    ) -> float:
        """Read noise in adu."""
        files = [row.file for row in self._fitting("science", readout, form)[:SAMPLE_FRAMES]] or [file]
        scatter = [level.sigma for level in (overscan_level(name, readout) for name in files) if level is not None]
        pairs = [float(part.master.facts.get("read_noise") or np.nan) for part in parts]
        for noise in (pairs[0] if self.rows("bias") and pairs else np.nan, np.median(scatter or [np.nan]), *pairs):
            if np.isfinite(noise):
                return float(noise)
        self.say(
            "read noise unknown, and no pairs of bias frames or overscan to tell it: taken from the background of the "
            "science frames, uncertain by the sky's own noise; set detector.read_noise",
            doubtful=True,
        )
        zero = sum(float(np.median(part.of((slice(None), slice(None))))) for part in parts)
        levels = [self.background(name, beam) for name in files]
        return float(np.median([np.sqrt(max(s**2 - max(m - zero, 0.0) / gain, 0.0)) for m, s in levels]))

    def background(self, file: str | Path, beam: int) -> tuple[float, float]:
        """Median (raw adu) and local pixel noise (adu) of one beam's strip in one frame.

        The noise comes from differences of neighbours, so that gradients do not enter.
        """

        def measure() -> tuple[float, float]:
            extension = self.instrument.extension_of(beam)
            strip = _clipped(strip_of(self.instrument, beam), layout_of(file, extension).shape)
            data = read_box(file, extension, Box(strip.x0, strip.y0, strip.x1, strip.y1)).data
            data = data[:: max(1, data.size // SAMPLE)]
            return float(np.nanmedian(data)), clipped_sigma(np.diff(data, axis=1)) / float(np.sqrt(2.0))

        return self._keep(("background", file_mark(file), beam), measure)

    def lamp(self, filter: str) -> Lamp | None:
        """See `Calibrator.lamp`."""
        return self._keep(("lamp", filter), lambda: self._measure_lamp(filter))

    def _measure_lamp(self, filter: str) -> Lamp | None:
        rows = [row for row in self.rows("flat") if row.filter == filter]
        beams = range(len(self.instrument.beams))
        places = {(self.instrument.extension_of(beam), strip_of(self.instrument, beam)) for beam in beams}
        if not rows or len(places) < len(beams) or len(beams) < 2:
            return None
        levels: list[dict[str, tuple[float, float]]] = []
        for beam in beams:
            readout = readout_of(self.instrument, beam)
            layout = self._layout(rows, readout)
            if layout is None:
                return None
            fitting = self._fitting("flat", readout, layout.form, filter)
            flats = self._flat_frames(readout, layout.form, fitting)
            strip = _clipped(strip_of(self.instrument, beam), layout.shape)
            _, measured, _ = usable_flats(flats, self._flat_image(readout, layout.form), [strip])
            levels.append({file: values[0] for file, values in measured.items()})
        common = [row for row in rows if all(row.file in own for own in levels)]
        values = np.array([[own[row.file] for own in levels] for row in common]).reshape(len(common), len(beams), 2)
        plate = self.instrument.wave_plate
        return lamp_polarisation(
            values[..., 0],
            values[..., 1],
            np.array([row.psi for row in common]),
            [beam.analyser for beam in self.instrument.beams],
            180.0 if plate is None else plate.retardance_of(filter),
        )

    @staticmethod
    def _layout(rows: list[Row], readout: Readout) -> Layout | None:
        for row in rows:
            with suppress(InputError):
                return layout_of(row.file, readout.extension)
        return None


def _plain(readout: Readout, bias: Master | None = None) -> Reducer:
    """Reducer for bias and dark frames, whose few adu need no linearity correction."""
    return Reducer(Readout(readout.extension, readout.overscan, (1.0,), readout.saturation), bias)


def _number(value: object) -> float:
    return float("nan") if value is np.ma.masked or value is None else float(value)  # type: ignore[arg-type]


def _same(a: float, b: float) -> bool:
    return abs(a - b) <= SAME_EXPOSURE * max(a, b)


def _clipped(section: Section | None, shape: tuple[int, int]) -> Section:
    ny, nx = shape
    if section is None:
        return Section(0, nx, 0, ny)
    return Section(min(section.x0, nx), min(section.x1, nx), min(section.y0, ny), min(section.y1, ny))
